"""Proposals against the whole extensive form, solved by SciPy; cuts made while following."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from tests.model.extensive_form import ExtensiveForm
from tests.solve.graphs import random_tree_graph
from xlplan.model.value_graph import ValueGraph
from xlplan.solve.decomposition import Engine, EngineOptions
from xlplan.solve.first_stage import capacities_of, state_of
from xlplan.solve.node_solver import NodeRequest
from xlplan.solve.proposal import LearningService, propose

SAMPLING = EngineOptions(enumerate_up_to=0, small_exits=0)


def box(graph: ValueGraph) -> tuple[np.ndarray, np.ndarray]:
    return graph.first_stage.col_lower, graph.first_stage.col_upper


def root_request(engine: Engine, x: np.ndarray) -> NodeRequest:
    graph = engine.graph
    root = graph.roots[0]
    capacity = capacities_of(root, x, graph.capacity_lower, graph.capacity_upper)
    return NodeRequest(root.family, root.member, state_of(root, capacity), capacity)


@pytest.mark.parametrize("seed", range(4))
def test_a_proposal_is_as_good_as_it_says(seed):
    """All paths are seen here, so what is said to be open holds the optimum."""
    graph = random_tree_graph(seed, n_stage=4)
    optimum, _ = ExtensiveForm(graph, {}).solve()
    closeness = 1e-5 * abs(optimum)
    with Engine(graph, seed=1) as engine:
        found = propose(engine, box(graph), closeness, 60)
    assert found.lower_bound <= optimum * (1.0 + 1e-9)
    assert found.open_abs <= closeness
    assert optimum <= found.lower_bound + found.open_abs + 1e-9 * abs(optimum)
    cost, _ = ExtensiveForm(graph, {}).solve(dict(enumerate(found.x)))
    assert cost >= optimum - 1e-9 * abs(optimum)
    assert cost <= optimum + 20.0 * closeness


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("draws_chains", [False, True])
def test_the_bound_holds_where_only_parts_are_seen(seed, draws_chains):
    graph = random_tree_graph(seed, n_stage=4)
    optimum, _ = ExtensiveForm(graph, {}).solve()
    bounds = []
    with Engine(graph, seed=1, options=SAMPLING) as engine:
        for _ in range(6):
            found = propose(engine, box(graph), 1e-6 * optimum, 2, draws_chains=draws_chains)
            assert found.lower_bound <= optimum * (1.0 + 1e-9)
            bounds.append(found.lower_bound)
    assert all(b >= a - 1e-9 * optimum for a, b in pairwise(bounds))


def test_without_a_look_the_bound_is_that_of_the_cuts():
    graph = random_tree_graph(1)
    optimum, _ = ExtensiveForm(graph, {}).solve()
    with Engine(graph, seed=1) as engine:
        before = propose(engine, box(graph), 1e-6, 0)
        engine.run(1e-7)
        after = propose(engine, box(graph), 1e-6 * abs(optimum), 0)
    assert before.lower_bound <= after.lower_bound + 1e-9 * abs(optimum)
    assert before.open_abs == after.open_abs == np.inf
    assert after.lower_bound == pytest.approx(optimum, rel=1e-5)
    assert after.lower_bound <= optimum * (1.0 + 1e-9)


def test_bounds_of_a_proposal_hold():
    graph = random_tree_graph(6)
    high = np.array([3.0, 1.0, 1.0])
    form = ExtensiveForm(graph, {})
    form.high[:3] = list(high)
    expected, _ = form.solve()
    with Engine(graph, seed=1) as engine:
        engine.run(1e-7)
        found = propose(engine, (np.zeros(3), high), 1e-6 * abs(expected), 30)
    assert (found.x <= high + 1e-9).all()
    assert found.lower_bound == pytest.approx(expected, rel=1e-5)


def test_no_cut_where_nothing_new_is_found():
    graph = random_tree_graph(3)
    with Engine(graph, seed=1) as engine:
        request = root_request(engine, np.array([2.0, 1.0, 1.0]))
        asked = [
            NodeRequest(**{**vars(request), "group": group, "known": known})
            for group, known in ((1, -np.inf), (2, np.inf))
        ]
        with_cut, without = engine.solve_nodes(asked)
    assert with_cut is not None
    assert without is not None
    assert len(with_cut.cuts) == 1
    assert without.cuts == ()
    assert without.value == pytest.approx(with_cut.value)


def test_learning_waits_and_its_cuts_hold():
    """What is learnt reaches the pools when it is taken in, and lies below the true value."""
    graph = random_tree_graph(3)
    x = np.array([2.0, 1.0, 1.0])
    true, _ = ExtensiveForm(graph, {}).solve(dict(enumerate(x)))
    first_stage = float(graph.first_stage.cost[:3] @ x)
    with Engine(graph, seed=1) as engine:
        service = LearningService(engine, 0.0)
        request = root_request(engine, x)
        service.solve_nodes([request])
        assert sum(pool.n for pool in engine.pools) == 0
        assert service.take_in() > 0
        assert service.take_in() == 0
        known = engine.value_of(
            request.family, request.member, request.state[None, :], request.capacity
        )
        assert first_stage + graph.roots[0].weight * known[0] <= true + 1e-9 * abs(true)
        # The second time there is nothing to learn.
        service.solve_nodes([request])
        assert service.take_in() == 0
