"""Cuts: affine functions of state and capacities that lie below the value of a node.

``value(s, c) >= intercept + state_slope @ s + capacity_slope @ c`` for every state and capacity in
the node's box. ``CutPool`` keeps those of one family, ``DualBound`` makes them from multipliers.

Whatever multipliers ``pi`` are put in, weak duality gives a valid cut, because every column has
finite bounds: with ``d = cost - A' pi``

    intercept = offset + sum_i pi_i (row_lower_i if pi_i > 0 else row_upper_i)
                + sum over columns that are no state or capacity of min(d_j lower_j, d_j upper_j)

and the slopes are ``d`` on the state and capacity columns (safe bounds of Neumaier and Shcherbina,
2004, recalled, not seen). So cuts hold although the solver is inexact, and the multipliers of one
member serve the others. The multipliers of a child's cuts are scaled so that they never exceed the
weight of the exit; then the value at the exit needs no upper bound.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import Family, Member
from xlplan.solve.row_matrix import RowMatrix

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

ROUNDING_SHIFT = 1e-12
"""Share of the sum of absolute terms by which a cut is lowered, for rounding in floats."""

SMALL_SLOPE = 1e-9
"""Slopes below this share of the largest term are moved into the intercept (scaling)."""

SAME_NUMBER = 1e-13
"""Relative difference below which two members are taken to have the same number."""

SNAP_WEIGHT = 1e-6
"""Multipliers of an exit whose sum is this close to the weight are scaled up to it."""


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
        return self.intercept + state_part + self.capacity_slope @ capacity


class CutPool:
    """Every cut of one family, never deleted, in the order in which they came."""

    def __init__(self, family: int, n_member: int, n_state: int, n_capacity: int) -> None:
        self.family = family
        self.n = 0
        self._member = np.zeros(64, dtype=np.int64)
        self._group = np.zeros(64, dtype=np.int64)
        self._intercept = np.zeros(64)
        self._state_slope = np.zeros((64, n_state))
        self._capacity_slope = np.zeros((64, n_capacity))
        self._positions: list[list[int]] = [[] for _ in range(n_member)]
        self._by_group: dict[tuple[int, int], int] = {}
        self._level_capacity: FloatArray | None = None
        self._level = np.zeros(64)
        self._n_level = 0

    @property
    def member(self) -> IntArray:
        """(n,) member that each cut belongs to."""
        return self._member[: self.n]

    @property
    def group(self) -> IntArray:
        """(n,) number of the solve that each cut came from."""
        return self._group[: self.n]

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

    def add(self, batch: CutBatch) -> None:
        """Appends cuts; a second one of the same member and group is ignored."""
        fresh = [
            i
            for i, key in enumerate(zip(batch.member.tolist(), batch.group.tolist(), strict=True))
            if key not in self._by_group and np.isfinite(batch.intercept[i])
        ]
        if len(fresh) < len(batch):
            batch = batch.take(np.array(fresh, dtype=np.int64))
        end = self.n + len(batch)
        while end > len(self._member):
            for name in (
                "_member", "_group", "_intercept", "_state_slope", "_capacity_slope", "_level"
            ):  # fmt: skip
                old = getattr(self, name)
                setattr(self, name, np.concatenate([old, np.zeros_like(old)]))
        self._member[self.n : end] = batch.member
        self._group[self.n : end] = batch.group
        self._intercept[self.n : end] = batch.intercept
        self._state_slope[self.n : end] = batch.state_slope
        self._capacity_slope[self.n : end] = batch.capacity_slope
        for position, (member, group) in enumerate(
            zip(batch.member.tolist(), batch.group.tolist(), strict=True), start=self.n
        ):
            self._positions[member].append(position)
            self._by_group[member, group] = position
        self.n = end

    def since(self, n_known: int) -> CutBatch:
        """The cuts that came after the first ``n_known``."""
        part = slice(n_known, self.n)
        return CutBatch(
            self.family,
            self._member[part],
            self._intercept[part],
            self._state_slope[part],
            self._capacity_slope[part],
            self._group[part],
        )

    def positions(self, member: int) -> list[int]:
        """Positions of the cuts of one member; not to be changed."""
        return self._positions[member]

    def position_of(self, member: int, group: int) -> int:
        """Position of the member's cut of one group, -1 where there is none."""
        return self._by_group.get((member, group), -1)

    def level(self, capacity: FloatArray) -> FloatArray:
        """``intercept + capacity_slope @ capacity`` of every cut, (n,); kept between calls."""
        is_known = self._level_capacity is not None and np.array_equal(
            self._level_capacity, capacity
        )
        if not is_known:
            self._level_capacity = capacity.copy()
            self._n_level = 0
        if self._n_level < self.n:
            part = slice(self._n_level, self.n)
            self._level[part] = self._intercept[part] + self._capacity_slope[part] @ capacity
            self._n_level = self.n
        return self._level[: self.n]

    def value(self, member: int, state: FloatArray, capacity: FloatArray) -> float:
        """Highest cut of one member at one point, minus infinity where it has none."""
        positions = self._positions[member]
        if not positions:
            return float("-inf")
        level = self.level(capacity)[positions]
        return float((level + self._state_slope[positions] @ state).max())

    def check(self) -> None:
        """Invariants, for tests."""
        assert sum(len(p) for p in self._positions) == self.n == len(self._by_group)
        assert all(np.all(self._member[p] == m) for m, p in enumerate(self._positions) if p)
        assert np.isfinite(self.intercept).all()
        assert np.isfinite(self.state_slope).all()


