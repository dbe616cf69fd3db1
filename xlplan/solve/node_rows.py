"""Which rows of a program are in its kept model, with which sides, and which are missed there.

``Now`` holds the numbers of the member that the model stands at, ``ProgramRows`` the rows in the
model, ``LazyRows`` those that are added when a point breaks them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.solve.folding import Expanded, Folding
from xlplan.solve.row_matrix import RowMatrix

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]
BoolArray = NDArray[np.bool_]

FEW_ENTRIES = 8
"""Lazy rows of up to so many entries are evaluated side by side."""


@dataclass
class Now:
    """Numbers of one member, of every column and row, and what folding makes of them.

    fold_side (n_fold,) ``b_D``; is_fold_free (n_fold,) whether the row of a fold is free
    """

    cost: FloatArray
    col_lower: FloatArray
    col_upper: FloatArray
    row_lower: FloatArray
    row_upper: FloatArray
    fold_side: FloatArray
    is_fold_free: BoolArray

    def fold(self, folding: Folding) -> None:
        """Takes the sides of folded rows anew."""
        side = self.row_lower[folding.row]
        self.is_fold_free = ~np.isfinite(side)
        self.fold_side = np.where(self.is_fold_free, 0.0, side)

    def fold_bounds(self, folding: Folding) -> tuple[FloatArray, FloatArray]:
        """Bounds of folded columns, none where the row of the fold is free."""
        return (
            np.where(self.is_fold_free, -np.inf, self.col_lower[folding.column]),
            np.where(self.is_fold_free, np.inf, self.col_upper[folding.column]),
        )


class ProgramRows:
    """Program rows, and bounds of folded columns, that are in the model, and where.

    program (n,) program row or -1; bounded (n,) fold whose column's bound it is, or -1; place (n,)
    row of the model; low, high (n,) sides as they stand there; ``multiple`` times fold row
    ``multiple_fold`` is part of the ``multiple_row``-th of them; of_program, of_bound: the way
    back, -1 where not in the model; varying: those whose sides differ between members.

    Parameters
    ----------
    name : str, for messages
    folding : Folding
    differs_row, differs_column : (n_row,), (n_col,), what differs between members
    """

    def __init__(
        self, name: str, folding: Folding, differs_row: BoolArray, differs_column: BoolArray
    ) -> None:
        self.name, self._folding = name, folding
        self._differs_row, self._differs_column = differs_row, differs_column
        self.program = self.bounded = self.place = np.zeros(0, dtype=np.int32)
        self.multiple_row = self.multiple_fold = np.zeros(0, dtype=np.int32)
        self.multiple = np.zeros(0)
        self.of_program = np.full(len(differs_row), -1, dtype=np.int32)
        self.of_bound = np.full(len(folding), -1, dtype=np.int32)
        self.low = self.high = np.zeros(0)
        self.varying = self._varying_multiples = np.zeros(0, dtype=np.int64)
        self._place_in_varying = np.zeros(0, dtype=np.int64)

    def __len__(self) -> int:
        return len(self.program)

    def append(
        self, rows: IntArray, folds: IntArray, places: IntArray, expanded: Expanded, now: Now
    ) -> tuple[FloatArray, FloatArray]:
        """Puts rows behind; their sides."""
        begin = len(self)
        new = begin + np.arange(len(rows), dtype=np.int32)
        self.of_program[rows[rows >= 0]] = new[rows >= 0]
        self.of_bound[folds[folds >= 0]] = new[folds >= 0]
        self.program = _behind(self.program, rows)
        self.bounded = _behind(self.bounded, folds)
        self.place = _behind(self.place, places)
        n_before = len(self.multiple)
        self.multiple_row = _behind(self.multiple_row, np.repeat(new, np.diff(expanded.fold_start)))
        self.multiple_fold = _behind(self.multiple_fold, expanded.fold)
        self.multiple = np.concatenate([self.multiple, expanded.multiple])
        low, high = self._sides(
            new, np.arange(n_before, len(self.multiple)), self.multiple_row[n_before:] - begin, now
        )
        self.low, self.high = np.concatenate([self.low, low]), np.concatenate([self.high, high])
        self._find_varying()
        return low, high

    def move(self, now: Now) -> IntArray:
        """Brings the sides to another member; positions of those that changed."""
        low, high = self._sides(self.varying, self._varying_multiples, self._place_in_varying, now)
        is_moved = (low != self.low[self.varying]) | (high != self.high[self.varying])
        self.low[self.varying], self.high[self.varying] = low, high
        moved: IntArray = self.varying[is_moved]
        return moved

    def multipliers(self, dual: FloatArray) -> FloatArray:
        """Multipliers of the program's rows, (n_row,), from those of the model's rows."""
        pi = np.zeros(len(self.of_program))
        own = dual[self.place]
        is_row = self.program >= 0
        pi[self.program[is_row]] = own[is_row]
        n_fold = len(self._folding)
        if n_fold:
            weights = self.multiple * own[self.multiple_row]
            pi[self._folding.row] = np.bincount(self.multiple_fold, weights, n_fold)
        return pi

    def _find_varying(self) -> None:
        differs = np.zeros(len(self), dtype=bool)
        is_row = self.program >= 0
        differs[is_row] = self._differs_row[self.program[is_row]]
        column = self._folding.column[self.bounded[~is_row]]
        differs[~is_row] = self._differs_column[column]
        by_fold = self._differs_row[self._folding.row]
        differs[self.multiple_row[by_fold[self.multiple_fold]]] = True
        # Where a fold's row is free in some members, so is the bound of its column.
        differs[~is_row] |= by_fold[self.bounded[~is_row]]
        self.varying = np.flatnonzero(differs)
        self._varying_multiples = np.flatnonzero(differs[self.multiple_row])
        place = np.cumsum(differs) - 1
        self._place_in_varying = place[self.multiple_row[self._varying_multiples]]

    def _sides(
        self, at: IntArray, multiples: IntArray, places: IntArray, now: Now
    ) -> tuple[FloatArray, FloatArray]:
        """Sides of the rows ``at``; ``multiples`` belong to them, at ``places`` in ``at``."""
        program = self.program[at]
        is_bound = program < 0
        low, high = now.row_lower[program], now.row_upper[program]
        if is_bound.any():
            folds = self.bounded[at[is_bound]]
            columns = self._folding.column[folds]
            free = now.is_fold_free[folds]
            low[is_bound] = np.where(free, -np.inf, now.col_lower[columns])
            high[is_bound] = np.where(free, np.inf, now.col_upper[columns])
        if len(multiples):
            fold = self.multiple_fold[multiples]
            shift = np.bincount(places, self.multiple[multiples] * now.fold_side[fold], len(at))
            lost = places[now.is_fold_free[fold]]
            if len(lost) and (np.isfinite(low[lost]) | np.isfinite(high[lost])).any():
                raise ValueError(f"{self.name}: a folded column counts without its row")
            low, high = low + shift, high + shift
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
        self._activity = np.zeros(len(rows))

    def __len__(self) -> int:
        return len(self.row)

    def refresh(self) -> None:
        """Takes the matrix's values anew."""
        for part, index, value in self._parts:
            entries = self._matrix.start[self.row[part], None] + np.arange(len(index))
            value[:] = self._matrix.value[entries].T

    def activity(self, y: FloatArray) -> FloatArray:
        """Activity at a point, (n,); overwritten by the next call."""
        for part, index, value in self._parts:
            total = self._activity[part]
            total[:] = 0.0
            for i, v in zip(index, value, strict=True):
                total += v * y[i]
        n_many = len(self.row) - self._n_few
        if n_many:
            values = self._matrix.value[self._entries] * y[self._index]
            self._activity[self._n_few :] = np.bincount(self._of_entry, values, n_many)
        return self._activity


def _behind(old: NDArray[np.int32], new: NDArray[np.integer]) -> NDArray[np.int32]:
    return np.concatenate([old, new.astype(np.int32)])
