"""Solves the whole tree with HiGHS through PuLP; the only place that does.

Enters: a ``WholeTree``. Leaves: a ``TreeSolution``: why the solver stopped, whether there is a
plan, its cost and a lower bound, and the plan as named arrays.
"""

from __future__ import annotations

import time
from dataclasses import dataclass
from enum import StrEnum

import pulp

from xlplan.model.dispatch import Purchases, TreeSegment
from xlplan.model.tree_reading import read_segments
from xlplan.model.whole_tree import WholeTree
from xlplan.solve.highs import new_highs

GAP_FRAC = 1e-6
"""Default gap of the integer search: a reference has to be closer than what is held against it."""

FEASIBLE = 2
"""HiGHS: a primal solution exists and is feasible (``primal_solution_status``)."""


class TreeTermination(StrEnum):
    """Why the solver stopped."""

    OPTIMAL = "optimal"
    LIMIT = "limit"
    INFEASIBLE = "infeasible"
    FAILED = "failed"


@dataclass(frozen=True)
class TreeSolution:
    """Outcome of one solve. ``objective`` is nan and the plan empty where there is no plan.

    ``bound``: no plan can cost less (the integer search's dual bound; -inf if unknown).
    ``raw_status``: the solver's own word.
    """

    termination: TreeTermination
    raw_status: str
    has_plan: bool
    objective: float
    bound: float
    purchases: Purchases | None
    segments: tuple[TreeSegment, ...]
    seconds: float


def solve_tree(
    tree: WholeTree,
    time_limit_s: float | None = None,
    gap_frac: float = GAP_FRAC,
    reads_segments: bool = True,
) -> TreeSolution:
    """Solves the tree; a plan with integers is solved again with these fixed.

    Parameters
    ----------
    tree : WholeTree
    time_limit_s : seconds for the search, None for no limit
    gap_frac : relative gap at which the integer search may stop
    reads_segments : False leaves the operation out (faster where only the cost is asked for)

    Returns
    -------
    TreeSolution
    """
    started = time.monotonic()
    problem = tree.problem
    offset = float(problem.objective.constant)
    termination, raw_status, bound = _run(problem, time_limit_s, gap_frac)
    if termination in (TreeTermination.INFEASIBLE, TreeTermination.FAILED):
        return _without_plan(termination, raw_status, started)
    if termination is TreeTermination.LIMIT and not _has_plan(problem):
        return _without_plan(termination, raw_status, started, bound + offset)
    integers = [v for v in problem.variables() if v.cat == pulp.LpInteger]
    if integers:
        # An integer that is off by the solver's tolerance opens a gate by that much times B;
        # with the integers exact, the cost is that of a plan that can be carried out.
        limits = [(v.lowBound, v.upBound) for v in integers]
        for variable in integers:
            variable.lowBound = variable.upBound = round(variable.value())
        polished, polished_status, _ = _run(problem, None, gap_frac)
        for variable, (low, high) in zip(integers, limits, strict=True):
            variable.lowBound, variable.upBound = low, high
        if polished is not TreeTermination.OPTIMAL:
            raw_status = f"{raw_status}, then {polished_status}"
            return _without_plan(TreeTermination.FAILED, raw_status, started, bound + offset)
    return TreeSolution(
        termination=termination,
        raw_status=raw_status,
        has_plan=True,
        objective=float(problem.objective.value()),
        bound=bound + offset,
        purchases=tree.purchases.read(),
        segments=read_segments(tree) if reads_segments else (),
        seconds=time.monotonic() - started,
    )


class _QuietHighsOfPulp(pulp.HiGHS):  # type: ignore[misc]
    """PuLP's own way to HiGHS, with our HiGHS object: no banner, one thread, checked options."""

    def createAndConfigureSolver(self, lp: pulp.LpProblem) -> None:
        options = {"mip_rel_gap": self.gapRel}
        if self.timeLimit is not None:
            options["time_limit"] = float(self.timeLimit)
        lp.solverModel = new_highs(**options)


def _run(
    problem: pulp.LpProblem, time_limit_s: float | None, gap_frac: float
) -> tuple[TreeTermination, str, float]:
    """One run of the solver: why it stopped, its word for it, the bound without the offset."""
    problem.solve(_QuietHighsOfPulp(timeLimit=time_limit_s, gapRel=gap_frac))
    highs = problem.solverModel
    raw_status = highs.modelStatusToString(highs.getModelStatus())
    info = highs.getInfo()
    has_integers = any(v.cat == pulp.LpInteger for v in problem.variables())
    if raw_status == "Optimal":
        bound = info.mip_dual_bound if has_integers else info.objective_function_value
        return TreeTermination.OPTIMAL, raw_status, float(bound)
    if "limit" in raw_status.lower() or "interrupt" in raw_status.lower():
        bound = info.mip_dual_bound if has_integers else float("-inf")
        return TreeTermination.LIMIT, raw_status, float(bound)
    if "infeasible" in raw_status.lower():
        return TreeTermination.INFEASIBLE, raw_status, float("-inf")
    return TreeTermination.FAILED, raw_status, float("-inf")


def _has_plan(problem: pulp.LpProblem) -> bool:
    """Whether the last run left a plan: at a limit HiGHS may give zeros in its place."""
    return bool(problem.solverModel.getInfo().primal_solution_status == FEASIBLE)


def _without_plan(
    termination: TreeTermination, raw_status: str, started: float, bound: float = float("-inf")
) -> TreeSolution:
    """Outcome without a plan."""
    seconds = time.monotonic() - started
    return TreeSolution(termination, raw_status, False, float("nan"), bound, None, (), seconds)