@dataclass(frozen=True)
class ExitMultipliers:
    """Multipliers of the cuts of children that were rows of a node's program.

    exit (n,), pi (n,) not negative, and the cuts themselves: intercept, state and capacity slope
    """

    exit: IntArray
    pi: FloatArray
    intercept: FloatArray
    state_slope: FloatArray
    capacity_slope: FloatArray


@dataclass(frozen=True)
class MemberChange:
    """What differs between a member and the one before it: positions and new numbers."""

    rows: IntArray
    row_lower: FloatArray
    row_upper: FloatArray
    columns: IntArray
    cost: FloatArray
    col_lower: FloatArray
    col_upper: FloatArray
    exits: IntArray
    exit_weight: FloatArray
    in_columns: IntArray
    offset: float
    scale: float


def _differs(new: FloatArray, old: FloatArray) -> NDArray[np.bool_]:
    """Where two vectors differ by more than rounding; equal infinities do not."""
    with np.errstate(invalid="ignore"):
        return (new != old) & ~(np.abs(new - old) <= SAME_NUMBER * np.abs(old))


def member_change(new: Member, old: Member) -> MemberChange:
    """Differences of two members of a family."""
    rows = np.flatnonzero(
        _differs(new.row_lower, old.row_lower) | _differs(new.row_upper, old.row_upper)
    )
    columns = np.flatnonzero(
        _differs(new.cost, old.cost)
        | _differs(new.col_lower, old.col_lower)
        | _differs(new.col_upper, old.col_upper)
    )
    exits = np.flatnonzero(_differs(new.exit_weight, old.exit_weight))
    return MemberChange(
        rows=rows,
        row_lower=new.row_lower[rows],
        row_upper=new.row_upper[rows],
        columns=columns,
        cost=new.cost[columns],
        col_lower=new.col_lower[columns],
        col_upper=new.col_upper[columns],
        exits=exits,
        exit_weight=new.exit_weight[exits],
        in_columns=new.in_columns,
        offset=new.offset,
        scale=new.scale,
    )


