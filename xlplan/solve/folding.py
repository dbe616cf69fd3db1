"""Works without the columns that equality rows determine (``LinearProgram.folds``).

Let ``E`` be the folded columns, ``D`` the rows that determine them, ``K`` the other columns:

    A_DE y_E + A_DK y_K = b_D      hence      y_E = W b_D - G y_K,   W = A_DE^-1,   G = W A_DK

``W b_D`` is called the *shift*. In a row the folded columns are replaced by that, and its sides
move by ``a_E W b_D``. With ``c = A_E' pi`` for the multipliers that a solver finds for such rows,
these multipliers belong to the rows themselves and ``-W' c`` to the rows ``D``. So a cut made from
them is one of the unfolded program. Bounds of folded columns become such rows when they are needed.

``W`` consists of small blocks (one network in one period). Equal ones are kept once, for all
programs of the process: most damage leaves a network as it is in most periods.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from weakref import WeakValueDictionary

import numpy as np
from numpy.typing import NDArray

from xlplan.model.linear_program import Folds, LinearProgram
from xlplan.solve.row_matrix import RowMatrix, way_back

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]
BoolArray = NDArray[np.bool_]

NOTHING = 1e-13
"""Entries below this share of the terms that they are sums of are rounding."""


@dataclass(frozen=True)
class FoldedRows:
    """Some rows in kept columns.

    start (n + 1,), index, value : the rows
    term_row, term_fold, term_weight : entries in folded columns that were replaced: position among
    the rows and among the folds, and the coefficient
    """

    start: IntArray
    index: IntArray
    value: FloatArray
    term_row: IntArray
    term_fold: IntArray
    term_weight: FloatArray


@dataclass(frozen=True)
class _Inverse:
    """``W`` (n, n) and ``G`` (n, n_outside) of a block of n folds."""

    own: FloatArray
    outside: FloatArray


_KNOWN: WeakValueDictionary[bytes, _Inverse] = WeakValueDictionary()
"""Inverses in use, by the entries of their blocks."""


@dataclass(frozen=True)
class _Alike:
    """Blocks with the same matrix.

    folds (n_block, n) positions among the folds; outside (n_block, n_outside) program columns
    """

    inverse: _Inverse
    folds: IntArray
    outside: IntArray


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
        self.row, self.column = program.folds.row, program.folds.column
        self._n_col, self._matrix = program.n_col, matrix
        is_kept = np.ones(program.n_col, dtype=bool)
        is_kept[self.column] = False
        if apart is not None:
            is_kept[apart] = False
        self.kept = np.flatnonzero(is_kept)
        self._fold_of_column = way_back(self.column, program.n_col)
        self._alike = _alike_blocks(program.folds, matrix, self._fold_of_column)
        # Of each fold: which of the alike, which block of these, and where in the block.
        self._kind, self._block, self._place = np.zeros((3, len(self.row)), dtype=np.int64)
        for i, alike in enumerate(self._alike):
            self._kind[alike.folds] = i
            self._block[alike.folds] = np.arange(len(alike.folds))[:, None]
            self._place[alike.folds] = np.arange(alike.folds.shape[1])

    def __len__(self) -> int:
        return len(self.row)

    def shift(self, side: FloatArray) -> FloatArray:
        """``W b_D`` (k, n_fold) of sides ``b_D`` of that shape."""
        found = np.empty_like(side)
        for alike in self._alike:
            found[:, alike.folds] = _times(side[:, alike.folds], alike.inverse.own.T)
        return found

    def touched(self, is_free: BoolArray) -> BoolArray:
        """Which folded columns hang on one of the free rows ``D``; both (k, n_fold)."""
        found = is_free.copy()
        for alike in self._alike:
            free = is_free[:, alike.folds]
            # Mostly a whole network is free or none of it.
            at = np.nonzero(free.any(axis=2) & ~free.all(axis=2))
            if len(at[0]):
                hit = free[at].astype(float) @ np.abs(alike.inverse.own.T)
                found[at[0][:, None], alike.folds[at[1]]] = hit > 0.0
        return found

    def complete(self, y: FloatArray, shift: FloatArray) -> None:
        """Fills the folded columns of k points.

        Parameters
        ----------
        y : array, shape (k, n_col), kept columns given, folded ones overwritten
        shift : array, shape (k, n_fold) or (1, n_fold)
        """
        for alike in self._alike:
            moved = _times(y[:, alike.outside], alike.inverse.outside.T)
            y[:, self.column[alike.folds]] = shift[:, alike.folds] - moved

    def multipliers(self, weight: FloatArray) -> FloatArray:
        """``-W' c`` (k, n_fold), for the rows ``D``, of ``c`` of that shape."""
        found = np.zeros_like(weight)
        for alike in self._alike:
            own = weight[:, alike.folds]
            at = np.nonzero(own.any(axis=2))
            found[at[0][:, None], alike.folds[at[1]]] = -own[at] @ alike.inverse.own
        return found

    def expand_rows(self, rows: IntArray) -> FoldedRows:
        """Program rows without their folded columns."""
        start, index, value = self._matrix.take(rows)
        row = np.repeat(np.arange(len(rows)), np.diff(start))
        fold = self._fold_of_column[index]
        here = fold >= 0
        if not here.any():
            none = np.zeros(0, dtype=np.int64)
            return FoldedRows(start, index, value, none, none, np.zeros(0))
        terms = (row[here], fold[here], value[here])
        return self._expand(len(rows), (row[~here], index[~here], value[~here]), terms)

    def expand_columns(self, folds: IntArray) -> FoldedRows:
        """Folded columns, by their position among the folds, as rows of the kept ones."""
        none = np.zeros(0, dtype=np.int64)
        terms = (np.arange(len(folds)), np.asarray(folds), np.ones(len(folds)))
        return self._expand(len(folds), (none, none, np.zeros(0)), terms)

    def _expand(
        self,
        n: int,
        kept: tuple[IntArray, IntArray, FloatArray],
        terms: tuple[IntArray, IntArray, FloatArray],
    ) -> FoldedRows:
        """n rows from entries (row, column, value) and terms (row, fold, coefficient)."""
        term_row, term_fold, term_weight = terms
        rows, columns, values = [kept[0]], [kept[1]], [kept[2]]
        for i in np.unique(self._kind[term_fold]).tolist():
            alike, at = self._alike[i], np.flatnonzero(self._kind[term_fold] == i)
            fold = term_fold[at]
            number = -term_weight[at, None] * alike.inverse.outside[self._place[fold]]
            part, place = np.nonzero(number)
            rows.append(term_row[at[part]])
            columns.append(alike.outside[self._block[fold[part]], place])
            values.append(number[part, place])
        row, value = np.concatenate(rows), np.concatenate(values)
        key, inverse = np.unique(row * self._n_col + np.concatenate(columns), return_inverse=True)
        size = np.zeros(n)
        np.maximum.at(size, row, np.abs(value))
        row, index = np.divmod(key, self._n_col)
        total = np.bincount(inverse, value, len(key))
        stays = np.abs(total) > NOTHING * size[row]
        start = np.concatenate([[0], np.cumsum(np.bincount(row[stays], minlength=n))])
        return FoldedRows(start, index[stays], total[stays], *terms)


