"""What differs between the members of a family, as arrays over the members.

Members of an event family read one series each, shifted by a period: the load of the third period
of an event that begins at 5 is that of the second of one that begins at 6. So the numbers are kept
as a few series, and where each of them is read.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import Family, Member
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.row_matrix import way_back

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]
BoolArray = NDArray[np.bool_]


FEW_EXITS = 8
"""A family with no more exits than this has tables over all its members: of where they differ, and
of the exits. Cuts and exits of other families are worked out member by member."""


BLOCK_SIZE = 2**18
"""Multiplications in one product of matrices. Larger ones are shared out among threads by the
library below NumPy, which takes far longer than the product where other processes are at work."""


@dataclass(frozen=True)
class Numbers:
    """Numbers of one member, or of n members with a first axis of length n.

    cost, col_lower, col_upper at ``MemberTable.columns``; row_lower, row_upper at
    ``MemberTable.rows``; the rest as in ``Member``
    """

    cost: FloatArray
    col_lower: FloatArray
    col_upper: FloatArray
    row_lower: FloatArray
    row_upper: FloatArray
    patch_value: FloatArray
    exit_weight: FloatArray
    exit_child: IntArray
    exit_child_if_gated: IntArray
    offset: FloatArray | float
    scale: FloatArray | float

    @staticmethod
    def of(member: Member) -> Numbers:
        """All numbers of one member, every column and row."""
        return Numbers(*(getattr(member, name) for name in Numbers.__dataclass_fields__))

    def part(self, i: int | slice | IntArray) -> Numbers:
        """One member, or several of them, of those on the first axis."""
        return Numbers(*(getattr(self, name)[i] for name in Numbers.__dataclass_fields__))


class ShiftedSeries:
    """An array (n_member, n) whose columns are kept as shifted parts of a few series.

    >>> whole = np.array([[1.0, 2.0, 7.0], [2.0, 3.0, 7.0], [3.0, 4.0, 7.0]])
    >>> series = ShiftedSeries(whole)
    >>> series.n_kept  # 1 2 3 4, and 7 7 7
    7
    >>> bool((series.take(np.arange(3)) == whole).all())
    True
    """

    def __init__(self, whole: FloatArray) -> None:
        n_member, n = whole.shape
        by_column = np.ascontiguousarray(whole.T)
        unique: dict[bytes, int] = {}
        name = [unique.setdefault(by_column[j].tobytes(), len(unique)) for j in range(n)]
        columns = [np.frombuffer(key, dtype=float) for key in unique]
        # Which series goes on where another one ends.
        heads = {column[:-1].tobytes(): i for i, column in enumerate(columns)}
        following = [heads.get(column[1:].tobytes(), -1) for column in columns]
        is_free = np.ones(len(columns), dtype=bool)
        begins = set(range(len(columns))) - {j for i, j in enumerate(following) if j != i}
        place = np.zeros(len(columns), dtype=np.int64)
        parts: list[FloatArray] = []
        n_kept = 0
        # What is in a circle has no beginning: those come last, from wherever.
        for i in (*sorted(begins), *range(len(columns))):
            if not is_free[i]:
                continue
            begin, j = n_kept, i
            parts.append(columns[i])
            n_kept += n_member
            while True:
                is_free[j] = False
                place[j] = n_kept - n_member
                j = following[j]
                if j < 0 or not is_free[j]:
                    break
                parts.append(columns[j][-1:])
                n_kept += 1
            assert n_kept > begin
        self.flat = np.concatenate(parts) if parts else np.zeros(0)
        self.place = place[np.array(name, dtype=np.int64)] if n else np.zeros(0, dtype=np.int64)

    @property
    def n_kept(self) -> int:
        """Numbers kept."""
        return len(self.flat)

    def take(self, members: IntArray, columns: IntArray | slice = slice(None)) -> FloatArray:
        """Rows of some members, (n, n_column), or some columns of them."""
        taken: FloatArray = self.flat[self.place[columns][None, :] + members[:, None]]
        return taken


def product(one: FloatArray, other: FloatArray) -> FloatArray:
    """``one @ other.T``, (n, m), of arrays (n, k) and (m, k), in blocks of a bounded size."""
    step = max(1, BLOCK_SIZE // max(1, len(one) * len(other)))
    total: FloatArray = one[:, :step] @ other[:, :step].T
    for begin in range(step, one.shape[1], step):
        part = slice(begin, begin + step)
        total += one[:, part] @ other[:, part].T
    return total


class MemberTable:
    """Numbers of a family's members at the positions where they differ.

    The reduced cost of most columns is the same in all members, and so is what a row or a column
    adds to a cut at a side that does not differ (``same_row_sides``, ``same_sums``). The sides that
    differ are added up by ``side_sums``, for many multipliers and members at once. What is left are
    ``moving`` columns.

    Attributes
    ----------
    first : Member, number 0: what is the same in all is read there
    columns, rows : program columns and rows in which members differ
    given, into : which state components come in, and their columns
    has_same_inputs : whether every member holds its incoming state in the same columns
    moving : (n_moving,) columns whose reduced cost differs: their cost does, or an entry of the
        matrix, or they hold the state at an exit
    moving_place : (n_col,) the way back, -1 elsewhere
    moving_inside : (n_moving,) 1 where a column is in no slope, else 0
    """

    def __init__(self, cache: MemberCache, i_family: int, family: Family) -> None:
        self.first = first = cache.get(i_family, 0)
        self.n_member = family.n_member
        names = ("cost", "col_lower", "col_upper", "row_lower", "row_upper")
        differs = {name: np.zeros(len(getattr(first, name)), dtype=bool) for name in names}
        self.has_same_inputs = True
        for i_member in range(1, family.n_member):
            member = cache.get(i_family, i_member)
            for name in names:
                differs[name] |= getattr(member, name) != getattr(first, name)
            if not np.array_equal(member.in_columns, first.in_columns):
                self.has_same_inputs = False
        is_moving = differs["cost"].copy()
        is_moving[family.program.index[family.patch]] = True
        is_moving[family.out_columns.ravel()] = True
        self.columns = np.flatnonzero(is_moving | differs["col_lower"] | differs["col_upper"])
        self.rows = np.flatnonzero(differs["row_lower"] | differs["row_upper"])
        # Columns of the incoming state and of the capacities are in the slopes, not in the sums.
        self.given = first.in_columns >= 0
        self.into = np.where(self.given, first.in_columns, 0)
        is_apart = np.zeros(len(is_moving), dtype=bool)
        is_apart[self.into[self.given]] = True
        is_apart[family.capacity_columns[family.capacity_columns >= 0]] = True
        self.moving = np.flatnonzero(is_moving)
        self.moving_place = way_back(self.moving, len(is_moving))
        self.moving_inside = np.where(is_apart[self.moving], 0.0, 1.0)
        self._gather(cache, i_family)
        is_left_out = is_moving | is_apart
        self._is_same_row = ~(differs["row_lower"] | differs["row_upper"])
        lower = np.where(is_left_out | differs["col_lower"], 0.0, first.col_lower)
        upper = np.where(is_left_out | differs["col_upper"], 0.0, first.col_upper)
        self._same_lower = np.stack([lower, np.abs(lower)])
        self._same_upper = np.stack([upper, -np.abs(upper)])
        self._list_sides(differs, is_left_out)

    def _gather(self, cache: MemberCache, i_family: int) -> None:
        """Numbers where members differ; all members in full would fill the memory.

        All kinds are in one series: an equation has the same numbers on both of its sides.
        """
        kinds: list[tuple[str, str, IntArray | slice]] = [
            ("cost", "cost", self.columns),
            ("col_lower", "col_lower", self.columns),
            ("col_upper", "col_upper", self.columns),
            ("row_lower", "row_lower", self.rows),
            ("row_upper", "row_upper", self.rows),
            ("patch_value", "patch_value", slice(None)),
            ("into_lower", "col_lower", self.into),
            ("into_upper", "col_upper", self.into),
        ]
        exits = ("exit_weight", "exit_child", "exit_child_if_gated", "offset", "scale")
        ends = np.cumsum([len(getattr(self.first, name)[at]) for _, name, at in kinds]).tolist()
        self._part = {
            kind: slice(begin, end)
            for (kind, _, _), begin, end in zip(kinds, [0, *ends[:-1]], ends, strict=True)
        }
        by_number = np.empty((ends[-1], self.n_member))
        taken: list[list[object]] = [[] for _ in exits]
        for i_member in range(self.n_member):
            member = cache.get(i_family, i_member)
            for kind, name, at in kinds:
                by_number[self._part[kind], i_member] = getattr(member, name)[at]
            for part, name in zip(taken, exits, strict=True):
                part.append(getattr(member, name))
        self._series = ShiftedSeries(by_number.T)
        self._exit_weight, self._exit_child, self._exit_child_if_gated, *rest = map(np.array, taken)
        self._offset, self._scale = rest
        among = np.searchsorted(self.columns, self.moving)
        self._moving_at = {
            kind: self._part[kind].start + among for kind in ("cost", "col_lower", "col_upper")
        }

    def _list_sides(self, differs: dict[str, BoolArray], is_left_out: BoolArray) -> None:
        """Lists the sides that differ: equations, then lower sides, then upper ones."""
        place, part = self._series.place, self._part
        is_equation = place[part["row_lower"]] == place[part["row_upper"]]
        is_in_sums = ~is_left_out[self.columns]
        low_column = np.flatnonzero(differs["col_lower"][self.columns] & is_in_sums)
        high_column = np.flatnonzero(differs["col_upper"][self.columns] & is_in_sums)
        equation, other = np.flatnonzero(is_equation), np.flatnonzero(~is_equation)
        self._equation, self._other_row = self.rows[equation], self.rows[other]
        self._low_column, self._high_column = self.columns[low_column], self.columns[high_column]
        self._side_at = np.concatenate(
            [
                part["row_lower"].start + equation,
                part["row_lower"].start + other,
                part["col_lower"].start + low_column,
                part["row_upper"].start + other,
                part["col_upper"].start + high_column,
            ]
        )

    def same_row_sides(self, rows: IntArray) -> tuple[FloatArray, FloatArray]:
        """Sides of some rows, (n,), 0 where one of the two differs between members."""
        is_same = self._is_same_row[rows]
        lower = np.where(is_same, self.first.row_lower[rows], 0.0)
        return lower, np.where(is_same, self.first.row_upper[rows], 0.0)

    def same_sums(self, d: FloatArray) -> FloatArray:
        """What the bounds that are the same in all members add to cuts.

        Sums and sums of absolute terms, (n_solve, 2), from reduced costs (n_solve, n_col); moving
        columns and those in a slope are left out.
        """
        above, below = np.maximum(d, 0.0), np.minimum(d, 0.0)
        return product(above, self._same_lower) + product(below, self._same_upper)

    def side_sums(
        self, pi: FloatArray, d: FloatArray, solve: IntArray, members: IntArray
    ) -> tuple[FloatArray, FloatArray, BoolArray]:
        """What the sides that differ add to the cuts of pairs of a solve and a member.

        A multiplier of a row and the reduced cost of a column count alike: above 0 with the lower
        side, below 0 with the upper one. So the sums are products of two matrices.

        Parameters
        ----------
        pi, d : arrays, shape (n_solve, n_row) and (n_solve, n_col)
        solve, members : arrays, shape (n_pair,)

        Returns
        -------
        sums, sums of the absolute terms, and whether all sides that they need are finite, (n_pair,)
        """
        other = pi.take(self._other_row, axis=1)
        factor = np.concatenate(
            [
                pi.take(self._equation, axis=1),
                np.maximum(other, 0.0),
                np.maximum(d.take(self._low_column, axis=1), 0.0),
                np.minimum(other, 0.0),
                np.minimum(d.take(self._high_column, axis=1), 0.0),
            ],
            axis=1,
        )
        used = np.flatnonzero(factor.any(axis=0))
        factor = factor.take(used, axis=1)
        is_asked = np.zeros(self.n_member, dtype=bool)
        is_asked[members] = True
        who = np.flatnonzero(is_asked)
        at = (np.cumsum(is_asked) - 1)[members]
        side = self._series.take(who, self._side_at[used])
        is_valid = np.ones(len(members), dtype=bool)
        is_open = ~np.isfinite(side)
        if is_open.any():
            side[is_open] = 0.0
            n_open = product((factor != 0.0).astype(float), is_open.astype(float))
            is_valid = n_open[solve, at] == 0.0
        sums, sizes = product(factor, side), product(np.abs(factor), np.abs(side))
        return sums[solve, at], sizes[solve, at], is_valid

    def moving_numbers(self, members: IntArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Cost, lower and upper bound of the moving columns of some members, (n, n_moving)."""
        cost, lower, upper = (self._series.take(members, at) for at in self._moving_at.values())
        return cost, lower, upper

    def into_bounds(self, members: IntArray) -> tuple[FloatArray, FloatArray]:
        """Bounds of the incoming state of some members, (n, n_state), 0 where it is free."""
        lower = self._series.take(members, self._part["into_lower"])
        upper = self._series.take(members, self._part["into_upper"])
        return lower * self.given, upper * self.given

    def patch_values(self, members: IntArray) -> FloatArray:
        """Matrix entries that differ, of some members, (n, n_patch)."""
        return self._series.take(members, self._part["patch_value"])

    def totals(self, members: IntArray) -> tuple[FloatArray, FloatArray]:
        """Offset and scale of some members, (n,)."""
        return self._offset[members], self._scale[members]

    def numbers(self, members: IntArray) -> Numbers:
        """Numbers of some members, in their order, with a first axis."""
        part = self._part
        row = self._series.take(members, slice(0, part["patch_value"].stop))
        return Numbers(
            row[:, part["cost"]],
            row[:, part["col_lower"]],
            row[:, part["col_upper"]],
            row[:, part["row_lower"]],
            row[:, part["row_upper"]],
            row[:, part["patch_value"]],
            self._exit_weight[members],
            self._exit_child[members],
            self._exit_child_if_gated[members],
            self._offset[members],
            self._scale[members],
        )

    def exits(self, members: IntArray) -> tuple[FloatArray, IntArray]:
        """Weights (n, n_exit) and children (n, n_exit, 2) of some members' exits."""
        return self._exit_weight[members], self._exit_child[members]
