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

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import Family, Member
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.row_matrix import RowMatrix

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

ROUNDING_SHIFT = 1e-12
"""Share of the sum of absolute terms by which a cut is lowered, for rounding in floats."""

SMALL_SLOPE = 1e-9
"""Slopes below this share of the largest term are moved into the intercept (scaling)."""

TABLE_BYTES = 40_000_000
"""A family's table of members beyond this size is not kept."""

MANY_EXITS = 8
"""Cuts of a family with more exits than this are made member by member."""

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


@dataclass(frozen=True)
class SortedCuts:
    """Cuts of a family sorted by member, the oldest of a member first.

    order (n,) positions in the pool; start, members : where each member's cuts begin, of those that
    have any; state_slope (n, n_state), level (n,) value without the state's part, both in order
    """

    order: IntArray
    start: IntArray
    members: IntArray
    state_slope: FloatArray
    level: FloatArray


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
        self._sorted: SortedCuts | None = None
        self._sorted_capacity: FloatArray | None = None

    @property
    def n_member(self) -> int:
        """Members of the family."""
        return len(self._positions)

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

    def by_member(self, capacity: FloatArray) -> SortedCuts:
        """Cuts sorted by member at some capacities; kept between calls."""
        known = self._sorted
        if known is None or len(known.order) != self.n:
            order = np.argsort(self.member, kind="stable")
            members, start = np.unique(self.member[order], return_index=True)
            known = SortedCuts(order, start, members, self.state_slope[order], np.zeros(0))
            self._sorted_capacity = None
        is_known = self._sorted_capacity is not None and np.array_equal(
            self._sorted_capacity, capacity
        )
        if not is_known:
            known = replace(known, level=self.level(capacity)[known.order])
            self._sorted_capacity = capacity.copy()
        self._sorted = known
        return known

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


class MemberTable:
    """What differs between the members of a family, as arrays over the members.

    Only positions that differ somewhere are stacked; the others are those of member 0. A table that
    would be large is not kept: what is asked for is then gathered anew.

    has_same_inputs : whether every member holds its incoming state in the same columns
    """

    def __init__(self, cache: MemberCache, i_family: int, family: Family) -> None:
        self._cache, self._i_family = cache, i_family
        self.first = first = cache.get(i_family, 0)
        columns = np.zeros(len(first.cost), dtype=bool)
        rows = np.zeros(len(first.row_lower), dtype=bool)
        self.has_same_inputs = True
        for i_member in range(1, family.n_member):
            member = cache.get(i_family, i_member)
            columns |= member.cost != first.cost
            columns |= member.col_lower != first.col_lower
            columns |= member.col_upper != first.col_upper
            rows |= member.row_lower != first.row_lower
            rows |= member.row_upper != first.row_upper
            if not np.array_equal(member.in_columns, first.in_columns):
                self.has_same_inputs = False
        columns[family.program.index[family.patch]] = True
        columns[family.out_columns.ravel()] = True
        self.columns, self.rows = np.flatnonzero(columns), np.flatnonzero(rows)
        self.row_place = np.full(len(rows), -1, dtype=np.int64)
        self.row_place[self.rows] = np.arange(len(self.rows))
        self.column_place = np.full(len(columns), -1, dtype=np.int64)
        self.column_place[self.columns] = np.arange(len(self.columns))
        # Columns of the incoming state and of the capacities are in the slopes, not in the sums.
        self.given = first.in_columns >= 0
        self.into = np.where(self.given, first.in_columns, 0)
        apart = np.zeros(len(columns), dtype=bool)
        apart[self.into[self.given]] = True
        apart[family.capacity_columns[family.capacity_columns >= 0]] = True
        is_const = ~apart
        is_const[self.columns] = False
        self.const = np.flatnonzero(is_const)
        self.const_lower = first.col_lower[self.const]
        self.const_upper = first.col_upper[self.const]
        self.inside = np.where(apart[self.columns], 0.0, 1.0)
        size = 8 * family.n_member * (3 * len(self.columns) + 2 * len(self.rows))
        self._whole: _Numbers | None = None
        if size <= TABLE_BYTES:
            self._whole = self._gather(np.arange(family.n_member)).compact()

    def numbers(self, members: IntArray) -> _Numbers:
        """Numbers of some members, in their order."""
        if self._whole is None:
            return self._gather(members)
        if len(members) == 1:  # views, where most calls are
            one = slice(int(members[0]), int(members[0]) + 1)
            return _Numbers(*(part[one] for part in vars(self._whole).values()))
        return _Numbers(*(part[members] for part in vars(self._whole).values()))

    def _gather(self, members: IntArray) -> _Numbers:
        taken = [self._cache.get(self._i_family, m) for m in members.tolist()]
        return _Numbers(
            cost=np.array([m.cost[self.columns] for m in taken]),
            col_lower=np.array([m.col_lower[self.columns] for m in taken]),
            col_upper=np.array([m.col_upper[self.columns] for m in taken]),
            row_lower=np.array([m.row_lower[self.rows] for m in taken]),
            row_upper=np.array([m.row_upper[self.rows] for m in taken]),
            patch_value=np.array([m.patch_value for m in taken]),
            exit_weight=np.array([m.exit_weight for m in taken]),
            exit_child=np.array([m.exit_child for m in taken]),
            offset=np.array([m.offset for m in taken]),
            scale=np.array([m.scale for m in taken]),
        )


