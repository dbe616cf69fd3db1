"""The only module that imports highspy.

``KeptModel`` keeps one HiGHS object with its basis and changes it in bulk; ``solve_program`` solves
one program once. Statuses, limits and the fallbacks after a surprising status are handled here.

HiGHS at a limit gives vectors of zeros and an infeasible program says objective 0: nothing is read
unless the status says that it exists.
"""

from __future__ import annotations

import logging
import tempfile
import time
from collections import Counter
from collections.abc import Sequence
from pathlib import Path

import highspy
import numpy as np
from numpy.typing import NDArray

from xlplan.model.linear_program import LinearProgram
from xlplan.solve.result import SolveResult, Termination

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

_LOG = logging.getLogger(__name__)

FEASIBILITY_TOLERANCE = 1e-7
"""HiGHS's own default, stated because lazy rows are checked with the same."""

FACE_TOLERANCE = 1e-7
"""Reduced cost, relative to the largest cost, that keeps a column at its bound on the face."""

_ROWWISE = int(highspy.MatrixFormat.kRowwise)
_MINIMISE = int(highspy.ObjSense.kMinimize)

_KEPT: dict[str, bool | float | str] = {
    "solver": "simplex",
    "simplex_strategy": 1,
    "presolve": "off",
}
"""Options of kept models: presolve would throw the basis away."""

_TERMINATIONS = {
    "kOptimal": Termination.OPTIMAL,
    "kModelEmpty": Termination.OPTIMAL,
    "kInfeasible": Termination.INFEASIBLE,
    "kUnbounded": Termination.UNBOUNDED,
    "kUnboundedOrInfeasible": Termination.UNBOUNDED,
    "kTimeLimit": Termination.TIME_LIMIT,
    "kIterationLimit": Termination.OTHER_LIMIT,
    "kSolutionLimit": Termination.OTHER_LIMIT,
    "kObjectiveBound": Termination.OTHER_LIMIT,
    "kObjectiveTarget": Termination.OTHER_LIMIT,
    "kMemoryLimit": Termination.OTHER_LIMIT,
    "kInterrupt": Termination.INTERRUPTED,
    "kHighsInterrupt": Termination.INTERRUPTED,
}

# Looked up by the value itself: asking a value of HiGHS for its name goes through all names.
_MODEL_STATUSES = {
    status: (_TERMINATIONS.get(name, Termination.ERROR), name[1:])
    for name, status in highspy.HighsModelStatus.__members__.items()
}
_RUN_STATUSES = {status: name[1:] for name, status in highspy.HighsStatus.__members__.items()}


class _QuietHighs(highspy.Highs):
    """Turns output off before anything else: the wrapper's callbacks print a banner."""

    def enableCallbacks(self) -> None:
        self.setOptionValue("output_flag", False)


def new_highs(**options: bool | float | str) -> highspy.Highs:
    """HiGHS object without output, on one thread."""
    highs = _QuietHighs()  # type: ignore[no-untyped-call]  # highspy leaves it without types
    # One value of threads per process: mixing them makes later runs fail silently.
    for name, value in {"output_flag": False, "threads": 1, **options}.items():
        if highs.setOptionValue(name, value) != highspy.HighsStatus.kOk:
            raise ValueError(f"HiGHS refused option {name} = {value!r}")
    return highs


def _int32(values: object) -> NDArray[np.int32]:
    return np.ascontiguousarray(values, dtype=np.int32)


def _float(values: object) -> FloatArray:
    return np.ascontiguousarray(values, dtype=np.float64)


class SolverFailureError(RuntimeError):
    """No attempt gave an optimum; ``path`` holds the model, for the log and the report."""

    def __init__(self, name: str, raw_status: str, path: Path | None) -> None:
        super().__init__(f"{name}: {raw_status}; model saved as {path}")
        self.path = path
        self.raw_status = raw_status


