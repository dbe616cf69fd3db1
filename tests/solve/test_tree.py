"""What the tree's solver says when there is a plan, and when there is none."""

from math import isnan

import pulp
import pytest

from tests.builders import make_measure, random_study, small_study
from xlplan.model.whole_tree import WholeTree, build_whole_tree
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.tree import TreeTermination, solve_tree
from xlplan.study.study import Study


def tree_of(study: Study) -> WholeTree:
    feeder = build_feeder(study)
    return build_whole_tree(study, feeder, build_window_models(study, feeder))


def test_bound_and_objective_meet_and_include_the_constant_part():
    # Repair cost is a constant of the program: it must be in the bound as in the objective.
    study = small_study(measures=(make_measure("M", ("SA",)),))
    solution = solve_tree(tree_of(study))
    assert solution.termination is TreeTermination.OPTIMAL
    assert solution.has_plan
    assert solution.bound == pytest.approx(solution.objective, rel=2e-6)
    assert solution.objective > 100 * 4 * 200 * 0.1 * 0.9


def test_an_impossible_program_gives_no_plan():
    tree = tree_of(small_study())
    problem, demand = tree.problem, tree.purchases.demand_kw
    problem += demand >= 2 * demand.upBound, "impossible"
    solution = solve_tree(tree)
    assert solution.termination is TreeTermination.INFEASIBLE
    assert not solution.has_plan
    assert isnan(solution.objective)
    assert solution.purchases is None
    assert solution.segments == ()


def test_no_time_at_all_is_a_limit_without_a_plan():
    # HiGHS then fills the solution with zeros: nothing of it may be taken for a plan.
    solution = solve_tree(tree_of(random_study(1)), time_limit_s=0.0)
    assert solution.termination is TreeTermination.LIMIT
    assert not solution.has_plan
    assert solution.purchases is None


def test_integers_keep_their_limits_after_solving():
    tree = tree_of(small_study(measures=(make_measure("M", ("SA",), capital_cost=1.0),)))
    first = solve_tree(tree)
    integers = [v for v in tree.problem.variables() if v.cat == pulp.LpInteger]
    assert [(v.lowBound, v.upBound) for v in integers] == [(0, 1)]
    assert solve_tree(tree).objective == pytest.approx(first.objective, rel=1e-9)


def test_nothing_is_printed(capfd):
    solve_tree(tree_of(small_study()))
    assert capfd.readouterr().out == ""
