"""One plan's numbers put together: costs by part, indices, causes, risk, traces, checks."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.evaluate.follow_plan import FollowResult
from xlplan.evaluate.metrics import COST_PARTS
from xlplan.evaluate.purchases import net_capital, price_purchases
from xlplan.evaluate.reliability import by_bus, by_class, indices
from xlplan.evaluate.results import (
    AimResult,
    CauseResult,
    CheckLine,
    ConvergenceRow,
    CostParts,
    PlanResult,
    Purchase,
    Trace,
    WindowResult,
)
from xlplan.evaluate.risk import simulate_years, worst_events
from xlplan.model.dispatch import Purchases
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import DeviceChange, Study

FloatArray = NDArray[np.float64]

CENT = 0.01
"""Totals must equal the sum of their parts to a cent."""

ROUNDING = 1e-6
"""Relative difference that sums over thousands of program values may show."""

ONE_AT_A_TIME_WARNING = 0.05
"""Beyond this the one-at-a-time rule hides too many failures (model.md section 2)."""


@dataclass(frozen=True)
class PlanFacts:
    """What the solver says about a plan, besides its operation."""

    name: str
    kind: str
    description: str
    bought: Purchases
    lower_bound: float | None
    bound_upper: float | None
    status: str
    method: str
    method_reason: str
    convergence: tuple[ConvergenceRow, ...]
    solve_seconds: float
    numerical_events: int = 0
    tree_cost: float | None = None
    """Optimum of the whole tree, where that is the method."""
    device_changes: tuple[DeviceChange, ...] = ()
    """Other devices of this alternative, which cost money."""


def build_plan_result(
    study: Study,
    windows: Sequence[WindowModel],
    follow: FollowResult,
    facts: PlanFacts,
    traces: tuple[Trace, ...],
    audit: tuple[CheckLine, ...],
    seed: int,
) -> PlanResult:
    """All numbers of one plan.

    Parameters
    ----------
    study : Study
    windows : sequence of WindowModel
    follow : FollowResult, from following the plan
    facts : PlanFacts
    traces : operation for the Operation sheet
    audit : checks of operation by code that takes no part in building the model
    seed : int

    Returns
    -------
    PlanResult
    """
    slots = follow.slots
    per_window = np.array([window.metrics for window in follow.windows])
    yearly = follow.occurrences @ per_window
    purchases = price_purchases(study, facts.bought, facts.device_changes)
    parts = {name: float(yearly[slots.single(name)]) for name in COST_PARTS}
    costs = CostParts(
        investment=sum(p.investment for p in purchases),
        fixed_om=sum(p.fixed_om for p in purchases),
        demand=study.settings.demand_charge_per_kw_year * facts.bought.demand_kw,
        **parts,
    )
    fixed = costs.investment + costs.fixed_om + costs.demand
    cost = fixed + follow.running_cost
    interval = (cost - follow.half_width, cost + follow.half_width)
    aim = _aim_result(follow, fixed, cost)
    aimed, high = (cost, interval[1]) if aim is None else (aim.total, aim.interval[1])
    gap = None
    if facts.lower_bound is not None:
        gap = max(0.0, high - facts.lower_bound) / max(abs(aimed), 1e-9)
    customers = np.array([load.customers for load in study.loads], dtype=float)
    fair = _without_storms_and_bulk(windows, follow)
    result = PlanResult(
        name=facts.name,
        kind=facts.kind,
        description=facts.description,
        costs=costs,
        capital_cost=net_capital(purchases),
        capital_gross=sum(p.capital_gross for p in purchases),
        lower_bound=facts.lower_bound,
        cost_interval=interval,
        gap_frac=gap,
        bound_upper=facts.bound_upper,
        status=facts.status,
        method=facts.method,
        method_reason=facts.method_reason,
        is_enumerated=follow.is_enumerated,
        n_sample=follow.n_sample,
        demand_kw=facts.bought.demand_kw,
        purchases=purchases,
        indices=indices(customers, slots, yearly),
        indices_fair=indices(customers, slots, fair),
        windows=_window_results(windows, follow, customers),
        buses=by_bus(study, slots, yearly),
        classes=by_class(study, slots, yearly),
        causes=_cause_results(windows, follow, customers),
        risk=simulate_years(follow, fixed, seed),
        interruption_own_clock=float(yearly[slots.single("interruption_own_clock")]),
        burnt_kwh=float(yearly[slots.single("burnt_kwh")]),
        normal_shed_kwh=float(yearly[slots.single("normal_shed_kwh")]),
        traces=traces,
        checks=(),
        convergence=facts.convergence,
        solve_seconds=facts.solve_seconds,
        numerical_events=facts.numerical_events,
        worst_events=worst_events(study, windows, follow),
        demand_windows=tuple(w.series.window for w in windows if w.series.counts_for_demand),
        aim=aim,
    )
    checks = plan_checks(study, windows, follow, facts, costs, cost, purchases, (aimed, high))
    return replace(result, checks=(*checks, *audit))


def _aim_result(follow: FollowResult, fixed: float, cost: float) -> AimResult | None:
    """What the plan is chosen by, where that is not its cost alone."""
    tail, outcomes = follow.tail_cost, follow.windows[0].outcomes
    if tail is None or outcomes is None:
        return None
    aim = outcomes.aim
    return AimResult(aim.weight_frac, aim.tail_frac, cost, fixed + tail, follow.aim_half_width)


def _without_storms_and_bulk(windows: Sequence[WindowModel], follow: FollowResult) -> FloatArray:
    """Yearly metrics without storm windows and without loss of the bulk supply."""
    total = np.zeros(follow.slots.n_slot)
    for window, result, n in zip(windows, follow.windows, follow.occurrences, strict=True):
        if window.series.is_storm:
            continue
        total += n * result.metrics
        for w, scenario in enumerate(window.scenarios):
            if scenario.is_bulk_supply:
                total -= n * (result.event_count[:, w] @ result.events[:, w])
    return np.maximum(total, 0.0)


def _window_results(
    windows: Sequence[WindowModel], follow: FollowResult, customers: FloatArray
) -> tuple[WindowResult, ...]:
    rows = []
    slots = follow.slots
    for window, result in zip(windows, follow.windows, strict=True):
        metrics = result.metrics
        rows.append(
            WindowResult(
                window=window.series.window,
                occurrences_per_year=window.series.occurrences_per_year,
                expected_cost=result.expected_cost,
                expected_events=result.expected_events,
                poisson_events=result.clock.poisson_mean(),
                eens_kwh=float(metrics[slots.per_load("ens_kwh")].sum()),
                customer_interruptions=float(customers @ metrics[slots.per_load("sustained")]),
                customer_hours=float(customers @ metrics[slots.per_load("hours")]),
                tail_cost=None if result.outcomes is None else result.outcomes.tail_cost,
            )
        )
    return tuple(rows)


def _cause_results(
    windows: Sequence[WindowModel], follow: FollowResult, customers: FloatArray
) -> tuple[CauseResult, ...]:
    rows = []
    slots = follow.slots
    for window, result, n in zip(windows, follow.windows, follow.occurrences, strict=True):
        for w, scenario in enumerate(window.scenarios):
            events = n * result.event_count[:, w] @ result.events[:, w]
            cost = events[slots.single("repair")] + events[slots.single("interruption")]
            rows.append(
                CauseResult(
                    window=window.series.window,
                    scenario=scenario.name,
                    section=scenario.section,
                    causes=scenario.what_fails,
                    repair_h=scenario.repair_h,
                    events_per_year=float(n * result.event_count[:, w].sum()),
                    eens_kwh=float(events[slots.per_load("ens_kwh")].sum()),
                    customer_hours=float(customers @ events[slots.per_load("hours")]),
                    cost=float(cost),
                    is_storm=window.series.is_storm,
                    is_bulk_supply=scenario.is_bulk_supply,
                )
            )
    return tuple(sorted(rows, key=lambda row: -row.cost))


def plan_checks(
    study: Study,
    windows: Sequence[WindowModel],
    follow: FollowResult,
    facts: PlanFacts,
    costs: CostParts,
    cost: float,
    purchases: Sequence[Purchase],
    aimed: tuple[float, float],
) -> tuple[CheckLine, ...]:
    """Reconciliations of one plan; ``aimed``: what it is chosen by, and its upper end."""
    lines = [
        CheckLine(
            "Cost parts add up",
            "Sum of the cost parts against the cost of following the plan",
            costs.total,
            cost,
            CENT,
        )
    ]
    slots = follow.slots
    priced = sum(
        n * float(w.clock_plan @ slots.cost(w.plan.metrics))
        for n, w in zip(follow.occurrences, follow.windows, strict=True)
        if w.solver_plan_cost is not None
    )
    said = sum(
        n * w.solver_plan_cost
        for n, w in zip(follow.occurrences, follow.windows, strict=True)
        if w.solver_plan_cost is not None
    )
    scale = max(1.0, abs(said))
    lines.append(
        CheckLine(
            "Plan re-priced",
            "Normal service priced again from its kW against what the solver says",
            priced,
            said,
            ROUNDING * scale,
        )
    )
    repriced = said = 0.0
    for n, w in zip(follow.occurrences, follow.windows, strict=True):
        if w.solver_event_cost is not None:
            repriced += n * float((w.first_chance * slots.cost(w.events)).sum())
            said += n * w.solver_event_cost
    lines.append(
        CheckLine(
            "Events re-priced",
            "First outage events priced again from their kW against what the solver says",
            repriced,
            said,
            ROUNDING * max(1.0, abs(said)),
        )
    )
    for window, result in zip(windows, follow.windows, strict=True):
        going = sum(
            float(result.event_count[max(0, window.series.n_period - s.n_period) :, w].sum())
            for w, s in enumerate(window.scenarios)
        )
        lines.append(
            CheckLine(
                f"Chances of {window.series.window}",
                "In service at the window's end, or still in an outage event: adds up to 1",
                float(result.in_service[-1]) + going,
                1.0,
                1e-9,
            )
        )
        if result.outcomes is not None:
            outcomes = result.outcomes
            lines.append(
                CheckLine(
                    f"Outcomes of {window.series.window}",
                    "Mean cost of the outcomes that worst ones are chosen among, and expected cost",
                    float(outcomes.chance @ outcomes.cost),
                    result.expected_cost,
                    ROUNDING * max(1.0, abs(result.expected_cost)),
                )
            )
        poisson = result.clock.poisson_mean()
        lines.append(
            CheckLine(
                f"One at a time, {window.series.window}",
                "Expected outage events against failures without the one-at-a-time rule",
                result.expected_events,
                poisson,
                ONE_AT_A_TIME_WARNING * max(poisson, 1e-12),
                is_warning=True,
            )
        )
    if facts.lower_bound is not None:
        lines.append(
            CheckLine(
                "Bound below cost",
                "Amount by which the lower bound passes the upper end of the interval of "
                + ("the cost" if follow.tail_cost is None else "mean and worst outcomes"),
                max(0.0, facts.lower_bound - aimed[1]),
                0.0,
                max(CENT, ROUNDING * abs(cost)),
            )
        )
    if facts.tree_cost is not None:
        lines.append(
            CheckLine(
                "Whole tree",
                "Optimum of the whole scenario tree against the cost of its plan, counted again",
                facts.tree_cost,
                aimed[0],
                max(CENT, ROUNDING * abs(cost)),
            )
        )
    budget = study.settings.capital_budget
    if budget is not None and facts.kind == "optimise":
        lines.append(
            CheckLine(
                "Within the budget",
                "Amount by which capital less grants passes the budget",
                max(0.0, sum(p.capital_net for p in purchases) - budget),
                0.0,
                max(CENT, ROUNDING * budget),
                # Device changes are given, whatever they cost: for the planner to judge.
                is_warning=bool(facts.device_changes),
            )
        )
    lines.append(
        CheckLine(
            "Interruption cost on each load's own clock",
            "Cost with the clock of the event against that with the clock of each load group",
            costs.interruption,
            float(
                follow.occurrences
                @ np.array(
                    [w.metrics[slots.single("interruption_own_clock")] for w in follow.windows]
                )
            ),
            0.05 * max(1.0, abs(costs.interruption)),
            is_warning=True,
        )
    )
    return tuple(lines)