class KeptModel:
    """A linear program kept in HiGHS: bounds, costs and rows change, the basis stays.

    ``counts`` collects solves and fallbacks, ``seconds`` the time inside HiGHS.
    """

    def __init__(
        self,
        name: str,
        cost: FloatArray,
        col_lower: FloatArray,
        col_upper: FloatArray,
        row_lower: FloatArray,
        row_upper: FloatArray,
        start: IntArray,
        index: IntArray,
        value: FloatArray,
    ) -> None:
        self.name = name
        self.counts: Counter[str] = Counter()
        self.seconds = 0.0
        self._highs = new_highs(**_KEPT)
        n_col, n_row = len(cost), len(row_lower)
        status = self._highs.passModel(
            n_col,
            n_row,
            len(index),
            _ROWWISE,
            _MINIMISE,
            0.0,
            _float(cost),
            _float(col_lower),
            _float(col_upper),
            _float(row_lower),
            _float(row_upper),
            _int32(start),
            _int32(index),
            _float(value),
            np.zeros(n_col, dtype=np.int32),  # an empty array would be read out of bounds
        )
        if status == highspy.HighsStatus.kError:
            raise ValueError(f"HiGHS refused the model of {name}")

    @property
    def n_row(self) -> int:
        """Rows now in the model."""
        return int(self._highs.getNumRow())

    def set_col_bounds(self, columns: IntArray, lower: FloatArray, upper: FloatArray) -> None:
        """New bounds of some columns."""
        if len(columns):
            self._highs.changeColsBounds(
                len(columns), _int32(columns), _float(lower), _float(upper)
            )

    def set_costs(self, columns: IntArray, cost: FloatArray) -> None:
        """New costs of some columns."""
        if len(columns):
            self._highs.changeColsCost(len(columns), _int32(columns), _float(cost))

    def set_row_bounds(self, rows: IntArray, lower: FloatArray, upper: FloatArray) -> None:
        """New sides of some rows."""
        if len(rows):
            # The stubs of highspy leave this one out.
            self._highs.changeRowsBounds(  # type: ignore[attr-defined]
                len(rows), _int32(rows), _float(lower), _float(upper)
            )

    def set_coefficients(
        self, rows: Sequence[int], columns: Sequence[int], values: Sequence[float]
    ) -> None:
        """New coefficients, one by one: HiGHS has no call for many.

        The basis stays valid, unlike after deleting a row.
        """
        change = self._highs.changeCoeff
        for row, column, value in zip(rows, columns, values, strict=True):
            change(row, column, value)

    def add_rows(
        self,
        lower: FloatArray,
        upper: FloatArray,
        start: IntArray,
        index: IntArray,
        value: FloatArray,
    ) -> None:
        """Adds rows at the end; ``start`` has one entry per row or one more."""
        if len(lower):
            status = self._highs.addRows(
                len(lower),
                _float(lower),
                _float(upper),
                len(index),
                _int32(start[: len(lower)]),
                _int32(index),
                _float(value),
            )
            if status == highspy.HighsStatus.kError:
                raise ValueError(f"HiGHS refused rows of {self.name}")

    def rest(self) -> None:
        """Gives the memory for solving back; model and basis stay.

        HiGHS keeps its working space however small the need, so they go to a new object.
        """
        old, self._highs = self._highs, new_highs(**_KEPT)
        if self._highs.passModel(old.getLp()) == highspy.HighsStatus.kError:
            raise ValueError(f"HiGHS refused its own model of {self.name}")
        basis = old.getBasis()
        # Without a basis the next run starts cold: slower, not wrong.
        if basis.valid and self._highs.setBasis(basis) == highspy.HighsStatus.kError:
            self.counts["basis refused"] += 1

    def forget_basis(self) -> None:
        """The next run starts cold."""
        self._highs.clearSolver()
        self.counts["cold restart"] += 1

    def run(self, wants_dual: bool = True) -> SolveResult:
        """Solves; tries harder where the status is not optimal.

        wants_dual : whether row duals come with the result; ``row_dual`` reads them afterwards

        Raises SolverFailureError where nothing helps; the model is then written to a file.
        """
        result = self._run_once(wants_dual)
        if result.termination is Termination.OPTIMAL:
            return result
        first_status = result.raw_status
        for word, options in (
            ("cold restart", {}),
            ("presolve on", {"presolve": "on"}),
            ("interior point", {"solver": "ipm", "presolve": "on"}),
        ):
            self.counts[f"fallback {word}"] += 1
            _LOG.info("%s: %s, trying %s", self.name, result.raw_status, word)
            self._highs.clearSolver()
            for name, value in options.items():
                self._highs.setOptionValue(name, value)
            result = self._run_once(wants_dual)
            self._highs.setOptionValue("presolve", "off")
            self._highs.setOptionValue("solver", "simplex")
            if result.termination is Termination.OPTIMAL:
                return result
        self.counts["failed"] += 1
        raise SolverFailureError(self.name, first_status, self.save())

    def _run_once(self, wants_dual: bool) -> SolveResult:
        begin = time.perf_counter()
        run_status = self._highs.run()
        result = _read_result(self._highs, run_status, False, begin, wants_dual)
        self.counts["solve"] += 1
        self.seconds += result.seconds
        return result

    def row_dual(self) -> FloatArray:
        """Multipliers of the rows, (n_row,), of the last run, which was optimal."""
        solution = self._highs.getSolution()
        if not solution.dual_valid:
            raise SolverFailureError(self.name, "optimal without multipliers", self.save())
        return _vector(solution.row_dual)

    def second_point(self, dual: FloatArray, cost: FloatArray) -> FloatArray:
        """Point that is best by another cost among the optimal ones of the last run.

        Columns with a reduced cost and rows with a multiplier stay at their sides: that is the
        optimal face. Only bounds and costs change, so the model is as before afterwards, but for
        its basis.

        Parameters
        ----------
        dual : array, shape (n_row,), of the last run
        cost : array, shape (n_col,)
        """
        solution, program = self._highs.getSolution(), self._highs.getLp()
        own, lower, upper, row_lower, row_upper = (
            _vector(values)
            for values in (
                program.col_cost_, program.col_lower_, program.col_upper_,
                program.row_lower_, program.row_upper_,
            )
        )  # fmt: skip
        size = max(1.0, float(np.abs(own).max(initial=0.0))) * FACE_TOLERANCE
        value = np.clip(_vector(solution.col_value), lower, upper)
        columns = np.flatnonzero(np.abs(_vector(solution.col_dual)) > size)
        rows = np.flatnonzero(np.abs(dual) > size)
        side = np.where(dual[rows] > 0.0, row_lower[rows], row_upper[rows])
        rows, side = rows[np.isfinite(side)], side[np.isfinite(side)]
        everything = np.arange(len(own))
        self.set_col_bounds(columns, value[columns], value[columns])
        self.set_row_bounds(rows, side, side)
        self.set_costs(everything, cost)
        again = self.run(wants_dual=False)
        self.set_costs(everything, own)
        self.set_row_bounds(rows, row_lower[rows], row_upper[rows])
        self.set_col_bounds(columns, lower[columns], upper[columns])
        self.counts["second objective"] += 1
        return again.col_value

    def save(self) -> Path | None:
        """Writes the model to a file of the temporary folder; None where that fails."""
        word = "".join(c if c.isalnum() else "_" for c in self.name)
        with tempfile.NamedTemporaryFile(
            prefix=f"xlplan_{word}_", suffix=".mps", delete=False
        ) as handle:
            path = Path(handle.name)
        status = self._highs.writeModel(str(path))
        return None if status == highspy.HighsStatus.kError else path


