"""Folding compared with dense linear algebra on random equations in two stages."""

from __future__ import annotations

import numpy as np
import pytest

from xlplan.model.linear_program import ProgramBuilder
from xlplan.solve.folding import Folding
from xlplan.solve.row_matrix import RowMatrix

N_KEPT, N_EARLY, N_LATE, N_FREE_ROW = 6, 3, 4, 5


def random_program(rng, n_block):
    """Blocks of early and late folds, the first two with the same numbers; plain rows behind."""
    builder = ProgramBuilder()
    for j in range(n_block * (N_KEPT + N_EARLY + N_LATE)):
        builder.add_column(f"c{j}", -1.0, 1.0)
    same = random_block(np.random.default_rng(int(rng.integers(1 << 30))))
    for b in range(n_block):
        early, late, early_rest, late_rest = same if b < 2 else random_block(rng)
        begin = b * (N_KEPT + N_EARLY + N_LATE)
        kept = begin + np.arange(N_KEPT)
        first = begin + N_KEPT + np.arange(N_EARLY)
        second = begin + N_KEPT + N_EARLY + np.arange(N_LATE)
        for stage, columns, own, others, rest in (
            (0, first, early, kept, early_rest),
            (1, second, late, np.concatenate([kept, first]), late_rest),
        ):
            rows = []
            for i in range(len(columns)):
                terms = list(zip(columns.tolist(), own[i].tolist(), strict=True))
                terms += zip(others.tolist(), rest[i].tolist(), strict=True)
                rows.append(builder.add_row("D", [t for t in terms if t[1]], 0.0, 0.0))
            builder.add_fold(stage, np.array(rows), columns)
    n_col = len(builder.cost)
    for _ in range(N_FREE_ROW):
        used = rng.choice(n_col, 5, replace=False)
        builder.add_row("free", list(zip(used.tolist(), rng.normal(size=5).tolist(), strict=True)))
    return builder.build()


def random_block(rng):
    sparse = [
        rng.normal(size=shape) * (rng.random(shape) < 0.4)
        for shape in ((N_EARLY, N_KEPT), (N_LATE, N_KEPT + N_EARLY))
    ]
    early = rng.normal(size=(N_EARLY, N_EARLY)) + 4.0 * np.eye(N_EARLY)
    late = rng.normal(size=(N_LATE, N_LATE)) + 4.0 * np.eye(N_LATE)
    return early, late, *sparse


def dense(program):
    matrix = np.zeros((program.n_row, program.n_col))
    for row in range(program.n_row):
        part = slice(program.start[row], program.start[row + 1])
        matrix[row, program.index[part]] = program.value[part]
    return matrix


@pytest.fixture(params=range(5))
def case(request):
    rng = np.random.default_rng(request.param)
    program = random_program(rng, n_block=4)
    return rng, program, dense(program), Folding(program, RowMatrix(program))


def test_folded_columns_solve_their_rows(case):
    rng, program, matrix, folding = case
    side = rng.normal(size=(3, len(folding)))
    y = np.zeros((3, program.n_col))
    y[:, folding.kept] = rng.normal(size=(3, len(folding.kept)))
    expected = np.linalg.solve(
        matrix[np.ix_(folding.row, folding.column)],
        (side - y[:, folding.kept] @ matrix[np.ix_(folding.row, folding.kept)].T).T,
    ).T
    folding.complete(y, folding.shift(side))
    assert y[:, folding.column] == pytest.approx(expected, rel=1e-9, abs=1e-9)


def test_rows_without_folded_columns_reach_the_same(case):
    rng, program, matrix, folding = case
    side = rng.normal(size=(1, len(folding)))
    y = np.zeros((1, program.n_col))
    y[:, folding.kept] = rng.normal(size=(1, len(folding.kept)))
    shift = folding.shift(side)
    folding.complete(y, shift)
    rows = program.n_row - 1 - np.arange(N_FREE_ROW)
    folds = rng.choice(len(folding), 6, replace=False)
    for folded, reached in (
        (folding.expand_rows(rows), matrix[rows] @ y[0]),
        (folding.expand_columns(folds), y[0, folding.column[folds]]),
    ):
        assert not set(folded.index.tolist()) & set(folding.column.tolist())
        products = folded.value * y[0, folded.index]
        moved = folded.term_weight * shift[0, folded.term_fold]
        for i, expected in enumerate(reached):
            part = slice(folded.start[i], folded.start[i + 1])
            total = products[part].sum() + moved[folded.term_row == i].sum()
            assert total == pytest.approx(expected, rel=1e-9, abs=1e-9)


def test_multipliers_leave_nothing_in_folded_columns(case):
    rng, program, matrix, folding = case
    rows = program.n_row - 1 - np.arange(N_FREE_ROW)
    pi = rng.normal(size=(2, N_FREE_ROW))
    by_column = pi @ matrix[np.ix_(rows, folding.column)]
    own = folding.multipliers(by_column)
    left = by_column + own @ matrix[np.ix_(folding.row, folding.column)]
    assert left == pytest.approx(np.zeros_like(left), abs=1e-9)


def test_columns_hang_on_the_rows_that_move_them(case):
    rng, _, matrix, folding = case
    inverse = np.linalg.inv(matrix[np.ix_(folding.row, folding.column)])
    is_free = rng.random((4, len(folding))) < 0.1
    expected = is_free | (is_free @ (np.abs(inverse) > 1e-12).astype(float).T > 0.0)
    assert (folding.touched(is_free) == expected).all()


def test_equal_blocks_are_inverted_once(case):
    *_, folding = case
    assert sorted(len(alike.folds) for alike in folding._alike) == [1, 1, 2]
