"""Cuts lie below the function they bound, whatever multipliers they were made from."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.optimize

from tests.model.extensive_form import ExtensiveForm
from tests.solve.graphs import ListFamily, gate_graph, make_member, random_tree_graph
from xlplan.model.linear_program import LinearProgram
from xlplan.solve.cut_pool import CutBatch, CutPool
from xlplan.solve.cuts import (
    ROUNDING_SHIFT,
    ChildMultipliers,
    DomainBox,
    DualBound,
    ExitMultipliers,
    lift_amounts,
)
from xlplan.solve.decomposition import Engine
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.node_solver import NodeRequest, NodeSolver
from xlplan.solve.tables import gather_tables


class _NodeForm(ExtensiveForm):
    """The whole tree below one node, at one state and capacities."""

    def __init__(self, graph, family, member, state, capacity) -> None:
        self.graph, self.gates, self.n_node = graph, {}, 0
        self.cost, self.low, self.high, self.integer = [], [], [], []
        self.rows, self.row_low, self.row_high, self.offset = [], [], [], 0.0
        links = [([], float(c)) for c in capacity]
        self._expand(family, member, [([], float(s)) for s in state], links, 1.0)


def _true_value(graph, family, member, state, capacity):
    return _NodeForm(graph, family, member, state, capacity).solve()[0]


def test_every_cut_is_below_its_function_at_random_points():
    graph = random_tree_graph(4, n_stage=3)
    with Engine(graph, seed=1) as engine:
        engine.run(1e-7)
        rng = np.random.default_rng(1)
        n_checked = 0
        for i_family, family in enumerate(graph.families):
            for i_member in range(family.n_member):
                pool = engine.pools[i_family]
                pool.check()
                for _ in range(4):
                    capacity = rng.uniform(graph.capacity_lower, graph.capacity_upper)
                    state = rng.uniform(0.0, 1.0, 2) * capacity[:2]
                    value = _true_value(graph, i_family, i_member, state, capacity)
                    known = engine.value_of(i_family, i_member, state[None, :], capacity)[0]
                    assert known <= value + 1e-7 * (1.0 + abs(value))
                    n_checked += len(pool.positions(i_member))
    assert n_checked > 20


@pytest.mark.parametrize("noise", [0.0, 1e-6, 1e-2, 1.0])
def test_cuts_from_noisy_multipliers_stay_valid(noise):
    graph = random_tree_graph(11, n_stage=2)
    tables = gather_tables(graph, MemberCache(graph.families))
    solver = NodeSolver(graph, tables)
    rng = np.random.default_rng(2)
    i_family = 1
    for i_member in range(graph.families[i_family].n_member):
        capacity = np.array([4.0, 3.0, 1.0])
        outcome = solver.model(i_family, 0).solve(i_member, np.array([1.0, 0.5]), capacity)
        pi = outcome.pi * (1.0 + noise * rng.standard_normal(len(outcome.pi)))
        pi += noise * rng.standard_normal(len(pi))
        member = graph.families[i_family].member(i_member)
        cut = solver.bound(i_family).cut(member, pi, outcome.exits, i_member, 1)
        at_trial = cut.values(np.array([[1.0, 0.5]]), capacity)[0]
        if noise == 0.0:
            assert at_trial == pytest.approx(outcome.value, rel=1e-8, abs=1e-8)
        for _ in range(5):
            other = rng.uniform(graph.capacity_lower, graph.capacity_upper)
            state = rng.uniform(0.0, 1.0, 2) * other[:2]
            value = _true_value(graph, i_family, i_member, state, other)
            assert cut.values(state[None, :], other)[0] <= value + 1e-8 * (1.0 + abs(value))


def test_multipliers_of_one_member_serve_another():
    graph = random_tree_graph(12, n_stage=2)
    tables = gather_tables(graph, MemberCache(graph.families))
    solver = NodeSolver(graph, tables)
    state, capacity = np.array([1.0, 0.5]), np.array([4.0, 3.0, 1.0])
    outcome = solver.model(1, 0).solve(0, state, capacity)
    cut, origin = solver.cuts(1).shared_cuts([outcome], [np.array([1])], [1])
    assert origin.tolist() == [0]
    assert cut.member.tolist() == [1]
    rng = np.random.default_rng(3)
    for _ in range(10):
        other = rng.uniform(graph.capacity_lower, graph.capacity_upper)
        at = rng.uniform(0.0, 1.0, 2) * other[:2]
        assert cut.values(at[None, :], other)[0] <= _true_value(graph, 1, 1, at, other) + 1e-8


def test_lifted_cut_by_hand():
    # Upper cut 10 - 2 s, lower cut 1 + s, s in [0, 3]: they differ most at s = 0, by 9.
    box = DomainBox(
        capacity_lower=np.zeros(1),
        capacity_upper=np.ones(1),
        state_lower=np.zeros(1),
        state_upper=np.full(1, 3.0),
        state_lower_matrix=np.zeros((1, 1)),
        state_upper_matrix=np.full((1, 1), 3.0),
    )
    upper = np.full(2, 10.0), np.full((2, 1), -2.0), np.zeros((2, 1))
    # A second lower cut at 4 makes it 6: any cut of the other child will do.
    lower = np.array([1.0, 1.0, 4.0]), np.array([[1.0], [1.0], [0.0]]), np.zeros((3, 1))
    amounts = lift_amounts(upper, lower, np.array([0, 1]), box, (0,), gate_is_one=True)
    assert amounts == pytest.approx([9.0, 6.0])


def test_gated_exit_at_both_values_of_the_gate():
    graph = gate_graph(1.0, damage=10.0, chance=0.5)
    with Engine(graph, seed=1) as engine:
        engine.run(1e-9)
        for gate, value in ((0.0, 5.0), (1.0, 0.5)):
            request = NodeRequest(0, 0, np.array([0.2]), np.array([gate]))
            assert engine.solve_nodes([request])[0].value == pytest.approx(value)


def test_lazy_rows_give_the_same_as_all_rows():
    graph = random_tree_graph(13, n_stage=2)
    solver = NodeSolver(graph, gather_tables(graph, MemberCache(graph.families)))
    rng = np.random.default_rng(4)
    n_lazy_needed = 0
    for _ in range(20):
        capacity = rng.uniform(graph.capacity_lower, graph.capacity_upper)
        state = rng.uniform(0.0, 1.0, 2) * capacity[:2]
        i_member = int(rng.integers(0, 2))
        outcome = solver.model(1, 0).solve(i_member, state, capacity)
        program, member = graph.families[1].program, graph.families[1].member(i_member)
        low, high = member.col_lower.copy(), member.col_upper.copy()
        low[member.in_columns] = high[member.in_columns] = state
        columns = graph.families[1].capacity_columns
        low[columns[:2]] = high[columns[:2]] = capacity[:2]
        matrix = np.zeros((program.n_row, program.n_col))
        for r in range(program.n_row):
            part = slice(program.start[r], program.start[r + 1])
            matrix[r, program.index[part]] = program.value[part]
        whole = scipy.optimize.milp(
            member.cost,
            bounds=scipy.optimize.Bounds(low, high),
            constraints=scipy.optimize.LinearConstraint(matrix, member.row_lower, member.row_upper),
        )
        assert outcome.value == pytest.approx(whole.fun, rel=1e-7, abs=1e-7)
        n_lazy_needed += int((matrix @ outcome.y > member.row_upper - 1e-7)[program.is_lazy].any())
    assert n_lazy_needed > 0


def test_pool_keeps_and_finds_cuts():
    pool = CutPool(0, n_member=2, n_state=1, n_capacity=1)
    batch = CutBatch(
        0,
        np.array([0, 0, 1]),
        np.array([1.0, 2.0, 3.0]),
        np.array([[1.0], [-1.0], [0.0]]),
        np.array([[0.0], [1.0], [0.0]]),
        np.array([7, 8, 7]),
    )
    pool.add(batch)
    pool.add(batch)  # the same groups again: ignored
    pool.check()
    assert pool.n == 3
    # Member 0 at s = 0.25, c = 1: the higher of 1 + 0.25 and 2 - 0.25 + 1.
    assert pool.value(0, np.array([0.25]), np.array([1.0])) == pytest.approx(2.75)
    assert pool.position_of(1, 7) == 2
    assert pool.position_of(1, 8) == -1
    assert len(pool.since(2)) == 1


def test_multipliers_above_the_weight_of_an_exit_are_scaled_down():
    # The plan's exit weighs 1/2. Twice as large a multiplier would promise twice the damage.
    graph = gate_graph(1.0)
    solver = NodeSolver(graph, gather_tables(graph, MemberCache(graph.families)))
    exits = ExitMultipliers(
        np.array([0]), np.array([1.0]), np.array([10.0]), np.zeros((1, 1)), np.array([[-9.0]])
    )
    cut = solver.bound(0).cut(graph.families[0].member(0), np.zeros(0), exits, 0, 1)
    assert cut.intercept[0] == pytest.approx(5.0)
    assert cut.capacity_slope[0, 0] == pytest.approx(-4.5)


class _PatchedFamily(ListFamily):
    """A family in which the first two entries of the matrix differ between members."""

    @property
    def patch(self):
        return np.arange(2)


def _random_family(rng, n_member=7, n_row=12, n_col=14, n_exit=2, n_state=2):
    """(family, its matrices) with numbers of every kind that differ and that do not."""
    matrix = np.where(rng.random((n_row, n_col)) < 0.4, rng.standard_normal((n_row, n_col)), 0.0)
    matrix[0, :2] = 1.0
    row, column = np.nonzero(matrix)
    program = LinearProgram(
        rng.standard_normal(n_col), -rng.random(n_col), rng.random(n_col), np.zeros(n_row),
        np.zeros(n_row), np.searchsorted(row, np.arange(n_row + 1)), column, matrix[row, column],
        np.zeros(n_col, dtype=bool), np.zeros(n_row, dtype=bool),
    )  # fmt: skip
    members = []
    kind = rng.integers(0, 5, n_row)  # equation, lower, upper, both, the same in all
    kind[:5] = np.arange(5)
    for i in range(n_member):
        low = program.row_lower - 1.0
        high = program.row_lower + 2.0
        low[kind < 4] += rng.standard_normal((kind < 4).sum())
        high[kind == 2] += rng.random((kind == 2).sum())
        high[kind == 0] = low[kind == 0]
        high[(kind == 1) | (kind == 4)] = np.inf
        low[kind == 2] = -np.inf
        high[kind == 3] = low[kind == 3] + rng.random((kind == 3).sum())
        if i == 3:  # free here, not elsewhere
            low[1], high[2] = -np.inf, np.inf
        cost, lower, upper = (
            getattr(program, name).copy() for name in ("cost", "col_lower", "col_upper")
        )
        cost[[3, 4, 9]] += rng.standard_normal(3)
        lower[[4, 5, 6, 10]] -= rng.random(4)
        upper[[4, 6, 7, 9]] += rng.random(4)
        exits = [(rng.random(), (0, 0), None) for _ in range(n_exit)]
        members.append(
            make_member(
                program, [8, 9], exits, cost=cost, col_lower=lower, col_upper=upper,
                row_lower=low, row_upper=high, offset=rng.standard_normal(),
                scale=1.0 + rng.random(), patch_value=rng.standard_normal(2),
            )
        )  # fmt: skip
    family = _PatchedFamily(
        "random", program, members, np.array([10, -1, 11]),
        np.array([[2, 12], [13, 12]])[:n_exit, :n_state], ((),) * n_exit, True,
    )  # fmt: skip
    matrices = np.repeat(matrix[None], n_member, axis=0)
    matrices[:, 0, :2] = [member.patch_value for member in members]
    return family, matrices


@pytest.mark.parametrize("seed", range(6))
def test_cut_of_a_pair_is_the_sum_term_by_term(seed):
    rng = np.random.default_rng(seed)
    family, matrices = _random_family(rng)
    n_solve, n_pair, n_child = 3, 25, 40
    theta_lower = -rng.random(2)
    bound = DualBound(
        0, family, np.zeros(3), np.ones(3), theta_lower, MemberCache((family,))
    )  # fmt: skip
    pi = rng.standard_normal((n_solve, 12)) * (rng.random((n_solve, 12)) < 0.6)
    # Most multipliers have the sign that their row asks for.
    sides = np.array([[member.row_lower, member.row_upper] for member in family.members])
    is_same = (sides == sides[0]).all(axis=(0, 1))
    is_usual = rng.random(pi.shape) < 0.9
    pi = np.where(is_usual & np.isinf(sides[0, 1]), np.abs(pi), pi)
    pi = np.where(is_usual & np.isinf(sides[0, 0]), -np.abs(pi), pi)
    solve, members = rng.integers(0, n_solve, n_pair), rng.integers(0, family.n_member, n_pair)
    children = ChildMultipliers(
        np.sort(rng.integers(0, n_pair, n_child)), rng.integers(0, 2, n_child),
        rng.random(n_child), rng.standard_normal(n_child),
        rng.standard_normal((n_child, 2)), rng.standard_normal((n_child, 3)),
    )  # fmt: skip
    cuts, is_valid = bound.cuts_of_pairs(pi, solve, members, children, np.arange(n_pair))
    assert is_valid.any()
    for p, (s, m) in enumerate(zip(solve.tolist(), members.tolist(), strict=True)):
        member, terms = family.member(m), [family.member(m).offset]
        is_open = False
        d = member.cost.copy()
        for i in range(12):
            if pi[s, i] != 0.0:
                side = member.row_lower[i] if pi[s, i] > 0.0 else member.row_upper[i]
                if is_same[i] and not np.isfinite(side):
                    continue  # no member has that side: the multiplier counts as 0
                is_open = is_open or not np.isfinite(side)
                terms.append(pi[s, i] * side)
                d -= pi[s, i] * matrices[m, i]
        assert bool(is_valid[p]) == (not is_open)
        capacity_slope = np.zeros(3)
        for e in range(2):
            here = (children.pair == p) & (children.exit == e)
            weight, asked = member.exit_weight[e], children.pi[here].sum()
            share = children.pi[here] * min(1.0, weight / asked if asked else 1.0)
            terms += [*(share * children.intercept[here]), (weight - share.sum()) * theta_lower[e]]
            d[family.out_columns[e]] += share @ children.state_slope[here]
            capacity_slope += share @ children.capacity_slope[here]
        for j in range(14):
            if j not in (8, 9, 10, 11):
                terms.append(min(d[j] * member.col_lower[j], d[j] * member.col_upper[j]))
        capacity_slope[[0, 2]] += d[[10, 11]]
        np.testing.assert_allclose(cuts.state_slope[p], d[[8, 9]] / member.scale, atol=1e-11)
        np.testing.assert_allclose(
            cuts.capacity_slope[p], capacity_slope / member.scale, atol=1e-11
        )
        if is_valid[p]:
            total, shift = math.fsum(terms), ROUNDING_SHIFT * np.abs(terms).sum()
            lowered_by = total - cuts.intercept[p] * member.scale
            assert 0.99 * shift <= lowered_by <= 1.01 * shift
