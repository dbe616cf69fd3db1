"""Named results of one plan: what evaluation hands to comparison and report.

Money per year in the study's currency unless a name starts with ``capital_``. Energy not supplied
is kWh at the customers (loss allowance taken off).
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from xlplan.evaluate.ac_results import AcCheck

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class CostParts:
    """Yearly cost by part; ``total`` is their sum."""

    investment: float = 0.0
    fixed_om: float = 0.0
    energy: float = 0.0
    fuel: float = 0.0
    demand: float = 0.0
    repair: float = 0.0
    interruption: float = 0.0
    normal_shedding: float = 0.0
    surplus: float = 0.0
    end_of_window: float = 0.0

    @property
    def total(self) -> float:
        """Sum of all parts."""
        return float(sum(getattr(self, f.name) for f in fields(self)))

    @property
    def customers(self) -> float:
        """What customers bear: interruption and shedding in normal service."""
        return self.interruption + self.normal_shedding

    @property
    def utility(self) -> float:
        """What the utility bears: all parts but the customers'."""
        return self.total - self.customers


@dataclass(frozen=True)
class Purchase:
    """One asset that can be bought, and what the plan buys of it.

    ``kind``: storage, generator, hardening or device; ``place``: bus, or lines of a measure.
    ``capital_gross`` before and ``capital_net`` after the grant; ``crf`` of its own life.
    """

    asset: str
    kind: str
    place: str
    kw: float
    kwh: float
    is_bought: bool
    max_new_kw: float
    max_new_kwh: float
    capital_per_kw: float
    capital_per_kwh: float
    capital_site: float
    grant_frac: float
    life_years: float
    crf: float
    fixed_om_rate: float
    """Per kW and year; for a measure per year."""
    capital_gross: float
    capital_net: float
    investment: float
    fixed_om: float


@dataclass(frozen=True)
class Indices:
    """Yearly reliability of the whole feeder (IEEE 1366 where shares shed are 0 or 1)."""

    eens_kwh: float
    saifi: float
    maifi: float
    saidi_h: float
    caidi_h: float
    asai: float


@dataclass(frozen=True)
class WindowResult:
    """One window, per occurrence. ``poisson_events``: mean without the one-at-a-time rule."""

    window: str
    occurrences_per_year: float
    expected_cost: float
    expected_events: float
    poisson_events: float
    eens_kwh: float
    customer_interruptions: float
    customer_hours: float
    tail_cost: float | None = None
    """Mean cost of the worst outcomes, where they have a weight."""


@dataclass(frozen=True)
class BusResult:
    """One bus, per year."""

    bus: str
    customers: float
    peak_kw: float
    eens_kwh: float
    interruptions: float
    outage_h: float


@dataclass(frozen=True)
class ClassResult:
    """One customer class, per year."""

    customer_class: str
    is_critical: bool
    customers: float
    eens_kwh: float
    interruption_cost: float
    saifi: float
    saidi_h: float


@dataclass(frozen=True)
class CauseResult:
    """One scenario in one window, per year: how often, how bad."""

    window: str
    scenario: str
    section: str
    causes: str
    repair_h: float
    events_per_year: float
    eens_kwh: float
    customer_hours: float
    cost: float
    """Repair and interruption cost per year."""
    is_storm: bool
    is_bulk_supply: bool


@dataclass(frozen=True)
class Risk:
    """Distribution of a year's cost (simulated years) and of one event's unserved energy."""

    mean: float
    p50: float
    p95: float
    cvar95: float
    n_year: int
    cost_percentiles: tuple[tuple[float, float], ...] = ()
    """(percent, cost)."""
    eens_percentiles: tuple[tuple[float, float], ...] = ()
    eens_mean: float = 0.0
    eens_cvar95: float = 0.0
    cost_bins: tuple[tuple[float, float, float], ...] = ()
    """(from, to, share of years)."""
    eens_bins: tuple[tuple[float, float, float], ...] = ()
    event_cost: EventSpread | None = None
    event_eens: EventSpread | None = None


@dataclass(frozen=True)
class EventSpread:
    """One figure over all outage events, each weighted by how often it is expected.

    ``percentiles``: (percent, figure); ``cvar95``: mean of the worst 5 % of events;
    ``bins``: (from, to, events per year).
    """

    mean: float
    cvar95: float
    largest: float
    percentiles: tuple[tuple[float, float], ...]
    bins: tuple[tuple[float, float, float], ...]


@dataclass(frozen=True)
class WorstEvent:
    """One scenario at the failure time at which it does most harm.

    ``begins``: time of the first period of the event as in the profiles; ``lost``: what was lost,
    load by load; ``per_year``: outage events of this scenario in this window, at whatever time.
    """

    window: str
    scenario: str
    causes: str
    begins: str
    hours: float
    per_year: float
    eens_kwh: float
    customers: float
    cost: float
    lost: str