def _alike_blocks(folds: Folds, matrix: RowMatrix, fold_of_column: IntArray) -> list[_Alike]:
    """Folds that hang together, those with the same matrix in one record."""
    if not len(folds):
        return []
    first, index, value = matrix.take(folds.row)
    place = np.repeat(np.arange(len(folds.row)), np.diff(first))
    other = fold_of_column[index]
    label = _connected(folds, place[other >= 0], other[other >= 0])
    is_late = np.repeat(folds.stage, np.diff(folds.start)) > 0
    # Early ones first, so that W is triangular in blocks.
    order = np.lexsort((is_late, label))
    ends = np.searchsorted(label[order], np.arange(label.max(initial=-1) + 2))
    local = np.zeros(len(label), dtype=np.int64)
    local[order] = np.arange(len(order)) - ends[label[order]]
    by_block = np.argsort(label[place], kind="stable")
    bounds = np.searchsorted(label[place][by_block], np.arange(len(ends)))
    found: dict[int, tuple[_Inverse, list[IntArray], list[IntArray]]] = {}
    for i, (begin, end) in enumerate(zip(bounds[:-1].tolist(), bounds[1:].tolist(), strict=True)):
        at, own = by_block[begin:end], order[ends[i] : ends[i + 1]]
        inside = other[at] >= 0
        outside, column = np.unique(index[at[~inside]], return_inverse=True)
        inverse = _inverse_of(
            int((~is_late[own]).sum()),
            (len(own), len(outside)),
            (local[place[at[inside]]], local[other[at[inside]]], value[at[inside]]),
            (local[place[at[~inside]]], column.ravel(), value[at[~inside]]),
        )
        _, all_own, all_outside = found.setdefault(id(inverse), (inverse, [], []))
        all_own.append(own)
        all_outside.append(outside)
    return [_Alike(one, np.array(own), np.array(outside)) for one, own, outside in found.values()]


