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

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import Family, Member
from xlplan.solve.cut_pool import CutBatch
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.member_table import FEW_EXITS, MemberTable
from xlplan.solve.row_matrix import RowMatrix, sums, sums_at, sums_by

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]
BoolArray = NDArray[np.bool_]

ROUNDING_SHIFT = 1e-12
"""Share of the sum of absolute terms by which a cut is lowered, for rounding in floats."""

SMALL_SLOPE = 1e-9
"""Slopes below this share of the largest term are moved into the intercept (scaling)."""

SNAP_WEIGHT = 1e-6
"""Multipliers of an exit whose sum is this close to the weight are scaled up to it."""


NEGLIGIBLE_SCALE = 1e-9
"""Later members of a nest whose objective is scaled by less than this share of the solved one's get
no cut from it: beside the rest, what counts in them is below the solver's tolerances."""


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
    """What the sums of a nested family need (``Nest``).

    entry_row, entry_value, entry_place : row, value, and place in the flattened (n_member,
        n_state) incoming state, of matrix entries in rows that count for that member
    capacity_row, capacity_value, capacity_place : likewise for the columns of capacities; the
        place is in an array (n_held, n_member + 1) of the capacities that have a column, by slot
    column_slot, exit_slot : 1 + the last member in which a column or an exit counts, 0 for none
    first_only : rows that count in member 0 alone
    """

    entry_row: IntArray
    entry_value: FloatArray
    entry_place: IntArray
    capacity_row: IntArray
    capacity_value: FloatArray
    capacity_place: IntArray
    column_slot: IntArray
    exit_slot: IntArray
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
    row_slot = _slots(nest.row_last[row[caps]], family.n_member)
    return _NestTable(
        entry_row=row[here],
        entry_value=program.value[here],
        entry_place=entry_place[here],
        capacity_row=row[caps],
        capacity_value=program.value[caps],
        capacity_place=of_capacity[program.index[caps]] * (family.n_member + 1) + row_slot,
        column_slot=_slots(nest.col_last, family.n_member),
        exit_slot=_slots(nest.exit_last, family.n_member),
        first_only=np.flatnonzero(nest.row_last == 0),
        state_lower=np.array(lower),
        state_upper=np.array(upper),
        offset=np.array(offset),
        scale=np.array(scale),
    )


def _slots(last: IntArray, n_member: int) -> IntArray:
    """1 + the last member in which something counts, 0 where it counts in none."""
    return np.clip(last, -1, n_member - 1) + 1