@dataclass(frozen=True)
class _Numbers:
    """Numbers of n members: (n, number of positions that differ), and (n,) for the last two."""

    cost: FloatArray
    col_lower: FloatArray
    col_upper: FloatArray
    row_lower: FloatArray
    row_upper: FloatArray
    patch_value: FloatArray
    exit_weight: FloatArray
    exit_child: IntArray
    offset: FloatArray
    scale: FloatArray

    def compact(self) -> _Numbers:
        """The same numbers, those that are equal for all members or on both sides kept once."""
        parts = {
            name: np.broadcast_to(part[0].copy(), part.shape)
            if len(part) and (part == part[0]).all()
            else part
            for name, part in vars(self).items()
        }
        for one, other in (("row_lower", "row_upper"), ("col_lower", "col_upper")):
            if np.array_equal(parts[one], parts[other]):
                parts[other] = parts[one]
        return _Numbers(**parts)


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

        def left(last: IntArray, term: FloatArray) -> FloatArray:
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

    def cuts_of(
        self, members: IntArray, pi: FloatArray, cuts: SharedMultipliers, group: int
    ) -> CutBatch | None:
        """Cuts of several members from the same ``pi``, each with its own children's cuts.

        Parameters
        ----------
        members : array, shape (n,)
        pi : array, shape (n_row,)
        cuts : SharedMultipliers
        group : int

        Returns
        -------
        CutBatch of n cuts; None where the family is not fit for it (many exits, other inputs)
        """
        table = self.table
        if table is None:
            return None
        now, first = table.numbers(members), table.first
        n = len(members)
        rows = np.flatnonzero(pi)
        multiplier = pi[rows]
        place = table.row_place[rows]
        differs = place >= 0
        side = np.where(multiplier > 0.0, first.row_lower[rows], first.row_upper[rows])
        usable = multiplier
        if not np.isfinite(side[~differs]).all():
            usable = np.where(differs | np.isfinite(side), multiplier, 0.0)
            side = np.where(np.isfinite(side), side, 0.0)
        row_const = usable[~differs] * side[~differs]
        place, at = place[differs], multiplier[differs]
        side = np.where(at > 0.0, now.row_lower[:, place], now.row_upper[:, place])
        if not np.isfinite(side).all():
            return None
        row_vary = side * at
        d = first.cost - self.matrix_of(first).transposed_times(rows, usable)
        columns, at_column = table.columns, table.column_place
        d_vary = now.cost + (d[columns] - first.cost[columns])
        if len(self.patch):
            full = np.zeros(len(pi))
            full[rows] = usable
            step = full[self.patch_row] * (now.patch_value - first.patch_value)
            np.subtract.at(d_vary, (slice(None), at_column[self.patch_column]), step)
        # Children's cuts: scaled down where they weigh more than the exit does.
        weight = now.exit_weight
        n_exit = weight.shape[1]
        total = np.bincount(cuts.exit, cuts.pi, n_exit)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(total > 0.0, weight / np.where(total > 0.0, total, 1.0), 0.0)
        factor = np.where(ratio < 1.0 + SNAP_WEIGHT, ratio, 1.0)
        rest = np.maximum(weight - factor * total, 0.0)
        exit_term = rest * self.theta_lower
        capacity_slope = np.zeros((n, len(self.capacity_lower)))
        cut_term = np.zeros((n, len(cuts.exit)))
        for i, e in enumerate(cuts.exit.tolist()):
            share = factor[:, e] * cuts.pi[i]
            cut_term[:, i] = share * cuts.intercept[:, i]
            capacity_slope += share[:, None] * cuts.capacity_slope[:, i]
            places = at_column[self.family.out_columns[e]]
            np.add.at(d_vary, (slice(None), places), share[:, None] * cuts.state_slope[:, i])
        given, into = table.given, table.into
        col_const = _col_terms(d[table.const], table.const_lower, table.const_upper)
        col_vary = _col_terms(d_vary, now.col_lower, now.col_upper) * table.inside
        intercept = (
            now.offset
            + float(row_const.sum())
            + float(col_const.sum())
            + row_vary.sum(axis=1)
            + col_vary.sum(axis=1)
            + cut_term.sum(axis=1)
            + exit_term.sum(axis=1)
        )
        size = float(
            np.abs(now.offset).max()
            + np.abs(row_const).sum()
            + np.abs(col_const).sum()
            + np.abs(row_vary).sum(axis=1).max()
            + np.abs(col_vary).sum(axis=1).max()
            + np.abs(cut_term).sum(axis=1).max()
            + np.abs(exit_term).sum(axis=1).max()
        )

        def by_member(wanted: IntArray, same: FloatArray, vary: FloatArray) -> FloatArray:
            """Numbers of some columns, (n, n_wanted), where some of them differ by member."""
            found = np.tile(same[wanted], (n, 1))
            place = at_column[wanted]
            found[:, place >= 0] = vary[:, place[place >= 0]]
            return found

        state_slope = np.where(given, by_member(into, d, d_vary), 0.0)
        capacity_slope[:, self._has_column] += by_member(self._capacity_columns, d, d_vary)
        lower = by_member(into, first.col_lower, now.col_lower)
        upper = by_member(into, first.col_upper, now.col_upper)
        return self._assembled(
            members,
            intercept,
            state_slope,
            capacity_slope,
            np.where(given, lower, 0.0),
            np.where(given, upper, 0.0),
            now.scale,
            group,
            size,
        )

    @property
    def table(self) -> MemberTable | None:
        """What differs between the members; None where ``cuts_of`` cannot be used."""
        if len(self.family.exit_gate) > MANY_EXITS or self.family.exit_columns is not None:
            return None
        if self._table is None:
            self._table = MemberTable(self._cache, self.i_family, self.family)
        return self._table if self._table.has_same_inputs else None

    def matrix_of(self, member: Member) -> RowMatrix:
        """The matrix with one member's patch written into it."""
        if len(self.patch):
            self.matrix.value[self.patch] = member.patch_value
            self.patch_base = member.patch_value
        return self.matrix

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
        group: int,
        size: float,
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
            np.full(len(members), group, dtype=np.int64),
        )


@dataclass(frozen=True)
class SharedMultipliers:
    """Multipliers of children's cuts that serve several members, each with its own cuts.

    exit, pi : (n_cut,); intercept (n, n_cut), state_slope (n, n_cut, n_state), capacity_slope
    (n, n_cut, n_capacity) of the cut that takes the same place for each of n members
    """

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
