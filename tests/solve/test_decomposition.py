"""The engine against the whole extensive form, solved by SciPy; limits; workers."""

from __future__ import annotations

import time
from dataclasses import replace

import numpy as np
import pytest

from tests.model.extensive_form import ExtensiveForm
from tests.solve.graphs import gate_graph, random_tree_graph
from xlplan.solve.decomposition import Engine, EngineOptions
from xlplan.solve.node_solver import REST_ROWS, NodeRequest
from xlplan.solve.result import StopReason


@pytest.mark.parametrize("seed", range(4))
def test_equals_the_extensive_form(seed):
    graph = random_tree_graph(seed, n_stage=4, n_branch=2 + seed % 2)
    optimum, _ = ExtensiveForm(graph, {}).solve()
    with Engine(graph, seed=1) as engine:
        result = engine.run(1e-7)
    assert result.termination is StopReason.GAP_REACHED
    assert not result.cost.is_statistical
    assert result.cost.mean == pytest.approx(optimum, rel=1e-6)
    assert result.lower_bound <= optimum * (1.0 + 1e-9)
    # The plan costs that much: the extensive form with x fixed says the same.
    fixed, _ = ExtensiveForm(graph, {}).solve(dict(enumerate(result.x)))
    assert fixed == pytest.approx(result.cost.mean, rel=1e-6)


def test_fixed_decision_uses_cuts_of_earlier_runs():
    graph = random_tree_graph(5)
    x = np.array([4.0, 2.0, 1.0])
    expected, _ = ExtensiveForm(graph, {}).solve(dict(enumerate(x)))
    with Engine(graph, seed=1) as engine:
        engine.run(1e-6)
        result = engine.run(1e-7, fixed_x=x)
    assert result.cost.mean == pytest.approx(expected, rel=1e-6)
    assert result.lower_bound == pytest.approx(expected, rel=1e-6)
    np.testing.assert_array_equal(result.x, x)


def test_narrower_bounds_of_x():
    graph = random_tree_graph(6)
    high = np.array([3.0, 1.0, 1.0])
    form = ExtensiveForm(graph, {})
    form.high[:3] = list(high)
    expected, _ = form.solve()
    with Engine(graph, seed=1) as engine:
        free = engine.run(1e-7)
        result = engine.run(1e-7, x_bounds=(np.zeros(3), high))
    assert result.cost.mean == pytest.approx(expected, rel=1e-6)
    assert (result.x <= high + 1e-9).all()
    assert result.cost.mean >= free.cost.mean - 1e-6


@pytest.mark.parametrize(("price", "cost", "measure"), [(1.0, 1.5, 1.0), (20.0, 5.0, 0.0)])
def test_gate(price, cost, measure):
    # Damage 10 with chance 1/2 costs 5. The measure turns 10 into 1: its price + 1/2.
    with Engine(gate_graph(price), seed=1) as engine:
        result = engine.run(1e-9)
        assert result.cost.mean == pytest.approx(cost)
        assert result.lower_bound == pytest.approx(cost)
        assert result.x[0] == measure
        for choice, fixed_cost in ((0.0, 5.0), (1.0, price + 0.5)):
            fixed = engine.run(1e-9, fixed_x=np.array([choice]))
            assert fixed.cost.mean == pytest.approx(fixed_cost)
            assert fixed.lower_bound == pytest.approx(fixed_cost)


def test_stopped_run_returns_a_plan_with_its_true_gap():
    graph = random_tree_graph(2, n_stage=5)
    optimum, _ = ExtensiveForm(graph, {}).solve()
    with Engine(graph, seed=1) as engine:
        result = engine.run(1e-9, deadline=time.monotonic() - 1.0)
    assert result.termination is StopReason.TIME_LIMIT
    assert result.has_plan
    assert result.x[2] in (0.0, 1.0)
    assert result.lower_bound <= optimum <= result.cost.high
    assert result.gap_frac == pytest.approx(
        (result.cost.high - result.lower_bound) / abs(result.cost.mean)
    )
    assert result.gap_frac > 1e-9


def test_interrupted_run():
    calls = []

    def ask() -> bool:
        calls.append(1)
        return len(calls) > 40

    graph = random_tree_graph(2, n_stage=5)
    optimum, _ = ExtensiveForm(graph, {}).solve()
    with Engine(graph, seed=1) as engine:
        result = engine.run(1e-9, should_stop=ask)
    assert result.termination is StopReason.INTERRUPTED
    assert result.lower_bound <= optimum <= result.cost.high + 1e-9


def test_bounds_only_rise_and_progress_is_told():
    records = []
    with Engine(random_tree_graph(7), seed=1) as engine:
        engine.run(1e-7, on_progress=records.append)
    bounds = [r.lower_bound for r in records]
    assert len(bounds) > 1
    assert bounds == sorted(bounds)


def test_sampled_interval_holds_the_cost_of_every_path():
    graph = random_tree_graph(8, n_stage=5, n_branch=3)
    optimum, _ = ExtensiveForm(graph, {}).solve()
    options = EngineOptions(n_sample_first=64)
    with Engine(graph, seed=3, options=options) as engine:
        result = engine.run(2e-3, enumerate_paths=False)
        every = engine.run(1.0, fixed_x=result.x, enumerate_paths=True)
    assert result.lower_bound <= optimum * (1.0 + 1e-9)
    assert every.cost.mean >= optimum * (1.0 - 1e-9)
    assert result.cost.high >= optimum * (1.0 - 1e-9)


def _member_and_sum(family, i_member, y) -> tuple[str, int, float]:
    """Picklable measure."""
    return family.name, i_member, float(y.sum())


@pytest.mark.parametrize("do_models_rest", [False, True])
def test_one_worker_and_two_give_the_same_digits(do_models_rest):
    results = []
    for workers in (1, 2):
        with Engine(random_tree_graph(9), seed=1, workers=workers) as engine:
            if do_models_rest:
                # As if it were large; the processes are not there yet.
                engine._workers.tables = replace(engine.tables, n_row=REST_ROWS + 1)
                if engine._workers._local is not None:
                    engine._workers._local._do_models_rest = True
            result = engine.run(1e-6)
            request = NodeRequest(1, 0, np.array([1.0, 0.5]), engine.run(1.0).capacities[0])
            node = engine.solve_nodes([request], _member_and_sum)[0]
            results.append((result, node))
    (one, node_one), (two, node_two) = results
    assert one.lower_bound == two.lower_bound
    assert one.cost == two.cost
    np.testing.assert_array_equal(one.x, two.x)
    assert node_one.value == node_two.value
    assert node_one.measured == node_two.measured
    assert node_one.measured[:2] == ("stage 1", 0)


def test_second_cost_chooses_among_optimal_points():
    # With free storage and nothing to serve, any stored energy is optimal; the second cost decides.
    graph = random_tree_graph(1)
    with Engine(graph, seed=1) as engine:
        result = engine.run(1e-7)
        last = len(graph.families) - 1
        family = graph.families[last]
        after = family.program.col_names.index("after 0")
        values, stored = [], []
        for sign in (1.0, -1.0):
            second = np.zeros(family.program.n_col)
            second[after] = sign
            request = NodeRequest(
                last,
                0,
                np.array([5.0, 3.0]),
                result.capacities[0],
                second_cost=second,
                wants_primal=True,
            )
            solution = engine.solve_nodes([request])[0]
            values.append(solution.cost)
            stored.append(solution.y[after])
    assert values[0] == pytest.approx(values[1], abs=1e-6)
    assert stored[0] <= stored[1] + 1e-9
