"""The comparison pack around a least-cost plan: what would change it, and by how much.

Enters: the solver of the study, whose cuts are used again, and its plans. Leaves: a ``Pack``, and a
finding for each piece that has no result. Hardening, budget and prices are questions to the engine
that is there; other repair times, rates, loads and energy prices need one of their own each, which
may search no longer than the least-cost plan took.
"""

from __future__ import annotations

import logging
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from typing import TypeVar

import numpy as np

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level, NoPlanError, Origin, XlplanError
from xlplan.compare.pack_result import (
    BudgetPoint,
    HardeningValue,
    HourFaster,
    Interval,
    Pack,
    Regret,
    RepairPoint,
    SensitivityCase,
    Worth,
)
from xlplan.compare.plan_solver import PlanSolver, SolvedPlan, Wish
from xlplan.evaluate.results import PlanResult
from xlplan.model.dispatch import Purchases
from xlplan.model.purchase import exclusive_groups
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.study.alternatives import PRICE_PARAMETERS, REPAIR_TIMES, vary
from xlplan.study.study import Sensitivity, Study

_LOG = logging.getLogger(__name__)
_Found = TypeVar("_Found")

BUDGET_SHARES = (0.0, 0.1, 0.2, 0.35, 0.5, 0.65, 0.8, 1.0)
"""Points of the budget curve, as shares of what is spent without a limit; closer where it bends."""

SHEETS_OF = {"line hardening": "Hardening", "repair times": "Outage assumptions"}
"""Sheet that a piece rests on, for its finding; the others rest on Settings."""

REPAIR_FACTORS = (0.5, 0.75, 1.0, 1.5, 2.0)
SIZE_SHARE = 0.1
"""A size that moves by less than this share of itself leaves the plan as it was."""

CLOSE_SHARE = 0.05
"""Points of curves are searched to this share of what the least-cost plan saves,"""

LEAST_CLOSE, MOST_CLOSE = 0.02, 0.2
"""but not to less or more than these shares of the target gap."""

LEAST_SECONDS = 5.0
"""Small studies may search this long for a point, however fast their plan was found."""


def price_studies_of(study: Study) -> tuple[Study, ...]:
    """The study at every price of the Sensitivities sheet that its own engine can serve."""
    return tuple(vary(study, one.parameter, value) for one, value in _price_cases(study))


def _price_cases(study: Study) -> list[tuple[Sensitivity, float]]:
    """Assumptions and values that only change prices; at a price of 0 a site has no column."""
    return [
        (one, value)
        for one in study.sensitivities
        if one.parameter in PRICE_PARAMETERS
        for value in (one.low, one.high)
        if value > 0.0 or one.parameter == "discount rate"
    ]


def optimum_difference(first: SolvedPlan, second: SolvedPlan) -> tuple[float, Interval]:
    """Cost of the first less that of the second, and the interval of the optima's difference.

    Each optimum lies between its lower bound and its cost; sampling adds the paired 95 % interval.
    A plan without a bound is taken at its cost.
    """
    difference = first.result.costs.total - second.result.costs.total
    half = first.follow.difference_half_width(second.follow)
    low = difference - half - _open(first.result)
    high = difference + half + _open(second.result)
    return difference, (low, high)


def _open(plan: PlanResult) -> float:
    """How much better than this plan the search leaves open."""
    return 0.0 if plan.lower_bound is None else max(0.0, plan.costs.total - plan.lower_bound)


