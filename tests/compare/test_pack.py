"""The comparison pack against single runs by the whole tree, and its small rules by hand.

The single runs use another method (every node of the tree in one program) and share no cuts, no
engine and no bounds with the pack.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from tests.compare.pack_study import by_tree, own_rows, pack_study, sensitivity, solver
from xlplan.base.errors import NoPlanError
from xlplan.compare.own import solve_own
from xlplan.compare.pack import (
    BUDGET_SHARES,
    PackMaker,
    hour_faster,
    knee_of,
    optimum_difference,
    price_studies_of,
    purchase_changes,
    regrets,
)
from xlplan.compare.pack_result import BudgetPoint, Pack
from xlplan.compare.plan_solver import PlanSolver, SolvedPlan, Wish
from xlplan.evaluate.purchases import price_purchases
from xlplan.model.dispatch import Purchases
from xlplan.study.alternatives import vary
from xlplan.study.study import Study

CLOSE = 1e-4
ROWS = (
    sensitivity("storage cost", 0.5, 2.0),
    sensitivity("hardening cost", 0.0, 3.0),
    sensitivity("discount rate", -2.0, 3.0),
    sensitivity("failure rates", 0.5, 2.0),
    sensitivity("repair times", 0.5, 2.0),
)


@pytest.fixture(scope="module")
def study() -> Study:
    return pack_study(sensitivities=ROWS, **own_rows())


@pytest.fixture(scope="module")
def made(study: Study) -> tuple[Pack, SolvedPlan, SolvedPlan]:
    with solver(study, price_studies=price_studies_of(study)) as one:
        existing, _, best = one.solve()
        maker = PackMaker(one, existing, best, solve_own(one).plans)
        pack = maker.make()
    assert maker.findings == []
    return pack, existing, best


@pytest.fixture(scope="module")
def pack(made: tuple[Pack, SolvedPlan, SolvedPlan]) -> Pack:
    return made[0]


def purchases(study: Study, plan: object) -> Purchases:
    """What a plan buys, read back from its list of assets."""
    bought = {p.asset: p for p in plan.purchases}  # type: ignore[attr-defined]
    return Purchases(
        np.array([bought[g.generator].kw for g in study.generators]),
        np.array([bought[s.storage].kw for s in study.storage]),
        np.array([bought[s.storage].kwh for s in study.storage]),
        np.array([bought[m.measure].is_bought for m in study.measures]),
    )


# -- hardening


@pytest.mark.parametrize("position", range(3))
def test_worth_of_a_measure(study, made, position):
    """With and without it, four runs; its own yearly cost comes off what it saves."""
    pack, _, best = made
    measure = study.measures[position]
    row = next(r for r in pack.hardening if r.measure == measure.measure)
    growth = 1.05**measure.life_years
    own = measure.capital_cost * (1.0 - measure.grant_frac) * 0.05 * growth / (growth - 1.0)
    own += measure.fixed_om
    assert row.yearly_cost == pytest.approx(own)
    with solver(study) as one:
        nothing = one.nothing_bought()
    hardened = np.zeros(3, dtype=bool)
    hardened[position] = True
    alone = by_tree(study, fixed=nothing) - by_tree(
        study, fixed=replace(nothing, is_hardened=hardened)
    )
    assert row.alone.value == pytest.approx(alone + own, rel=1e-3)
    # The two measures of line SA exclude one another.
    rest = best.bought.is_hardened.copy()
    rest[position] = False
    if position < 2:
        rest[:2] = False
    without = replace(best.bought, is_hardened=rest)
    with_it = replace(best.bought, is_hardened=rest | hardened)
    beside = by_tree(study, fixed=without) - by_tree(study, fixed=with_it)
    assert row.in_plan.value == pytest.approx(beside + own, rel=1e-3)


def test_hardening_never_does_harm(pack):
    """Failures avoided cost nothing, so a measure is worth 0 or more, within its interval."""
    assert len(pack.hardening) == 3
    for row in pack.hardening:
        for worth in (row.alone, row.in_plan):
            assert worth.interval[0] <= worth.value <= worth.interval[1]
            assert worth.interval[1] >= 0.0
            assert worth.value > -1e-6 * worth.total_without
            assert worth.eens_saved_kwh > 0.0


def test_hardening_is_ranked_by_net_value(pack):
    nets = [row.in_plan.value - row.yearly_cost for row in pack.hardening]
    assert nets == sorted(nets, reverse=True)
    trees = next(row for row in pack.hardening if row.measure == "trees SA")
    assert trees.without == ("wire SA",)


# -- budget


def test_budget_curve_against_single_runs(study, pack):
    assert len(pack.budget) >= 8
    for point in pack.budget:
        assert point.plan.capital_cost <= point.budget + 0.01
        single = by_tree(study, point.budget)
        assert point.plan.costs.total == pytest.approx(single, rel=CLOSE)


def test_budget_curve_is_monotone(pack, made):
    """As found, each by itself: more money costs no more, within the interval of the difference."""
    _, existing, best = made
    budgets = [point.budget for point in pack.budget]
    assert budgets == sorted(budgets)
    assert budgets[0] == 0.0
    totals = [point.plan.costs.total for point in pack.budget]
    assert all(b <= a + 1e-6 for a, b in pairwise(totals))
    assert totals[0] == pytest.approx(existing.result.costs.total)
    assert totals[-1] <= best.result.costs.total + 1e-6
    for point in pack.budget:
        assert point.interval[0] <= point.saving <= point.interval[1]


def test_budget_of_the_study_is_on_the_curve():
    study = pack_study(capital_budget=8000.0)
    with solver(study) as one:
        existing, _, best = one.solve()
        points = PackMaker(one, existing, best).budget()
    own = [point for point in points if point.is_study_budget]
    assert [point.budget for point in own] == [8000.0]
    assert points[-1].budget > 20_000.0
    assert own[0].plan.costs.total <= best.result.costs.total + 1e-6
    assert points[-1].plan.costs.total == pytest.approx(by_tree(study), rel=CLOSE)


def test_nothing_worth_buying_is_a_flat_curve():
    study = vary(vary(pack_study(), "storage cost", 100.0), "hardening cost", 100.0)
    study = vary(study, "generator cost", 100.0)
    with solver(study) as one:
        existing, _, best = one.solve()
        maker = PackMaker(one, existing, best)
        points = maker.budget()
    assert len(points) == len(BUDGET_SHARES)
    assert all(point.saving == 0.0 for point in points)
    assert knee_of(points) is None


def point(budget: float, saving: float, low: float | None = None) -> BudgetPoint:
    return BudgetPoint(budget, None, saving, (saving if low is None else low, saving), False, False)  # type: ignore[arg-type]


def test_knee_is_the_point_farthest_above_the_chord():
    """Chord from 0 to 100 for 10: at 2 the curve is at 60, 40 above 20; at 5, 80, 30 above 50."""
    points = [point(0.0, 0.0), point(2.0, 60.0), point(5.0, 80.0), point(10.0, 100.0)]
    assert knee_of(points) == 1
    undecided = [*points[:-1], point(10.0, 100.0, low=-1.0)]
    assert knee_of(undecided) is None
    assert knee_of(points[:2]) is None


# -- repair time


def test_repair_times_against_single_runs(study, pack, made):
    _, _, best = made
    assert [p.factor for p in pack.repair_time] == [0.5, 0.75, 1.0, 1.5, 2.0]
    for p in pack.repair_time:
        if p.factor in (0.75, 1.5):
            # Half and double stand among the sensitivities, with single runs of their own.
            varied = vary(study, "repair times", p.factor)
            kept = by_tree(varied, fixed=best.bought)
            assert p.kept.costs.total == pytest.approx(kept, rel=CLOSE)
            assert p.anew.costs.total == pytest.approx(by_tree(varied), rel=CLOSE)
        assert p.anew.costs.total <= p.kept.costs.total + 1e-6
        assert p.loss == pytest.approx(p.kept.costs.total - p.anew.costs.total)
        # Two hours times the factor, in whole hours.
        assert p.mean_event_h == pytest.approx(np.ceil(2.0 * p.factor))
    eens = [p.kept.indices.eens_kwh for p in pack.repair_time]
    # Factors that round to the same periods differ by what the solver leaves open.
    assert all(b >= a * (1.0 - 1e-6) for a, b in pairwise(eens))


def test_an_hour_faster(pack, made):
    """Three quarters of two hours round to two hours again: half of it is the next shorter."""
    by_factor = {p.factor: p for p in pack.repair_time}
    value = pack.hour_faster
    assert value is not None
    assert (value.from_factor, value.hours) == (0.5, pytest.approx(1.0))
    saved = by_factor[1.0].kept.costs.total - by_factor[0.5].kept.costs.total
    assert value.value == pytest.approx(saved)
    assert value.interval[0] <= value.value <= value.interval[1]
    assert hour_faster(pack.repair_time[2:], {1.0: made[2]}) is None


# -- sensitivities


@pytest.mark.parametrize("position", range(2 * len(ROWS)))
def test_sensitivities_against_single_runs(study, pack, made, position):
    _, _, best = made
    case = pack.sensitivities[position]
    row = ROWS[position // 2]
    assert case.parameter == row.parameter
    assert case.value == (row.high if position % 2 else row.low)
    varied = vary(study, case.parameter, case.value)
    kept = by_tree(varied, fixed=best.bought)
    assert case.kept.costs.total == pytest.approx(kept, rel=CLOSE)
    assert case.anew.costs.total == pytest.approx(by_tree(varied), rel=CLOSE)
    assert case.anew.costs.total <= case.kept.costs.total + 1e-6
    assert case.loss_interval[0] <= case.loss <= case.loss_interval[1]
    assert dict(case.totals)[best.result.name] == pytest.approx(kept, rel=CLOSE)
    # Sizes and prices of the plan made anew belong together.
    priced = price_purchases(varied, purchases(varied, case.anew))
    assert case.anew.capital_cost == pytest.approx(sum(p.capital_net for p in priced), abs=0.01)


def test_regret_is_against_the_best_of_each_case(pack, made):
    """Worked out again from the totals; devices and blind alternatives take no part."""
    _, existing, best = made
    names = {regret.name for regret in pack.regrets}
    assert names == {
        existing.result.name,
        best.result.name,
        "Small money",
        "Battery only",
        "Leave it",
    }
    for regret in pack.regrets:
        largest = regret.base_total - best.result.costs.total
        for case in pack.sensitivities:
            totals = dict(case.totals)
            lowest = min(case.anew.costs.total, *totals.values())
            largest = max(largest, totals[regret.name] - lowest)
        assert regret.largest == pytest.approx(largest)
        assert regret.largest >= -1e-6
    assert [r.largest for r in pack.regrets] == sorted(r.largest for r in pack.regrets)
    assert regrets({"a": 1.0}, ()) == ()


def test_changes_in_words(made):
    _, existing, best = made
    assert purchase_changes(best.result, best.result) == ""
    words = purchase_changes(existing.result, best.result)
    assert "also battery" in words
    assert "no battery" in purchase_changes(best.result, existing.result)
    assets = tuple(
        replace(p, kwh=p.kwh * 1.5) if p.asset == "battery" else p for p in best.result.purchases
    )
    words = purchase_changes(best.result, replace(best.result, purchases=assets))
    assert "kWh (was" in words
    assert " kW " not in words


# -- the whole


def test_difference_of_optima_holds_both_errors(made):
    """Each optimum may lie as low as its bound: 10 below the first, 4 below the second."""
    _, _, best = made

    def plan(below: float) -> SolvedPlan:
        bound = best.result.costs.total - below
        return replace(best, result=replace(best.result, lower_bound=bound))

    difference, (low, high) = optimum_difference(plan(10.0), plan(4.0))
    assert difference == 0.0
    assert (low, high) == (pytest.approx(-10.0), pytest.approx(4.0))


def test_one_failure_loses_no_other_piece(study, monkeypatch):
    solve = PlanSolver.solve_wish

    def fails(self: PlanSolver, wish: Wish) -> SolvedPlan:
        if "Failure rates high" in wish.name or wish.name == "Plan without wire SA":
            raise NoPlanError("no time")
        return solve(self, wish)

    with solver(study, price_studies=price_studies_of(study)) as one:
        existing, _, best = one.solve()
        monkeypatch.setattr(PlanSolver, "solve_wish", fails)
        maker = PackMaker(one, existing, best)
        pack = maker.make()
    assert pack.hardening == ()
    assert len(pack.budget) >= 8
    assert len(pack.repair_time) == 5
    assert len(pack.sensitivities) == 2 * len(ROWS) - 1
    assert {f.value for f in maker.findings} == {"line hardening", "failure rates high"}
    (row,) = [f for f in maker.findings if f.value == "failure rates high"]
    assert row.key == "parameter"


def test_a_budget_that_does_not_bind_leaves_the_curve_at_the_plan():
    study = pack_study(capital_budget=1e6)
    with solver(study) as one:
        existing, _, best = one.solve()
        points = PackMaker(one, existing, best).budget()
    assert points[-1].plan == best.result
    assert points[-1].budget == best.result.capital_cost
    assert not any(point.is_study_budget for point in points)
