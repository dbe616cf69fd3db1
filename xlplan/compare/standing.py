"""The three standing alternatives of a study, on the same windows and random numbers.

``Existing feeder`` buys nothing; ``Plan ignoring outages`` buys for normal service as if nothing
could fail, and in an event plans as if nothing more could; ``Least-cost plan`` minimises the
expected yearly cost. All are followed through the same failures.
"""

from __future__ import annotations

import logging
import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.base.errors import NoPlanError
from xlplan.base.names import EXISTING, IGNORING_OUTAGES, LEAST_COST
from xlplan.evaluate.ac_check import check_ac, check_lines
from xlplan.evaluate.follow_plan import Follower, FollowResult
from xlplan.evaluate.follow_tree import follow_tree
from xlplan.evaluate.meters import attach_meters
from xlplan.evaluate.operation import (
    Operated,
    audit_operation,
    plan_traces,
    tree_operation,
    with_peak_purchase,
)
from xlplan.evaluate.plan_result import PlanFacts, build_plan_result
from xlplan.evaluate.purchases import price_purchases, read_purchases
from xlplan.evaluate.results import ConvergenceRow, PlanResult
from xlplan.model.dispatch import Purchases
from xlplan.model.study_graph import StudyGraph, build_study_graph
from xlplan.model.tree_size import TreeFit, judge_size
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import Feeder
from xlplan.outages.window_model import WindowModel
from xlplan.solve.decomposition import Engine
from xlplan.solve.result import DecompositionResult, IterationRecord, StopReason
from xlplan.solve.tree import TreeTermination, solve_tree
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]

_LOG = logging.getLogger(__name__)

TREE_REFUSAL = 1_000_000
"""A whole tree beyond this many columns is not built even if asked for: it would take gigabytes
and hours."""

INNER_TARGET = 0.25
"""Share of the target at which the decomposition stops by its own estimate. The target is a share of
a cost that is mostly energy; alternatives differ by less, so the plan is brought closer than asked
for while that is cheap, and the interval of the reported cost needs some of the rest."""

EXISTING_TARGET = 0.2
"""The same for the existing feeder, against which every saving is counted: how much better it could
still be run must be small beside the difference."""

RESERVE = 0.25
"""Share of a time limit kept for following the plan."""

KINDS = {EXISTING: "existing", IGNORING_OUTAGES: "optimise", LEAST_COST: "optimise"}
DESCRIPTIONS = {
    EXISTING: "Nothing is bought; what exists is run as well as it can be.",
    IGNORING_OUTAGES: (
        "Bought for normal service as if nothing could fail; in an outage event planned as if "
        "nothing more could fail."
    ),
    LEAST_COST: "The purchases with the lowest expected yearly cost, outages included.",
}


@dataclass(frozen=True)
class SolveOptions:
    """How to solve. ``time_limit_h`` holds for each alternative."""

    method: str = "auto"
    gap_target_frac: float = 0.01
    time_limit_h: float = 0.5
    samples: int = 200
    seed: int = 1
    workers: int = 1


@dataclass(frozen=True)
class Progress:
    """What is told on the way: the alternative, and bound, cost, gap where there are some."""

    alternative: str
    step: str
    lower_bound: float | None = None
    cost: float | None = None
    gap_frac: float | None = None
    seconds_left: float | None = None


@dataclass(frozen=True)
class SolvedPlan:
    """A plan's numbers, and how it was followed (for paired differences)."""

    result: PlanResult
    follow: FollowResult
    x: FloatArray
    """First-stage solution, in the columns of ``model.purchase``; empty where a tree was solved."""