@dataclass
class PackMaker:
    """Makes the pack piece by piece.

    ``others``: the user's solved alternatives, for the view across cases.
    """

    solver: PlanSolver
    existing: SolvedPlan
    best: SolvedPlan
    others: Sequence[SolvedPlan] = ()
    findings: list[Finding] = field(default_factory=list)
    _by_factor: dict[float, tuple[SolvedPlan, SolvedPlan, dict[str, float]]] = field(
        default_factory=dict
    )

    def make(self) -> Pack:
        """Everything; what fails is left out with a finding."""
        budget = self._try("the budget curve", self.budget) or ()
        repair = self._try("repair times", self.repair_times) or ()
        cases = tuple(self.sensitivities())
        return Pack(
            is_asked=True,
            plan_name=self.best.result.name,
            hardening=self._try("line hardening", self.hardening) or (),
            budget=budget,
            knee=knee_of(budget),
            repair_time=repair,
            hour_faster=hour_faster(repair, self._kept_by_factor()),
            sensitivities=cases,
            regrets=regrets(self._base_totals(), cases),
        )

    # -- helpers -------------------------------------------------------------------------------

    def _try(
        self, what: str, work: Callable[[], _Found], origin: Origin | None = None
    ) -> _Found | None:
        """The piece, or None and a finding: one piece must not lose the others."""
        if self.solver.should_stop():
            self._missing(what, "the run was stopped before its turn.", origin)
            return None
        try:
            return work()
        except XlplanError as error:
            _LOG.warning("%s: %s", what, error)
            self._missing(what, str(error), origin)
        except Exception as error:
            _LOG.exception("%s", what)
            text = f"something went wrong inside xlplan ({type(error).__name__}); see the log."
            self._missing(what, text, origin)
        return None

    def _missing(self, what: str, why: str, origin: Origin | None) -> None:
        self.findings.append(
            Finding(
                level=Level.WARNING,
                code=Code.NOT_SOLVED,
                sheet=SHEETS_OF.get(what, "Settings") if origin is None else origin.sheet,
                cell="" if origin is None else origin.cell("parameter"),
                key="" if origin is None else "parameter",
                value=what,
                message=f"{what[0].upper()}{what[1:]}: no result; {why}",
                hint="The rest of the results is not touched by it.",
            )
        )

    @property
    def study(self) -> Study:
        """The study as it is."""
        return self.solver.study

    @property
    def limit_s(self) -> float:
        """Seconds that a point may search: what the least-cost plan took."""
        return max(LEAST_SECONDS, self.best.result.solve_seconds)

    def _solve(self, solver: PlanSolver, wish: Wish) -> SolvedPlan:
        """The plan asked for; one that was stopped half-way is no point of a curve."""
        plan = solver.solve_wish(wish)
        if solver.should_stop():
            raise NoPlanError("the run was stopped while it was worked on.")
        return plan

    def _wish(self, name: str, fixed: Purchases | None = None) -> Wish:
        return Wish(
            name=name,
            kind="optimise" if fixed is None else "fixed",
            capital_budget=self.study.settings.capital_budget,
            fixed=fixed,
            is_brief=True,
            limit_s=self.limit_s,
            closeness=self.closeness,
        )

    @property
    def closeness(self) -> float:
        """Money per year by which a point may miss its optimum: little of what the plan saves."""
        total, target = self.best.result.costs.total, self.solver.options.gap_target_frac
        saving = abs(self.existing.result.costs.total - total)
        least, most = (share * target * abs(total) for share in (LEAST_CLOSE, MOST_CLOSE))
        return min(max(CLOSE_SHARE * saving, least), most)

    # -- hardening -----------------------------------------------------------------------------

    def hardening(self) -> tuple[HardeningValue, ...]:
        """Every measure alone and beside the plan's purchases, the most valuable first."""
        rows = [self._measure(i) for i in range(len(self.study.measures))]
        return tuple(sorted(rows, key=lambda row: row.yearly_cost - row.in_plan.value))

    def _measure(self, i: int) -> HardeningValue:
        study, solver = self.study, self.solver
        measure = study.measures[i]
        rivals = {j for group in exclusive_groups(study) if i in group for j in group} - {i}
        bought = self.best.bought
        dropped = [j for j in rivals if bought.is_hardened[j]]
        only = _hardened(solver.nothing_bought(), {i: True})
        bare = _hardened(bought, dict.fromkeys((i, *dropped), False))
        full = _hardened(bare, {i: True})
        alone = self._given(f"{measure.measure} alone", only)
        without = self._given(f"Plan without {measure.measure}", bare)
        with_it = self._given(f"Plan with {measure.measure}", full)
        price = next(p for p in with_it.result.purchases if p.asset == measure.measure)
        own = price.investment + price.fixed_om
        return HardeningValue(
            measure=measure.measure,
            lines=measure.lines,
            failures_avoided_frac=measure.failures_avoided_frac,
            capital_net=price.capital_net,
            investment=price.investment,
            fixed_om=price.fixed_om,
            is_in_plan=bool(bought.is_hardened[i]),
            alone=_worth(self.existing, alone, own),
            in_plan=_worth(without, with_it, own),
            without=tuple(study.measures[j].measure for j in dropped),
        )

    def _given(self, name: str, bought: Purchases) -> SolvedPlan:
        """A plan with purchases given; the existing feeder and the plan itself are known."""
        for known in (self.existing, self.best):
            if _is_same(known.bought, bought):
                return known
        return self._solve(self.solver, self._wish(name, bought))

    # -- budget --------------------------------------------------------------------------------

    def budget(self) -> tuple[BudgetPoint, ...]:
        """Best plans by money spent; a plan found with less money serves where it is better."""
        own = self.study.settings.capital_budget
        spent = self.best.result.capital_cost
        wide = self.best
        if own is not None:
            # The budget may bind, also where not all of it is spent: what would be without one?
            wish = replace(self._wish("Plan without a budget"), capital_budget=None)
            wide = self._solve(self.solver, wish)
            costs_more = wide.result.costs.total > self.best.result.costs.total
            if costs_more or wide.result.capital_cost <= own:
                # The budget does not bind: this was the same search again, and within its gap the
                # curve ends at the plan that is recommended.
                wide = self.best
        most = max(wide.result.capital_cost, spent)
        known = {0.0: self.existing, most: wide}
        if most <= 0.0:
            # Nothing is worth buying without a limit, so nothing is with one.
            most = self.solver.graph.first_stage.capital_most if own is None else own
            known = {share * most: self.existing for share in BUDGET_SHARES}
        budgets = sorted({round(share * most, 2) for share in BUDGET_SHARES} | set(known))
        if own is not None and 0.0 < own < most:
            budgets = sorted({*budgets, own})
        points: list[BudgetPoint] = []
        lead = self.existing
        for budget in _apart(budgets, known):
            found = known.get(budget)
            if found is None:
                wish = replace(self._wish(f"Budget {budget:,.0f}"), capital_budget=budget)
                found = self._solve(self.solver, wish)
            if own is not None and budget >= own > 0.0 and budget < most:
                found = min(found, self.best, key=lambda plan: plan.result.costs.total)
            is_carried = lead.result.costs.total < found.result.costs.total
            lead = lead if is_carried else found
            difference, (low, high) = optimum_difference(self.existing, lead)
            points.append(
                BudgetPoint(
                    budget=budget,
                    plan=lead.result,
                    saving=difference,
                    interval=(low, high),
                    is_carried=is_carried,
                    is_study_budget=own is not None and budget == own,
                )
            )
        return tuple(points)

    # -- repair time and sensitivities -----------------------------------------------------------

    def repair_times(self) -> tuple[RepairPoint, ...]:
        """The plan kept and the plan made anew at each factor."""
        points = []
        for factor in REPAIR_FACTORS:
            kept, anew, _ = self._at_repair_factor(factor)
            hours, events = _event_hours(kept)
            loss, interval = optimum_difference(kept, anew)
            points.append(
                RepairPoint(factor, hours, events, kept.result, anew.result, loss, interval)
            )
        return tuple(points)

    def _at_repair_factor(self, factor: float) -> tuple[SolvedPlan, SolvedPlan, dict[str, float]]:
        if factor not in self._by_factor:
            if factor == 1.0:
                self._by_factor[factor] = (self.best, self.best, self._base_totals())
            else:
                name = f"Repair times x {factor:g}"
                study = vary(self.study, REPAIR_TIMES, factor)
                rows = [one for one in self.study.sensitivities if one.parameter == REPAIR_TIMES]
                is_case = any(factor in (one.low, one.high) for one in rows)
                self._by_factor[factor] = self._in_case(name, study, is_case)
        return self._by_factor[factor]

    def _kept_by_factor(self) -> dict[float, SolvedPlan]:
        return {factor: found[0] for factor, found in self._by_factor.items()}

    def _in_case(
        self, name: str, study: Study, with_others: bool = True
    ) -> tuple[SolvedPlan, SolvedPlan, dict[str, float]]:
        """Plan kept, plan made anew, costs of alternatives, where more than prices differs.

        Alternatives that buy the same share a figure; that of the others is estimated, since
        nothing but their cost is shown.
        """
        feeder = build_feeder(study)
        windows = build_window_models(study, feeder)
        base, own_name = self.solver, self.best.result.name
        with PlanSolver(
            study, feeder, windows, base.options, base.on_progress, base.should_stop
        ) as solver:
            # The plan kept comes first: it may be good enough, and its cuts are near the best ones.
            kept = self._solve(solver, self._wish(f"{name}: {own_name}", self.best.bought))
            anew = self._better(self._solve(solver, self._wish(f"{name}: made anew")), kept)
            totals = {own_name: kept.result.costs.total}
            known = [(self.best.bought, kept.result.costs.total)]
            for other in (self.existing, *self._contenders()) if with_others else ():
                cost = next((c for bought, c in known if _is_same(bought, other.bought)), None)
                if cost is None:
                    wish = self._wish(f"{name}: {other.result.name}", other.bought)
                    cost = solver.estimated_cost(wish)
                    if cost < anew.result.costs.total:
                        # Cheaper than what the search found: that is worth following.
                        found = self._solve(solver, wish)
                        cost = found.result.costs.total
                        anew = self._better(anew, found)
                    known.append((other.bought, cost))
                totals[other.result.name] = cost
        return kept, anew, totals

    def _better(self, anew: SolvedPlan, other: SolvedPlan) -> SolvedPlan:
        """What other purchases were found to cost is open to the search: they serve if cheaper."""
        if not self._may_buy(other) or other.result.costs.total >= anew.result.costs.total:
            return anew
        bound = anew.result.lower_bound
        return replace(other, result=replace(other.result, lower_bound=bound))

    def _contenders(self) -> list[SolvedPlan]:
        """The user's alternatives whose purchases can be tried in every case."""
        with_devices = {change.alternative for change in self.study.device_changes}
        blind = {one.alternative for one in self.study.alternatives if one.ignores_outages}
        return [one for one in self.others if one.result.name not in with_devices | blind]

    def _may_buy(self, plan: SolvedPlan) -> bool:
        budget = self.study.settings.capital_budget
        return budget is None or plan.result.capital_cost <= budget * (1.0 + 1e-9)

    def _base_totals(self) -> dict[str, float]:
        plans = (self.existing, self.best, *self._contenders())
        return {plan.result.name: plan.result.costs.total for plan in plans}

    def sensitivities(self) -> list[SensitivityCase]:
        """Every row of the sheet, low and high."""
        cases = []
        for row, value, is_high in self.cases():
            what = f"{row.parameter} {'high' if is_high else 'low'}"
            found = self._try(what, partial(self.case, row, value, is_high), row.origin)
            if found is not None:
                cases.append(found)
        return cases

    def cases(self) -> list[tuple[Sensitivity, float, bool]]:
        """Row, value and whether it is the high one, of everything that is varied."""
        return [
            (row, value, is_high)
            for row in self.study.sensitivities
            for value, is_high in ((row.low, False), (row.high, True))
        ]

    def case(self, row: Sensitivity, value: float, is_high: bool) -> SensitivityCase:
        """One assumption at one value."""
        prices = _price_cases(self.study)
        price = next((i for i, (r, v) in enumerate(prices) if r is row and v == value), -1)
        name = f"{row.parameter.capitalize()} {'high' if is_high else 'low'}"
        if price >= 0:
            kept, anew, totals = self._at_prices(name, price)
        elif row.parameter == REPAIR_TIMES:
            kept, anew, totals = self._at_repair_factor(value)
        else:
            kept, anew, totals = self._in_case(name, vary(self.study, row.parameter, value))
        loss, interval = optimum_difference(kept, anew)
        changes = purchase_changes(kept.result, anew.result)
        return SensitivityCase(
            parameter=row.parameter,
            is_high=is_high,
            value=value,
            kept=kept.result,
            anew=anew.result,
            loss=loss,
            loss_interval=interval,
            does_change=bool(changes),
            changes=changes or "the same plan",
            totals=tuple(totals.items()),
        )

    def _at_prices(self, name: str, price: int) -> tuple[SolvedPlan, SolvedPlan, dict[str, float]]:
        """The same where only prices differ: operation stays, the engine's cuts serve."""
        solver = self.solver
        wish = replace(self._wish(f"{name}: made anew"), price_list=price)
        anew = self._solve(solver, wish)
        given = {
            plan.result.name: solver.repriced(plan, price)
            for plan in (self.best, self.existing, *self._contenders())
        }
        for plan in given.values():
            anew = self._better(anew, plan)
        kept = given[self.best.result.name]
        return kept, anew, {key: plan.result.costs.total for key, plan in given.items()}


