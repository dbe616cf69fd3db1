"""Which rows of a program are in its kept model, with which sides, and which are missed there.

``Numbers`` of a few members come in, with a first axis over them; ``Lookup`` reads some positions
of all of them at once. ``ProgramRows`` holds the rows in the model, ``LazyRows`` those that are
added when a point breaks them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import Member
from xlplan.solve.folding import FoldedRows, Folding
from xlplan.solve.member_table import MemberTable, Numbers
from xlplan.solve.row_matrix import RowMatrix, sums_by, way_back

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]
BoolArray = NDArray[np.bool_]

_Any = TypeVar("_Any", np.float64, np.bool_)

FEW_ENTRIES = 8
"""Lazy rows of up to so many entries are evaluated side by side."""


class Lookup:
    """Some positions of vectors over the program's columns or rows, read for k members at once.

    Parameters
    ----------
    at : (n,), positions
    place : (n_all,), where each stands among the numbers that differ, -1: the same in all members
    same : vectors (n_all,) of any member, one for each that will be read
    """

    def __init__(self, at: IntArray, place: IntArray, *same: FloatArray) -> None:
        found = place[at]
        self._inside = np.flatnonzero(found >= 0)
        self._source = found[self._inside]
        self._n_varying, self._is_all = len(self._inside), len(self._inside) == len(at)
        self._same = [] if self._is_all else [vector[at][None, :] for vector in same]

    @property
    def does_vary(self) -> bool:
        """Whether members differ at any of the positions."""
        return self._n_varying > 0

    def read(self, *varying: FloatArray) -> list[FloatArray]:
        """Each vector, (k, n), from what differs, (k, n_differing); (1, n) where nothing does."""
        if self._is_all and self._n_varying:
            return [vector.take(self._source, axis=1) for vector in varying]
        if not self._n_varying:
            return list(self._same) or [np.zeros((1, 0)) for _ in varying]
        found = []
        for same, vector in zip(self._same, varying, strict=True):
            whole = np.repeat(same, len(vector), axis=0)
            whole[:, self._inside] = vector[:, self._source]
            found.append(whole)
        return found


class Differences:
    """Where the members of a family differ: everywhere, unless there is a table of it.

    column_place (n_col,), row_place (n_row,) : place among what differs, -1: the same in all
    """

    def __init__(self, first: Member, table: MemberTable | None) -> None:
        self.first = first
        if table is None:
            self.column_place: IntArray = np.arange(len(first.cost))
            self.row_place: IntArray = np.arange(len(first.row_lower))
        else:
            self.column_place = way_back(table.columns, len(first.cost))
            self.row_place = way_back(table.rows, len(first.row_lower))

    def bounds(self, columns: IntArray) -> Lookup:
        """Reads ``col_lower`` and ``col_upper``."""
        first = self.first
        return Lookup(columns, self.column_place, first.col_lower, first.col_upper)

    def costs(self, columns: IntArray) -> Lookup:
        """Reads ``cost``."""
        return Lookup(columns, self.column_place, self.first.cost)

    def sides(self, rows: IntArray) -> Lookup:
        """Reads ``row_lower`` and ``row_upper``."""
        first = self.first
        return Lookup(rows, self.row_place, first.row_lower, first.row_upper)


@dataclass(frozen=True)
class Now:
    """Numbers of k members, and what folding makes of them.

    numbers : with a first axis of length k
    fold_shift (k, n_fold) or (1, n_fold) ``W b_D``; is_fold_free alike, whether a fold's row is
    free; is_fold_lost alike, whether the column hangs on a free row, or None: none does
    """

    numbers: Numbers
    fold_shift: FloatArray
    is_fold_free: BoolArray
    is_fold_lost: BoolArray | None

    @staticmethod
    def of(numbers: Numbers, fold_rows: Lookup, folding: Folding) -> Now:
        """Takes the sides of folded rows, which ``fold_rows`` reads."""
        side, _ = fold_rows.read(numbers.row_lower, numbers.row_upper)
        is_free, is_lost = ~np.isfinite(side), None
        if is_free.any():
            side, is_lost = np.where(is_free, 0.0, side), folding.touched(is_free)
        return Now(numbers, folding.shift(side), is_free, is_lost)

    def __len__(self) -> int:
        return len(self.numbers.exit_weight)

    def fold_bounds(self, bounds: Lookup) -> tuple[FloatArray, FloatArray]:
        """Bounds of folded columns, which ``bounds`` reads; none where the fold's row is free."""
        low, high = bounds.read(self.numbers.col_lower, self.numbers.col_upper)
        if self.is_fold_lost is None:
            return low, high
        return (
            np.where(self.is_fold_free, -np.inf, low),
            np.where(self.is_fold_free, np.inf, high),
        )


