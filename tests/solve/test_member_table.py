"""Numbers of members kept as shifted series, and the cuts made of them in one go."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from tests.builders import random_study
from tests.solve.graphs import random_tree_graph
from xlplan.model.study_graph import build_study_graph
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.cut_pool import GROUP_BITS, CutBatch, CutPool
from xlplan.solve.decomposition import Engine
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.member_table import MemberTable, ShiftedSeries
from xlplan.solve.node_solver import NodeRequest, NodeSolver
from xlplan.solve.tables import gather_tables


@given(
    hnp.arrays(float, st.tuples(st.integers(1, 7), st.integers(0, 9)), elements=st.integers(0, 2))
)
def test_series_give_back_every_number(whole):
    series = ShiftedSeries(whole)
    members = np.arange(len(whole))
    np.testing.assert_array_equal(series.take(members), whole)
    np.testing.assert_array_equal(series.take(members[::-1]), whole[::-1])


def test_a_shifted_profile_is_kept_once():
    profile = np.random.default_rng(1).random(30)
    # Twenty members of ten periods each read numbers 0..9, 1..10, ... of one profile of 29.
    whole = np.array([profile[m : m + 10] for m in range(20)])
    assert ShiftedSeries(whole).n_kept == 29


@pytest.mark.parametrize("seed", [0, 3, 7])
def test_tables_of_a_study_hold_the_members_numbers(seed):
    study = random_study(seed)
    feeder = build_feeder(study)
    graph = build_study_graph(study, feeder, build_window_models(study, feeder)).graph
    cache = MemberCache(graph.families)
    n_checked = 0
    for i, family in enumerate(graph.families):
        table = MemberTable(cache, i, family)
        together = table.numbers(np.arange(family.n_member))
        for m in range(family.n_member):
            member, numbers = family.member(m), together.part(m)
            for name, places in (
                ("cost", table.columns),
                ("col_lower", table.columns),
                ("col_upper", table.columns),
                ("row_lower", table.rows),
                ("row_upper", table.rows),
            ):
                whole = getattr(table.first, name).copy()
                whole[places] = getattr(numbers, name)
                np.testing.assert_array_equal(whole, getattr(member, name))
                n_checked += len(places)
            np.testing.assert_array_equal(numbers.patch_value, member.patch_value)
            np.testing.assert_array_equal(numbers.exit_weight, member.exit_weight)
    assert n_checked


def test_cuts_of_a_run_are_those_of_its_nodes_one_by_one():
    graph = random_tree_graph(5, n_stage=3)
    with Engine(graph, seed=1) as engine:
        engine.run(1e-3)
        pools = engine.pools
    rng = np.random.default_rng(5)
    n_cut = 0
    for i_family, family in enumerate(graph.families):
        requests = []
        for group, i_member in enumerate(rng.integers(0, family.n_member, 6).tolist()):
            capacity = rng.uniform(graph.capacity_lower, graph.capacity_upper)
            state = rng.uniform(0.0, 1.0, 2) * capacity[:2]
            requests.append(NodeRequest(i_family, i_member, state, capacity, group=group))
        found = []
        for is_run in (True, False):
            solver = NodeSolver(graph, gather_tables(graph, MemberCache(graph.families)))
            for pool in pools:
                solver.add_cuts([pool.since(0)])
            if is_run:
                solutions = solver.solve_run(requests)
            else:
                solutions = [solver.solve(request) for request in requests]
            cuts = [batch for solution in solutions for batch in solution.cuts]
            found.append([solution.value for solution in solutions])
            found.append(np.concatenate([c.intercept for c in cuts]))
            found.append(np.concatenate([c.state_slope for c in cuts]))
            found.append(np.concatenate([c.capacity_slope for c in cuts]))
            n_cut += len(found[-1])
        for one, other in zip(found[:4], found[4:], strict=True):
            np.testing.assert_allclose(one, other, rtol=1e-9, atol=1e-9)
    assert n_cut


def test_a_pool_with_many_cuts_finds_each_and_takes_none_twice():
    rng = np.random.default_rng(2)
    pool = CutPool(3, n_member=7, n_state=2, n_capacity=1)
    known: dict[tuple[int, int], float] = {}
    for _ in range(400):
        n = int(rng.integers(1, 30))
        # Groups come in any order, and some come again.
        member, group = rng.integers(0, 7, n), rng.integers(0, 900, n)
        intercept = rng.standard_normal(n)
        pool.add(CutBatch(3, member, intercept, rng.random((n, 2)), rng.random((n, 1)), group))
        for m, g, a in zip(member.tolist(), group.tolist(), intercept.tolist(), strict=True):
            known.setdefault((m, g), a)
    pool.check()
    assert pool.n == len(known)
    for (m, g), a in known.items():
        assert pool.intercept[pool.position_of(m, g)] == a
    absent = pool.positions_of(np.array([0, 6]), (1 << GROUP_BITS) - 1)
    assert absent.tolist() == [-1, -1]
    capacity, state = np.array([0.5]), np.array([0.2, 0.9])
    for m in range(7):
        places = pool.positions(m)
        values = pool.intercept[places] + pool.state_slope[places] @ state
        values += pool.capacity_slope[places] @ capacity
        assert pool.value(m, state, capacity) == pytest.approx(values.max())


def test_models_that_rest_go_on_from_their_basis():
    graph = random_tree_graph(6, n_stage=2)
    solver = NodeSolver(graph, gather_tables(graph, MemberCache(graph.families)))
    capacity = graph.capacity_upper
    state = 0.5 * capacity[:2]
    model = solver.model(1, 0)
    value = model.solve(0, state, capacity).value
    model.rest()
    assert model.solve(0, state, capacity).value == pytest.approx(value, rel=1e-9)
    assert model.solve(1, state, capacity).value == pytest.approx(
        NodeSolver(graph, solver.tables).model(1, 0).solve(1, state, capacity).value, rel=1e-9
    )