# -- small rules ---------------------------------------------------------------------------------


def _hardened(bought: Purchases, changes: dict[int, bool]) -> Purchases:
    is_hardened = bought.is_hardened.copy()
    for i, value in changes.items():
        is_hardened[i] = value
    return replace(bought, is_hardened=is_hardened)


def _is_same(first: Purchases, second: Purchases) -> bool:
    return (
        np.array_equal(first.generator_kw, second.generator_kw)
        and np.array_equal(first.storage_kw, second.storage_kw)
        and np.array_equal(first.storage_kwh, second.storage_kwh)
        and np.array_equal(first.is_hardened, second.is_hardened)
    )


def _worth(without: SolvedPlan, with_it: SolvedPlan, own_cost: float) -> Worth:
    """Value before the yearly cost ``own_cost`` of what is added."""
    difference, (low, high) = optimum_difference(without, with_it)
    before, after = without.result.costs, with_it.result.costs
    return Worth(
        value=difference + own_cost,
        utility=before.utility - after.utility + own_cost,
        customers=before.customers - after.customers,
        interval=(low + own_cost, high + own_cost),
        eens_saved_kwh=without.result.indices.eens_kwh - with_it.result.indices.eens_kwh,
        total_without=without.result.costs.total,
        total_with=with_it.result.costs.total,
    )


