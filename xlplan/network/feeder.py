"""The radial feeder as arrays, in the order of the study's rows.

Enters: a ``Study``. Leaves: a ``Feeder``: positions instead of names, kW, kvar, kVA and ohm.
Lines keep their own direction (from, to): flows are signed, a boost acts at the from end.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.study.study import Device, Study

IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Feeder:
    """Buses, lines and what stands at which bus. ``rating_kva`` is inf where there is none."""

    bus_ids: tuple[str, ...]
    line_ids: tuple[str, ...]
    supply_ids: tuple[str, ...]
    source: int
    base_kv: float
    source_v_sq_pu: float
    from_bus: IntArray
    to_bus: IntArray
    r_ohm: FloatArray
    x_ohm: FloatArray
    rating_kva: FloatArray
    boost_frac: FloatArray
    normally_open: BoolArray
    from_device: tuple[Device, ...]
    to_device: tuple[Device, ...]
    capacitor_kvar: FloatArray
    load_bus: IntArray
    generator_bus: IntArray
    storage_bus: IntArray
    supply_bus: IntArray

    @property
    def n_bus(self) -> int:
        """Number of buses."""
        return len(self.bus_ids)

    @property
    def n_line(self) -> int:
        """Number of lines, ties included."""
        return len(self.line_ids)


def build_feeder(study: Study) -> Feeder:
    """Arrays of the study's feeder.

    Parameters
    ----------
    study : Study, its references already checked

    Returns
    -------
    Feeder; positions follow the rows of Buses, Lines, Loads, Generators, Storage, supplies
    """
    position = {bus.bus: i for i, bus in enumerate(study.buses)}

    def at_bus(records: Sequence[object], key: str = "bus") -> IntArray:
        return np.array([position[getattr(r, key)] for r in records], dtype=np.int64)

    def column(name: str) -> FloatArray:
        return np.array([getattr(line, name) for line in study.lines], dtype=float)

    return Feeder(
        bus_ids=tuple(bus.bus for bus in study.buses),
        line_ids=tuple(line.line for line in study.lines),
        supply_ids=tuple(supply.supply for supply in study.supplies),
        source=position[study.settings.source_bus],
        base_kv=study.settings.base_kv,
        source_v_sq_pu=study.settings.source_voltage_pu**2,
        from_bus=at_bus(study.lines, "from_bus"),
        to_bus=at_bus(study.lines, "to_bus"),
        r_ohm=column("r_ohm"),
        x_ohm=column("x_ohm"),
        rating_kva=column("rating_kva"),
        boost_frac=column("boost_frac"),
        normally_open=np.array([line.normally_open for line in study.lines], dtype=bool),
        from_device=tuple(line.from_device for line in study.lines),
        to_device=tuple(line.to_device for line in study.lines),
        capacitor_kvar=np.array([bus.capacitor_kvar for bus in study.buses], dtype=float),
        load_bus=at_bus(study.loads),
        generator_bus=at_bus(study.generators),
        storage_bus=at_bus(study.storage),
        supply_bus=at_bus(study.supplies),
    )