def _read_result(
    highs: highspy.Highs,
    run_status: highspy.HighsStatus,
    is_mip: bool,
    begin: float,
    wants_dual: bool = True,
) -> SolveResult:
    """Turns HiGHS's state into a ``SolveResult``, reading only what is valid."""
    seconds = time.perf_counter() - begin
    termination, word = _MODEL_STATUSES[highs.getModelStatus()]
    if run_status == highspy.HighsStatus.kError:
        termination = Termination.ERROR
    solution = highs.getSolution()
    is_optimal = termination is Termination.OPTIMAL
    has_incumbent, bound = is_optimal, float("nan")
    if is_mip:
        info = highs.getInfo()
        is_feasible = info.primal_solution_status == highspy.SolutionStatus.kSolutionStatusFeasible
        has_incumbent = is_optimal or (solution.value_valid and is_feasible)
    has_dual = is_optimal and not is_mip and solution.dual_valid
    objective = float(highs.getObjectiveValue()) if has_incumbent else float("nan")
    if is_mip and termination is not Termination.ERROR:
        bound = float(info.mip_dual_bound)
    elif is_optimal:
        bound = objective
    return SolveResult(
        termination=termination,
        has_incumbent=bool(has_incumbent),
        has_dual=bool(has_dual),
        raw_status=f"{word} ({_RUN_STATUSES[run_status]})",
        seconds=seconds,
        objective_or_nan=objective,
        bound_or_nan=bound,
        # Attribute access builds a list of the whole vector, hence once each.
        col_value_or_none=_vector(solution.col_value) if has_incumbent else None,
        row_dual_or_none=_vector(solution.row_dual) if has_dual and wants_dual else None,
    )