def _connected(folds: Folds, place: IntArray, other: IntArray) -> IntArray:
    """Number of the block that each fold belongs to, (n_fold,): blocks whose rows use each other.

    place, other : folds whose row uses the column of the other
    """
    block = np.repeat(np.arange(len(folds.start) - 1), np.diff(folds.start))
    parent = list(range(len(folds.start) - 1))

    def root(i: int) -> int:
        while parent[i] != i:
            parent[i] = parent[parent[i]]
            i = parent[i]
        return i

    pairs = np.unique(np.stack([block[place], block[other]], axis=1), axis=0)
    for a, b in pairs.tolist():
        low, high = sorted((root(a), root(b)))
        parent[high] = low
    roots = np.array([root(i) for i in range(len(parent))], dtype=np.int64)
    label: IntArray = np.unique(roots[block], return_inverse=True)[1].ravel()
    return label


def _inverse_of(
    n_early: int,
    shape: tuple[int, int],
    own: tuple[IntArray, IntArray, FloatArray],
    outside: tuple[IntArray, IntArray, FloatArray],
) -> _Inverse:
    """``W`` and ``G`` from entries (row, column, value) of ``A_DE`` and ``A_DK``."""
    head = np.array([n_early, *shape, len(own[0])])
    parts: Sequence[NDArray[np.generic]] = (head, *own, *outside)
    key = b"".join(part.tobytes() for part in parts)
    known = _KNOWN.get(key)
    if known is not None:
        return known
    n, n_outside = shape
    matrix, rest = np.zeros((n, n)), np.zeros((n, n_outside))
    matrix[own[0], own[1]] = own[2]
    rest[outside[0], outside[1]] = outside[2]
    inverse = np.zeros((n, n))
    early, late = slice(0, n_early), slice(n_early, n)
    inverse[early, early] = _cleaned_inverse(matrix[early, early])
    inverse[late, late] = _cleaned_inverse(matrix[late, late])
    inverse[late, early] = -_product(
        inverse[late, late], _product(matrix[late, early], inverse[early, early])
    )
    _KNOWN[key] = found = _Inverse(inverse, _product(inverse, rest))
    return found


def _times(blocks: FloatArray, matrix: FloatArray) -> FloatArray:
    """Blocks (k, n_block, n) times a matrix (n, m), as one product."""
    k, n_block, n = blocks.shape
    return (blocks.reshape(k * n_block, n) @ matrix).reshape(k, n_block, -1)


def _cleaned_inverse(matrix: FloatArray) -> FloatArray:
    inverse: FloatArray = np.asarray(np.linalg.inv(matrix), dtype=np.float64)
    inverse[np.abs(inverse) <= NOTHING * np.abs(inverse).max(initial=0.0)] = 0.0
    return inverse


def _product(left: FloatArray, right: FloatArray) -> FloatArray:
    """The product; what cancelled in it is 0."""
    product: FloatArray = left @ right
    product[np.abs(product) <= NOTHING * (np.abs(left) @ np.abs(right))] = 0.0
    return product
