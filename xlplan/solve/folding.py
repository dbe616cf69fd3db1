"""Works without the columns that equality rows determine (``LinearProgram.folds``).

Let ``E`` be the folded columns, ``D`` the rows that determine them, ``K`` the other columns:

    A_DE y_E + A_DK y_K = b_D      hence      y_E = W (b_D - A_DK y_K),   W = A_DE^-1

A row that holds folded columns is replaced by itself plus multiples ``m`` of rows ``D`` in which
they cancel (``a_E + m A_DE = 0``); its sides move by ``m b_D``, and the multipliers that a solver
finds for it belong to the row itself and, times ``m``, to the rows ``D``. So a cut made from them
is one of the unfolded program. A bound of a folded column becomes such a row when it is needed.

The inverses are those of small blocks (one network in one period), equal blocks are inverted once.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.linear_program import LinearProgram
from xlplan.solve.row_matrix import RowMatrix, sums, sums_by

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

NOTHING = 1e-13
"""Entries of an inverse below this are rounding."""


@dataclass(frozen=True)
class Expanded:
    """Rows in kept columns: each is a program row (or a column) plus multiples of rows ``D``.

    start, index, value : the rows, in program columns
    fold_start, fold, multiple : multiples of the ``fold``-th row ``D``
    """

    start: IntArray
    index: IntArray
    value: FloatArray
    fold_start: IntArray
    fold: IntArray
    multiple: FloatArray


class Folding:
    """The folds of one program.

    Attributes
    ----------
    kept : (n_kept,), program columns that are left, those in ``apart`` excepted
    row, column : (n_fold,), rows ``D`` and columns ``E``, in pairs
    """

    def __init__(
        self, program: LinearProgram, matrix: RowMatrix, apart: IntArray | None = None
    ) -> None:
        folds = program.folds
        self.row, self.column = folds.row, folds.column
        self.n_col = program.n_col
        self._matrix = matrix
        is_folded = np.zeros(program.n_col, dtype=bool)
        is_folded[self.column] = True
        is_kept = ~is_folded
        if apart is not None:
            is_kept[apart] = False
        self.kept = np.flatnonzero(is_kept)
        self._fold_of_column = np.full(program.n_col, -1, dtype=np.int64)
        self._fold_of_column[self.column] = np.arange(len(self.column))
        stage = np.repeat(folds.stage, np.diff(folds.start))
        self._is_late = stage > 0
        self._inverse = _Inverse(folds.start, self._block_matrices(folds.start))
        # Rows D without their own block: what is left when the inverse is applied.
        self._early, self._late = np.flatnonzero(~self._is_late), np.flatnonzero(self._is_late)
        self._rest = [self._rest_of(places) for places in (self._early, self._late)]
        self._parts = [self._inverse.part(self._is_late == is_late) for is_late in (False, True)]

    def __len__(self) -> int:
        return len(self.row)

    def _block_matrices(self, start: IntArray) -> list[FloatArray]:
        """``A_DE`` of every block."""
        block_of = np.repeat(np.arange(len(start) - 1), np.diff(start))
        blocks = [np.zeros((n, n)) for n in np.diff(start)]
        first, index, value = self._matrix.take(self.row)
        place = np.repeat(np.arange(len(self.row)), np.diff(first))
        other = self._fold_of_column[index]
        inside = (other >= 0) & (block_of[place] == block_of[other])
        for p, o, v in zip(place[inside], other[inside], value[inside], strict=True):
            begin = start[block_of[p]]
            blocks[block_of[p]][p - begin, o - begin] = v
        return blocks

    def _rest_of(self, places: IntArray) -> tuple[NDArray[np.int32], NDArray[np.int32], FloatArray]:
        """Entries of some rows ``D`` outside their own block: (position in places, column, value).

        Folded columns of an earlier stage are among them.
        """
        first, index, value = self._matrix.take(self.row[places])
        place = np.repeat(np.arange(len(places)), np.diff(first))
        other = self._fold_of_column[index]
        own = (other >= 0) & (self._is_late[np.maximum(other, 0)] == self._is_late[places][place])
        return place[~own].astype(np.int32), index[~own].astype(np.int32), value[~own]

    def complete(self, y: FloatArray, side: FloatArray) -> None:
        """Fills the folded columns of k points.

        Parameters
        ----------
        y : array, shape (k, n_col), kept columns given, folded ones overwritten
        side : array, shape (k, n_fold) or (1, n_fold), ``b_D``
        """
        k = len(y)
        found = np.zeros((k, len(self)))
        left = np.zeros((k, len(self)))
        for blocks, places, (place, index, value) in zip(
            self._parts, (self._early, self._late), self._rest, strict=True
        ):
            if len(places):
                rest = sums_by(place, value * y.take(index, axis=1), len(places))
                left[:, places] = side.take(places, axis=1) - rest
                for inverse, inside in blocks:
                    found[:, inside] = left[:, inside] @ inverse.T
                y[:, self.column[places]] = found[:, places]

    def expand_rows(self, rows: IntArray) -> Expanded:
        """Program rows without their folded columns."""
        start, index, value = self._matrix.take(rows)
        if not len(self):
            none = np.zeros(0, dtype=np.int64)
            return Expanded(start, index, value, np.zeros(len(start), int), none, np.zeros(0))
        is_folded = np.append(self._fold_of_column[index] >= 0, False)
        has_fold = np.diff(start) > 0  # an empty part of reduceat would be its first entry
        if len(rows):
            has_fold &= np.logical_or.reduceat(is_folded, start[:-1])
        return self._expand(
            [
                (index[a:b], value[a:b], has)
                for a, b, has in zip(
                    start[:-1].tolist(), start[1:].tolist(), has_fold.tolist(), strict=True
                )
            ]
        )

    def expand_columns(self, folds: IntArray) -> Expanded:
        """Folded columns, by their position among the folds, as rows of the kept ones."""
        return self._expand([(self.column[f : f + 1], np.ones(1), True) for f in folds.tolist()])

    def _expand(self, rows: Sequence[tuple[IntArray, FloatArray, bool]]) -> Expanded:
        """Rows as index, value and whether any of the columns is folded."""
        starts, indices, values = [0], [], []
        fold_starts, folds, multiples = [0], [], []
        for index, value, has_fold in rows:
            own, number = [], []
            # Late columns first: cancelling them brings in early ones.
            for is_late in (True, False) if has_fold else ():
                fold = self._fold_of_column[index]
                here = (fold >= 0) & (self._is_late[np.maximum(fold, 0)] == is_late)
                if not here.any():
                    continue
                used, multiple = self._inverse.row_times(fold[here], -value[here])
                own.append(used)
                number.append(multiple)
                first, more, entry = self._matrix.take(self.row[used])
                entry = entry * np.repeat(multiple, np.diff(first))
                index, inverse = np.unique(np.concatenate([index, more]), return_inverse=True)
                value = sums(inverse, np.concatenate([value, entry]), len(index))
                gone = self._fold_of_column[index]
                stays = (gone < 0) | (self._is_late[np.maximum(gone, 0)] != is_late)
                stays &= np.abs(value) > NOTHING * np.abs(entry).max(initial=0.0)
                index, value = index[stays], value[stays]
            indices.append(index)
            values.append(value)
            starts.append(starts[-1] + len(index))
            folds += own
            multiples += number
            fold_starts.append(fold_starts[-1] + sum(len(used) for used in own))
        return Expanded(
            np.array(starts),
            _joined_places(indices),
            _joined_numbers(values),
            np.array(fold_starts),
            _joined_places(folds),
            _joined_numbers(multiples),
        )


def _joined_places(parts: Sequence[IntArray]) -> IntArray:
    return np.concatenate(parts) if parts else np.zeros(0, dtype=np.int64)


def _joined_numbers(parts: Sequence[FloatArray]) -> FloatArray:
    return np.concatenate(parts) if parts else np.zeros(0)


@dataclass(frozen=True)
class _Alike:
    """Blocks with the same matrix: their inverse, and where each of them begins."""

    inverse: FloatArray
    starts: IntArray
    places: IntArray
    """(n_block, n) positions among the folds."""


class _Inverse:
    """Inverses of all blocks; those of equal blocks are kept once."""

    def __init__(self, start: IntArray, blocks: Sequence[FloatArray]) -> None:
        starts: dict[bytes, list[int]] = {}
        matrices: dict[bytes, FloatArray] = {}
        for begin, block in zip(start[:-1].tolist(), blocks, strict=True):
            key = block.tobytes()
            starts.setdefault(key, []).append(begin)
            matrices[key] = block
        self._alike: list[_Alike] = []
        n = int(start[-1])
        self._group = np.zeros(n, dtype=np.int64)
        self._begin = np.zeros(n, dtype=np.int64)
        for i, (key, begins) in enumerate(starts.items()):
            inverse = np.asarray(np.linalg.inv(matrices[key]), dtype=np.float64)
            inverse[np.abs(inverse) <= NOTHING * np.abs(inverse).max(initial=0.0)] = 0.0
            at = np.array(begins, dtype=np.int64)
            places = at[:, None] + np.arange(len(inverse))
            self._alike.append(_Alike(inverse, at, places))
            self._group[places.ravel()] = i
            self._begin[places.ravel()] = np.repeat(at, len(inverse))

    def part(self, is_wanted: NDArray[np.bool_]) -> list[tuple[FloatArray, IntArray]]:
        """Inverses of the wanted blocks, and the positions (n_block, n) of those that have each."""
        parts = []
        for alike in self._alike:
            wanted = is_wanted[alike.starts]
            if wanted.any():
                parts.append((alike.inverse, alike.places[wanted]))
        return parts

    def row_times(self, places: IntArray, left: FloatArray) -> tuple[IntArray, FloatArray]:
        """``left @ W[places]`` as positions and values."""
        columns, values = [], []
        for begin in np.unique(self._begin[places]).tolist():
            here = self._begin[places] == begin
            inverse = self._alike[int(self._group[begin])].inverse
            row = left[here] @ inverse[places[here] - begin]
            used = np.flatnonzero(row)
            columns.append(begin + used)
            values.append(row[used])
        return np.concatenate(columns), np.concatenate(values)