@dataclass(frozen=True)
class Trace:
    """One stretch of operation by period, for charts: kW at the start of each period.

    ``sources``: name -> kW by period (grid purchase, each neighbour supply, each generator, each
    store's discharge positive and charging negative). ``energy_kwh``: store -> stored energy at the
    end of each period.
    """

    title: str
    description: str
    times: tuple[str, ...]
    hours: FloatArray
    load_kw: FloatArray
    served_kw: FloatArray
    unserved_kw: FloatArray
    sources: dict[str, FloatArray]
    energy_kwh: dict[str, FloatArray]
    energy_capacity_kwh: dict[str, float]
    window: str = ""
    scenario: str = ""
    """Name of the scenario of an outage event; "" in normal service."""
    closings: tuple[str, ...] = ()
    """Ties and neighbour supplies closed, and dead parts, in words."""


@dataclass(frozen=True)
class CheckLine:
    """One reconciliation: two numbers that must agree, with a tolerance and a reason."""

    name: str
    what: str
    left: float
    right: float
    tolerance: float
    is_warning: bool = False
    """True: a difference is for the planner to judge (history), not a fault of the run."""

    @property
    def passes(self) -> bool:
        """True if the two numbers agree within the tolerance."""
        return abs(self.left - self.right) <= self.tolerance


@dataclass(frozen=True)
class ConvergenceRow:
    """One pass of the solver."""

    seconds: float
    lower_bound: float
    estimate: float
    upper_end: float
    gap_frac: float
    note: str = ""


@dataclass(frozen=True)
class AimResult:
    """What a plan is chosen by where bad outcomes have a weight, per year.

    weight_frac : weight of ``tail``; ``expected`` has the rest
    tail_frac : share of a window occurrence's outcomes that counts as bad
    expected : expected yearly cost, as in the cost parts
    tail : CVaR, the yearly cost if every occurrence of every window cost the mean of its worst
        outcomes; an outcome is that nothing fails, or a first failure with what is expected to
        follow
    half_width : half of the 95 % interval of the aim
    """

    weight_frac: float
    tail_frac: float
    expected: float
    tail: float
    half_width: float

    @property
    def total(self) -> float:
        """The aim: what the plan minimises."""
        return (1.0 - self.weight_frac) * self.expected + self.weight_frac * self.tail

    @property
    def interval(self) -> tuple[float, float]:
        """95 % interval of the aim."""
        return (self.total - self.half_width, self.total + self.half_width)


@dataclass(frozen=True)
class PlanResult:
    """Everything about one alternative.

    ``cost_interval``: 95 % interval of the cost of following the plan; both ends equal where every
    path was enumerated. ``lower_bound`` None where the alternative is no optimum (plan ignoring
    outages). Where bad outcomes have a weight, ``lower_bound``, ``bound_upper``, ``gap_frac`` and
    ``convergence`` are those of ``aim``, all else is expected cost.
    ``interruption_own_clock``: interruption cost re-priced on each load group's own clock.
    ``indices_fair``: without storm windows and loss of bulk supply.
    """

    name: str
    kind: str
    description: str
    costs: CostParts
    capital_cost: float
    capital_gross: float
    lower_bound: float | None
    cost_interval: tuple[float, float]
    gap_frac: float | None
    bound_upper: float | None
    status: str
    """gap reached, limit reached or interrupted."""
    method: str
    method_reason: str
    is_enumerated: bool
    n_sample: int
    demand_kw: float
    purchases: tuple[Purchase, ...]
    indices: Indices
    indices_fair: Indices
    windows: tuple[WindowResult, ...]
    buses: tuple[BusResult, ...]
    classes: tuple[ClassResult, ...]
    causes: tuple[CauseResult, ...]
    risk: Risk
    interruption_own_clock: float
    burnt_kwh: float
    """Energy lost in the relaxed area of the loss curves, kWh a year."""
    normal_shed_kwh: float
    traces: tuple[Trace, ...]
    """The normal day first, then the worst, the most frequent and the longest outage event."""
    checks: tuple[CheckLine, ...]
    convergence: tuple[ConvergenceRow, ...]
    solve_seconds: float
    numerical_events: int = 0
    demand_windows: tuple[str, ...] = ()
    difference: float = 0.0
    difference_interval: tuple[float, float] = (0.0, 0.0)
    """Yearly cost less that of the existing feeder, paired."""
    ac: AcCheck | None = None
    """Operation checked by nonlinear power flow."""
    worst_events: tuple[WorstEvent, ...] = ()
    aim: AimResult | None = None
    """Where bad outcomes have a weight; None where the expected cost is minimised."""
    difference_to_best: float = 0.0
    difference_to_best_interval: tuple[float, float] = (0.0, 0.0)
    """The same against the recommended plan."""

    @property
    def aimed_total(self) -> float:
        """What the plan is chosen by, per year: its cost, or the aim where there is one."""
        return self.costs.total if self.aim is None else self.aim.total

    @property
    def aimed_interval(self) -> tuple[float, float]:
        """95 % interval of that."""
        return self.cost_interval if self.aim is None else self.aim.interval
