"""A linear or mixed-integer program as plain arrays, and a builder that fills it row by row.

    minimise  cost @ y + offset   subject to  row_lower <= A y <= row_upper,
                                               col_lower <=   y <= col_upper

Enters: rows and columns with names. Leaves: ``LinearProgram``. ``is_lazy`` marks rows that a
solver may leave out until they are violated; they belong to the program all the same. *Folds* name
columns that equality rows determine (a flow by the balance of the bus behind it): a solver may
work without them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

INF = float("inf")


@dataclass(frozen=True)
class Folds:
    """Columns that may be worked out from the others, block by block.

    ``row[i]`` determines ``column[i]``: within the block ``start[b]:start[b + 1]`` the square
    matrix of these rows and columns has an inverse, whatever the member. Such a row is an equality
    wherever its column counts, and such a column has no cost. Rows of a block at ``stage`` 0 hold
    no column of another block, those at stage 1 may hold columns of blocks at stage 0.
    """

    row: IntArray = field(default_factory=lambda: np.zeros(0, dtype=np.int64))
    column: IntArray = field(default_factory=lambda: np.zeros(0, dtype=np.int64))
    start: IntArray = field(default_factory=lambda: np.zeros(1, dtype=np.int64))
    stage: IntArray = field(default_factory=lambda: np.zeros(0, dtype=np.int64))

    def __len__(self) -> int:
        return len(self.row)


@dataclass(frozen=True)
class LinearProgram:
    """Rows compressed (``start``, ``index``, ``value``), all bounds as arrays."""

    cost: FloatArray
    col_lower: FloatArray
    col_upper: FloatArray
    row_lower: FloatArray
    row_upper: FloatArray
    start: IntArray
    index: IntArray
    value: FloatArray
    is_integer: BoolArray
    is_lazy: BoolArray
    offset: float = 0.0
    col_names: tuple[str, ...] = ()
    row_names: tuple[str, ...] = ()
    folds: Folds = field(default_factory=Folds)

    @property
    def n_col(self) -> int:
        """Number of columns."""
        return len(self.cost)

    @property
    def n_row(self) -> int:
        """Number of rows, lazy ones included."""
        return len(self.row_lower)

    def activity(self, y: FloatArray) -> FloatArray:
        """``A y``, shape (n_row,)."""
        products = self.value * y[self.index]
        total = np.concatenate([[0.0], np.cumsum(products)])
        by_row: FloatArray = total[self.start[1:]] - total[self.start[:-1]]
        return by_row

    def check(self) -> None:
        """Invariants, for tests; raises AssertionError."""
        assert len(self.start) == self.n_row + 1
        assert self.start[-1] == len(self.index)
        assert len(self.index) == len(self.value)
        assert self.n_col == len(self.col_lower) == len(self.col_upper) == len(self.is_integer)
        assert self.n_row == len(self.row_upper) == len(self.is_lazy)
        assert not len(self.index) or (self.index.min() >= 0 and self.index.max() < self.n_col)
        assert np.isfinite(self.value).all()
        assert np.isfinite(self.cost).all()
        assert (self.col_lower <= self.col_upper).all()
        assert (self.row_lower <= self.row_upper).all()
        folds = self.folds
        assert len(folds.row) == len(folds.column) == folds.start[-1]
        assert len(np.unique(folds.row)) == len(np.unique(folds.column)) == len(folds)
        assert not self.cost[folds.column].any()
        assert not self.is_lazy[folds.row].any()


@dataclass
class ProgramBuilder:
    """Collects columns and rows; ``build`` freezes them."""

    cost: list[float] = field(default_factory=list)
    col_lower: list[float] = field(default_factory=list)
    col_upper: list[float] = field(default_factory=list)
    is_integer: list[bool] = field(default_factory=list)
    col_names: list[str] = field(default_factory=list)
    row_lower: list[float] = field(default_factory=list)
    row_upper: list[float] = field(default_factory=list)
    is_lazy: list[bool] = field(default_factory=list)
    row_names: list[str] = field(default_factory=list)
    start: list[int] = field(default_factory=lambda: [0])
    index: list[int] = field(default_factory=list)
    value: list[float] = field(default_factory=list)
    folds: list[tuple[int, list[int], list[int]]] = field(default_factory=list)

    def add_column(
        self,
        name: str,
        lower: float = 0.0,
        upper: float = INF,
        cost: float = 0.0,
        is_integer: bool = False,
    ) -> int:
        """Adds one column; its position."""
        self.col_names.append(name)
        self.col_lower.append(float(lower))
        self.col_upper.append(float(upper))
        self.cost.append(float(cost))
        self.is_integer.append(is_integer)
        return len(self.cost) - 1

    def add_row(
        self,
        name: str,
        terms: Sequence[tuple[int, float]],
        lower: float = -INF,
        upper: float = INF,
        is_lazy: bool = False,
    ) -> int:
        """Adds ``lower <= sum(coefficient * column) <= upper``; its position. Terms may repeat."""
        merged: dict[int, float] = {}
        for column, coefficient in terms:
            merged[column] = merged.get(column, 0.0) + float(coefficient)
        for column, coefficient in merged.items():
            if coefficient != 0.0:
                self.index.append(column)
                self.value.append(coefficient)
        self.start.append(len(self.index))
        self.row_names.append(name)
        self.row_lower.append(float(lower))
        self.row_upper.append(float(upper))
        self.is_lazy.append(is_lazy)
        return len(self.row_lower) - 1

    def add_lazy_block(
        self, names: Sequence[str], columns: IntArray, values: FloatArray, upper: FloatArray
    ) -> None:
        """Adds lazy rows ``values @ columns <= upper``, no column twice in a row.

        Parameters
        ----------
        names : n names
        columns : array, shape (n, m), positions
        values : array, shape (n, m), none of them 0
        upper : array, shape (n,)
        """
        n, m = values.shape
        self.index += columns.ravel().tolist()
        self.value += values.ravel().tolist()
        begin = self.start[-1]
        self.start += range(begin + m, begin + n * m + 1, m)
        self.row_names += names
        self.row_lower += [-INF] * n
        self.row_upper += upper.tolist()
        self.is_lazy += [True] * n

    def add_fold(self, stage: int, rows: IntArray, columns: IntArray) -> None:
        """Says that some equality rows determine as many columns, see ``Folds``."""
        if len(rows):
            self.folds.append((stage, rows.tolist(), columns.tolist()))

    def build(self, offset: float = 0.0) -> LinearProgram:
        """The program as arrays."""
        counts = [len(rows) for _, rows, _ in self.folds]
        return LinearProgram(
            cost=np.array(self.cost, dtype=float),
            col_lower=np.array(self.col_lower, dtype=float),
            col_upper=np.array(self.col_upper, dtype=float),
            row_lower=np.array(self.row_lower, dtype=float),
            row_upper=np.array(self.row_upper, dtype=float),
            start=np.array(self.start, dtype=np.int64),
            index=np.array(self.index, dtype=np.int64),
            value=np.array(self.value, dtype=float),
            is_integer=np.array(self.is_integer, dtype=bool),
            is_lazy=np.array(self.is_lazy, dtype=bool),
            offset=offset,
            col_names=tuple(self.col_names),
            row_names=tuple(self.row_names),
            folds=Folds(
                row=np.array([r for _, rows, _ in self.folds for r in rows], dtype=np.int64),
                column=np.array([c for *_, columns in self.folds for c in columns], dtype=np.int64),
                start=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
                stage=np.array([stage for stage, *_ in self.folds], dtype=np.int64),
            ),
        )
