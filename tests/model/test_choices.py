"""Budgets and price lists as bounds of columns: the same optimum as a first stage built for them.

A linear program over the purchases alone, with a made-up worth of each, solved by SciPy.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import LinearConstraint, milp

from tests.compare.pack_study import pack_study, solver
from xlplan.model.layout import build_layout
from xlplan.model.purchase import Choices, FirstStage, build_first_stage
from xlplan.study.alternatives import vary, with_budget
from xlplan.study.study import Study
from xlplan.study.windows import build_window_series

PRICES = (("storage cost", 0.5), ("hardening cost", 3.0), ("discount rate", 4.0))


def first_stage(study: Study, choices: Choices | None = None) -> FirstStage:
    series = [build_window_series(study, window) for window in study.windows]
    return build_first_stage(study, build_layout(study, series), choices)


def best(stage: FirstStage, worth: np.ndarray, lower: np.ndarray, upper: np.ndarray) -> float:
    """Yearly cost less worth, at its least."""
    program = stage.program
    matrix = np.zeros((program.n_row, program.n_col))
    for i in range(program.n_row):
        row = slice(program.start[i], program.start[i + 1])
        matrix[i, program.index[row]] = program.value[row]
    cost = program.cost.copy()
    cost[: len(worth)] -= worth
    found = milp(
        cost,
        constraints=LinearConstraint(matrix, program.row_lower, program.row_upper),
        bounds=(lower, upper),
        integrality=program.is_integer,
        options={"mip_rel_gap": 0.0},
    )
    assert found.success
    return float(found.fun)


@pytest.mark.parametrize("budget", [None, 0.0, 4000.0, 9000.0, 1e6])
@pytest.mark.parametrize("position", range(-1, len(PRICES)))
def test_bounds_ask_what_a_program_of_its_own_would(position, budget):
    study = pack_study()
    lists = tuple(vary(study, *price) for price in PRICES)
    open_stage = first_stage(study, Choices(lists))
    asked = with_budget(study if position < 0 else lists[position], budget)
    own = first_stage(asked)
    n = own.program.n_col
    random = np.random.default_rng(5)
    for _ in range(5):
        worth = random.uniform(0.5, 3.0, n) * np.abs(own.program.cost)
        one = best(own, worth, own.program.col_lower, own.program.col_upper)
        other = best(open_stage, worth, *open_stage.bounds(budget, position))
        assert other == pytest.approx(one, rel=1e-9, abs=1e-6)


def test_given_purchases_leave_nothing_to_choose():
    study = pack_study()
    stage = first_stage(study, Choices((vary(study, "storage cost", 2.0),)))
    with solver(study) as one:
        nothing = one.nothing_bought()
    lower, upper = stage.fixed(stage.bounds(None, 0), study, nothing)
    is_open = np.flatnonzero(lower < upper)
    names = {stage.program.col_names[i] for i in is_open}
    assert names == {
        "demand limit kW",
        "capital that may be spent",
        "capital that may be spent at a price list",
        "added by a price list",
    }


def test_a_price_list_of_other_assets_is_refused():
    study = pack_study()
    with pytest.raises(ValueError, match="other assets"):
        first_stage(study, Choices((vary(study, "storage cost", 0.0),)))