def _left(by_slot: FloatArray) -> FloatArray:
    """Sums by member, (n_member, ...), of what still counts there, from sums by slot."""
    suffix: FloatArray = np.cumsum(by_slot[::-1], axis=0)[::-1][1:]
    return suffix


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
        if i_member + 1 == n:
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
        # Rows that count in member 0 alone are in the slot of that member, which is ``first``.
        row_slot = _slots(nest.row_last[parts.rows], n)
        by_slot = sums(table.column_slot, col_term, n + 1)
        by_slot += sums(row_slot, parts.row_term, n + 1)
        by_slot += sums(table.exit_slot, parts.cut_term + parts.theta_term, n + 1)
        intercept = table.offset + _left(by_slot)
        n_capacity, n_held = len(self.capacity_lower), len(self._capacity_columns)
        capacity_by_slot = sums_at(
            table.exit_slot[parts.cut_exit],
            np.arange(n_capacity),
            parts.capacity_term,
            (n + 1, n_capacity),
        )
        entry = table.capacity_value * full[table.capacity_row]
        by_row = sums(table.capacity_place, entry, n_held * (n + 1))
        capacity_by_slot[:, self._has_column] -= by_row.reshape(n_held, n + 1).T
        capacity_slope = _left(capacity_by_slot)
        n_state = table.state_lower.shape[1]
        entry = table.entry_value * full[table.entry_row]
        state_slope = -sums(table.entry_place, entry, n * n_state).reshape(n, n_state)
        intercept[i_member] = first.intercept
        state_slope[i_member] = first.state_slope
        capacity_slope[i_member] = first.capacity_slope
        counts = table.scale[i_member:] >= NEGLIGIBLE_SCALE * table.scale[i_member]
        these = np.arange(i_member, n)[counts]
        return self._assembled(
            these,
            intercept[these],
            state_slope[these],
            capacity_slope[these],
            table.state_lower[these],
            table.state_upper[these],
            table.scale[these],
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
        n_pair = len(members)
        pi, same, d = self._reduced_costs(table, pi)
        same += table.same_sums(d)
        vary, vary_size, is_valid = table.side_sums(pi, d, solve, members)
        # Children's cuts: scaled down where they weigh more than the exit does.
        weight = table.exits(members)[0]
        n_exit = weight.shape[1]
        total = sums(children.pair * n_exit + children.exit, children.pi, n_pair * n_exit)
        factor, rest = _exit_factors(weight, total.reshape(n_pair, n_exit))
        exit_term = rest * self.theta_lower
        share = factor[children.pair, children.exit] * children.pi
        child_term = share * children.intercept
        # Columns whose reduced costs differ, from here on by pair.
        cost, lower, upper = table.moving_numbers(members)
        moving = cost + (d[:, table.moving] - table.first.cost[table.moving])[solve]
        if len(self.patch):
            step = pi[:, self.patch_row][solve] * (table.patch_values(members) - self.patch_base)
            used = np.flatnonzero(step.any(axis=0))
            places = table.moving_place[self.patch_column[used]]
            moving -= sums_at(np.arange(n_pair), places, step[:, used], moving.shape)
        if len(share):
            places = table.moving_place[self.family.out_columns[children.exit]]
            slope = share[:, None] * children.state_slope
            moving += sums_at(children.pair, places, slope, moving.shape)
        moving_term = _col_terms(moving, lower, upper) * table.moving_inside
        offset, scale = table.totals(members)
        intercept = (
            offset
            + same[solve, 0]
            + vary
            + moving_term.sum(axis=1)
            + sums(children.pair, child_term, n_pair)
            + exit_term.sum(axis=1)
        )
        size = (
            np.abs(offset)
            + same[solve, 1]
            + vary_size
            + np.abs(moving_term).sum(axis=1)
            + sums(children.pair, np.abs(child_term), n_pair)
            + np.abs(exit_term).sum(axis=1)
        )

        def by_pair(wanted: IntArray) -> FloatArray:
            """Reduced costs of some columns, (n_pair, n_wanted)."""
            found = d[:, wanted][solve]
            place = table.moving_place[wanted]
            found[:, place >= 0] = moving[:, place[place >= 0]]
            return found

        capacity_slope = np.zeros((n_pair, len(self.capacity_lower)))
        if len(share):
            slope = share[:, None] * children.capacity_slope
            places = np.arange(slope.shape[1])
            capacity_slope += sums_at(children.pair, places, slope, capacity_slope.shape)
        capacity_slope[:, self._has_column] += by_pair(self._capacity_columns)
        cuts = self._assembled(
            members,
            np.where(is_valid, intercept, -np.inf),
            np.where(table.given, by_pair(table.into), 0.0),
            capacity_slope,
            *table.into_bounds(members),
            scale,
            groups,
            size,
        )
        return cuts, is_valid

    def _reduced_costs(
        self, table: MemberTable, pi: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Sums over the rows' sides that are the same in all members, and reduced costs.

        Returns
        -------
        ``pi`` with 0 where the side that it needs is infinite in all members; sums and sums of
        absolute terms, (n_solve, 2); ``cost - A' pi``, (n_solve, n_col), of member 0
        """
        n_col = len(table.first.cost)
        # Solves of one run have most of their multipliers in the same rows.
        rows = np.flatnonzero((pi != 0.0).any(axis=0))
        asked = pi.take(rows, axis=1)
        used, term = _row_terms(asked, *table.same_row_sides(rows))
        if (used != asked).any():
            pi = pi.copy()
            pi[:, rows] = used
        matrix = self.matrix
        entries = matrix.entries(rows)
        counts = matrix.start[rows + 1] - matrix.start[rows]
        weights = used.take(np.repeat(np.arange(len(rows)), counts), axis=1)
        weights *= matrix.value[entries]
        product = sums_by(matrix.index[entries], weights, n_col)
        same = np.stack([term.sum(axis=1), np.abs(term).sum(axis=1)], axis=1)
        return pi, same, table.first.cost - product

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
                magnitude = np.abs(slope)
                largest = magnitude.max(axis=1, keepdims=True)
                is_small = (magnitude < SMALL_SLOPE * largest) & (magnitude > 0.0)
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
        self.rows = np.flatnonzero(pi != 0.0)
        self.pi, self.row_term = _row_terms(
            pi[self.rows], member.row_lower[self.rows], member.row_upper[self.rows]
        )
        self.d = member.cost - matrix.transposed_times(self.rows, self.pi)
        if len(bound.patch):
            full = np.zeros(len(pi))
            full[self.rows] = self.pi
            step = full[bound.patch_row] * (member.patch_value - bound.patch_base)
            self.d -= sums(bound.patch_column, step, len(self.d))
        if bound.family.exit_columns is not None:
            # What rows make of the value of an exit is part of its weight.
            self.weight = self.weight + self.d[bound.family.exit_columns]
            self.d[bound.family.exit_columns] = np.minimum(self.weight, 0.0)
            self.weight = np.maximum(self.weight, 0.0)
        self.cut_exit, self.cut_pi = exits.exit, exits.pi
        self.cut_intercept = exits.intercept
        self._weigh_exits(exits.state_slope, exits.capacity_slope)
        self.col_term = _col_terms(self.d, self.col_lower, self.col_upper)
        # Later members of a nest have fewer terms: this bounds the rounding of them all.
        self.size = abs(self.offset) + sum(
            float(np.abs(term).sum())
            for term in (self.row_term, self.col_term, self.cut_term, self.theta_term)
        )

    def _weigh_exits(self, state_slope: FloatArray, capacity_slope: FloatArray) -> None:
        """Scales the multipliers of every exit to its weight, and adds the cuts' slopes."""
        n_exit = len(self.weight)
        total = sums(self.cut_exit, self.cut_pi, n_exit)
        factor, rest = _exit_factors(self.weight, total)
        self.theta_term = np.where(rest > 0.0, rest * self.bound.theta_lower, 0.0)
        step = self.cut_pi * factor[self.cut_exit]
        if len(step):
            out = self.bound.family.out_columns[self.cut_exit]
            self.d += sums(out.ravel(), (step[:, None] * state_slope).ravel(), len(self.d))
        self.cut_term = sums(self.cut_exit, step * self.cut_intercept, n_exit)
        self.capacity_term = step[:, None] * capacity_slope

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
        capacity_slope = self.capacity_term.sum(axis=0)
        capacity_slope[bound._has_column] += self.d[bound._capacity_columns]
        return _Terms(
            intercept=float(intercept),
            state_slope=np.where(is_given, self.d[held], 0.0),
            capacity_slope=capacity_slope,
            state_lower=np.where(is_given, self.col_lower[held], 0.0),
            state_upper=np.where(is_given, self.col_upper[held], 0.0),
            scale=self.scale,
        )


def _exit_factors(weight: FloatArray, total: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Factors that scale the multipliers of each exit to its weight, and the weight left over."""
    is_scaled = weight < (1.0 + SNAP_WEIGHT) * total
    factor = np.where(is_scaled, weight / np.where(is_scaled, total, 1.0), 1.0)
    return factor, np.maximum(weight - factor * total, 0.0)


def _row_terms(
    pi: FloatArray, row_lower: FloatArray, row_upper: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Multipliers, 0 where the side that they need is infinite, and their terms."""
    side = np.where(pi > 0.0, row_lower, row_upper)
    is_open = ~np.isfinite(side)
    if is_open.any():
        pi, side = np.where(is_open, 0.0, pi), np.where(is_open, 0.0, side)
    return pi, pi * side


def _col_terms(d: FloatArray, lower: FloatArray, upper: FloatArray) -> FloatArray:
    return d * np.where(d > 0.0, lower, upper)


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
        lower_one: FloatArray = np.minimum(results[0], results[1])
        return lower_one
