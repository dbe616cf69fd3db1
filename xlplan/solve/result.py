"""What a solve gives back: why it stopped, and values that exist.

``SolveResult`` is about one linear or mixed-integer program, ``DecompositionResult`` about a whole
run. A value that does not exist cannot be read: the property raises ``MissingValueError``.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


class Termination(StrEnum):
    """Why one solve stopped."""

    OPTIMAL = "optimal"
    INFEASIBLE = "infeasible"
    UNBOUNDED = "unbounded"
    TIME_LIMIT = "time limit"
    OTHER_LIMIT = "other limit"
    INTERRUPTED = "interrupted"
    ERROR = "error"


class MissingValueError(RuntimeError):
    """A value was read that the solve did not produce."""


@dataclass(frozen=True)
class SolveResult:
    """Outcome of one program.

    has_incumbent : there is a primal point (for a MILP at a limit: one that satisfies all rows)
    has_dual : there are row duals (never for a MILP)
    raw_status : the solver's own words
    seconds : wall time
    """

    termination: Termination
    has_incumbent: bool
    has_dual: bool
    raw_status: str
    seconds: float
    objective_or_nan: float = float("nan")
    bound_or_nan: float = float("nan")
    col_value_or_none: FloatArray | None = None
    row_dual_or_none: FloatArray | None = None

    @property
    def objective(self) -> float:
        """Value of the primal point."""
        if not self.has_incumbent:
            raise MissingValueError(f"no primal point: {self.raw_status}")
        return self.objective_or_nan

    @property
    def bound(self) -> float:
        """Proven lower bound; minus infinity is possible."""
        if np.isnan(self.bound_or_nan):
            raise MissingValueError(f"no bound: {self.raw_status}")
        return self.bound_or_nan

    @property
    def gap_frac(self) -> float:
        """Distance of objective and bound over the size of the objective."""
        return relative_gap(self.objective, self.bound)

    @property
    def col_value(self) -> FloatArray:
        """Primal point, (n_col,)."""
        if not self.has_incumbent or self.col_value_or_none is None:
            raise MissingValueError(f"no primal point: {self.raw_status}")
        return self.col_value_or_none

    @property
    def row_dual(self) -> FloatArray:
        """Row multipliers, (n_row,): change of the objective per unit of the active side."""
        if not self.has_dual or self.row_dual_or_none is None:
            raise MissingValueError(f"no duals: {self.raw_status}")
        return self.row_dual_or_none


def relative_gap(upper: float, lower: float) -> float:
    """``(upper - lower) / |upper|``, not below 0; infinite where a side is.

    >>> relative_gap(-100.0, -101.0)
    0.01
    >>> relative_gap(0.0, 0.0)
    0.0
    """
    if not np.isfinite(upper) or not np.isfinite(lower):
        return float("inf")
    difference = max(upper - lower, 0.0)
    if difference == 0.0:
        return 0.0
    return difference / abs(upper) if upper != 0.0 else float("inf")


class StopReason(StrEnum):
    """Why a run of the decomposition stopped."""

    GAP_REACHED = "gap reached"
    TIME_LIMIT = "time limit"
    INTERRUPTED = "interrupted"
    PASS_LIMIT = "pass limit"
    MEMORY_LIMIT = "memory limit"


@dataclass(frozen=True)
class CostEstimate:
    """Cost of following a plan.

    ``mean`` with its 95 % interval ``low`` .. ``high``; ``is_statistical`` is False where every
    path was followed. ``by_root``: mean value of each root without its weight.
    """

    mean: float
    low: float
    high: float
    is_statistical: bool
    n_sample: int
    by_root: tuple[float, ...]
    n_unmeasured: int = 0
    """Exits that were not followed and were charged their upper bound instead."""


@dataclass(frozen=True)
class IterationRecord:
    """One line of the log of a run."""

    i_pass: int
    is_mixed_integer: bool
    seconds: float
    lower_bound: float
    cost_mean: float
    cost_high: float
    gap_frac: float
    n_solve: int
    n_cut: int


@dataclass(frozen=True)
class DecompositionResult:
    """Plan, bound and measured gap of a run; money is that of the graph's objective."""

    termination: StopReason
    has_plan: bool
    lower_bound: float
    x: FloatArray
    capacities: tuple[FloatArray, ...]
    cost: CostEstimate
    first_stage_cost: float
    gap_frac: float
    log: tuple[IterationRecord, ...]
    seconds: float
    counts: Mapping[str, float] = field(default_factory=dict)
    """Counted events: solves, cuts, fallbacks of the solver, seconds inside it."""
