"""Points of curves: plans that serve twice, costs without following, sampled continuations.

Expected costs are those of the whole tree: another method, one run each, nothing shared.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import pytest

from tests.builders import make_profiles, make_window
from tests.compare.pack_study import by_tree, pack_study, sensitivity, solver
from xlplan.base.errors import NoPlanError
from xlplan.compare.pack import PackMaker, price_studies_of
from xlplan.compare.plan_solver import PlanSolver, SolvedPlan, Wish, is_same_purchase
from xlplan.compare.standing import StandingAlternatives
from xlplan.evaluate import follow_plan
from xlplan.evaluate.follow_plan import Follower
from xlplan.study.alternatives import vary

CLOSENESS = 1.0


class Counted:
    """A solver that has solved its standing alternatives, and how often plans were followed."""

    def __init__(self, one: StandingAlternatives, monkeypatch: pytest.MonkeyPatch) -> None:
        self.one = one
        self.existing, _, self.best = one.solve()
        self.n_followed = 0
        follow = Follower.follow

        def counting(follower: Follower, *args: object) -> object:
            self.n_followed += 1
            return follow(follower, *args)  # type: ignore[arg-type]

        monkeypatch.setattr(Follower, "follow", counting)

    def solve(self, **wish: object) -> SolvedPlan:
        full = {"is_brief": True, "closeness": CLOSENESS, **wish}
        return self.one.solve_wish(Wish("point", **full))  # type: ignore[arg-type]


@pytest.fixture
def counted(monkeypatch: pytest.MonkeyPatch) -> Iterator[Counted]:
    study = pack_study(sensitivities=(sensitivity("storage cost", 0.99, 1.01),))
    with solver(study, price_studies=price_studies_of(study)) as one:
        yield Counted(one, monkeypatch)


def test_a_plan_that_was_followed_before_is_taken(counted):
    """The same question, a budget that leaves room, and prices that hardly move the plan."""
    best = counted.best.result
    again = counted.solve()
    room = counted.solve(capital_budget=1.5 * best.capital_cost)
    near = counted.solve(price_list=0, closeness=100.0)
    nothing = counted.solve(kind="fixed", fixed=counted.one.nothing_bought())
    assert counted.n_followed == 0
    for plan in (again, room):
        assert plan.result.costs.total == pytest.approx(best.costs.total)
        assert plan.result.name == "point"
        assert is_same_purchase(plan.bought, counted.best.bought)
    assert nothing.result.costs.total == pytest.approx(counted.existing.result.costs.total)
    # At other prices the plan is priced anew, and its bound is that of these prices.
    study = counted.one.choices.price_studies[0]
    kept = by_tree(study, fixed=counted.best.bought)
    assert near.result.costs.total == pytest.approx(kept, rel=1e-4)
    best_there = by_tree(study)
    assert near.result.lower_bound <= best_there + 1e-6 * best_there
    assert best_there <= near.result.costs.total + 0.1
    assert near.result.costs.total - near.result.lower_bound <= 100.0


def test_a_budget_that_binds_is_searched_anew(counted):
    budget = 0.5 * counted.best.result.capital_cost
    plan = counted.solve(capital_budget=budget)
    assert counted.n_followed >= 1
    assert plan.result.capital_cost <= budget + 0.01
    single = by_tree(counted.one.study, budget)
    assert plan.result.costs.total - CLOSENESS <= single + 1e-4 * single
    assert plan.result.lower_bound <= single + 1e-6 * single
    assert plan.result.costs.total - plan.result.lower_bound <= CLOSENESS
    # Asked a second time it is known.
    before = counted.n_followed
    counted.solve(capital_budget=budget)
    assert counted.n_followed == before


def test_a_plan_beyond_the_budget_is_never_taken(counted):
    plan = counted.solve(capital_budget=0.0, closeness=1e9)
    assert plan.result.capital_cost == 0.0


@pytest.mark.parametrize("factor", [0.5, 2.0])
def test_an_estimated_cost_is_near_that_of_a_single_run(factor):
    """An engine that has solved nothing yet, at other failure rates."""
    study = vary(pack_study(), "failure rates", factor)
    with solver(study) as one:
        bought = replace(one.nothing_bought(), is_hardened=np.array([False, True, False]))
        wish = Wish("other", "fixed", fixed=bought, is_brief=True, closeness=CLOSENESS)
        cost = one.estimated_cost(wish)
    assert cost == pytest.approx(by_tree(study, fixed=bought), abs=CLOSENESS)


def test_points_that_are_sampled_have_intervals(monkeypatch):
    """Continuations are drawn, first few, then more where few leave too wide an interval."""
    monkeypatch.setattr(follow_plan, "ENUMERATION_LIMIT", 0)
    study = pack_study(
        profiles=make_profiles(6, price=np.array([1.0, 1.0, 2.0, 1.0, 1.0, 2.0])),
        windows=(make_window(n_period=6, occurrences_per_year=200.0, price_profile="price"),),
    )
    with solver(study) as one:
        existing, _, best = one.solve()
        hardened = replace(best.bought, is_hardened=~best.bought.is_hardened)
        hardened.is_hardened[:2] = [False, True]
        wish = Wish("point", "fixed", fixed=hardened, is_brief=True, closeness=CLOSENESS)
        plan = one.solve_wish(wish)
        full = best.follow.n_sample
    assert existing.follow.n_sample == full
    assert 0 < plan.follow.n_sample < full
    expected = by_tree(study, fixed=hardened)
    low, high = plan.result.cost_interval
    assert low - CLOSENESS <= expected <= high + CLOSENESS
    # Unequal numbers of draws are not paired: the interval is that of independent samples.
    half = plan.follow.difference_half_width(best.follow)
    assert half**2 == pytest.approx(plan.follow.half_width**2 + best.follow.half_width**2)


def test_closeness_is_a_small_part_of_the_saving(counted):
    maker = PackMaker(counted.one, counted.existing, counted.best)
    total = counted.best.result.costs.total
    saving = counted.existing.result.costs.total - total
    target = counted.one.options.gap_target_frac
    assert maker.closeness <= max(0.05 * saving, 0.02 * target * total) + 1e-9
    assert maker.closeness <= 0.2 * target * total + 1e-9


def test_a_stopped_run_follows_nothing(counted, monkeypatch):
    monkeypatch.setattr(counted.one, "should_stop", lambda: True)
    known = counted.solve(capital_budget=0.3 * counted.best.result.capital_cost)
    assert known.result.costs.total == pytest.approx(counted.existing.result.costs.total)
    other = replace(counted.best.bought, is_hardened=np.array([False, False, True]))
    with pytest.raises(NoPlanError, match="Stopped"):
        counted.solve(kind="fixed", fixed=other)
    assert counted.n_followed == 0


def test_wishes_without_closeness_are_searched_to_the_target(counted):
    plan = counted.one.solve_wish(Wish("point", is_brief=True))
    assert counted.n_followed == 1
    assert plan.result.costs.total == pytest.approx(by_tree(counted.one.study), rel=1e-4)
    assert isinstance(counted.one, PlanSolver)
