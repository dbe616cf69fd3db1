"""Columns: the meaning of each column of a program, both ways.

``PeriodColumns`` names the columns of one period; ``dispatch`` turns a solution back into arrays
by period and asset. Positions are -1 where a device plays no part in a period: its value is then 0
(for a load on a dead bus: its whole load is shed).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

IntArray = NDArray[np.int64]
FloatArray = NDArray[np.float64]


def _none(n: int) -> IntArray:
    return np.full(n, -1, dtype=np.int64)


@dataclass
class PeriodColumns:
    """Columns of one period; energy and fuel are those at its end (aliases of earlier ones)."""

    n_bus: int
    n_line: int
    n_load: int
    n_group: int
    n_generator: int
    n_storage: int
    n_supply: int
    import_kw: int = -1
    export_kw: int = -1
    import_kvar: int = -1
    supply_kw: IntArray = field(init=False)
    supply_kvar: IntArray = field(init=False)
    generator_kw: IntArray = field(init=False)
    generator_kvar: IntArray = field(init=False)
    trip_kw: IntArray = field(init=False)
    fuel_kwh: IntArray = field(init=False)
    storage_kw: IntArray = field(init=False)
    storage_kvar: IntArray = field(init=False)
    draw_kw: IntArray = field(init=False)
    energy_kwh: IntArray = field(init=False)
    capacitor_kvar: IntArray = field(init=False)
    surplus_kw: IntArray = field(init=False)
    group_kw: IntArray = field(init=False)
    remote_kw: IntArray = field(init=False)
    load_live: NDArray[np.bool_] = field(init=False)
    flow_kw: IntArray = field(init=False)
    flow_kvar: IntArray = field(init=False)
    v_sq: IntArray = field(init=False)

    def __post_init__(self) -> None:
        """Every device absent."""
        for name in ("supply_kw", "supply_kvar"):
            setattr(self, name, _none(self.n_supply))
        for name in ("generator_kw", "generator_kvar", "trip_kw", "fuel_kwh"):
            setattr(self, name, _none(self.n_generator))
        for name in ("storage_kw", "storage_kvar", "draw_kw", "energy_kwh"):
            setattr(self, name, _none(self.n_storage))
        for name in ("capacitor_kvar", "surplus_kw", "v_sq"):
            setattr(self, name, _none(self.n_bus))
        for name in ("flow_kw", "flow_kvar"):
            setattr(self, name, _none(self.n_line))
        self.group_kw = _none(self.n_group)
        self.remote_kw = _none(self.n_load)
        self.load_live = np.zeros(self.n_load, dtype=bool)


def stack(periods: list[PeriodColumns]) -> dict[str, IntArray]:
    """Columns by name over all periods: name -> (n_period, n_asset) positions."""
    names = [
        "import_kw export_kw import_kvar supply_kw supply_kvar generator_kw generator_kvar trip_kw",
        "fuel_kwh storage_kw storage_kvar draw_kw energy_kwh capacitor_kvar surplus_kw group_kw",
        "remote_kw load_live flow_kw flow_kvar v_sq",
    ]
    return {
        name: np.array([getattr(columns, name) for columns in periods])
        for name in " ".join(names).split()
    }


def take(y: FloatArray, columns: IntArray) -> FloatArray:
    """Values at the positions, 0 where a position is -1."""
    return np.where(columns >= 0, y[np.maximum(columns, 0)], 0.0)
