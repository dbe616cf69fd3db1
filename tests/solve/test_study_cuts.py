"""Cuts of studies: the quick ways of making many at once equal the plain way, and all are valid."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import scipy.optimize
import scipy.sparse

from tests.builders import random_study
from tests.solve.graphs import random_tree_graph
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
            cut = solvers[0].cuts(i_family).cut_from(folded, i_member, 1).take(np.arange(1))
            reached = cut.values(state[None, :], capacity)[0]
            assert reached == pytest.approx(full.value, rel=1e-6, abs=1e-5)


def value_with_cuts(family, member, state, capacity, theta_lower, exits):
    """Value of a member with the given cuts of its children alone: a cold LP."""
    program, n_exit = family.program, len(theta_lower)
    low, high = member.col_lower.copy(), member.col_upper.copy()
    given, held = member.in_columns >= 0, family.capacity_columns >= 0
    low[member.in_columns[given]] = high[member.in_columns[given]] = state[given]
    low[family.capacity_columns[held]] = high[family.capacity_columns[held]] = capacity[held]
    value = program.value.copy()
    value[family.patch] = member.patch_value
    rows = scipy.sparse.csr_array(
        (value, program.index, program.start), shape=(program.n_row, program.n_col)
    )
    # One row for each cut of a child: theta - slope @ y >= the rest of the cut.
    n_cut = len(exits.exit)
    cut_rows = scipy.sparse.lil_array((n_cut, program.n_col + n_exit))
    for k, e in enumerate(exits.exit):
        cut_rows[k, program.n_col + e] = 1.0
        for column, slope in zip(family.out_columns[e], exits.state_slope[k], strict=True):
            cut_rows[k, column] -= slope
    matrix = scipy.sparse.vstack(
        [scipy.sparse.hstack([rows, scipy.sparse.csr_array((program.n_row, n_exit))]), cut_rows]
    )
    row_low = np.concatenate([member.row_lower, exits.intercept + exits.capacity_slope @ capacity])
    found = scipy.optimize.milp(
        np.concatenate([member.cost, member.exit_weight]),
        bounds=scipy.optimize.Bounds(
            np.concatenate([low, theta_lower]), np.concatenate([high, np.full(n_exit, np.inf)])
        ),
        constraints=scipy.optimize.LinearConstraint(
            matrix.tocsr(), row_low, np.concatenate([member.row_upper, np.full(n_cut, np.inf)])
        ),
    )
    assert found.status == 0
    return (found.fun + member.offset) / member.scale


def sides_that_are_infinite(family, pi, i_member):
    """Whether ``pi`` needs an infinite side of a row that differs between the members."""
    members = [family.member(m) for m in range(family.n_member)]
    low = np.array([m.row_lower for m in members])
    high = np.array([m.row_upper for m in members])
    differs = (low != low[0]).any(axis=0) | (high != high[0]).any(axis=0)
    side = np.where(pi > 0.0, low[i_member], high[i_member])
    return bool((differs & (pi != 0.0) & ~np.isfinite(side)).any())


def compared_with_cold_programs(graph, seed):
    """Compares cuts of pairs and of nests with cold programs.

    Returns how many were below, how many of these reached the value, how many were not valid.
    """
    rng = np.random.default_rng(seed)
    with Engine(graph, seed=1) as engine:
        engine.run(0.05)
        pools = engine.pools
    solver = NodeSolver(graph, gather_tables(graph, MemberCache(graph.families)))
    for pool in pools:
        solver.add_cuts([pool.since(0)])
    n_reached = n_below = n_invalid = 0
    for i_family, family in enumerate(graph.families):
        model, bound = solver.model(i_family, 0), solver.bound(i_family)
        box = solver.tables.families[i_family]
        solved = []
        for i_member in rng.integers(0, family.n_member, 3).tolist():
            capacity, state = random_point(graph, i_family, rng)
            state = clip_states(box, state[None], capacity[None])[0]
            solved.append((i_member, capacity, state, model.solve(i_member, state, capacity)))
        for noise in (0.0, 0.1, 2.0):
            pi = np.array([outcome.pi for *_, outcome in solved])
            pi = pi * (1.0 + noise * rng.standard_normal(pi.shape))
            if noise > 1.0:  # some that were 0 are not, of either sign
                at = rng.random(pi.shape) < 0.02
                pi[at] += np.abs(pi).max(initial=0.0) * rng.standard_normal(at.sum())
            if bound.is_nested:
                i_solve = rng.integers(len(solved), size=1)
                i_member, *_, outcome = solved[int(i_solve[0])]
                cuts = bound.nested_cuts(
                    family.member(i_member), i_member, pi[i_solve[0]], outcome.exits, 1
                )
                solve = np.repeat(i_solve, len(cuts))
                is_valid = np.ones(len(cuts), dtype=bool)
            else:
                # Each solve's own member, and others, solves in no order.
                own = np.array([i_member for i_member, *_ in solved])
                others = rng.integers(0, family.n_member, 3)
                solve = np.concatenate([np.arange(len(solved)), rng.permutation(len(solved))])
                exits = [solved[i][3].exits for i in solve]
                children = ChildMultipliers(
                    np.repeat(np.arange(len(solve)), [len(e.exit) for e in exits]),
                    *(
                        np.concatenate([getattr(e, name) for e in exits])
                        for name in ("exit", "pi", "intercept", "state_slope", "capacity_slope")
                    ),
                )
                cuts, is_valid = bound.cuts_of_pairs(
                    pi, solve, np.concatenate([own, others]), children, np.arange(len(solve))
                )
            for i in rng.permutation(len(cuts))[:6].tolist():
                i_own, capacity, state, outcome = solved[solve[i]]
                i_member = int(cuts.member[i])
                member = family.member(i_member)
                if not bound.is_nested:
                    is_bad = sides_that_are_infinite(family, pi[solve[i]], i_member)
                    assert bool(is_valid[i]) != is_bad
                if not is_valid[i]:
                    n_invalid += 1
                    continue
                is_own = noise == 0.0 and i_member == i_own
                if not is_own:
                    capacity, state = random_point(graph, i_family, rng)
                    state = clip_states(box, state[None], capacity[None])[0]
                value = value_with_cuts(
                    family, member, state, capacity, box.theta_lower, outcome.exits
                )
                reached = cuts.take(np.array([i])).values(state[None, :], capacity)[0]
                assert reached <= value + 1e-7 * (1.0 + abs(value))
                n_below += 1
                if is_own:
                    assert reached == pytest.approx(value, rel=1e-6, abs=1e-6)
                    n_reached += 1
    return n_below, n_reached, n_invalid


@pytest.mark.parametrize("seed", [1, 4, 6, 14, 26])
def test_cuts_of_pairs_and_nests_are_below_cold_programs_of_their_members(seed):
    n_below, n_reached, _ = compared_with_cold_programs(graph_of(seed), seed)
    assert n_below > n_reached > 0


@pytest.mark.parametrize("seed", [4, 5])
def test_cuts_of_pairs_that_need_an_infinite_side_are_not_valid(seed):
    graph = random_tree_graph(seed, n_stage=3)
    n_below, n_reached, n_invalid = compared_with_cold_programs(graph, seed)
    assert n_below > n_reached > 0
    assert n_invalid