def _apart(budgets: Sequence[float], known: dict[float, SolvedPlan]) -> list[float]:
    """Budgets in order, without those that rounding set beside one that is known."""
    kept: list[float] = []
    for budget in budgets:
        near = [one for one in known if one != budget and abs(one - budget) < 0.01]
        if not near:
            kept.append(budget)
    return kept


def _event_hours(plan: SolvedPlan) -> tuple[float, float]:
    """Mean length of an outage event in whole periods (h), and events a year."""
    hours = events = 0.0
    for n, window in zip(plan.follow.occurrences, plan.follow.windows, strict=True):
        count = window.event_count.sum(axis=0)
        events += float(n * count.sum())
        hours += float(n * (count @ window.clock.event_periods)) * window.clock.period_h
    return (hours / events if events > 0.0 else 0.0), events


def knee_of(points: Sequence[BudgetPoint]) -> int | None:
    """The point farthest above the straight line from the first saving to the last.

    None where the whole curve saves nothing beyond its interval. The distance rule is that of
    Satopaa and others, "Finding a kneedle in a haystack", 2011 (recalled).
    """
    if len(points) < 3 or points[-1].interval[0] <= 0.0 or points[-1].budget <= 0.0:
        return None
    most, saving = points[-1].budget, points[-1].saving
    above = [point.saving / saving - point.budget / most for point in points]
    return int(np.argmax(above))