class StandingAlternatives:
    """Solves one study's alternatives; keeps the engine, whose cuts serve all of them."""

    def __init__(
        self,
        study: Study,
        feeder: Feeder,
        windows: tuple[WindowModel, ...],
        options: SolveOptions,
        on_progress: Callable[[Progress], None] | None = None,
        should_stop: Callable[[], bool] | None = None,
    ) -> None:
        self.study, self.feeder, self.windows = study, feeder, windows
        self.options = options
        self.on_progress = on_progress or (lambda _: None)
        self.should_stop = should_stop or (lambda: False)
        fit = judge_size(study, windows)
        self.method, self.method_reason = choose_method(options.method, fit)
        self.graph = build_study_graph(study, feeder, windows)
        attach_meters(self.graph, windows)
        self.engine = Engine(self.graph.graph, options.seed, options.workers)
        self.blind: StudyGraph | None = None

    def close(self) -> None:
        """Ends worker processes."""
        self.engine.close()

    def solve(self) -> tuple[SolvedPlan, ...]:
        """The three alternatives, in the order in which they are reported."""
        best = self._optimise(LEAST_COST)
        existing = self._optimise(EXISTING)
        ignoring = self._ignore_outages()
        for other in (existing, ignoring):
            is_cheaper = other.result.costs.total < best.result.costs.total - CENT
            if is_cheaper and self.method == "decomposed" and not self.should_stop():
                best = self._try_purchases(best, other)
        plans = (existing, ignoring, best)
        return tuple(_against(plan, existing) for plan in plans)

    def _try_purchases(self, best: SolvedPlan, other: SolvedPlan) -> SolvedPlan:
        """Takes another plan's purchases, run for outages, where they cost less.

        Within the target gap the search may stop at purchases that are not the best; those of a
        plan that turned out cheaper are worth trying.
        """
        lower = other.x.copy()
        upper = other.x.copy()
        demand = self.graph.first_stage.demand_kw
        lower[demand] = self.graph.first_stage.program.col_lower[demand]
        upper[demand] = self.graph.first_stage.program.col_upper[demand]
        tried = self._by_decomposition(LEAST_COST, lower, upper, best)
        return tried if tried.result.costs.total < best.result.costs.total else best

    # -- one alternative -----------------------------------------------------------------------

    def _optimise(self, name: str) -> SolvedPlan:
        """Least cost, or the best running of what exists."""
        if self.method == "tree":
            return self._by_tree(name)
        lower = self.graph.first_stage.program.col_lower.copy()
        upper = self.graph.first_stage.program.col_upper.copy()
        if name == EXISTING:
            demand = self.graph.first_stage.demand_kw
            keep = upper[demand]
            upper = lower.copy()
            upper[demand] = keep
        return self._by_decomposition(name, lower, upper)

    def _by_tree(self, name: str) -> SolvedPlan:
        study = self.study
        self.on_progress(Progress(name, "building the whole tree"))
        fixed = None
        if name == EXISTING:
            fixed = Purchases(
                np.zeros(len(study.generators)),
                np.zeros(len(study.storage)),
                np.zeros(len(study.storage)),
                np.zeros(len(study.measures), dtype=bool),
            )
        tree = build_whole_tree(study, self.feeder, self.windows, fixed)
        self.on_progress(Progress(name, "solving the whole tree"))
        limit_s = self.options.time_limit_h * SECONDS_PER_HOUR
        gap = min(TREE_GAP, self.options.gap_target_frac)
        solution = solve_tree(tree, limit_s, gap)
        if not solution.has_plan or solution.purchases is None:
            raise NoPlanError(
                f"The solver found no plan for '{name}' ({solution.raw_status}). "
                "A longer time limit, or --method decomposed, may help."
            )
        bought = fixed_demand(solution.purchases, fixed)
        follow = follow_tree(study, self.feeder, self.windows, bought, solution.segments)
        reached = solution.termination is TreeTermination.OPTIMAL
        row = ConvergenceRow(
            solution.seconds,
            solution.bound,
            solution.objective,
            solution.objective,
            _gap(solution.objective, solution.bound, solution.objective),
            "whole tree",
        )
        facts = PlanFacts(
            name=name,
            kind=KINDS[name],
            description=DESCRIPTIONS[name],
            bought=bought,
            lower_bound=solution.bound,
            bound_upper=solution.objective,
            status="gap reached" if reached else self._stopped(),
            method="tree",
            method_reason=self.method_reason,
            convergence=(row,),
            solve_seconds=solution.seconds,
            tree_cost=solution.objective,
        )
        traces, audit, dispatches = tree_operation(
            study, self.feeder, self.windows, bought, solution.segments, follow
        )
        bought = with_peak_purchase(study, self.windows, bought, dispatches)
        facts = replace(facts, bought=bought)
        seed = self.options.seed
        result = build_plan_result(study, self.windows, follow, facts, traces, audit, seed)
        result = self._with_ac(result, bought, dispatches)
        return SolvedPlan(self._with_status(result), follow, np.zeros(0))

    def _by_decomposition(
        self,
        name: str,
        lower: FloatArray,
        upper: FloatArray,
        before: SolvedPlan | None = None,
    ) -> SolvedPlan:
        """One alternative within bounds of ``x``; ``before``: the plan whose bound holds for it."""
        started = time.monotonic()
        limit_s = self.options.time_limit_h * SECONDS_PER_HOUR
        deadline = started + limit_s * (1.0 - RESERVE)
        target = self.options.gap_target_frac
        inner = (EXISTING_TARGET if name == EXISTING else INNER_TARGET) * target
        samples = self.options.samples
        rows: list[ConvergenceRow] = []
        spent = 0.0
        known = -math.inf
        if before is not None and before.result.lower_bound is not None:
            # The purchases are given now, but the bound of the free search is the one that counts.
            rows = list(before.result.convergence)
            spent, known = before.result.solve_seconds, before.result.lower_bound
        bound = known
        while True:
            found = self._run(name, inner, deadline, started + limit_s, lower, upper, rows)
            bound = max(bound, found.lower_bound) if before is None else known
            self.on_progress(Progress(name, "following the plan", bound))
            follow = self._follower(self.graph, self.engine).follow(
                found.capacities[0], samples, self.options.seed
            )
            cost = found.first_stage_cost + follow.running_cost
            gap = _gap(cost + follow.half_width, bound, cost)
            seconds = spent + time.monotonic() - started
            rows.append(
                ConvergenceRow(seconds, bound, cost, cost + follow.half_width, gap, "plan followed")
            )
            left = deadline - time.monotonic()
            is_over = found.termination is not StopReason.GAP_REACHED or left <= 0.0
            if gap <= target or is_over or before is not None:
                break
            inner *= 0.5
            samples = min(2 * samples, MOST_SAMPLES)
        facts = PlanFacts(
            name=name,
            kind=KINDS[name],
            description=DESCRIPTIONS[name],
            bought=read_purchases(self.graph.first_stage, found.x),
            lower_bound=bound,
            bound_upper=cost if follow.is_enumerated else None,
            status="gap reached" if gap <= target else self._stopped(),
            method="decomposed",
            method_reason=self.method_reason,
            convergence=tuple(rows),
            solve_seconds=spent + time.monotonic() - started,
            numerical_events=int(sum(found.counts.get(name, 0) for name in DIFFICULTIES)),
        )
        return self._evaluated(facts, follow, self.graph, self.engine, found)

    def _run(
        self,
        name: str,
        inner: float,
        deadline: float,
        end: float,
        lower: FloatArray,
        upper: FloatArray,
        rows: list[ConvergenceRow],
    ) -> DecompositionResult:
        before = rows[-1].seconds if rows else 0.0

        def tell(record: IterationRecord) -> None:
            has_cost = math.isfinite(record.cost_mean)
            rows.append(
                ConvergenceRow(
                    before + record.seconds,
                    record.lower_bound,
                    record.cost_mean if has_cost else math.nan,
                    record.cost_high if has_cost else math.nan,
                    record.gap_frac,
                    "whole numbers" if record.is_mixed_integer else "relaxed",
                )
            )
            self.on_progress(
                Progress(
                    name,
                    "solving",
                    record.lower_bound,
                    record.cost_mean if has_cost else None,
                    record.gap_frac if math.isfinite(record.gap_frac) else None,
                    max(0.0, end - time.monotonic()),
                )
            )

        found = self.engine.run(
            inner,
            deadline=deadline,
            x_bounds=(lower, upper),
            on_progress=tell,
            should_stop=self.should_stop,
        )
        if not found.has_plan:
            raise NoPlanError(f"Stopped before there was a plan for '{name}'.")
        return found

    def _ignore_outages(self) -> SolvedPlan:
        """Bought and run as if nothing could fail, followed through what does."""
        name = IGNORING_OUTAGES
        started = time.monotonic()
        limit_s = self.options.time_limit_h * SECONDS_PER_HOUR
        self.on_progress(Progress(name, "planning without outages"))
        graph = build_study_graph(self.study, self.feeder, self.windows, plans_for_outages=False)
        attach_meters(graph, self.windows)
        with Engine(graph.graph, self.options.seed, self.options.workers) as engine:
            found = engine.run(
                BLIND_GAP,
                deadline=started + limit_s * (1.0 - RESERVE),
                should_stop=self.should_stop,
            )
            if not found.has_plan:
                raise NoPlanError(f"Stopped before there was a plan for '{name}'.")
            self.on_progress(Progress(name, "following the plan"))
            follower = replace(self._follower(graph, engine), breaks_ties_by_energy=True)
            follow = follower.follow(found.capacities[0], self.options.samples, self.options.seed)
            reached = found.termination is StopReason.GAP_REACHED
            facts = PlanFacts(
                name=name,
                kind=KINDS[name],
                description=DESCRIPTIONS[name],
                bought=read_purchases(graph.first_stage, found.x),
                lower_bound=None,
                bound_upper=None,
                status="gap reached" if reached else self._stopped(),
                method="decomposed",
                method_reason="It is one plan without failures, whatever the size of the tree.",
                convergence=(),
                solve_seconds=time.monotonic() - started,
            )
            return self._evaluated(facts, follow, graph, engine, found)

    def _evaluated(
        self,
        facts: PlanFacts,
        follow: FollowResult,
        graph: StudyGraph,
        engine: Engine,
        found: DecompositionResult,
    ) -> SolvedPlan:
        capacity = found.capacities[0]
        follower = self._follower(graph, engine)
        if facts.name == IGNORING_OUTAGES:
            follower = replace(follower, breaks_ties_by_energy=True)
        traces, dispatches = plan_traces(self.study, follower, follow, capacity)
        bought = with_peak_purchase(self.study, self.windows, facts.bought, dispatches)
        facts = replace(facts, bought=bought)
        audit = audit_operation(self.study, self.feeder, self.windows, bought, dispatches)
        result = build_plan_result(
            self.study, self.windows, follow, facts, traces, audit, self.options.seed
        )
        result = self._with_ac(result, bought, dispatches)
        return SolvedPlan(self._with_status(result), follow, found.x)

    def _with_ac(
        self, result: PlanResult, bought: Purchases, operated: Sequence[Operated]
    ) -> PlanResult:
        """The plan with its operation checked by nonlinear power flow."""
        check = check_ac(self.study, self.feeder, self.windows, bought, operated)
        return replace(result, ac=check, checks=(*result.checks, *check_lines(check)))

    def _follower(self, graph: StudyGraph, engine: Engine) -> Follower:
        def guide(i_window: int, member: int, state: FloatArray) -> float:
            family = self.graph.windows[i_window].plan
            return float(self.engine.value_of(family, member, state[None, :], self._guide_at)[0])

        self._guide_at = self.graph.layout.capacity_upper
        return Follower(graph, self.windows, engine, guide)

    def _stopped(self) -> str:
        return "interrupted" if self.should_stop() else "limit reached"

    def _with_status(self, result: PlanResult) -> PlanResult:
        """A plan whose reported gap misses the target has not reached it, whatever the solver."""
        if result.gap_frac is None or result.gap_frac <= self.options.gap_target_frac:
            return result
        if result.status == "gap reached":
            return replace(result, status=self._stopped())
        return result


