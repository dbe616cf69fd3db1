"""What an audit compares and what it finds: capacities, the state before, violations.

A *violation* is a number beyond its limit by more than the tolerance. Tolerances stand here with
their reasons; a violation carries the one it was held against.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from xlplan.model.dispatch import Dispatch, Purchases
from xlplan.outages.records import ServicePeriod
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]

TOLERANCE_KW = 1e-4
"""For kW, kvar, kVA and kWh: the solver keeps single rows to 1e-7, sums over a feeder a few hundred
times that, and a tenth of a watt means nothing to a planner."""

TOLERANCE_V_SQ_PU = 1e-6
"""For squared voltages: half a millionth of the voltage, far below what any instrument reads."""


@dataclass(frozen=True)
class Violation:
    """One limit that is not kept. ``amount``: by how much; ``period``: of the window."""

    what: str
    where: str
    period: int
    amount: float
    tolerance: float

    def text(self) -> str:
        """One line: ``period 3, ES1: energy above the rating by 0.5``."""
        return f"period {self.period}, {self.where}: {self.what} by {self.amount:.6g}"


@dataclass(frozen=True)
class Capacities:
    """What is in service, existing and bought: (n_generator,), (n_storage,), (n_storage,)."""

    generator_kw: FloatArray
    storage_kw: FloatArray
    storage_kwh: FloatArray


def capacities_in_service(study: Study, purchases: Purchases) -> Capacities:
    """Existing capacity of every unit plus what is bought.

    Parameters
    ----------
    study : Study
    purchases : Purchases, new capacity only

    Returns
    -------
    Capacities
    """
    return Capacities(
        generator_kw=np.array([u.existing_kw for u in study.generators]) + purchases.generator_kw,
        storage_kw=np.array([u.existing_kw for u in study.storage]) + purchases.storage_kw,
        storage_kwh=np.array([u.existing_kwh for u in study.storage]) + purchases.storage_kwh,
    )


@dataclass(frozen=True)
class UnitState:
    """State before a period.

    energy_kwh : (n_storage,)
    output_kw : (n_generator,), nan where the previous output is free (start of a window)
    fuel_kwh : (n_generator,), nan where there is no tank
    """

    energy_kwh: FloatArray
    output_kw: FloatArray
    fuel_kwh: FloatArray


def start_of_window(study: Study, capacities: Capacities, start_soc_frac: FloatArray) -> UnitState:
    """State at the start of a window: start charge, free outputs, full tanks.

    Parameters
    ----------
    study : Study
    capacities : Capacities
    start_soc_frac : array, shape (n_storage,)

    Returns
    -------
    UnitState
    """
    tank_h = np.array([np.nan if u.tank_h is None else u.tank_h for u in study.generators])
    return UnitState(
        energy_kwh=start_soc_frac * capacities.storage_kwh,
        output_kw=np.full(len(study.generators), np.nan),
        fuel_kwh=tank_h.reshape(-1) * capacities.generator_kw,
    )


def state_after(dispatch: Dispatch, i: int, service: ServicePeriod) -> UnitState:
    """State after period ``i`` of a dispatch; a unit that stood still starts again from 0.

    Parameters
    ----------
    dispatch : Dispatch
    i : int, position within the dispatch
    service : ServicePeriod, of that period

    Returns
    -------
    UnitState
    """
    return UnitState(
        energy_kwh=dispatch.energy_kwh[i],
        output_kw=np.where(service.generator_live, dispatch.generator_kw[i], 0.0),
        fuel_kwh=dispatch.fuel_kwh[i],
    )


@dataclass
class Findings:
    """Collects violations of one period at a time."""

    period: int = 0
    violations: list[Violation] = field(default_factory=list)

    def at_most(
        self, what: str, where: str, value: float, limit: float, tolerance: float = TOLERANCE_KW
    ) -> None:
        """Notes a value above its limit; a value that is no number is always noted."""
        excess = float(value) - float(limit)
        if not excess <= tolerance:
            self.violations.append(Violation(what, where, self.period, excess, tolerance))

    def at_least(
        self, what: str, where: str, value: float, limit: float, tolerance: float = TOLERANCE_KW
    ) -> None:
        """Notes a value below its limit."""
        self.at_most(what, where, -float(value), -float(limit), tolerance)

    def equal(
        self, what: str, where: str, value: float, target: float, tolerance: float = TOLERANCE_KW
    ) -> None:
        """Notes a value away from its target, on either side."""
        self.at_most(what, where, abs(float(value) - float(target)), 0.0, tolerance)
