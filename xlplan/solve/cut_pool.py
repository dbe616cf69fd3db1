"""Where cuts are kept: ``CutBatch`` on the way, ``CutPool`` for good.

``value(s, c) >= intercept + state_slope @ s + capacity_slope @ c`` for every state and capacity in
the node's box.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

GROUP_BITS = 40
"""A member and a group share one number of 64 bits; groups are counted from 0."""

TAIL = 2048
"""So many new cuts are searched one after the other before all are sorted anew."""

ROUNDING = 1e-12
"""Difference of two cuts, relative to the largest of their terms, that may be float rounding."""

_COLUMNS = ("_key", "_intercept", "_state_slope", "_capacity_slope", "_level")


@dataclass(frozen=True)
class CutBatch:
    """Some cuts of one family: (n,), (n,), (n, n_state), (n, n_capacity).

    ``group`` numbers the solve that the multipliers came from.
    """

    family: int
    member: IntArray
    intercept: FloatArray
    state_slope: FloatArray
    capacity_slope: FloatArray
    group: IntArray

    def __len__(self) -> int:
        return len(self.member)

    def take(self, keep: NDArray[np.bool_] | IntArray) -> CutBatch:
        """Some of the cuts."""
        return CutBatch(
            self.family,
            self.member[keep],
            self.intercept[keep],
            self.state_slope[keep],
            self.capacity_slope[keep],
            self.group[keep],
        )

    def values(self, states: FloatArray, capacity: FloatArray) -> FloatArray:
        """Value of each cut at its own state, (n,)."""
        state_part = np.einsum("ij,ij->i", self.state_slope, states)
        found: FloatArray = self.intercept + state_part + self.capacity_slope @ capacity
        return found


def joined(batches: list[CutBatch]) -> CutBatch:
    """Cuts of one family in one batch; there is at least one."""
    if len(batches) == 1:
        return batches[0]
    return CutBatch(
        batches[0].family,
        *(
            np.concatenate([getattr(batch, name) for batch in batches])
            for name in ("member", "intercept", "state_slope", "capacity_slope", "group")
        ),
    )


@dataclass(frozen=True)
class SortedCuts:
    """Cuts of a family, all or some, sorted by member, the oldest of a member first.

    order (n,) positions in the pool; start (n_member + 1,) where each member's cuts begin;
    state_slope (n, n_state), level (n,) value without the state's part, both in that order
    """

    order: IntArray
    start: IntArray
    state_slope: FloatArray
    level: FloatArray


class CutPool:
    """Every cut of one family, never deleted, in the order in which they came."""

    def __init__(self, family: int, n_member: int, n_state: int, n_capacity: int) -> None:
        self.family, self.n_member = family, n_member
        self.n = 0
        self._key = np.zeros(64, dtype=np.int64)
        self._intercept = np.zeros(64)
        self._state_slope = np.zeros((64, n_state))
        self._capacity_slope = np.zeros((64, n_capacity))
        self._level = np.zeros(64)
        # Lowest and highest slope of any cut, and 0.
        self._slope_range = np.zeros((2, n_state))
        self._level_capacity: FloatArray | None = None
        self._n_level = 0
        self._last_group = -1
        # Keys in ascending order and where they stand; the last cuts may not be among them yet.
        self._order = np.zeros(0, dtype=np.int64)
        self._sorted_key = np.zeros(0, dtype=np.int64)
        self._sorted: SortedCuts | None = None
        self._sorted_capacity: FloatArray | None = None
        self._high: SortedCuts | None = None
        self._high_at, self._n_high = np.zeros(0), 0

    @property
    def member(self) -> IntArray:
        """(n,) member that each cut belongs to."""
        return self._key[: self.n] >> GROUP_BITS

    @property
    def group(self) -> IntArray:
        """(n,) number of the solve that each cut came from."""
        return self._key[: self.n] & ((1 << GROUP_BITS) - 1)

    @property
    def intercept(self) -> FloatArray:
        """(n,)"""
        return self._intercept[: self.n]

    @property
    def state_slope(self) -> FloatArray:
        """(n, n_state)"""
        return self._state_slope[: self.n]

    @property
    def capacity_slope(self) -> FloatArray:
        """(n, n_capacity)"""
        return self._capacity_slope[: self.n]

    def groups_at(self, positions: IntArray) -> IntArray:
        """Groups of some cuts."""
        groups: IntArray = self._key[positions] & ((1 << GROUP_BITS) - 1)
        return groups

    def add(self, batch: CutBatch) -> None:
        """Appends cuts; a second one of the same member and group is ignored."""
        key = _keys(batch.member, batch.group)
        is_fresh = np.isfinite(batch.intercept)
        if len(key) and int(batch.group.min()) <= self._last_group:
            is_fresh &= self._find(key) < 0
        if len(key) > 1:
            first = np.unique(key, return_index=True)[1]
            if len(first) < len(key):
                is_first = np.zeros(len(key), dtype=bool)
                is_first[first] = True
                is_fresh &= is_first
        if not is_fresh.all():
            key, batch = key[is_fresh], batch.take(is_fresh)
        end = self.n + len(batch)
        if end > len(self._key):
            room = max(end, len(self._key) + len(self._key) // 2)
            for name in _COLUMNS:
                old = getattr(self, name)
                more = np.zeros((room - len(old), *old.shape[1:]), dtype=old.dtype)
                setattr(self, name, np.concatenate([old, more]))
        part = slice(self.n, end)
        if len(batch):
            by_state = batch.state_slope.T
            least, most = self._slope_range
            self._slope_range = np.array(
                [np.minimum(by_state.min(axis=1), least), np.maximum(by_state.max(axis=1), most)]
            )
        self._key[part] = key
        self._intercept[part] = batch.intercept
        self._state_slope[part] = batch.state_slope
        self._capacity_slope[part] = batch.capacity_slope
        self._last_group = max(self._last_group, int(batch.group.max(initial=-1)))
        self.n = end

    def since(self, n_known: int) -> CutBatch:
        """The cuts that came after the first ``n_known``."""
        part = slice(n_known, self.n)
        return CutBatch(
            self.family,
            self.member[part],
            self._intercept[part],
            self._state_slope[part],
            self._capacity_slope[part],
            self.group[part],
        )

    def positions(self, member: int) -> IntArray:
        """Positions of the cuts of one member, the oldest first."""
        self._sort()
        bounds = [member << GROUP_BITS, (member + 1) << GROUP_BITS]
        begin, end = np.searchsorted(self._sorted_key, bounds)
        return self._order[begin:end]

    def positions_of_each(self, members: IntArray) -> tuple[IntArray, IntArray]:
        """Positions of the cuts of some members, one after the other, and how many each has."""
        self._sort()
        begin = np.searchsorted(self._sorted_key, members << GROUP_BITS)
        count = np.searchsorted(self._sorted_key, (members + 1) << GROUP_BITS) - begin
        return self._order[ranges(begin, count)], count

    def position_of(self, member: int, group: int) -> int:
        """Position of the member's cut of one group, -1 where there is none."""
        return int(self.positions_of(np.array([member]), group)[0])

    def positions_of(self, members: IntArray, group: int | IntArray) -> IntArray:
        """Positions of the members' cuts of one group, -1 where there is none."""
        return self._find(_keys(members, np.asarray(group, dtype=np.int64)))

    def level(self, capacity: FloatArray) -> FloatArray:
        """``intercept + capacity_slope @ capacity`` of every cut, (n,); kept between calls."""
        known = self._level_capacity
        if known is None or not (known is capacity or np.array_equal(known, capacity)):
            self._level_capacity = capacity.copy()
            self._n_level = 0
        if self._n_level < self.n:
            part = slice(self._n_level, self.n)
            self._level[part] = self._intercept[part] + self._capacity_slope[part] @ capacity
            self._n_level = self.n
        return self._level[: self.n]

    def by_member(self, capacity: FloatArray) -> SortedCuts:
        """Cuts sorted by member at some capacities; kept between calls."""
        known, at = self._sorted, self._sorted_capacity
        is_whole = known is not None and len(known.order) == self.n
        if is_whole and at is not None and (at is capacity or np.array_equal(at, capacity)):
            assert known is not None
            return known
        self._sort()
        if known is None or not is_whole:
            bounds = np.arange(self.n_member + 1, dtype=np.int64) << GROUP_BITS
            start: IntArray = np.searchsorted(self._sorted_key, bounds)
            slope = self._state_slope.take(self._order, axis=0)
        else:
            start, slope = known.start, known.state_slope
        # Kept as it is, so that the same array is known at a glance; nobody changes it in place.
        self._sorted_capacity = capacity
        self._sorted = SortedCuts(self._order, start, slope, self.level(capacity)[self._order])
        return self._sorted

    def high_cuts(self, capacity: FloatArray, low: FloatArray, high: FloatArray) -> SortedCuts:
        """Cuts that may be their member's highest at some state from low to high, (n_state,) each.

        Left out is every cut that the member's highest one in the middle of the box exceeds in all
        the box, by more than the rounding of both. Kept between calls; when cuts were added, only
        they and what was high are looked at again.
        """
        known, at = self._high, np.concatenate([capacity, low, high])
        is_same = known is not None and np.array_equal(at, self._high_at)
        if known is not None and is_same and self._n_high == self.n:
            return known
        self._sort()
        order, key = self._order, self._sorted_key
        if known is not None and is_same:
            is_asked = np.zeros(self.n, dtype=bool)
            is_asked[known.order] = is_asked[self._n_high :] = True
            here = np.flatnonzero(is_asked[order])
            order, key = order[here], key[here]
        middle, half = 0.5 * (low + high), 0.5 * (high - low)
        level = self.level(capacity)
        value = (level + self.state_slope @ middle)[order]
        bounds = np.arange(self.n_member + 1, dtype=np.int64) << GROUP_BITS
        best, count = _first_highest(value, np.searchsorted(key, bounds))
        reach = np.maximum(np.abs(low), np.abs(high))
        size = np.abs(level).max() + np.abs(self._slope_range).max(axis=0) @ reach
        # By how much a cut may gain on the best one on the way from the middle, and remain below.
        short = np.repeat(value[best], count) - value - ROUNDING * size
        # Most are so far below that any two cuts of the family would not make up for it.
        near = np.flatnonzero(short <= (self._slope_range[1] - self._slope_range[0]) @ half)
        # Rows are taken by ``take``: an index does the same several times slower.
        slope = self._state_slope.take(order[near], axis=0)
        apart = slope - self._state_slope.take(np.repeat(order[best], count)[near], axis=0)
        kept = np.flatnonzero(short[near] <= np.abs(apart) @ half)
        order, key = order[near[kept]], key[near[kept]]
        start = np.searchsorted(key, bounds)
        self._high = SortedCuts(order, start, slope.take(kept, axis=0), level[order])
        self._high_at, self._n_high = at, self.n
        return self._high

    def value(self, member: int, state: FloatArray, capacity: FloatArray) -> float:
        """Highest cut of one member at one point, minus infinity where it has none."""
        positions = self.positions(member)
        if not len(positions):
            return float("-inf")
        level = self.level(capacity)[positions]
        return float((level + self._state_slope[positions] @ state).max())

    def check(self) -> None:
        """Invariants, for tests."""
        self._sort()
        assert len(np.unique(self._key[: self.n])) == self.n == len(self._order)
        assert sum(len(self.positions(m)) for m in range(self.n_member)) == self.n
        assert all((self.member[self.positions(m)] == m).all() for m in range(self.n_member))
        assert np.isfinite(self.intercept).all()
        assert np.isfinite(self.state_slope).all()

    def _sort(self) -> None:
        """Brings the last cuts into the order by key."""
        n_sorted = len(self._order)
        if n_sorted < self.n:
            key = np.concatenate([self._sorted_key, self._key[n_sorted : self.n]])
            place = np.argsort(key, kind="stable")
            self._order = np.concatenate([self._order, np.arange(n_sorted, self.n)])[place]
            self._sorted_key = key[place]

    def _find(self, key: IntArray) -> IntArray:
        """Positions of keys, -1 where there is none."""
        if self.n - len(self._order) > TAIL:
            self._sort()
        found = np.full(len(key), -1, dtype=np.int64)
        n_sorted = len(self._order)
        if n_sorted:
            place = np.searchsorted(self._sorted_key, key)
            place[place == n_sorted] = 0
            is_here = self._sorted_key[place] == key
            found[is_here] = self._order[place[is_here]]
        if n_sorted < self.n:
            tail = self._key[n_sorted : self.n]
            for i in np.flatnonzero(np.isin(key, tail)).tolist():
                found[i] = n_sorted + int(np.flatnonzero(tail == key[i])[0])
        return found


def _keys(member: IntArray, group: IntArray) -> IntArray:
    return (np.asarray(member, dtype=np.int64) << GROUP_BITS) | group


def ranges(start: IntArray, count: IntArray) -> IntArray:
    """The numbers from each start on, so many of each, one after the other.

    >>> ranges(np.array([5, 0]), np.array([2, 3])).tolist()
    [5, 6, 0, 1, 2]
    """
    begin = np.cumsum(count) - count
    numbers: IntArray = np.repeat(start - begin, count) + np.arange(int(count.sum()))
    return numbers


def _first_highest(value: FloatArray, start: IntArray) -> tuple[IntArray, IntArray]:
    """Where the first highest value of each part is, and how long the part; none of empty ones.

    value (n,); start (n_part + 1,)
    """
    count = np.diff(start)
    begin, count = start[:-1][count > 0], count[count > 0]
    hits = np.flatnonzero(value == np.repeat(np.maximum.reduceat(value, begin), count))
    return hits[np.searchsorted(hits, begin)], count
