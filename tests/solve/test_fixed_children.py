"""Cuts of children that stay the same: none that matters is left out, and the oldest at ties."""

from __future__ import annotations

import numpy as np
import pytest

from xlplan.solve.cut_pool import CutBatch, CutPool
from xlplan.solve.cuts import DomainBox
from xlplan.solve.fixed_children import FixedChildren

N_MEMBER, N_STATE = 6, 3


def _random_cuts(rng: np.random.Generator, family: int, n: int, group: int) -> CutBatch:
    """Cuts around a bowl: each is the highest one somewhere, most of them far away."""
    point, capacity = rng.uniform(-4.0, 4.0, (n, N_STATE)), rng.uniform(0.0, 1.0, (n, 2))
    intercept = 50.0 - (point**2).sum(axis=1) - (capacity**2).sum(axis=1)
    # The last member has none.
    member = rng.integers(0, N_MEMBER - 1, n)
    groups = group + np.arange(n)
    return CutBatch(family, member, intercept, 2.0 * point, 2.0 * capacity, groups)


def _box() -> DomainBox:
    """States between 0 and twice the capacities."""
    upper = np.array([[2.0, 0.0], [0.0, 2.0], [1.0, 1.0]])
    return DomainBox(np.zeros(2), np.ones(2), np.zeros(3), np.full(3, 9.0), np.zeros((3, 2)), upper)


def test_high_cuts_by_hand():
    # s from 0 to 1: the lines s, 1 - s, 0.2 and s - 0.1, which is below the first one everywhere.
    pool = CutPool(0, n_member=2, n_state=1, n_capacity=1)
    intercept, slope = np.array([0.0, 1.0, 0.2, -0.1]), np.array([[1.0], [-1.0], [0.0], [1.0]])
    zeros = np.zeros((4, 1))
    pool.add(CutBatch(0, np.full(4, 1), intercept, slope, zeros, np.arange(4)))
    found = pool.high_cuts(np.zeros(1), np.zeros(1), np.ones(1))
    assert found.order.tolist() == [0, 1, 2]
    assert found.start.tolist() == [0, 0, 3]
    # At s = 0 alone nothing but the second one counts.
    found = pool.high_cuts(np.zeros(1), np.zeros(1), np.zeros(1))
    assert found.order.tolist() == [1]


def test_high_cuts_hold_the_highest_at_every_state():
    rng = np.random.default_rng(4)
    pool = CutPool(0, N_MEMBER, N_STATE, 2)
    low, high = np.array([0.0, -0.5, 1.0]), np.array([1.0, 0.5, 1.0])
    capacity = np.array([0.3, 0.8])
    n_left_out = 0
    for i in range(4):
        pool.add(_random_cuts(rng, 0, 200, 200 * i))
        if i == 3:
            capacity = np.array([0.9, 0.1])
        found = pool.high_cuts(capacity, low, high)
        assert found is pool.high_cuts(capacity.copy(), low, high)
        n_left_out += pool.n - len(found.order)
        for state in rng.uniform(low, high, (50, N_STATE)):
            value = found.level + found.state_slope @ state
            for m in range(N_MEMBER):
                part = value[found.start[m] : found.start[m + 1]]
                highest = pool.value(m, state, capacity)
                assert part.max(initial=-np.inf) == pytest.approx(highest, rel=1e-12)
    assert n_left_out


def test_the_highest_cut_of_every_exit():
    rng = np.random.default_rng(7)
    pools = [CutPool(i, N_MEMBER, N_STATE, 2) for i in range(3)]
    n_exit = 40
    child = np.column_stack([rng.integers(0, 3, n_exit), rng.integers(-1, N_MEMBER, n_exit)])
    gated = np.column_stack([rng.integers(0, 3, n_exit), rng.integers(-1, N_MEMBER, n_exit)])
    # Few columns, so that some exits ask the same.
    columns = np.array([[0, 1, 2], [3, 4, 5]])[rng.integers(0, 2, n_exit)]
    fixed = FixedChildren(child, gated, columns, _box(), pools)
    assert len(fixed.family) < (fixed.place >= 0).sum()
    asked = np.stack([child, gated])
    assert (fixed.family[fixed.place] == asked[:, :, 0])[fixed.place >= 0].all()
    assert (fixed.member[fixed.place] == asked[:, :, 1])[fixed.place >= 0].all()
    n_checked = 0
    for i in range(12):
        # The last pool gets cuts late.
        for pool in pools[: 2 if i < 6 else 3]:
            if i % 2:
                pool.add(_random_cuts(rng, pool.family, 60, 60 * i))
        capacity = np.array([0.5, 0.2]) if i < 4 else rng.uniform(0.0, 1.0, 2)
        # Now and then the solver leaves the domain.
        most = 1.2 if i % 3 == 0 else 1.0
        y = rng.uniform(0.0, most, 6) * np.tile(_box().state_upper_matrix @ capacity, 2)
        states = y[columns]
        wanted = fixed.place[:, rng.integers(0, n_exit - 5) :]
        targets = wanted[wanted >= 0]
        found = fixed.highest(capacity, y, targets)
        for exit_, which in np.argwhere(fixed.place.T >= 0).tolist():
            target = fixed.place[which, exit_]
            if target not in targets:
                continue
            i_child, member = asked[which, exit_].tolist()
            highest = pools[i_child].value(member, states[exit_], capacity)
            assert found.top[target] == pytest.approx(highest, rel=1e-12)
            if np.isfinite(highest):
                (position,) = found.positions(np.array([target])).tolist()
                assert pools[i_child].member[position] == member
                cut = pools[i_child].since(position).take(np.array([0]))
                assert cut.values(states[[exit_]], capacity)[0] == pytest.approx(highest)
                n_checked += 1
    assert n_checked


def test_the_oldest_of_equal_cuts_is_taken():
    pool = CutPool(0, n_member=1, n_state=1, n_capacity=1)
    box = DomainBox(
        np.zeros(1), np.ones(1), np.zeros(1), np.ones(1), np.zeros((1, 1)), np.ones((1, 1))
    )
    ones, zeros = np.ones((3, 1)), np.zeros((3, 1))
    # Came in another order than that of the solves they are from.
    batch = CutBatch(0, np.zeros(3, int), np.zeros(3), ones, zeros, np.array([8, 2, 5]))
    pool.add(batch)
    exits = np.zeros((2, 2), dtype=int)
    fixed = FixedChildren(exits, exits - 1, np.zeros((2, 1), dtype=int), box, [pool])
    found = fixed.highest(np.ones(1), np.full(1, 0.5), fixed.place[0])
    assert found.top.tolist() == [0.5]
    assert found.positions(np.array([0])).tolist() == [1]