class DualBound:
    """Makes the cuts of one family; keeps the matrix in NumPy beside the solver's own copy.

    state_lower, state_upper, capacity_lower, capacity_upper : boxes in which cuts must hold
    theta_lower : (n_exit,), lower bounds of the values at the exits
    """

    def __init__(
        self,
        i_family: int,
        family: Family,
        capacity_lower: FloatArray,
        capacity_upper: FloatArray,
        theta_lower: FloatArray,
    ) -> None:
        program = family.program
        self.i_family = i_family
        self.family = family
        self.matrix = RowMatrix(program)
        self.patch = family.patch
        self.patch_base = program.value[family.patch]
        self.patch_row = np.searchsorted(program.start, family.patch, side="right") - 1
        self.patch_column = program.index[family.patch]
        self.theta_lower = theta_lower
        self.capacity_lower = capacity_lower
        self.capacity_upper = capacity_upper
        self._has_column = family.capacity_columns >= 0
        self._capacity_columns = family.capacity_columns[self._has_column]

    def cut(self, member: Member, pi: FloatArray, exits: ExitMultipliers, i_member: int,
            group: int) -> CutBatch:  # fmt: skip
        """Cut of one member from multipliers ``pi`` of the program's rows, (n_row,)."""
        walk = _Walk(self, member, pi, exits)
        return self._finish([walk.terms()], [i_member], group, walk.size)

    def cuts_along(
        self,
        member: Member,
        i_member: int,
        changes: Sequence[MemberChange],
        pi: FloatArray,
        exits: ExitMultipliers,
        group: int,
    ) -> CutBatch:
        """Cuts of one member and of those that follow it by ``changes``, from one ``pi``.

        Only what changes from member to member is worked out anew; the family has no patch.
        """
        walk = _Walk(self, member, pi, exits)
        terms = [walk.terms()]
        for change in changes:
            walk.move(change)
            terms.append(walk.terms())
        return self._finish(terms, list(range(i_member, i_member + len(terms))), group, walk.size)

    def _finish(self, terms: list[_Terms], members: list[int], group: int, size: float) -> CutBatch:
        """Scales, moves small slopes into the intercept, lowers for rounding."""
        scale = np.array([t.scale for t in terms])
        intercept = np.array([t.intercept for t in terms])
        state_slope = np.array([t.state_slope for t in terms])
        capacity_slope = np.array([t.capacity_slope for t in terms])
        state_lower = np.array([t.state_lower for t in terms])
        state_upper = np.array([t.state_upper for t in terms])
        shift = ROUNDING_SHIFT * size
        for slope, lower, upper in (
            (state_slope, state_lower, state_upper),
            (capacity_slope, self.capacity_lower, self.capacity_upper),
        ):
            if slope.size:
                largest = np.abs(slope).max(axis=1, initial=0.0, keepdims=True)
                is_small = (slope != 0.0) & (np.abs(slope) < SMALL_SLOPE * largest)
                moved = np.where(is_small, np.minimum(slope * lower, slope * upper), 0.0)
                intercept += moved.sum(axis=1)
                slope[is_small] = 0.0
        return CutBatch(
            self.i_family,
            np.array(members, dtype=np.int64),
            (intercept - shift) / scale,
            state_slope / scale[:, None],
            capacity_slope / scale[:, None],
            np.full(len(members), group, dtype=np.int64),
        )


@dataclass(frozen=True)
class _Terms:
    """Sums of one member before scaling."""

    intercept: float
    state_slope: FloatArray
    capacity_slope: FloatArray
    state_lower: FloatArray
    state_upper: FloatArray
    scale: float