SECONDS_PER_HOUR = 3600.0

DIFFICULTIES = ("fallback cold restart", "failed", "cut not tight", "row rounds used up")
"""Counted events of the engine that say that the solver had trouble with a program."""

CENT = 0.01
"""Plans whose costs differ by less are equal."""

TREE_GAP = 1e-6
"""The whole tree is the reference: its integer search goes on to this gap."""

BLIND_GAP = 1e-5
"""The plan ignoring outages is one program without failures: solved to the end."""

MOST_SAMPLES = 5000
"""Continuations beyond this cost more time than their interval is worth."""


def choose_method(asked: str, fit: TreeFit) -> tuple[str, str]:
    """Method and the reason for it, in one sentence.

    Raises NoPlanError where the whole tree is asked for and cannot be built.
    """
    if asked == "tree":
        if fit.n_column > TREE_REFUSAL:
            raise NoPlanError(
                f"The whole tree cannot be built: {fit.reason}, and {TREE_REFUSAL:,} at the very "
                "most. Use --method decomposed."
            )
        return "tree", f"The whole tree was asked for; {fit.reason}."
    if asked == "decomposed":
        return "decomposed", f"The decomposition was asked for; {fit.reason}."
    return ("tree" if fit.fits else "decomposed"), f"{fit.reason[0].upper()}{fit.reason[1:]}."


def fixed_demand(found: Purchases, fixed: Purchases | None) -> Purchases:
    """Purchases as given, with the demand that the tree decided."""
    return found if fixed is None else replace(fixed, demand_kw=found.demand_kw)


def _gap(upper: float, lower: float, cost: float) -> float:
    return max(0.0, upper - lower) / max(abs(cost), 1e-9)


def _against(plan: SolvedPlan, existing: SolvedPlan) -> SolvedPlan:
    """The plan with its paired difference to the existing feeder."""
    difference = plan.result.costs.total - existing.result.costs.total
    half = plan.follow.difference_half_width(existing.follow) if plan is not existing else 0.0
    return replace(
        plan,
        result=replace(
            plan.result,
            difference=difference,
            difference_interval=(difference - half, difference + half),
        ),
    )


def capital_of(study: Study, bought: Purchases) -> float:
    """Capital less grants of some purchases."""
    return sum(p.capital_net for p in price_purchases(study, bought))
