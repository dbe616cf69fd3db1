"""The highest cut of each child of a family whose exits lead to the same children in all members.

The plan of a window has an exit for every period and fault, a thousand and more, and is asked after
every run of its program. Two things keep that cheap. Most cuts were made at other capacities and
are below another one at every state that is possible now, so that they are left out until the
capacities change (``CutPool.high_cuts``). What remains lies in one table, by target, in the order
of the exits: a plan from some period on reads the end of it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.solve.cut_pool import CutPool, ranges
from xlplan.solve.cuts import DomainBox

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

DOMAIN_MARGIN = 1e-6
"""Relative widening of the domain, for the solver leaves states outside by its tolerance."""


@dataclass(frozen=True)
class _Table:
    """Cuts of all targets that have some: these n have m cuts.

    target (n,) ascending; start (n + 1,) where the cuts of each begin; position (m,) in the pool of
    the target's family; level (m,) value without the state's part; state_slope (n_state, m)
    """

    target: IntArray
    start: IntArray
    position: IntArray
    level: FloatArray
    state_slope: FloatArray


@dataclass(frozen=True)
class HighestCuts:
    """The highest cut of some targets, each at its own state.

    top (n_target,) its value, minus infinity where a target was not asked or has no cut
    """

    top: FloatArray
    _value: FloatArray
    _first: int
    _table: _Table

    def positions(self, targets: IntArray) -> IntArray:
        """Positions of the highest cuts in their pools, the oldest at ties; they must have some."""
        table = self._table
        place = np.searchsorted(table.target, targets)
        count = (table.start[1:] - table.start[:-1])[place]
        at = ranges(table.start[place], count)
        hits = np.flatnonzero(self._value[at - self._first] == self.top[targets].repeat(count))
        found: IntArray = table.position[at[hits[np.searchsorted(hits, np.cumsum(count) - count)]]]
        return found


class FixedChildren:
    """What the exits of a family ask: a *target* is a child with the columns handed on to it.

    Parameters
    ----------
    child, child_if_gated : (n_exit, 2), -1 where an exit has none
    out_columns : (n_exit, n_state), where the states handed on stand in a point
    box : domain of the states at the exits
    pools : list of CutPool

    Attributes
    ----------
    family, member : (n_target,), of the child; targets are in the order of their first exits
    place : (2, n_exit), the target of each exit without and with its gate, -1 where it has none
    """

    def __init__(
        self,
        child: IntArray,
        child_if_gated: IntArray,
        out_columns: IntArray,
        box: DomainBox,
        pools: list[CutPool],
    ) -> None:
        n_exit, self._n_state = out_columns.shape
        self._box, self._pools = box, pools
        asked = np.concatenate([child, child_if_gated])
        has_child = asked[:, 1] >= 0
        exits = np.tile(np.arange(n_exit), 2)[has_child]
        keys = np.hstack([asked, np.tile(out_columns, (2, 1))])[has_child]
        unique, inverse = np.unique(keys, axis=0, return_inverse=True)
        inverse = inverse.ravel()
        first_exit = np.full(len(unique), n_exit)
        np.minimum.at(first_exit, inverse, exits)
        order = np.argsort(first_exit, kind="stable")
        rank = np.argsort(order)
        self.family, self.member = unique[order, 0], unique[order, 1]
        self._columns = np.ascontiguousarray(out_columns[first_exit[order]].T)
        place = np.full(2 * n_exit, -1, dtype=np.int64)
        place[has_child] = rank[inverse]
        self.place = place.reshape(2, n_exit)
        # Targets of each child family.
        self._of_family = {i: np.flatnonzero(self.family == i) for i in np.unique(self.family)}
        self._capacity: FloatArray | None = None
        self._low = self._high = np.zeros(self._n_state)
        self._table: _Table | None = None
        self._n_known: list[int] = []

    def highest(self, capacity: FloatArray, point: FloatArray, targets: IntArray) -> HighestCuts:
        """The highest cuts of targets, at least one, at the states in a point."""
        first, last = int(targets.min()), int(targets.max()) + 1
        at_state = point.take(self._columns[:, first:last])
        table = self._table_for(capacity, at_state)
        top = np.full(len(self.family), -np.inf)
        begin, end = np.searchsorted(table.target, [first, last]).tolist()
        start, asked = table.start[begin : end + 1], table.target[begin:end]
        part, count = slice(start[0], start[-1]), start[1:] - start[:-1]
        value = table.level[part].copy()
        by_component = at_state.take(asked - first, axis=1).repeat(count, axis=1)
        by_component *= table.state_slope[:, part]
        for numbers in by_component:
            value += numbers
        if begin < end:
            top[asked] = np.maximum.reduceat(value, start[:-1] - start[0])
        return HighestCuts(top, value, int(start[0]), table)

    def _table_for(self, capacity: FloatArray, states: FloatArray) -> _Table:
        """Cuts that may be the highest ones; kept while capacities and pools are the same.

        states (n_state, n) are those asked for.
        """
        n_known = [self._pools[i].n for i in self._of_family]
        is_known = self._capacity is not None and np.array_equal(self._capacity, capacity)
        if not is_known:
            self._capacity = capacity.copy()
            low, high = self._box.state_range(capacity)
            self._low = low - DOMAIN_MARGIN * (1.0 + np.abs(low))
            self._high = high + DOMAIN_MARGIN * (1.0 + np.abs(high))
        low, high = states.min(axis=1), states.max(axis=1)
        if (low < self._low).any() or (high > self._high).any():
            self._low, self._high = np.minimum(low, self._low), np.maximum(high, self._high)
            is_known = False
        if self._table is None or not is_known or n_known != self._n_known:
            self._table, self._n_known = self._gather(capacity), n_known
        return self._table

    def _gather(self, capacity: FloatArray) -> _Table:
        """Cuts of all child families, brought into the order of the targets."""
        begin, count = np.zeros((2, len(self.family)), dtype=np.int64)
        parts, n = [], 0
        for i_family, targets in self._of_family.items():
            if self._pools[i_family].n:
                cuts = self._pools[i_family].high_cuts(capacity, self._low, self._high)
                members = self.member[targets]
                begin[targets] = n + cuts.start[members]
                count[targets] = cuts.start[members + 1] - cuts.start[members]
                parts.append(cuts)
                n += len(cuts.order)
        if not parts:
            none = np.zeros(0, dtype=np.int64)
            return _Table(
                none, np.zeros(1, np.int64), none, np.zeros(0), np.zeros((self._n_state, 0))
            )
        at, target = ranges(begin, count), np.flatnonzero(count)
        return _Table(
            target,
            np.concatenate([[0], np.cumsum(count[target])]),
            np.concatenate([part.order for part in parts])[at],
            np.concatenate([part.level for part in parts])[at],
            np.concatenate([part.state_slope for part in parts]).take(at, axis=0).T.copy(),
        )