class _Walk:
    """Terms of the weak-duality sum, moved from member to member."""

    def __init__(
        self, bound: DualBound, member: Member, pi: FloatArray, exits: ExitMultipliers
    ) -> None:
        self.bound = bound
        matrix = bound.matrix
        self.pi_given = pi
        self.cost = member.cost.copy()
        self.col_lower, self.col_upper = member.col_lower.copy(), member.col_upper.copy()
        self.weight = member.exit_weight.copy()
        self.in_columns, self.offset, self.scale = member.in_columns, member.offset, member.scale
        # Most lazy rows have no multiplier: only the others are kept.
        self.rows = np.flatnonzero(pi)
        self.pi = _usable(pi[self.rows], member.row_lower[self.rows], member.row_upper[self.rows])
        self.row_term = _row_terms(
            self.pi, member.row_lower[self.rows], member.row_upper[self.rows]
        )
        self.d = self.cost.copy()
        if len(self.rows):
            self.d -= matrix.transposed_times(self.rows, self.pi)
        if len(bound.patch):
            full = np.zeros(len(pi))
            full[self.rows] = self.pi
            step = full[bound.patch_row] * (member.patch_value - bound.patch_base)
            np.subtract.at(self.d, bound.patch_column, step)
        # Cuts of the children, ordered by exit so that one exit is one slice.
        order = np.argsort(exits.exit, kind="stable")
        self.cut_exit, self.cut_pi = exits.exit[order], exits.pi[order]
        self.cut_intercept = exits.intercept[order]
        self.cut_slope, self.cut_capacity = exits.state_slope[order], exits.capacity_slope[order]
        n_exit = len(self.weight)
        self.begin = np.searchsorted(self.cut_exit, np.arange(n_exit + 1))
        self.pi_sum = np.bincount(self.cut_exit, weights=self.cut_pi, minlength=n_exit)
        self.factor = np.zeros(n_exit)
        self.cut_term = np.zeros(n_exit)
        self.theta_term = np.zeros(n_exit)
        self.capacity_part = np.zeros((n_exit, self.cut_capacity.shape[1]))
        self.weighted_exits(np.arange(n_exit))
        self.col_term = _col_terms(self.d, self.col_lower, self.col_upper)
        # Later members have fewer terms: the first one's size bounds the rounding of them all.
        self.size = abs(self.offset) + sum(
            float(np.abs(term).sum())
            for term in (self.row_term, self.col_term, self.cut_term, self.theta_term)
        )

    def weighted_exits(self, exits: IntArray) -> IntArray:
        """Scales the multipliers of some exits to their weights; the columns that this moves."""
        weight, total = self.weight[exits], self.pi_sum[exits]
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(total > 0.0, weight / np.where(total > 0.0, total, 1.0), 0.0)
        factor = np.where(ratio < 1.0 + SNAP_WEIGHT, ratio, 1.0)
        rest = np.maximum(weight - factor * total, 0.0)
        lower = self.bound.theta_lower[exits]
        self.theta_term[exits] = np.where(rest > 0.0, rest * lower, 0.0)
        change = factor - self.factor[exits]
        self.factor[exits] = factor
        moved = exits[(change != 0.0) & (total > 0.0)]
        if not len(moved):
            return np.zeros(0, dtype=np.int64)
        # All cuts of the moved exits as one index array.
        counts = self.begin[moved + 1] - self.begin[moved]
        which = np.repeat(self.begin[moved] - np.cumsum(counts) + counts, counts)
        which += np.arange(len(which))
        factors = np.zeros(len(self.factor))
        factors[exits] = change
        step = self.cut_pi[which] * factors[self.cut_exit[which]]
        out = self.bound.family.out_columns[self.cut_exit[which]]
        np.add.at(self.d, out, step[:, None] * self.cut_slope[which])
        np.add.at(self.cut_term, self.cut_exit[which], step * self.cut_intercept[which])
        np.add.at(
            self.capacity_part, self.cut_exit[which], step[:, None] * self.cut_capacity[which]
        )
        zero = moved[factor[np.searchsorted(exits, moved)] == 0.0]
        self.cut_term[zero] = 0.0  # no rounding left behind
        self.capacity_part[zero] = 0.0
        return out.ravel()

    def move(self, change: MemberChange) -> None:
        """Goes on to the next member."""
        touched = [change.columns]
        self.offset, self.scale = change.offset, change.scale
        self.in_columns = change.in_columns
        if len(change.columns):
            self.d[change.columns] += change.cost - self.cost[change.columns]
            self.cost[change.columns] = change.cost
            self.col_lower[change.columns] = change.col_lower
            self.col_upper[change.columns] = change.col_upper
        has_pi = self.pi_given[change.rows] != 0.0
        if has_pi.any():
            rows, low, high = (
                part[has_pi] for part in (change.rows, change.row_lower, change.row_upper)
            )
            places = np.searchsorted(self.rows, rows)
            pi = _usable(self.pi_given[rows], low, high)
            step = pi - self.pi[places]
            self.row_term[places] = _row_terms(pi, low, high)
            self.pi[places] = pi
            moved = step != 0.0
            if moved.any():
                start, index, value = self.bound.matrix.take(rows[moved])
                np.subtract.at(self.d, index, value * np.repeat(step[moved], np.diff(start)))
                touched.append(index)
        if len(change.exits):
            self.weight[change.exits] = change.exit_weight
            touched.append(self.weighted_exits(change.exits))
        columns = np.concatenate(touched)
        self.col_term[columns] = _col_terms(
            self.d[columns], self.col_lower[columns], self.col_upper[columns]
        )

    def terms(self) -> _Terms:
        """Sums for the member the walk stands at."""
        bound = self.bound
        columns = np.concatenate([self.in_columns[self.in_columns >= 0], bound._capacity_columns])
        kept = self.col_term[columns]
        self.col_term[columns] = 0.0
        intercept = (
            self.offset
            + self.row_term.sum()
            + self.col_term.sum()
            + self.cut_term.sum()
            + self.theta_term.sum()
        )
        self.col_term[columns] = kept
        is_given = self.in_columns >= 0
        held = np.where(is_given, self.in_columns, 0)
        capacity_slope = self.capacity_part.sum(axis=0)
        capacity_slope[bound._has_column] += self.d[bound._capacity_columns]
        return _Terms(
            intercept=float(intercept),
            state_slope=np.where(is_given, self.d[held], 0.0),
            capacity_slope=capacity_slope,
            state_lower=np.where(is_given, self.col_lower[held], 0.0),
            state_upper=np.where(is_given, self.col_upper[held], 0.0),
            scale=self.scale,
        )