def hour_faster(points: Sequence[RepairPoint], kept: dict[float, SolvedPlan]) -> HourFaster | None:
    """Value of an hour from the plan kept at its repair times and at the next shorter ones."""
    by_factor = {point.factor: point for point in points}
    base = by_factor.get(1.0)
    if base is None:
        return None
    for factor in sorted((f for f in by_factor if f < 1.0), reverse=True):
        hours = base.mean_event_h - by_factor[factor].mean_event_h
        if hours > 0.0:
            difference, (low, high) = optimum_difference(kept[1.0], kept[factor])
            return HourFaster(difference / hours, (low / hours, high / hours), factor, hours)
    return None


def purchase_changes(kept: PlanResult, anew: PlanResult) -> str:
    """What the plan made anew buys otherwise, in words; "" where nothing does."""
    before = {p.asset: p for p in kept.purchases}
    parts = []
    for after in anew.purchases:
        old = before.get(after.asset)
        if old is None or after.is_bought != old.is_bought:
            parts.append(f"{'also' if after.is_bought else 'no'} {after.asset}")
            continue
        for size, was, unit in ((after.kw, old.kw, "kW"), (after.kwh, old.kwh, "kWh")):
            if abs(size - was) > SIZE_SHARE * max(was, size):
                parts.append(f"{after.asset} {size:,.0f} {unit} (was {was:,.0f})")
    return "; ".join(parts)


def regrets(base: dict[str, float], cases: Sequence[SensitivityCase]) -> tuple[Regret, ...]:
    """What each alternative costs above the best of each case, at most; the least first."""
    rows = []
    best_base = min(base.values(), default=0.0)
    for name, total in base.items():
        over = [("as given", total - best_base)]
        for case in cases:
            totals = dict(case.totals)
            if name in totals:
                best = min(case.anew.costs.total, *totals.values())
                word = f"{case.parameter} {'high' if case.is_high else 'low'}"
                over.append((word, totals[name] - best))
        worst = max(over, key=lambda item: item[1])
        mean = sum(value for _, value in over) / len(over)
        rows.append(Regret(name, total, worst[1], worst[0], mean))
    return tuple(sorted(rows, key=lambda row: row.largest)) if cases else ()
