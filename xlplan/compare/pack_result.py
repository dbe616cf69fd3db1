"""What the comparison pack hands to the report: hardening, budget, repair time, sensitivities.

A *plan kept* is the least-cost plan's purchases under changed assumptions; a *plan made anew* is
the best for them. Differences carry an interval that holds both what sampling leaves open (95 %)
and what the search leaves open (distance of each cost to its own lower bound).
"""

from __future__ import annotations

from dataclasses import dataclass

from xlplan.evaluate.results import PlanResult

Interval = tuple[float, float]


@dataclass(frozen=True)
class Worth:
    """What something is worth a year, before its own yearly cost; ``utility + customers``."""

    value: float
    utility: float
    customers: float
    interval: Interval
    eens_saved_kwh: float
    total_without: float
    total_with: float


@dataclass(frozen=True)
class HardeningValue:
    """One measure: ``alone`` on the existing feeder, ``in_plan`` beside the plan's purchases.

    ``without``: measures of the plan that share a line with it and were left out for the second.
    """

    measure: str
    lines: tuple[str, ...]
    failures_avoided_frac: float
    capital_net: float
    investment: float
    fixed_om: float
    is_in_plan: bool
    alone: Worth
    in_plan: Worth
    without: tuple[str, ...] = ()

    @property
    def yearly_cost(self) -> float:
        """Investment and fixed O&M of the measure itself."""
        return self.investment + self.fixed_om


@dataclass(frozen=True)
class BudgetPoint:
    """The best plan found with no more than ``budget`` of capital less grants.

    ``saving``: yearly cost less than with no money at all. ``is_carried``: a plan found with less
    money was better than what this search found, and is taken.
    """

    budget: float
    plan: PlanResult
    saving: float
    interval: Interval
    is_carried: bool
    is_study_budget: bool


@dataclass(frozen=True)
class RepairPoint:
    """Repair times of all classes times ``factor``; ``mean_event_h`` in whole periods."""

    factor: float
    mean_event_h: float
    events_per_year: float
    kept: PlanResult
    anew: PlanResult
    loss: float
    """Yearly cost of keeping the plan less that of the plan made anew."""
    loss_interval: Interval


@dataclass(frozen=True)
class HourFaster:
    """What repairs faster by an hour are worth a year, from two points of the plan kept."""

    value: float
    interval: Interval
    from_factor: float
    hours: float


@dataclass(frozen=True)
class SensitivityCase:
    """One assumption at one value; ``totals``: yearly cost of every alternative compared."""

    parameter: str
    is_high: bool
    value: float
    kept: PlanResult
    anew: PlanResult
    loss: float
    loss_interval: Interval
    does_change: bool
    changes: str
    totals: tuple[tuple[str, float], ...]

    @property
    def is_decided(self) -> bool:
        """True if making the plan anew is cheaper beyond its interval."""
        return self.loss_interval[0] > 0.0


@dataclass(frozen=True)
class Regret:
    """One alternative over all cases: the most that it costs above the best plan of a case."""

    name: str
    base_total: float
    largest: float
    case: str
    mean: float


@dataclass(frozen=True)
class Pack:
    """The comparison pack; empty parts were not asked for, or have a finding that says why."""

    is_asked: bool = False
    left_out: str = ""
    """Why all of it was left out, in a sentence; empty where it was not."""
    plan_name: str = ""
    hardening: tuple[HardeningValue, ...] = ()
    budget: tuple[BudgetPoint, ...] = ()
    knee: int | None = None
    """Position among the budget points; None where no saving is beyond its interval."""
    repair_time: tuple[RepairPoint, ...] = ()
    hour_faster: HourFaster | None = None
    sensitivities: tuple[SensitivityCase, ...] = ()
    regrets: tuple[Regret, ...] = ()