def _usable(pi: FloatArray, row_lower: FloatArray, row_upper: FloatArray) -> FloatArray:
    """Multipliers, 0 where the side that they need is infinite."""
    is_bad = ((pi > 0.0) & np.isneginf(row_lower)) | ((pi < 0.0) & np.isposinf(row_upper))
    return np.where(is_bad, 0.0, pi)


def _row_terms(pi: FloatArray, row_lower: FloatArray, row_upper: FloatArray) -> FloatArray:
    side = np.where(pi > 0.0, row_lower, row_upper)
    return pi * np.where(pi != 0.0, side, 0.0)


def _col_terms(d: FloatArray, lower: FloatArray, upper: FloatArray) -> FloatArray:
    return np.where(d > 0.0, d * lower, d * upper)


def lift_amount(
    upper_intercept: float,
    upper_state: FloatArray,
    upper_capacity: FloatArray,
    lower_intercept: FloatArray,
    lower_state: FloatArray,
    lower_capacity: FloatArray,
    boxes: DomainBox,
    gate: tuple[int, ...],
    gate_is_one: bool,
) -> float:
    """Smallest ``B`` with ``upper - B <= some lower cut`` wherever the gate has the given value.

    One cut against n others; the maximum over the state's domain and the capacity box is worked
    out for each of them, and the least one is taken, for any of them will do.
    """
    intercept = upper_intercept - lower_intercept
    state = upper_state[None, :] - lower_state
    capacity = upper_capacity[None, :] - lower_capacity
    worst = boxes.highest(intercept, state, capacity, gate, gate_is_one)
    return float(worst.min())


@dataclass(frozen=True)
class DomainBox:
    """Where a cut is asked for: capacities in a box, states between two multiples of them."""

    capacity_lower: FloatArray
    capacity_upper: FloatArray
    state_lower: FloatArray
    state_upper: FloatArray
    state_lower_matrix: FloatArray
    state_upper_matrix: FloatArray

    def highest(
        self,
        intercept: FloatArray,
        state: FloatArray,
        capacity: FloatArray,
        gate: tuple[int, ...],
        gate_is_one: bool,
    ) -> FloatArray:
        """Upper bound of affine functions over the domain with the gate at 0 or 1, (n,)."""
        positive, negative = np.maximum(state, 0.0), np.minimum(state, 0.0)
        by_box = positive @ self.state_upper + negative @ self.state_lower
        by_domain = positive @ self.state_upper_matrix + negative @ self.state_lower_matrix
        results = []
        for slope, constant in (
            (capacity, intercept + by_box),
            (capacity + by_domain, intercept),
        ):
            high = np.maximum(slope * self.capacity_lower, slope * self.capacity_upper)
            positions = list(gate)
            total = high.sum(axis=1) - high[:, positions].sum(axis=1)
            if gate_is_one:
                total = total + slope[:, positions].max(axis=1)
            results.append(constant + total)
        return np.minimum(results[0], results[1])
