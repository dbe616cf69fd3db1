"""The records that faults become: stages, service by period, scenarios.

Everything here is data, independent of what is bought, in the positions of ``Feeder``. Nothing
points to a parent: live lines are a mask and islands are sets of buses, so that a meshed feeder
can use the same records.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Stage:
    """A stretch of an outage event with one topology: isolation, or repair.

    ``part_of_bus``: connected part of each live bus, -1 where dead by the fault.
    ``islands``: the parts without any source, each a sorted tuple of bus positions (whether
    anything can form them is settled by period, in ``ServicePeriod``).
    ``closed_ties``, ``closed_supplies``: in the order of closing.
    """

    name: str
    n_period: int
    line_live: BoolArray
    closed_ties: tuple[int, ...]
    closed_supplies: tuple[int, ...]
    source_live: bool
    bus_live: BoolArray
    part_of_bus: IntArray
    islands: tuple[tuple[int, ...], ...]
    generator_live: BoolArray
    storage_live: BoolArray


@dataclass(frozen=True)
class Island:
    """Buses fed by their own grid-forming units only, and the units that hold the voltage.

    ``forming_generators`` and ``forming_storage`` count in this period: live, past their delay.
    """

    buses: tuple[int, ...]
    forming_generators: tuple[int, ...]
    forming_storage: tuple[int, ...]


@dataclass(frozen=True)
class ServicePeriod:
    """What can run in one period, of normal service or of an outage event.

    A dead bus (also: a bus of an island that no unit forms in this period) sheds its whole load
    and every unit on it stands still. ``generator_live`` False: stands still, no ramp rows,
    previous output then 0 (dead bus, failed, or failed to start). ``generator_may_run`` False
    where live: gives nothing, ramp rows stay (start delay; outage-only in normal service).
    ``generator_refills``: its tank refills in this period. ``clock_h``: hours since the event
    began, at the start of the period; 0 in normal service.
    """

    clock_h: float
    line_live: BoolArray
    bus_live: BoolArray
    source_live: bool
    supply_closed: BoolArray
    generator_live: BoolArray
    generator_may_run: BoolArray
    generator_refills: BoolArray
    storage_live: BoolArray
    islands: tuple[Island, ...]


@dataclass(frozen=True)
class Cause:
    """One component whose failure is (part of) a scenario.

    ``kind``: line, generator, storage or bulk supply; ``ident`` its id in the study.
    ``rate_per_year``: shape (n_period,), by period of the window, this scenario's share of it
    (repair spread and start failures split a component's rate over several scenarios).
    """

    kind: str
    ident: str
    outage_class: str
    rate_per_year: FloatArray
    repair_cost_per_failure: float


@dataclass(frozen=True)
class Scenario:
    """A merged fault within one window: same dead section, stages, times and hardening.

    ``section`` label of the dead section, "" where none is dead. ``n_period`` periods from the
    failure's next period to the end of the repair, the first ``n_isolation`` of them isolation.
    ``hardening``: (measure position, share of failures avoided), ascending by share; the measures
    exclude one another. ``repair_cost``: shape (n_period of the window,), money per failure.
    ``detail``: "" or words for a generator that does not start, after a comma.
    """

    name: str
    section: str
    causes: tuple[Cause, ...]
    n_isolation: int
    n_period: int
    switching_h: float
    repair_h: float
    stages: tuple[Stage, ...]
    service: tuple[ServicePeriod, ...]
    hardening: tuple[tuple[int, float], ...]
    is_bulk_supply: bool
    rate_per_year: FloatArray
    repair_cost: FloatArray
    detail: str = ""

    @property
    def what_fails(self) -> str:
        """The components whose failure this is, and what else goes wrong then.

        Scenarios that differ in a generator that does not start have different words.
        """
        return ", ".join(dict.fromkeys(cause.ident for cause in self.causes)) + self.detail
