"""Cuts: affine functions of state and capacities that lie below the value of a node.

``value(s, c) >= intercept + state_slope @ s + capacity_slope @ c`` for every state and capacity in
the node's box. ``DualBound`` makes those of a family from multipliers.

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

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import Family, Member
from xlplan.solve.cut_pool import CutBatch
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.member_table import FEW_EXITS, MemberTable
from xlplan.solve.row_matrix import RowMatrix

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]
BoolArray = NDArray[np.bool_]

ROUNDING_SHIFT = 1e-12
"""Share of the sum of absolute terms by which a cut is lowered, for rounding in floats."""

SMALL_SLOPE = 1e-9
"""Slopes below this share of the largest term are moved into the intercept (scaling)."""

SNAP_WEIGHT = 1e-6
"""Multipliers of an exit whose sum is this close to the weight are scaled up to it."""


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
class _NestTable:
    """Entries that the sums of a nested family need (``Nest``).

    entry, entry_row, entry_place : position in the matrix, row, and place in the flattened
        (n_member, n_state) incoming state, of entries in rows that count for that member; the same
        for capacities, whose place is their position among those that have a column
    """

    entry: IntArray
    entry_row: IntArray
    entry_place: IntArray
    capacity_entry: IntArray
    capacity_row: IntArray
    capacity_place: IntArray
    first_only: IntArray
    state_lower: FloatArray
    state_upper: FloatArray
    offset: FloatArray
    scale: FloatArray


def _nest_table(cache: MemberCache, i_family: int, family: Family) -> _NestTable | None:
    """Lists those entries; None where two members hold their state in the same column."""
    nest, program = family.nest, family.program
    if nest is None or len(family.patch) or family.n_member < 2:
        return None
    # One after the other: all members of a long plan together would fill the memory.
    in_columns, lower, upper, offset, scale = [], [], [], [], []
    for i_member in range(family.n_member):
        member = cache.get(i_family, i_member)
        into = np.maximum(member.in_columns, 0)
        in_columns.append(member.in_columns)
        lower.append(member.col_lower[into])
        upper.append(member.col_upper[into])
        offset.append(member.offset)
        scale.append(member.scale)
    later = np.array(in_columns[1:])
    expected = np.arange(later.shape[0])[:, None]  # member u holds it in columns of u - 1
    if (later < 0).any() or (nest.col_last[later] != expected).any():
        return None
    if len(np.unique(later)) != later.size:
        return None
    row = np.repeat(np.arange(program.n_row), np.diff(program.start))
    n_state = later.shape[1]
    place = np.full(program.n_col, -1, dtype=np.int64)
    place[later.ravel()] = n_state + np.arange(later.size)
    entry_place = place[program.index]
    here = (entry_place >= 0) & (nest.row_last[row] >= entry_place // max(n_state, 1))
    held = family.capacity_columns[family.capacity_columns >= 0]
    of_capacity = np.full(program.n_col, -1, dtype=np.int64)
    of_capacity[held] = np.arange(len(held))
    caps = of_capacity[program.index] >= 0
    return _NestTable(
        entry=np.flatnonzero(here),
        entry_row=row[here],
        entry_place=entry_place[here],
        capacity_entry=np.flatnonzero(caps),
        capacity_row=row[caps],
        capacity_place=of_capacity[program.index[caps]],
        first_only=np.flatnonzero(nest.row_last == 0),
        state_lower=np.array(lower),
        state_upper=np.array(upper),
        offset=np.array(offset),
        scale=np.array(scale),
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
        cache: MemberCache,
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
        self._cache = cache
        self._nest = _nest_table(cache, i_family, family)
        self._table: MemberTable | None = None
        self._is_looked_at = False

    @property
    def is_nested(self) -> bool:
        """Whether ``nested_cuts`` may be asked for."""
        return self._nest is not None

    def cut(self, member: Member, pi: FloatArray, exits: ExitMultipliers, i_member: int,
            group: int) -> CutBatch:  # fmt: skip
        """Cut of one member from multipliers ``pi`` of the program's rows, (n_row,)."""
        parts = _Sum(self, member, pi, exits)
        return self._finish([parts.terms()], [i_member], group, parts.size)

    def nested_cuts(
        self, member: Member, i_member: int, pi: FloatArray, exits: ExitMultipliers, group: int
    ) -> CutBatch:
        """Cuts of one member and of all later ones of a nested family, from one ``pi``.

        What a later member has is the sum over the rows, columns and exits that are left.
        """
        parts = _Sum(self, member, pi, exits)
        first = parts.terms()
        nest, table = self.family.nest, self._nest
        assert nest is not None
        assert table is not None
        n = self.family.n_member
        later = np.arange(i_member + 1, n)
        if not len(later):
            return self._finish([first], [i_member], group, parts.size)
        full = np.zeros(len(pi))
        full[parts.rows] = parts.pi
        d, col_term = parts.d, parts.col_term
        if i_member == 0 and full[table.first_only].any():
            rows = table.first_only
            d = d + self.matrix.transposed_times(rows, full[rows])
            col_term = _col_terms(d, parts.col_lower, parts.col_upper)
            full[rows] = 0.0
        col_term = col_term.copy()
        col_term[self._capacity_columns] = 0.0

        def left(last: IntArray, term: NDArray[Any]) -> FloatArray:
            """Sum of what still counts, by member, (n_member,)."""
            total = np.bincount(np.clip(last, -1, n - 1) + 1, term, n + 1)
            suffix: FloatArray = np.cumsum(total[::-1])[::-1][1:]
            return suffix

        intercept = table.offset + left(nest.col_last, col_term)
        row_last = nest.row_last[parts.rows]
        row_term = np.where(row_last > 0, parts.row_term, 0.0)
        intercept += left(row_last, row_term)
        intercept += left(nest.exit_last, parts.cut_term + parts.theta_term)
        n_capacity = parts.capacity_part.shape[1]
        exit_last = np.clip(nest.exit_last, -1, n - 1) + 1
        by_exit = np.zeros((n + 1, n_capacity))
        np.add.at(by_exit, exit_last[parts.used], parts.capacity_part[parts.used])
        entry = self.matrix.value[table.capacity_entry] * full[table.capacity_row]
        last = np.clip(nest.row_last[table.capacity_row], -1, n - 1) + 1
        n_held = len(self._capacity_columns)
        by_row = np.bincount(table.capacity_place * (n + 1) + last, entry, n_held * (n + 1))
        by_exit[:, self._has_column] -= by_row.reshape(n_held, n + 1).T
        capacity_slope = np.cumsum(by_exit[::-1], axis=0)[::-1][1:]
        n_state = table.state_lower.shape[1]
        entry = self.matrix.value[table.entry] * full[table.entry_row]
        state_slope = -np.bincount(table.entry_place, entry, n * n_state).reshape(n, n_state)
        return self._assembled(
            np.arange(i_member, n),
            np.concatenate([[first.intercept], intercept[later]]),
            np.vstack([first.state_slope[None, :], state_slope[later]]),
            np.vstack([first.capacity_slope[None, :], capacity_slope[later]]),
            np.vstack([first.state_lower[None, :], table.state_lower[later]]),
            np.vstack([first.state_upper[None, :], table.state_upper[later]]),
            table.scale[i_member:],
            group,
            parts.size,
        )

    def cuts_of_pairs(
        self,
        pi: FloatArray,
        solve: IntArray,
        members: IntArray,
        children: ChildMultipliers,
        groups: IntArray,
    ) -> tuple[CutBatch, BoolArray] | None:
        """Cuts of pairs of a solve, whose multipliers serve, and a member.

        Parameters
        ----------
        pi : array, shape (n_solve, n_row)
        solve, members, groups : arrays, shape (n_pair,)
        children : ChildMultipliers

        Returns
        -------
        cuts of all pairs and which of them are valid (a multiplier may need a side that is
        infinite for that member); None where the family is not fit for it
        """
        table = self.table
        if table is None:
            return None
        first = table.first
        n_pair = len(members)
        # Rows that are the same for all members.
        at, rows = np.nonzero(pi)
        multiplier = pi[at, rows]
        place = table.row_place[rows]
        side = np.where(multiplier > 0.0, first.row_lower[rows], first.row_upper[rows])
        is_open = (place < 0) & ~np.isfinite(side)
        if is_open.any():
            pi = pi.copy()
            pi[at[is_open], rows[is_open]] = 0.0
            at, rows, place = at[~is_open], rows[~is_open], place[~is_open]
            multiplier, side = multiplier[~is_open], side[~is_open]
        same = place < 0
        row_term = multiplier[same] * side[same]
        n_solve = len(pi)
        row_const = np.bincount(at[same], row_term, n_solve)
        size_const = np.bincount(at[same], np.abs(row_term), n_solve)
        # Rows that differ, of those that any solve uses.
        used = np.unique(place[~same])
        now = table.numbers(members, used)
        by_row = pi[:, table.rows[used]][solve]
        side = now.row_lower
        if now.row_upper is not now.row_lower:
            side = np.where(by_row > 0.0, side, now.row_upper)
        with np.errstate(invalid="ignore"):
            row_vary = np.where(by_row != 0.0, side * by_row, 0.0)
        is_valid = np.asarray(np.isfinite(row_vary).all(axis=1))
        # Reduced costs.
        matrix, n_col = self.matrix, len(first.cost)
        entries = matrix.entries(rows)
        counts = matrix.start[rows + 1] - matrix.start[rows]
        weights = matrix.value[entries] * np.repeat(multiplier, counts)
        target = np.repeat(at * n_col, counts) + matrix.index[entries]
        d = first.cost - np.bincount(target, weights, n_solve * n_col).reshape(n_solve, n_col)
        columns, at_column = table.columns, table.column_place
        d_vary = now.cost + (d[:, columns] - first.cost[columns])[solve]
        if len(self.patch):
            step = pi[:, self.patch_row][solve] * (now.patch_value - self.patch_base)
            moved = np.flatnonzero(step.any(axis=0))
            places = at_column[self.patch_column[moved]]
            np.subtract.at(d_vary.T, places, step[:, moved].T)
        # Children's cuts: scaled down where they weigh more than the exit does.
        weight = now.exit_weight
        n_exit = weight.shape[1]
        total = np.bincount(children.pair * n_exit + children.exit, children.pi, n_pair * n_exit)
        total = total.reshape(n_pair, n_exit)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(total > 0.0, weight / np.where(total > 0.0, total, 1.0), 0.0)
        factor = np.where(ratio < 1.0 + SNAP_WEIGHT, ratio, 1.0)
        rest = np.maximum(weight - factor * total, 0.0)
        exit_term = rest * self.theta_lower
        share = factor[children.pair, children.exit] * children.pi
        child_term = share * children.intercept
        cut_term = np.bincount(children.pair, child_term, n_pair)
        places = at_column[self.family.out_columns[children.exit]]
        n_vary = len(columns)
        if len(share):
            flat = children.pair[:, None] * n_vary + places
            more = np.bincount(
                flat.ravel(), (share[:, None] * children.state_slope).ravel(), n_pair * n_vary
            )
            d_vary += more.reshape(n_pair, n_vary)
        capacity_slope = np.zeros((n_pair, len(self.capacity_lower)))
        np.add.at(capacity_slope, children.pair, share[:, None] * children.capacity_slope)
        col_const = _col_terms(d[:, table.const], table.const_lower, table.const_upper)
        col_vary = _col_terms(d_vary, now.col_lower, now.col_upper) * table.inside
        size_const = size_const + np.abs(col_const).sum(axis=1)
        intercept = (
            now.offset
            + (row_const + col_const.sum(axis=1))[solve]
            + row_vary.sum(axis=1)
            + col_vary.sum(axis=1)
            + cut_term
            + exit_term.sum(axis=1)
        )
        size = (
            np.abs(now.offset)
            + size_const[solve]
            + np.abs(row_vary).sum(axis=1)
            + np.abs(col_vary).sum(axis=1)
            + np.bincount(children.pair, np.abs(child_term), n_pair)
            + np.abs(exit_term).sum(axis=1)
        )

        def by_pair(wanted: IntArray, same: FloatArray, vary: FloatArray) -> FloatArray:
            """Numbers of some columns, (n_pair, n_wanted), where some of them differ."""
            found = (
                same[:, wanted][solve] if len(same) > 1 else np.tile(same[0, wanted], (n_pair, 1))
            )
            place = at_column[wanted]
            found[:, place >= 0] = vary[:, place[place >= 0]]
            return found

        given, into = table.given, table.into
        state_slope = np.where(given, by_pair(into, d, d_vary), 0.0)
        capacity_slope[:, self._has_column] += by_pair(self._capacity_columns, d, d_vary)
        cuts = self._assembled(
            members,
            np.where(is_valid, intercept, -np.inf),
            state_slope,
            capacity_slope,
            np.where(given, by_pair(into, first.col_lower[None, :], now.col_lower), 0.0),
            np.where(given, by_pair(into, first.col_upper[None, :], now.col_upper), 0.0),
            np.asarray(now.scale),
            groups,
            size,
        )
        return cuts, is_valid

    @property
    def table(self) -> MemberTable | None:
        """What differs between the members; None where ``cuts_of_pairs`` cannot be used."""
        if not self._is_looked_at:
            self._is_looked_at = True
            if len(self.family.exit_gate) <= FEW_EXITS and self.family.exit_columns is None:
                table = MemberTable(self._cache, self.i_family, self.family)
                self._table = table if table.has_same_inputs else None
        return self._table

    def _finish(self, terms: list[_Terms], members: list[int], group: int, size: float) -> CutBatch:
        return self._assembled(
            np.array(members, dtype=np.int64),
            np.array([t.intercept for t in terms]),
            np.array([t.state_slope for t in terms]),
            np.array([t.capacity_slope for t in terms]),
            np.array([t.state_lower for t in terms]),
            np.array([t.state_upper for t in terms]),
            np.array([t.scale for t in terms]),
            group,
            size,
        )

    def _assembled(
        self,
        members: IntArray,
        intercept: FloatArray,
        state_slope: FloatArray,
        capacity_slope: FloatArray,
        state_lower: FloatArray,
        state_upper: FloatArray,
        scale: FloatArray,
        group: int | IntArray,
        size: float | FloatArray,
    ) -> CutBatch:
        """Scales, moves small slopes into the intercept, lowers for rounding."""
        shift = ROUNDING_SHIFT * size
        for slope, lower, upper in (
            (state_slope, state_lower, state_upper),
            (capacity_slope, self.capacity_lower, self.capacity_upper),
        ):
            if slope.size:
                largest = np.abs(slope).max(axis=1, initial=0.0, keepdims=True)
                is_small = (slope != 0.0) & (np.abs(slope) < SMALL_SLOPE * largest)
                if is_small.any():
                    moved = np.where(is_small, np.minimum(slope * lower, slope * upper), 0.0)
                    intercept = intercept + moved.sum(axis=1)
                    slope[is_small] = 0.0
        return CutBatch(
            self.i_family,
            members,
            (intercept - shift) / scale,
            state_slope / scale[:, None],
            capacity_slope / scale[:, None],
            np.broadcast_to(np.asarray(group, dtype=np.int64), (len(members),)),
        )


