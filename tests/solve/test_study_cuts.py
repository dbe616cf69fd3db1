"""Cuts of studies: the quick ways of making many at once equal the plain way, and all are valid."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.builders import random_study
from xlplan.model.study_graph import build_study_graph
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.cuts import ChildMultipliers, ExitMultipliers
from xlplan.solve.decomposition import Engine
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.node_solver import NodeSolver
from xlplan.solve.tables import clip_states, gather_tables


def graph_of(seed, features=None):
    """Value graph of a random study."""
    study = random_study(seed) if features is None else random_study(seed, features=features)
    feeder = build_feeder(study)
    return build_study_graph(study, feeder, build_window_models(study, feeder)).graph


def without_folds(graph):
    """The same graph whose programs keep every column."""
    families = []
    for family in graph.families:
        program = replace(family.program, folds=type(family.program.folds)())
        families.append(replace(family, program=program))
    return replace(graph, families=tuple(families))


def random_point(graph, i_family, rng):
    """Capacities in their box, whole where they gate, and a state in its domain."""
    capacity = rng.uniform(graph.capacity_lower, graph.capacity_upper)
    for family in graph.families:
        for gate in family.exit_gate:
            capacity[list(gate)] = 0.0
            if gate and rng.random() < 0.5:
                capacity[gate[0]] = 1.0
    low = graph.state_lower_matrix[i_family] @ capacity
    high = graph.state_upper_matrix[i_family] @ capacity
    return capacity, rng.uniform(low, np.maximum(low, high))


def assert_same(one, other, pool_scale):
    """Equal members, slopes and intercepts, up to rounding in sums of thousands of terms."""
    assert one.member.tolist() == other.member.tolist()
    scale = 1.0 + pool_scale
    np.testing.assert_allclose(one.intercept, other.intercept, atol=1e-8 * scale, rtol=1e-9)
    np.testing.assert_allclose(one.state_slope, other.state_slope, atol=1e-8 * scale, rtol=1e-9)
    np.testing.assert_allclose(
        one.capacity_slope, other.capacity_slope, atol=1e-8 * scale, rtol=1e-9
    )


@pytest.mark.parametrize("seed", range(0, 30, 3))
def test_quick_cuts_equal_plain_cuts(seed):
    graph = graph_of(seed)
    rng = np.random.default_rng(seed)
    with Engine(graph, seed=1) as engine:
        engine.run(0.05)
        pools = engine.pools
    solver = NodeSolver(graph, gather_tables(graph, MemberCache(graph.families)))
    for pool in pools:
        solver.add_cuts([pool.since(0)])
    n_nested = n_shared = 0
    for i_family, family in enumerate(graph.families):
        model, bound = solver.model(i_family, 0), solver.bound(i_family)
        for _ in range(3):
            i_member = int(rng.integers(family.n_member))
            capacity, state = random_point(graph, i_family, rng)
            state = clip_states(solver.tables.families[i_family], state[None], capacity[None])[0]
            outcome = model.solve(i_member, state, capacity)
            # Noise makes every term count; any multipliers give a cut.
            pi = outcome.pi * (1.0 + 0.1 * rng.standard_normal(len(outcome.pi)))
            exits = outcome.exits
            size = float(np.abs(pi).max(initial=0.0)) * 1e3
            if bound.is_nested:
                quick = bound.nested_cuts(family.member(i_member), i_member, pi, exits, 1)
                members = range(i_member, family.n_member)
                n_nested += 1
            else:
                members = rng.permutation(family.n_member)[:4].tolist()
                n = len(members)
                n_cut = len(exits.exit)
                children = ChildMultipliers(
                    np.repeat(np.arange(n), n_cut),
                    np.tile(exits.exit, n),
                    np.tile(exits.pi, n),
                    np.tile(exits.intercept, n),
                    np.tile(exits.state_slope, (n, 1)),
                    np.tile(exits.capacity_slope, (n, 1)),
                )
                quick, is_valid = bound.cuts_of_pairs(
                    pi[None, :], np.zeros(n, int), np.array(members), children, np.ones(n, int)
                )
                assert is_valid.all()
                n_shared += 1
            for i, m in enumerate(members):
                plain = bound.cut(
                    family.member(m), pi, ExitMultipliers(*vars(exits).values()), m, 1
                )
                assert_same(quick.take(np.array([i])), plain, size)
    assert n_nested
    assert n_shared


@pytest.mark.parametrize("seed", range(1, 30, 4))
def test_folded_network_equals_the_full_one_at_random_states(seed):
    graph = graph_of(seed)
    rng = np.random.default_rng(seed)
    with Engine(graph, seed=1) as engine:
        engine.run(0.05)
        pools = engine.pools
    solvers = []
    for variant in (graph, without_folds(graph)):
        solver = NodeSolver(variant, gather_tables(variant, MemberCache(variant.families)))
        for pool in pools:
            solver.add_cuts([pool.since(0)])
        solvers.append(solver)
    assert any(len(family.program.folds) for family in graph.families)
    for i_family, family in enumerate(graph.families):
        for _ in range(4):
            i_member = int(rng.integers(family.n_member))
            capacity, state = random_point(graph, i_family, rng)
            folded, full = (
                solver.model(i_family, 0).solve(i_member, state, capacity) for solver in solvers
            )
            assert folded.value == pytest.approx(full.value, rel=1e-7, abs=1e-6)
            member, program = family.member(i_member), family.program
            activity = program.activity(folded.y)
            slack = 1e-5 * (1.0 + np.abs(activity))
            assert (activity >= member.row_lower - slack).all()
            assert (activity <= member.row_upper + slack).all()
            # Cuts from either hold for both: the folded multipliers are of the full program.
            cut = solvers[0].model(i_family, 0).cut_from(folded, i_member, 1).take(np.arange(1))
            reached = cut.values(state[None, :], capacity)[0]
            assert reached == pytest.approx(full.value, rel=1e-6, abs=1e-5)
