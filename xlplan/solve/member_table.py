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

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]


FEW_EXITS = 8
"""A family with no more exits than this has tables over all its members: of where they differ, and
of the exits. Cuts and exits of other families are worked out member by member."""


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

    def one(self, member: int) -> FloatArray:
        """Row of one member."""
        taken: FloatArray = self.flat[self.place + member]
        return taken


class MemberTable:
    """Numbers of a family's members at the positions where they differ.

    Attributes
    ----------
    first : Member, number 0: what is the same in all is read there
    columns, rows : program columns and rows in which members differ
    column_place, row_place : the way back, -1 where all are the same
    given, into : which state components come in, and their columns
    const, const_lower, const_upper : columns that are the same in all and in no slope; their bounds
    inside : (n_columns,) 1 where a column is in no slope, else 0
    has_same_inputs : whether every member holds its incoming state in the same columns
    """

    def __init__(self, cache: MemberCache, i_family: int, family: Family) -> None:
        self.first = first = cache.get(i_family, 0)
        n_member = family.n_member
        columns = np.zeros(len(first.cost), dtype=bool)
        rows = np.zeros(len(first.row_lower), dtype=bool)
        self.has_same_inputs = True
        for i_member in range(1, n_member):
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
        self._gather(cache, i_family, n_member)

    def _gather(self, cache: MemberCache, i_family: int, n_member: int) -> None:
        """Numbers where members differ; all members in full would fill the memory."""
        kinds: list[tuple[str, IntArray | slice]] = [
            ("cost", self.columns), ("col_lower", self.columns), ("col_upper", self.columns),
            ("row_lower", self.rows), ("row_upper", self.rows), ("patch_value", slice(None)),
        ]  # fmt: skip
        exits = ("exit_weight", "exit_child", "exit_child_if_gated", "offset", "scale")
        rows: list[list[FloatArray]] = [[] for _ in kinds]
        taken: list[list[object]] = [[] for _ in exits]
        for i_member in range(n_member):
            member = cache.get(i_family, i_member)
            for row, (name, places) in zip(rows, kinds, strict=True):
                row.append(getattr(member, name)[places])
            for part, name in zip(taken, exits, strict=True):
                part.append(getattr(member, name))
        series = [ShiftedSeries(np.array(row, dtype=float)) for row in rows]
        self._cost, self._col_lower, self._col_upper, self._row_lower, self._row_upper = series[:5]
        self._patch_value = series[5]
        # Most rows that differ are equations.
        self._is_equal = np.array_equal(self._row_lower.flat, self._row_upper.flat) and (
            np.array_equal(self._row_lower.place, self._row_upper.place)
        )
        if self._is_equal:
            self._row_upper = self._row_lower
        self._exit_weight, self._exit_child, self._exit_child_if_gated, *rest = map(np.array, taken)
        self._offset, self._scale = rest

    def numbers(self, members: IntArray, rows: IntArray) -> Numbers:
        """Numbers of some members, in their order, with a first axis; rows (positions) alone."""
        row_lower = self._row_lower.take(members, rows)
        return Numbers(
            self._cost.take(members),
            self._col_lower.take(members),
            self._col_upper.take(members),
            row_lower,
            row_lower if self._is_equal else self._row_upper.take(members, rows),
            self._patch_value.take(members),
            self._exit_weight[members],
            self._exit_child[members],
            self._exit_child_if_gated[members],
            self._offset[members],
            self._scale[members],
        )

    def one(self, member: int) -> Numbers:
        """Numbers of one member, without a first axis."""
        row_lower = self._row_lower.one(member)
        return Numbers(
            self._cost.one(member),
            self._col_lower.one(member),
            self._col_upper.one(member),
            row_lower,
            row_lower if self._is_equal else self._row_upper.one(member),
            self._patch_value.one(member),
            self._exit_weight[member],
            self._exit_child[member],
            self._exit_child_if_gated[member],
            float(self._offset[member]),
            float(self._scale[member]),
        )

    def exits(self, members: IntArray) -> tuple[FloatArray, IntArray]:
        """Weights (n, n_exit) and children (n, n_exit, 2) of some members' exits."""
        return self._exit_weight[members], self._exit_child[members]