@dataclass(frozen=True)
class ChildMultipliers:
    """Multipliers of children's cuts, one after the other.

    pair (n,) which cut each counts in, ascending; exit, pi, intercept (n,); state_slope (n,
    n_state), capacity_slope (n, n_capacity) of the child's cut
    """

    pair: IntArray
    exit: IntArray
    pi: FloatArray
    intercept: FloatArray
    state_slope: FloatArray
    capacity_slope: FloatArray


@dataclass(frozen=True)
class _Terms:
    """Sums of one member before scaling."""

    intercept: float
    state_slope: FloatArray
    capacity_slope: FloatArray
    state_lower: FloatArray
    state_upper: FloatArray
    scale: float


class _Sum:
    """Terms of the weak-duality sum of one member."""

    def __init__(
        self, bound: DualBound, member: Member, pi: FloatArray, exits: ExitMultipliers
    ) -> None:
        self.bound = bound
        matrix = bound.matrix
        self.col_lower, self.col_upper = member.col_lower, member.col_upper
        self.weight = member.exit_weight
        self.in_columns, self.offset, self.scale = member.in_columns, member.offset, member.scale
        # Most lazy rows have no multiplier: only the others are kept.
        self.rows = np.flatnonzero(pi)
        self.pi = _usable(pi[self.rows], member.row_lower[self.rows], member.row_upper[self.rows])
        self.row_term = _row_terms(
            self.pi, member.row_lower[self.rows], member.row_upper[self.rows]
        )
        self.d = member.cost.copy()
        if len(self.rows):
            self.d -= matrix.transposed_times(self.rows, self.pi)
        if len(bound.patch):
            full = np.zeros(len(pi))
            full[self.rows] = self.pi
            step = full[bound.patch_row] * (member.patch_value - bound.patch_base)
            np.subtract.at(self.d, bound.patch_column, step)
        if bound.family.exit_columns is not None:
            # What rows make of the value of an exit is part of its weight.
            self.weight = self.weight + self.d[bound.family.exit_columns]
            self.d[bound.family.exit_columns] = np.minimum(self.weight, 0.0)
            self.weight = np.maximum(self.weight, 0.0)
        self.cut_exit, self.cut_pi = exits.exit, exits.pi
        self.cut_intercept = exits.intercept
        self.cut_slope, self.cut_capacity = exits.state_slope, exits.capacity_slope
        self.capacity_part = np.zeros((len(self.weight), self.cut_capacity.shape[1]))
        self._weigh_exits()
        self.col_term = _col_terms(self.d, self.col_lower, self.col_upper)
        # Later members of a nest have fewer terms: this bounds the rounding of them all.
        self.size = abs(self.offset) + sum(
            float(np.abs(term).sum())
            for term in (self.row_term, self.col_term, self.cut_term, self.theta_term)
        )

    def _weigh_exits(self) -> None:
        """Scales the multipliers of every exit to its weight, and adds the cuts' slopes."""
        n_exit = len(self.weight)
        total = np.bincount(self.cut_exit, weights=self.cut_pi, minlength=n_exit)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(total > 0.0, self.weight / np.where(total > 0.0, total, 1.0), 0.0)
        factor = np.where(ratio < 1.0 + SNAP_WEIGHT, ratio, 1.0)
        rest = np.maximum(self.weight - factor * total, 0.0)
        self.theta_term = np.where(rest > 0.0, rest * self.bound.theta_lower, 0.0)
        step = self.cut_pi * factor[self.cut_exit]
        out = self.bound.family.out_columns[self.cut_exit]
        np.add.at(self.d, out, step[:, None] * self.cut_slope)
        self.cut_term = np.bincount(self.cut_exit, step * self.cut_intercept, n_exit)
        self.used = np.unique(self.cut_exit)
        np.add.at(self.capacity_part, self.cut_exit, step[:, None] * self.cut_capacity)

    def terms(self) -> _Terms:
        """Its sums."""
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


