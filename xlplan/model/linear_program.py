"""A linear or mixed-integer program as plain arrays, and a builder that fills it row by row.

    minimise  cost @ y + offset   subject to  row_lower <= A y <= row_upper,
                                               col_lower <=   y <= col_upper

Enters: rows and columns with names. Leaves: ``LinearProgram``. ``is_lazy`` marks rows that a
solver may leave out until they are violated; they belong to the program all the same.
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
        return total[self.start[1:]] - total[self.start[:-1]]

    def check(self) -> None:
        """Invariants, for tests; raises AssertionError."""
        assert len(self.start) == self.n_row + 1 and self.start[-1] == len(self.index)
        assert len(self.index) == len(self.value)
        assert self.n_col == len(self.col_lower) == len(self.col_upper) == len(self.is_integer)
        assert self.n_row == len(self.row_upper) == len(self.is_lazy)
        assert not len(self.index) or (self.index.min() >= 0 and self.index.max() < self.n_col)
        assert np.isfinite(self.value).all() and np.isfinite(self.cost).all()
        assert (self.col_lower <= self.col_upper).all() and (self.row_lower <= self.row_upper).all()


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

    def build(self, offset: float = 0.0) -> LinearProgram:
        """The program as arrays."""
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
        )