class ProgramRows:
    """Program rows, and bounds of folded columns, that are in the model, and where.

    program (n,) program row or -1; bounded (n,) fold whose column's bound it is, or -1; place (n,)
    row of the model; in the ``term_row``-th of them ``term_weight`` times the folded column
    ``term_fold`` was replaced; of_program, of_bound: the way back, -1 where not in the model;
    varying (n_varying,): those whose sides differ between members, ascending; low, high
    (n_varying,): their sides as they stand in the model.

    Parameters
    ----------
    name : str, for messages
    folding : Folding
    differences : Differences
    """

    def __init__(self, name: str, folding: Folding, differences: Differences) -> None:
        self.name, self._folding, self._differences = name, folding, differences
        self.program = self.bounded = self.place = np.zeros(0, dtype=np.int32)
        self.term_row = self.term_fold = np.zeros(0, dtype=np.int32)
        self.term_weight = np.zeros(0)
        n_row = len(differences.row_place)
        self.of_program = np.full(n_row, -1, dtype=np.int32)
        self.of_bound = np.full(len(folding), -1, dtype=np.int32)
        # Where a row D differs between members, so does what hangs on it.
        self._does_shift_vary = folding.touched(differences.row_place[None, folding.row] >= 0)[0]
        self.low = self.high = np.zeros(0)
        self.varying = np.zeros(0, dtype=np.int64)
        self._reader: _SideReader | None = None

    def __len__(self) -> int:
        return len(self.program)

    def append(
        self,
        rows: IntArray,
        folds: IntArray,
        places: IntArray,
        folded: FoldedRows,
        now: Now,
        i: int = 0,
    ) -> tuple[FloatArray, FloatArray, IntArray]:
        """Puts rows behind; the model holds them with the sides of the ``i``-th member.

        Returns
        -------
        sides for the members of ``now``, (k, n) each; which of the rows vary, (n_new_varying,)
        """
        begin = len(self)
        new = begin + np.arange(len(rows), dtype=np.int32)
        self.of_program[rows[rows >= 0]] = new[rows >= 0]
        self.of_bound[folds[folds >= 0]] = new[folds >= 0]
        self.program = _behind(self.program, rows)
        self.bounded = _behind(self.bounded, folds)
        self.place = _behind(self.place, places)
        n_before = len(self.term_row)
        self.term_row = _behind(self.term_row, begin + folded.term_row)
        self.term_fold = _behind(self.term_fold, folded.term_fold)
        self.term_weight = np.concatenate([self.term_weight, folded.term_weight])
        terms = np.arange(n_before, len(self.term_row))
        low, high = _SideReader(self, new, terms).read(now)
        fresh = self._find_varying(new, terms)
        self.varying = np.concatenate([self.varying, begin + fresh])
        self._reader = None
        self.low = np.concatenate([self.low, low[i, fresh]])
        self.high = np.concatenate([self.high, high[i, fresh]])
        return low, high, fresh

    def sides(self, now: Now) -> tuple[FloatArray, FloatArray]:
        """Sides of the varying rows for every member of ``now``, (k, n_varying)."""
        if self._reader is None:
            differs = np.zeros(len(self), dtype=bool)
            differs[self.varying] = True
            terms = np.flatnonzero(differs[self.term_row])
            self._reader = _SideReader(self, self.varying, terms)
        return self._reader.read(now)

    def multipliers(self, dual: FloatArray) -> FloatArray:
        """Multipliers of the program's rows, (k, n_row), from those of the model's, (k, n)."""
        k, n_fold = len(dual), len(self._folding)
        pi = np.zeros((k, len(self.of_program)))
        own = dual.take(self.place, axis=1)
        is_row = self.program >= 0
        pi[:, self.program[is_row]] = own[:, is_row]
        if n_fold:
            weights = self.term_weight * own.take(self.term_row, axis=1)
            by_column = sums_by(self.term_fold, weights, n_fold)
            pi[:, self._folding.row] = self._folding.multipliers(by_column)
        return pi

    def _find_varying(self, new: IntArray, terms: IntArray) -> IntArray:
        """Which of some rows, the last ones, have sides that differ between members."""
        program, bounded = self.program[new], self.bounded[new]
        differs = np.zeros(len(new), dtype=bool)
        is_row = program >= 0
        differs[is_row] = self._differences.row_place[program[is_row]] >= 0
        column = self._folding.column[bounded[~is_row]]
        differs[~is_row] = self._differences.column_place[column] >= 0
        row = self.term_row[terms] - (len(self) - len(new))
        differs[row[self._does_shift_vary[self.term_fold[terms]]]] = True
        return np.flatnonzero(differs)


