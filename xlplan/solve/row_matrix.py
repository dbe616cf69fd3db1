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
        return np.bincount(self.index[entries], weights, self.n_col)

    def take(self, rows: IntArray) -> tuple[IntArray, IntArray, FloatArray]:
        """Some rows as start, index, value."""
        entries = self.entries(rows)
        counts = self.start[rows + 1] - self.start[rows]
        start = np.concatenate([[0], np.cumsum(counts)])
        return start, self.index[entries], self.value[entries]


def sums_by(place: IntArray, weights: NDArray[np.generic], n: int) -> FloatArray:
    """Sums of every row of ``weights`` (k, m) by ``place`` (m,): (k, n)."""
    k = len(weights)
    if k == 1:
        return np.bincount(place, weights[0], n)[None, :]
    flat = place + n * np.arange(k)[:, None]
    return np.bincount(flat.ravel(), weights.ravel(), k * n).reshape(k, n)
