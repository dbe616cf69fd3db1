"""A sparse matrix by rows in NumPy: the products that cuts and checks need."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xlplan.model.linear_program import LinearProgram

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]


class RowMatrix:
    """Rows of a program. The pattern is shared; ``value`` is a copy where it may be changed.

    >>> program = LinearProgram(*[np.zeros(2)] * 3, *[np.zeros(1)] * 2, np.array([0, 2]),
    ...     np.array([0, 1]), np.array([3.0, 4.0]), np.zeros(2, bool), np.zeros(1, bool))
    >>> RowMatrix(program).transposed_times(np.array([0]), np.array([10.0])).tolist()
    [30.0, 40.0]
    """

    def __init__(self, program: LinearProgram, is_changed: bool = False) -> None:
        self.n_row, self.n_col = program.n_row, program.n_col
        self.start, self.index = program.start, program.index
        self.value = program.value.copy() if is_changed else program.value

    def entries(self, rows: IntArray) -> IntArray:
        """Positions of the entries of some rows, row after row."""
        counts = self.start[rows + 1] - self.start[rows]
        places = np.repeat(self.start[rows] - np.cumsum(counts) + counts, counts)
        return places + np.arange(len(places))

    def transposed_times(self, rows: IntArray, pi: FloatArray) -> FloatArray:
        """``A[rows]' pi``, (n_col,), for multipliers of some rows, (len(rows),)."""
        entries = self.entries(rows)
        counts = self.start[rows + 1] - self.start[rows]
        weights = self.value[entries] * np.repeat(pi, counts)
        return sums(self.index[entries], weights, self.n_col)

    def take(self, rows: IntArray) -> tuple[IntArray, IntArray, FloatArray]:
        """Some rows as start, index, value."""
        entries = self.entries(rows)
        counts = self.start[rows + 1] - self.start[rows]
        start = np.concatenate([[0], np.cumsum(counts)])
        return start, self.index[entries], self.value[entries]


def sums(place: IntArray, term: NDArray[np.generic], n: int) -> FloatArray:
    """Sums of the terms of each place, (n,)."""
    return np.bincount(place, term, n).astype(float, copy=False)  # integers where there are none


def sums_at(
    row: IntArray, column: IntArray, term: NDArray[np.generic], shape: tuple[int, ...]
) -> FloatArray:
    """Array of a shape with the sums of terms (n, m) at row (n,) and column (m,) or (n, m)."""
    flat = row[:, None] * shape[1] + column
    return sums(flat.ravel(), term.ravel(), shape[0] * shape[1]).reshape(shape)


def sums_by(place: IntArray, term: NDArray[np.generic], n: int) -> FloatArray:
    """Sums of every row of ``term`` (k, m) by ``place`` (m,): (k, n)."""
    if len(term) == 1:
        return sums(place, term[0], n)[None, :]
    return sums_at(np.arange(len(term)), place, term, (len(term), n))


def way_back(at: IntArray, n: int) -> IntArray:
    """Where each of n numbers stands in ``at``, -1 where it does not.

    >>> way_back(np.array([3, 1]), 4).tolist()
    [-1, 1, -1, 0]
    """
    place = np.full(n, -1, dtype=np.int64)
    place[at] = np.arange(len(at))
    return place