def _vector(values: list[float] | FloatArray) -> FloatArray:
    """A list of floats as an array; quicker than ``np.asarray`` for that."""
    return np.fromiter(values, float, len(values))


def solve_program(
    program: LinearProgram,
    time_limit_s: float | None = None,
    gap_frac: float = 1e-6,
    start_point: FloatArray | None = None,
) -> SolveResult:
    """Solves one LP or MILP from scratch.

    Parameters
    ----------
    program : LinearProgram, all of whose rows count, lazy ones included
    time_limit_s : float or None
    gap_frac : float, relative gap at which a MILP stops
    start_point : array, shape (n_col,), a known good point of a MILP, or None

    Returns
    -------
    SolveResult; for a MILP ``bound`` is the proven dual bound, not the incumbent
    """
    is_mip = bool(program.is_integer.any())
    options: dict[str, bool | float | str] = {}
    if is_mip:
        options = {"mip_rel_gap": float(gap_frac), "mip_abs_gap": 1e-9}
    if time_limit_s is not None:
        options["time_limit"] = max(float(time_limit_s), 1e-3)
    highs = new_highs(**options)
    status = highs.passModel(
        program.n_col,
        program.n_row,
        len(program.index),
        _ROWWISE,
        _MINIMISE,
        float(program.offset),
        _float(program.cost),
        _float(program.col_lower),
        _float(program.col_upper),
        _float(program.row_lower),
        _float(program.row_upper),
        _int32(program.start),
        _int32(program.index),
        _float(program.value),
        _int32(program.is_integer),
    )
    if status == highspy.HighsStatus.kError:
        raise ValueError("HiGHS refused the model")
    if is_mip and start_point is not None:
        solution = highspy.HighsSolution()
        solution.col_value = [float(v) for v in start_point]
        highs.setSolution(solution)
    begin = time.perf_counter()
    run_status = highs.run()
    result = _read_result(highs, run_status, is_mip, begin)
    is_optimal = result.termination is Termination.OPTIMAL
    if is_optimal and start_point is not None and highs.getInfo().mip_node_count == 0:
        # HiGHS 1.16 may call a start point optimal without having solved anything, with objective
        # and bound 0 whatever the point costs. Where it looked at no node, solving again is cheap.
        return solve_program(program, time_limit_s, gap_frac)
    return result
