"""The wrapper of HiGHS: statuses, limits, changes in bulk, silence."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest

from xlplan.model.linear_program import ProgramBuilder
from xlplan.solve.highs import KeptModel, SolverFailureError, solve_program
from xlplan.solve.result import MissingValueError, Termination


def _program(is_integer=False):
    """max x + y, 2 x + y <= 7.5, 0 <= x <= 10, 0 <= y <= 3: at y = 3, x = 2.25 (2 if whole)."""
    builder = ProgramBuilder()
    x = builder.add_column("x", 0.0, 10.0, -1.0, is_integer)
    y = builder.add_column("y", 0.0, 3.0, -1.0)
    builder.add_row("r", [(x, 2.0), (y, 1.0)], upper=7.5)
    return builder.build(offset=1.0)


def _kept(program):
    return KeptModel(
        "test", program.cost, program.col_lower, program.col_upper, program.row_lower,
        program.row_upper, program.start, program.index, program.value,
    )  # fmt: skip


def test_lp():
    result = solve_program(_program())
    assert result.termination is Termination.OPTIMAL
    assert result.objective == pytest.approx(-4.25)  # 1 - 2.25 - 3
    assert result.row_dual[0] == pytest.approx(-0.5)  # one more unit of the row gives half an x
    assert result.gap_frac == 0.0


def test_milp_has_no_duals_and_a_proven_bound():
    result = solve_program(_program(is_integer=True))
    assert result.objective == pytest.approx(-4.0)
    assert result.bound == pytest.approx(-4.0)
    assert not result.has_dual
    with pytest.raises(MissingValueError):
        _ = result.row_dual


def test_a_start_point_is_not_taken_for_the_optimum():
    """min 0.8 x + phi, phi >= 9 - 2 x: half of 9 for x, 3.6. At x = 0, phi = 9 it costs 9."""
    builder = ProgramBuilder()
    x = builder.add_column("x", 0.0, 10.0, 0.8)
    size = builder.add_column("size", 0.0, 10.0, 1.5)
    site = builder.add_column("site", 0.0, 1.0, 4.0, True)
    phi = builder.add_column("phi", 0.0, np.inf, 1.0)
    builder.add_row("site", [(size, 1.0), (site, -10.0)], upper=0.0)
    builder.add_row("cut", [(x, 2.0), (size, 2.1), (phi, 1.0)], lower=9.0)
    result = solve_program(builder.build(), start_point=np.array([0.0, 0.0, 0.0, 9.0]))
    assert result.objective == pytest.approx(3.6)
    assert result.bound == pytest.approx(3.6)
    assert result.col_value[x] == pytest.approx(4.5)


def test_infeasible_program_has_no_values():
    program = replace(_program(), row_lower=np.array([100.0]), row_upper=np.array([200.0]))
    result = solve_program(program)
    assert result.termination is Termination.INFEASIBLE
    with pytest.raises(MissingValueError):
        _ = result.objective


def test_kept_model_follows_changes():
    model = _kept(_program())
    assert model.run().objective == pytest.approx(-5.25)
    model.set_row_bounds(np.array([0]), np.array([-np.inf]), np.array([3.0]))
    assert model.run().objective == pytest.approx(-3.0)  # y = 3
    model.set_costs(np.array([1]), np.array([0.0]))
    assert model.run().objective == pytest.approx(-1.5)  # x = 1.5
    model.set_col_bounds(np.array([0]), np.array([0.0]), np.array([1.0]))
    assert model.run().objective == pytest.approx(-1.0)
    model.add_rows(np.array([-np.inf]), np.array([0.5]), np.array([0, 1]), np.array([0]),
                   np.array([1.0]))  # fmt: skip
    assert model.run().objective == pytest.approx(-0.5)
    model.set_coefficients([1], [0], [2.0])
    assert model.run().objective == pytest.approx(-0.25)
    assert model.row_dual()[1] == pytest.approx(-0.5)  # one more unit of the row is half an x
    assert model.counts["solve"] == 6


def test_failure_tries_everything_then_saves_the_model():
    model = _kept(_program())
    model.set_row_bounds(np.array([0]), np.array([100.0]), np.array([200.0]))
    with pytest.raises(SolverFailureError) as caught:
        model.run()
    assert caught.value.path is not None
    assert caught.value.path.exists()
    caught.value.path.unlink()
    assert model.counts["fallback interior point"] == 1
    # The object is usable afterwards.
    model.set_row_bounds(np.array([0]), np.array([-np.inf]), np.array([7.5]))
    assert model.run().objective == pytest.approx(-5.25)


def test_nothing_is_printed():
    code = (
        "import numpy as np\n"
        "from xlplan.solve.highs import KeptModel\n"
        "m = KeptModel('a', np.ones(1), np.zeros(1), np.ones(1), np.zeros(0), np.zeros(0),"
        " np.zeros(1, int), np.zeros(0, int), np.zeros(0))\n"
        "m.run()\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout == ""
    assert done.stderr == ""