def lift_amounts(
    upper: tuple[FloatArray, FloatArray, FloatArray],
    lower: tuple[FloatArray, FloatArray, FloatArray],
    start: IntArray,
    box: DomainBox,
    gate: tuple[int, ...],
    gate_is_one: bool,
) -> FloatArray:
    """Smallest ``B`` with ``upper - B <= some lower cut`` wherever the gate has the given value.

    Upper cuts (n,), (n, n_state), (n, n_capacity), each against some of the lower ones, whose first
    axis is parted at ``start`` (n,). The maximum over the state's domain and the capacity box is
    worked out for each pair, and an upper cut takes its least one, for any of them will do; (n,).
    """
    count = np.diff(start, append=len(lower[0]))
    intercept, state, capacity = (
        np.repeat(a, count, axis=0) - b for a, b in zip(upper, lower, strict=True)
    )
    worst = box.highest(intercept, state, capacity, gate, gate_is_one)
    amounts: FloatArray = np.minimum.reduceat(worst, start)
    return amounts


@dataclass(frozen=True)
class DomainBox:
    """Where a cut is asked for: capacities in a box, states between two multiples of them."""

    capacity_lower: FloatArray
    capacity_upper: FloatArray
    state_lower: FloatArray
    state_upper: FloatArray
    state_lower_matrix: FloatArray
    state_upper_matrix: FloatArray

    def state_range(self, capacity: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Lowest and highest states at some capacities, (n_state,) each."""
        low = np.maximum(self.state_lower, self.state_lower_matrix @ capacity)
        high = np.minimum(self.state_upper, self.state_upper_matrix @ capacity)
        return low, np.maximum(low, high)

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