class _SideReader:
    """Sides of the rows ``at`` of ``ProgramRows``, to which the ``terms`` belong."""

    def __init__(self, rows: ProgramRows, at: IntArray, terms: IntArray) -> None:
        self._name, self.n = rows.name, len(at)
        program = rows.program[at]
        is_bound = program < 0
        self._own, self._bound = np.flatnonzero(~is_bound), np.flatnonzero(is_bound)
        self._sides = rows._differences.sides(program[self._own])
        self._folds = rows.bounded[at[self._bound]]
        self._bounds = rows._differences.bounds(rows._folding.column[self._folds])
        self._place = way_back(at, len(rows))[rows.term_row[terms]]
        self._fold, self._weight = rows.term_fold[terms], rows.term_weight[terms]

    def read(self, now: Now) -> tuple[FloatArray, FloatArray]:
        """Lower and upper sides, (k, n)."""
        numbers = now.numbers
        low, high = np.empty((len(now), self.n)), np.empty((len(now), self.n))
        own_low, own_high = self._sides.read(numbers.row_lower, numbers.row_upper)
        low[:, self._own], high[:, self._own] = own_low, own_high
        if len(self._bound):
            own_low, own_high = self._bounds.read(numbers.col_lower, numbers.col_upper)
            free = now.is_fold_free.take(self._folds, axis=1)
            low[:, self._bound] = np.where(free, -np.inf, own_low)
            high[:, self._bound] = np.where(free, np.inf, own_high)
        if len(self._fold):
            if now.is_fold_lost is not None:
                lost = now.is_fold_lost.take(self._fold, axis=1)
                is_asked = np.isfinite(low) | np.isfinite(high)
                if (lost & is_asked.take(self._place, axis=1)).any():
                    raise ValueError(f"{self._name}: a folded column counts without its row")
            shift = self._weight * now.fold_shift.take(self._fold, axis=1)
            shift = sums_by(self._place, shift, self.n)
            low, high = low - shift, high - shift
        return low, high


class LazyRows:
    """Activity of a program's lazy rows; those with few entries are kept side by side.

    Attributes
    ----------
    row : (n,), program rows in the order in which they are evaluated
    """

    def __init__(self, rows: IntArray, matrix: RowMatrix) -> None:
        counts = matrix.start[rows + 1] - matrix.start[rows]
        order = np.argsort(counts, kind="stable")
        self.row, counts = rows[order], counts[order]
        self._matrix = matrix
        self._parts: list[tuple[slice, NDArray[np.int32], FloatArray]] = []
        for count in np.unique(counts[counts <= FEW_ENTRIES]).tolist():
            begin, end = np.searchsorted(counts, [count, count + 1]).tolist()
            entries = matrix.start[self.row[begin:end], None] + np.arange(count)
            index = np.ascontiguousarray(matrix.index[entries].T, dtype=np.int32)
            value = np.ascontiguousarray(matrix.value[entries].T)
            self._parts.append((slice(begin, end), index, value))
        self._n_few = int(np.searchsorted(counts, FEW_ENTRIES + 1))
        many = self.row[self._n_few :]
        self._entries = matrix.entries(many).astype(np.int32)
        self._index = matrix.index[self._entries].astype(np.int32)
        self._of_entry = np.repeat(np.arange(len(many)), counts[self._n_few :]).astype(np.int32)

    def __len__(self) -> int:
        return len(self.row)

    def refresh(self) -> None:
        """Takes the matrix's values anew."""
        for part, index, value in self._parts:
            entries = self._matrix.start[self.row[part], None] + np.arange(len(index))
            value[:] = self._matrix.value[entries].T

    def activity(self, y: FloatArray) -> FloatArray:
        """Activity, (k, n), at k points, (k, n_col)."""
        found = np.empty((len(y), len(self.row)))
        for part, index, value in self._parts:
            total = found[:, part]
            total[:] = 0.0
            for i, v in zip(index, value, strict=True):
                total += v * y.take(i, axis=1)
        n_many = len(self.row) - self._n_few
        if n_many:
            values = self._matrix.value[self._entries] * y.take(self._index, axis=1)
            found[:, self._n_few :] = sums_by(self._of_entry, values, n_many)
        return found


def rows_of(array: NDArray[_Any], places: Sequence[int]) -> NDArray[_Any]:
    """Rows of some points, (k, n), or the one row (1, n) that serves all."""
    return array[places] if len(array) > 1 else array


def _behind(old: NDArray[np.int32], new: NDArray[np.integer]) -> NDArray[np.int32]:
    return np.concatenate([old, new.astype(np.int32)])
