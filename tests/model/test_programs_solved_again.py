"""Linear programs of the model, solved again by SciPy's interior point instead of the dual simplex.

Members of both kinds of family, at random states and purchases. The two solutions meet in
objective; the simplex point satisfies every row and bound; and each point is complementary to the
*other* solver's multipliers, which only optimal pairs are.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import linprog
from scipy.sparse import csr_array

from tests.builders import random_study
from xlplan.model.linear_program import LinearProgram
from xlplan.model.study_graph import StudyGraph, build_study_graph
from xlplan.model.value_graph import Family
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.highs import KeptModel

FEASIBLE = 1e-6
"""Ten times the solver's own tolerance on single rows; numbers are kW, kWh and p.u."""

RELATIVE = 1e-7
"""Of the larger of 1 and the objective: both solvers stop at 1e-7 or better."""


def graph_of(seed: int) -> StudyGraph:
    study = random_study(seed)
    feeder = build_feeder(study)
    return build_study_graph(study, feeder, build_window_models(study, feeder))


def member_program(
    graph: StudyGraph, i_family: int, i_member: int, rng: np.random.Generator
) -> LinearProgram:
    """One member without its children, at a random state and purchases inside their domains."""
    family: Family = graph.graph.families[i_family]
    member = family.member(i_member)
    low, high = graph.graph.capacity_lower, graph.graph.capacity_upper
    capacity = low + rng.uniform(0.2, 1.0, len(low)) * (high - low)
    state_low = graph.graph.state_lower_matrix[i_family] @ capacity
    state_high = graph.graph.state_upper_matrix[i_family] @ capacity
    state = state_low + rng.uniform(0.0, 1.0, len(state_low)) * (state_high - state_low)
    lower, upper = member.col_lower.copy(), member.col_upper.copy()
    held, given = family.capacity_columns >= 0, member.in_columns >= 0
    columns = family.capacity_columns[held]
    lower[columns] = upper[columns] = capacity[held]
    columns = member.in_columns[given]
    lower[columns] = upper[columns] = state[given]
    value = family.program.value.copy()
    value[family.patch] = member.patch_value
    return replace(
        family.program,
        cost=member.cost,
        col_lower=lower,
        col_upper=upper,
        row_lower=member.row_lower,
        row_upper=member.row_upper,
        value=value,
    )


def by_simplex(program: LinearProgram) -> tuple[float, np.ndarray, np.ndarray]:
    """Objective, point and row multipliers, as the product solves its subproblems."""
    result = KeptModel(
        "again",
        program.cost,
        program.col_lower,
        program.col_upper,
        program.row_lower,
        program.row_upper,
        program.start,
        program.index,
        program.value,
    ).run()
    return result.objective, result.col_value, result.row_dual


def by_interior_point(program: LinearProgram) -> tuple[float, np.ndarray, np.ndarray]:
    """The same by SciPy; rows split into equations and one-sided inequalities."""
    matrix = csr_array(
        (program.value, program.index, program.start), shape=(program.n_row, program.n_col)
    )
    low, high = program.row_lower, program.row_upper
    equal = np.flatnonzero(low == high)
    above = np.flatnonzero((low != high) & np.isfinite(high))
    below = np.flatnonzero((low != high) & np.isfinite(low))
    signed = csr_array(
        np.vstack([matrix[above].toarray(), -matrix[below].toarray()])
        if len(above) + len(below)
        else np.zeros((0, program.n_col))
    )
    result = linprog(
        program.cost,
        A_ub=signed,
        b_ub=np.concatenate([high[above], -low[below]]),
        A_eq=matrix[equal],
        b_eq=low[equal],
        bounds=np.column_stack([program.col_lower, program.col_upper]),
        method="highs-ipm",
    )
    assert result.status == 0, result.message
    dual = np.zeros(program.n_row)
    dual[equal] = result.eqlin.marginals
    dual[above] += result.ineqlin.marginals[: len(above)]
    dual[below] -= result.ineqlin.marginals[len(above) :]
    return float(result.fun), np.asarray(result.x), dual


def slackness(program: LinearProgram, point: np.ndarray, dual: np.ndarray) -> float:
    """Sum of |multiplier x distance to the side it belongs to|, over rows and columns."""
    matrix = csr_array(
        (program.value, program.index, program.start), shape=(program.n_row, program.n_col)
    )
    activity, reduced = matrix @ point, program.cost - matrix.T @ dual

    def part(values, multipliers, low, high):
        side = np.where(multipliers > 0.0, low, high)
        active = np.abs(multipliers) > 1e-9
        return float(np.abs(multipliers[active] * (values - side)[active]).sum())

    rows = part(activity, dual, program.row_lower, program.row_upper)
    return rows + part(point, reduced, program.col_lower, program.col_upper)


@pytest.mark.parametrize("seed", [2, 6, 11, 17, 23, 29])
def test_simplex_and_interior_point_meet(seed):
    graph = graph_of(seed)
    rng = np.random.default_rng(seed)
    families = graph.graph.families
    # Every kind of family: the plan of each window, and some events.
    chosen = rng.permutation(len(families))[:5]
    plans = [i for i, family in enumerate(families) if "plan" in type(family).__name__.lower()]
    n_moved = 0
    for i_family in dict.fromkeys([plans[0], *(int(i) for i in chosen)]):
        i_member = int(rng.integers(families[i_family].n_member))
        program = member_program(graph, i_family, i_member, rng)
        one, point, dual = by_simplex(program)
        two, other_point, other_dual = by_interior_point(program)
        size = max(1.0, abs(one))
        assert one == pytest.approx(two, abs=RELATIVE * size)
        matrix = csr_array(
            (program.value, program.index, program.start), shape=(program.n_row, program.n_col)
        )
        activity = matrix @ point
        assert (activity >= program.row_lower - FEASIBLE).all()
        assert (activity <= program.row_upper + FEASIBLE).all()
        assert (point >= program.col_lower - FEASIBLE).all()
        assert (point <= program.col_upper + FEASIBLE).all()
        assert one == pytest.approx(float(program.cost @ point), abs=1e-9 * size)
        # Each point with the other solver's multipliers, and with its own.
        for x, y in ((point, other_dual), (other_point, dual), (point, dual)):
            assert slackness(program, x, y) <= 1e-5 * size
        n_moved += int(np.abs(dual).max() > 1e-6)
    assert n_moved > 0


def test_a_wrong_multiplier_or_point_would_be_seen():
    graph = graph_of(6)
    rng = np.random.default_rng(1)
    program = member_program(graph, 0, 0, rng)
    value, point, dual = by_simplex(program)
    wrong = dual.copy()
    wrong[int(np.abs(dual).argmax())] *= 1.1
    assert slackness(program, point, wrong) > 1e-4 * max(1.0, abs(value))
