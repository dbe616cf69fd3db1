"""Solves one study again and again: other budgets, prices and purchases, the same random numbers.

Enters: a study, its feeder and windows, and one ``Wish`` after the other. Leaves: ``SolvedPlan``s.
The engine and its cuts stay from wish to wish: budgets, given purchases and price lists are bounds
of its first stage. All plans are followed through the same failures and the same draws, so that
differences can be taken history by history.
"""

from __future__ import annotations

import logging
import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Self

import numpy as np
from numpy.typing import NDArray

from xlplan.base.errors import NoPlanError
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
from xlplan.evaluate.purchases import net_capital, price_purchases, read_purchases
from xlplan.evaluate.results import CheckLine, ConvergenceRow, PlanResult, Trace
from xlplan.model.dispatch import Purchases
from xlplan.model.purchase import Choices
from xlplan.model.remnants import bounds_without, find_remnants, study_without
from xlplan.model.study_graph import StudyGraph, build_study_graph
from xlplan.model.tree_size import TreeFit, judge_size
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import Feeder
from xlplan.outages.window_model import WindowModel
from xlplan.solve.decomposition import Engine
from xlplan.solve.proposal import LearningService, Proposal, propose
from xlplan.solve.result import DecompositionResult, IterationRecord, StopReason
from xlplan.solve.savepoint import Savepoint
from xlplan.solve.tree import TreeSolution, TreeTermination, solve_tree
from xlplan.study.alternatives import with_budget
from xlplan.study.economics import capital_recovery_factor
from xlplan.study.study import DeviceChange, Study

FloatArray = NDArray[np.float64]

_LOG = logging.getLogger(__name__)

TREE_REFUSAL = 1_000_000
"""A whole tree beyond this many columns is not built even if asked for: it would take gigabytes
and hours."""

INNER_TARGET = 0.25
"""Share of the target at which the decomposition stops by its own estimate. The target is a share
of a cost that is mostly energy; alternatives differ by less, so the plan is brought closer than
asked for while that is cheap, and the interval of the reported cost needs some of the rest."""

GIVEN_TARGET = 0.2
"""The same where the purchases are given (the existing feeder among them, against which every
saving is counted): how much better they could still be run must be small beside the difference."""

BRIEF_TARGET = 0.5
"""The same for a brief wish that does not say how near the best plan is near enough."""

DEMAND_CLOSENESS = 1e-7
"""Share of the cost to which first stage and roots agree on the demand limit of a plan."""

MOST_LOOKS = 8
"""Parts of the events that a point's search looks at before the plan is followed."""

MOST_ROUNDS = 3
"""Plans that are followed for one point before the best of them is taken with its gap."""

SAMPLE_SHARE = 0.25
"""Points are followed with this share of the least number of continuations at first: what these
add is small against the first events, and the number is doubled where it is not."""

SAMPLING_PART = 0.25
"""Part of the closeness that a point's sampling error may take."""

BOUND_SHARE, BOUND_LEAST_S = 0.25, 20.0
"""A deterministic bound from above may take this share of a plan's time, or of so many seconds."""

OWN_FACTOR = 2.0
"""Time of a subproblem against the part of it spent inside the solver."""

RESERVE = 0.25
"""Share of a time limit kept for following the plan."""


@dataclass(frozen=True)
class SolveOptions:
    """How to solve. ``time_limit_h`` holds for each alternative."""

    method: str = "auto"
    gap_target_frac: float = 0.01
    time_limit_h: float = 0.5
    samples: int = 200
    seed: int = 1
    workers: int = 1
    memory_bytes: int | None = None


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
    bought: Purchases


@dataclass(frozen=True)
class Wish:
    """What a plan is asked for.

    ``capital_budget``: None for no limit; of the purchases, device changes left out. ``fixed``:
    purchases given, nothing else is bought. ``ignores_outages``: bought and run as if nothing could
    fail. ``price_list``: position among the solver's price studies, -1 for the study's own prices.
    ``is_brief``: one search without a second one for a closer gap, no charts and no audit.
    ``limit_s``: seconds to take at most; None for the time limit of the options.
    """

    name: str
    kind: str = "optimise"
    description: str = ""
    capital_budget: float | None = None
    fixed: Purchases | None = None
    ignores_outages: bool = False
    price_list: int = -1
    is_brief: bool = False
    limit_s: float | None = None
    whole_budget: float | None = None
    """Of purchases and device changes together; None: ``capital_budget`` and the changes."""
    closeness: float | None = None
    """Of a brief wish: money per year by which the best plan may be missed; None: by a share of the
    target. What is left open shows in the plan's bound."""


@dataclass(frozen=True)
class _Followed:
    """A plan that was followed, for other questions that it may answer.

    ``running``: per year, demand charge included, purchases left out: these have other prices in
    other questions.
    """

    bought: Purchases
    follow: FollowResult
    running: float


class PlanSolver:
    """Solves one study's plans; keeps the engine, whose cuts serve all of them.

    ``price_studies``: the study at other prices, for wishes that name one. ``device_changes``: what
    the study has that the study as typed has not; their cost is part of every plan. ``savepoint``:
    where the decomposition keeps what it learns; ``resumes``: it goes on from there.
    """

    def __init__(
        self,
        study: Study,
        feeder: Feeder,
        windows: tuple[WindowModel, ...],
        options: SolveOptions,
        on_progress: Callable[[Progress], None] | None = None,
        should_stop: Callable[[], bool] | None = None,
        price_studies: tuple[Study, ...] = (),
        device_changes: tuple[DeviceChange, ...] = (),
        savepoint: Savepoint | None = None,
        resumes: bool = False,
    ) -> None:
        self.study, self.feeder, self.windows = study, feeder, windows
        self.options = options
        self.on_progress = on_progress or (lambda _: None)
        self.should_stop = should_stop or (lambda: False)
        fit = judge_size(study, windows)
        self.method, self.method_reason = choose_method(options.method, fit)
        self.choices = Choices(price_studies)
        self.device_changes = device_changes
        rate = study.settings.real_discount_rate_frac
        self.device_yearly = sum(
            change.capital_cost * capital_recovery_factor(rate, change.life_years)
            for change in device_changes
        )
        self.device_capital = sum(change.capital_cost for change in device_changes)
        self.graph = build_study_graph(study, feeder, windows, choices=self.choices)
        attach_meters(self.graph, windows)
        self.engine = Engine(
            self.graph.graph,
            options.seed,
            options.workers,
            savepoint=savepoint if self.method == "decomposed" else None,
            resumes=resumes,
            memory_bytes=options.memory_bytes,
        )
        self._blind: tuple[StudyGraph, Engine] | None = None
        self._followed: list[_Followed] = []
        self._n_brief = max(2, round(SAMPLE_SHARE * options.samples))

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Ends worker processes."""
        self.engine.close()
        if self._blind is not None:
            self._blind[1].close()

    def nothing_bought(self) -> Purchases:
        """Purchases of what buys nothing."""
        study = self.study
        return Purchases(
            np.zeros(len(study.generators)),
            np.zeros(len(study.storage)),
            np.zeros(len(study.storage)),
            np.zeros(len(study.measures), dtype=bool),
        )

    def solve_wish(self, wish: Wish) -> SolvedPlan:
        """The plan asked for; raises NoPlanError where there is none."""
        if wish.ignores_outages:
            return self._ignoring_outages(wish)
        if self.method == "tree":
            return self._by_tree(wish)
        if wish.is_brief and wish.closeness is not None:
            return self._briefly(wish, wish.closeness)
        return self._by_decomposition(wish)

    def estimated_cost(self, wish: Wish) -> float:
        """Yearly cost of given purchases, without following them where the cuts know it closely.

        The bound, and what looks at a part of the events, scaled to all of them, see above it.
        Where that is more than the wish's closeness the plan is followed.
        """
        if self.method == "tree" or wish.fixed is None or wish.closeness is None:
            return self.solve_wish(wish).result.costs.total
        bounds = self._bounds(self.graph, wish)
        self.on_progress(Progress(wish.name, "solving"))
        deadline = time.monotonic() + self._limit_s(wish) * (1.0 - RESERVE)
        found = self._proposed(bounds, wish.closeness, MOST_LOOKS, deadline, draws_chains=True)
        if found.open_abs > wish.closeness:
            return self.solve_wish(wish).result.costs.total
        return found.lower_bound + found.open_abs + self.device_yearly

    def study_of(self, wish: Wish) -> Study:
        """The study at the wish's prices and budget."""
        study = self.study
        if wish.price_list >= 0:
            study = self.choices.price_studies[wish.price_list]
        budget = wish.whole_budget
        if budget is None and wish.capital_budget is not None:
            budget = wish.capital_budget + self.device_capital
        return with_budget(study, budget)

    def _bounds(self, graph: StudyGraph, wish: Wish) -> tuple[FloatArray, FloatArray]:
        first_stage = graph.first_stage
        if wish.fixed is None:
            return first_stage.bounds(wish.capital_budget, wish.price_list)
        bounds = first_stage.bounds(None, wish.price_list)
        return first_stage.fixed(bounds, self.study, wish.fixed)

    def _clean_bounds(
        self, graph: StudyGraph, wish: Wish, found: Proposal | DecompositionResult
    ) -> tuple[FloatArray, FloatArray] | None:
        """Bounds that rule out what of a decision is no purchase; None where all of it is.

        Purchases that are given stay as they are.
        """
        if wish.fixed is not None:
            return None
        remnants = find_remnants(self.study, read_purchases(graph.first_stage, found.x))
        if remnants is None:
            return None
        return bounds_without(graph.first_stage, self._bounds(graph, wish), remnants)

    def _without_remnants(
        self,
        graph: StudyGraph,
        engine: Engine,
        wish: Wish,
        found: DecompositionResult,
        gap_frac: float,
        deadline: float,
    ) -> DecompositionResult:
        """The plan searched again without its remnants; ``found`` where that is not as near.

        The new plan has its own cost. The bound is that of the search in which they were free.
        """
        clean = self._clean_bounds(graph, wish, found)
        if clean is None or found.termination is not StopReason.GAP_REACHED:
            return found
        other = engine.run(
            gap_frac, deadline=deadline, x_bounds=clean, should_stop=self.should_stop
        )
        if not other.has_plan:
            return found
        gap = _gap(other.cost.high, found.lower_bound, other.cost.mean)
        if gap > max(gap_frac, found.gap_frac):
            return found
        return replace(
            other,
            termination=found.termination,
            lower_bound=found.lower_bound,
            gap_frac=gap,
        )

    def _with_demand_settled(
        self, wish: Wish, found: DecompositionResult, deadline: float
    ) -> DecompositionResult:
        """The plan with the demand limit that goes with its purchases.

        Within the gap the limit may lie a little below the peak, and the first plan then sheds
        load in normal service that nobody means to shed. First stage and roots are made to agree
        closely with the purchases given, which takes no further look at events.
        """
        if self.study.settings.demand_charge_per_kw_year <= 0.0:
            return found
        bought = read_purchases(self.graph.first_stage, found.x)
        bounds = self._bounds(self.graph, replace(wish, fixed=bought))
        closeness = DEMAND_CLOSENESS * abs(found.cost.mean)
        settled = self._proposed(bounds, closeness, 0, deadline)
        return replace(
            found,
            x=settled.x,
            capacities=settled.capacities,
            first_stage_cost=settled.first_stage_cost,
        )

    def _limit_s(self, wish: Wish) -> float:
        limit_s = self.options.time_limit_h * SECONDS_PER_HOUR
        return limit_s if wish.limit_s is None else min(limit_s, wish.limit_s)

    def repriced(self, plan: SolvedPlan, price_list: int) -> SolvedPlan:
        """A plan's figures at other prices: what is bought and how it runs stay as they are.

        Its bound is one for running these purchases; other purchases may cost less at these prices.
        """
        study = self.choices.price_studies[price_list]
        result = plan.result
        purchases = price_purchases(study, plan.bought, self.device_changes)
        investment = sum(p.investment for p in purchases)
        fixed_om = sum(p.fixed_om for p in purchases)
        costs = replace(result.costs, investment=investment, fixed_om=fixed_om)
        added = costs.total - result.costs.total
        low, high = result.cost_interval
        bound = None if result.lower_bound is None else result.lower_bound + added
        return replace(
            plan,
            result=replace(
                result,
                costs=costs,
                purchases=purchases,
                capital_cost=net_capital(purchases),
                capital_gross=sum(p.capital_gross for p in purchases),
                cost_interval=(low + added, high + added),
                lower_bound=bound,
                bound_upper=None,
                gap_frac=None,
            ),
        )

    # -- points of curves ----------------------------------------------------------------------

    def _briefly(self, wish: Wish, closeness: float) -> SolvedPlan:
        """One plan within ``closeness`` of the bound, from what other questions have found out.

        A plan that was followed before serves if it is near enough. Else the plan that the cuts
        propose is followed, and that makes new cuts where they were off; then it is asked again.
        """
        name, started = wish.name, time.monotonic()
        limit_s = self._limit_s(wish)
        deadline = started + limit_s * (1.0 - RESERVE)
        bounds = self._bounds(self.graph, wish)
        bound, n_new = -math.inf, 0
        rows: list[ConvergenceRow] = []
        self.on_progress(Progress(name, "solving"))
        has_looked = not self._followed
        found = self._proposed(bounds, closeness, MOST_LOOKS if has_looked else 0, deadline)
        while True:
            bound = max(bound, found.lower_bound + self.device_yearly)
            best = self._best_known(wish)
            if best is not None:
                cost, plan = best
                high = cost + plan.follow.half_width
                gap = _gap(high, bound, cost)
                seconds = time.monotonic() - started
                rows.append(ConvergenceRow(seconds, bound, cost, high, gap, "plan followed"))
                is_over = time.monotonic() >= deadline or self.should_stop()
                if high - bound <= closeness or n_new >= MOST_ROUNDS or is_over:
                    break
            # Given purchases are followed at once: what was learnt of other plans is mostly enough.
            if not has_looked and (wish.fixed is None or n_new > 0):
                found = self._proposed(bounds, closeness, MOST_LOOKS, deadline)
                has_looked = True
                continue
            if self.should_stop():
                raise NoPlanError(f"Stopped before there was a plan for '{name}'.")
            self.on_progress(Progress(name, "following the plan", bound))
            clean = self._clean_bounds(self.graph, wish, found)
            followed = found if clean is None else self._proposed(clean, closeness, 0, deadline)
            self._follow_briefly(followed, closeness)
            n_new, has_looked = n_new + 1, False
            found = self._proposed(bounds, closeness, 0, deadline)
        facts = PlanFacts(
            name=name,
            kind=wish.kind,
            description=wish.description,
            bought=plan.bought,
            lower_bound=bound,
            bound_upper=None,
            status="gap reached" if gap <= self.options.gap_target_frac else self._stopped(),
            method="decomposed",
            method_reason=self.method_reason,
            convergence=tuple(rows),
            solve_seconds=time.monotonic() - started,
            device_changes=self.device_changes,
        )
        study = self.study_of(wish)
        result = build_plan_result(
            study, self.windows, plan.follow, facts, (), (), self.options.seed
        )
        return SolvedPlan(self._with_status(result), plan.follow, plan.bought)

    def _proposed(
        self,
        bounds: tuple[FloatArray, FloatArray],
        closeness: float,
        n_look: int,
        deadline: float,
        draws_chains: bool = False,
    ) -> Proposal:
        return propose(
            self.engine, bounds, closeness, n_look, deadline, self.should_stop, draws_chains
        )

    def _follow_briefly(self, found: Proposal, closeness: float) -> None:
        """Follows a proposal and remembers it; what its events teach goes to the engine."""
        service = LearningService(self.engine, found.event_tolerance)
        follower = replace(self._follower(self.graph, self.engine), service=service)
        follow = follower.follow(found.capacities[0], self._n_brief, self.options.seed)
        service.take_in()
        if follow.half_width > SAMPLING_PART * closeness:
            self._n_brief = min(2 * self._n_brief, self.options.samples)
        bought = read_purchases(self.graph.first_stage, found.x)
        self._remember(bought, follow)

    def _remember(self, bought: Purchases, follow: FollowResult) -> None:
        """Keeps a followed plan, at the study's own prices."""
        charge = self.study.settings.demand_charge_per_kw_year * bought.demand_kw
        self._followed.append(_Followed(bought, follow, charge + follow.running_cost))

    def _best_known(self, wish: Wish) -> tuple[float, _Followed] | None:
        """Cost at the wish's prices and plan, of the plans followed that the wish allows."""
        study = self.study_of(wish)
        found: list[tuple[float, _Followed]] = []
        for one in self._followed:
            prices = price_purchases(study, one.bought, self.device_changes)
            if wish.fixed is not None:
                is_allowed = is_same_purchase(one.bought, wish.fixed)
            else:
                budget = study.settings.capital_budget
                is_allowed = budget is None or net_capital(prices) <= budget * (1.0 + 1e-9) + 0.01
            if is_allowed:
                yearly = sum(p.investment + p.fixed_om for p in prices)
                found.append((one.running + yearly, one))
        return min(found, key=lambda item: item[0], default=None)

    # -- one plan ------------------------------------------------------------------------------

    def _by_tree(self, wish: Wish) -> SolvedPlan:
        study, name = self.study_of(wish), wish.name
        self.on_progress(Progress(name, "building the whole tree"))
        # The tree's own budget row holds purchases alone.
        tree_study = with_budget(study, wish.capital_budget)
        tree = build_whole_tree(tree_study, self.feeder, self.windows, wish.fixed)
        self.on_progress(Progress(name, "solving the whole tree"))
        gap = min(TREE_GAP, self.options.gap_target_frac)
        solution = solve_tree(tree, self._limit_s(wish), gap)
        if not solution.has_plan or solution.purchases is None:
            raise NoPlanError(
                f"The solver found no plan for '{name}' ({solution.raw_status}). "
                "A longer time limit, or --method decomposed, may help."
            )
        solution = self._tree_without_remnants(wish, tree_study, solution, gap)
        assert solution.purchases is not None
        bought = fixed_demand(solution.purchases, wish.fixed)
        follow = follow_tree(study, self.feeder, self.windows, bought, solution.segments)
        reached = solution.termination is TreeTermination.OPTIMAL
        cost = solution.objective + self.device_yearly
        bound = solution.bound + self.device_yearly
        row = ConvergenceRow(
            solution.seconds, bound, cost, cost, _gap(cost, bound, cost), "whole tree"
        )
        facts = PlanFacts(
            name=name,
            kind=wish.kind,
            description=wish.description,
            bought=bought,
            lower_bound=bound,
            bound_upper=cost,
            status="gap reached" if reached else self._stopped(),
            method="tree",
            method_reason=self.method_reason,
            convergence=(row,),
            solve_seconds=solution.seconds,
            tree_cost=cost,
            device_changes=self.device_changes,
        )
        traces: tuple[Trace, ...] = ()
        audit: tuple[CheckLine, ...] = ()
        dispatches: Sequence[Operated] = ()
        if not wish.is_brief:
            traces, audit, dispatches = tree_operation(
                study, self.feeder, self.windows, bought, solution.segments, follow
            )
            bought = with_peak_purchase(study, self.windows, bought, dispatches)
            facts = replace(facts, bought=bought)
        seed = self.options.seed
        result = build_plan_result(study, self.windows, follow, facts, traces, audit, seed)
        if not wish.is_brief:
            result = self._with_ac(result, bought, dispatches)
        return SolvedPlan(self._with_status(result), follow, bought)

    def _tree_without_remnants(
        self, wish: Wish, study: Study, solution: TreeSolution, gap: float
    ) -> TreeSolution:
        """The whole tree solved again without remnants; as it was where that costs more."""
        if wish.fixed is not None:
            return solution
        assert solution.purchases is not None
        remnants = find_remnants(study, solution.purchases)
        left_s = self._limit_s(wish) - solution.seconds
        if remnants is None or solution.termination is not TreeTermination.OPTIMAL or left_s <= 0.0:
            return solution
        tree = build_whole_tree(study_without(study, remnants), self.feeder, self.windows)
        other = solve_tree(tree, left_s, gap)
        allowed = solution.objective + gap * abs(solution.objective)
        is_as_good = other.termination is TreeTermination.OPTIMAL and other.objective <= allowed
        if not is_as_good:
            return solution
        seconds = solution.seconds + other.seconds
        return replace(other, bound=solution.bound, seconds=seconds)

    def _by_decomposition(self, wish: Wish, before: SolvedPlan | None = None) -> SolvedPlan:
        """One plan; ``before``: the plan whose bound holds for it, where its search was wider."""
        name = wish.name
        started = time.monotonic()
        limit_s = self._limit_s(wish)
        deadline = started + limit_s * (1.0 - RESERVE)
        target = self.options.gap_target_frac
        share = BRIEF_TARGET if wish.is_brief else INNER_TARGET
        inner = (share if wish.fixed is None else GIVEN_TARGET) * target
        samples = self.options.samples
        rows: list[ConvergenceRow] = []
        spent = 0.0
        known = -math.inf
        if before is not None and before.result.lower_bound is not None:
            # The purchases are given now, but the bound of the free search is the one that counts.
            rows = list(before.result.convergence)
            spent, known = before.result.solve_seconds, before.result.lower_bound
        bound = known
        bounds = self._bounds(self.graph, wish)
        while True:
            found = self._run(name, inner, deadline, started + limit_s, bounds, rows)
            if before is None:
                bound = max(bound, found.lower_bound + self.device_yearly)
            found = self._without_remnants(self.graph, self.engine, wish, found, inner, deadline)
            found = self._with_demand_settled(wish, found, deadline)
            self.on_progress(Progress(name, "following the plan", bound))
            follow = self._follower(self.graph, self.engine).follow(
                found.capacities[0], samples, self.options.seed
            )
            running, half = follow.aimed()
            cost = found.first_stage_cost + running + self.device_yearly
            gap = _gap(cost + half, bound, cost)
            seconds = spent + time.monotonic() - started
            rows.append(ConvergenceRow(seconds, bound, cost, cost + half, gap, "plan followed"))
            left = deadline - time.monotonic()
            is_over = found.termination is not StopReason.GAP_REACHED or left <= 0.0
            if gap <= target or is_over or before is not None or wish.is_brief:
                break
            inner *= 0.5
            samples = min(2 * samples, MOST_SAMPLES)
        bought = read_purchases(self.graph.first_stage, found.x)
        self._remember(bought, follow)
        bound_upper = cost if follow.is_enumerated else None
        if bound_upper is None and not wish.is_brief:
            bound_upper = self._upper_bound(found, time.monotonic() - started)
        facts = PlanFacts(
            name=name,
            kind=wish.kind,
            description=wish.description,
            bought=bought,
            lower_bound=bound,
            bound_upper=bound_upper,
            status="gap reached" if gap <= target else self._stopped(),
            method="decomposed",
            method_reason=self.method_reason,
            convergence=tuple(rows),
            solve_seconds=spent + time.monotonic() - started,
            numerical_events=int(sum(found.counts.get(name, 0) for name in DIFFICULTIES)),
            device_changes=self.device_changes,
        )
        return self._evaluated(wish, facts, follow, self.graph, self.engine, found)

    def _upper_bound(self, found: DecompositionResult, spent_s: float) -> float | None:
        """Deterministic bound of the cost at a plan's purchases; None where it takes too long."""
        counts = self.engine.counts()
        n_node = max(counts.get("node solve", 0.0), 1.0)
        seconds_per_node = max(counts["seconds in solver"], 1e-3) / n_node
        most = int(BOUND_SHARE * max(spent_s, BOUND_LEAST_S) / (OWN_FACTOR * seconds_per_node))
        most *= self.options.workers
        bound, reason = self.engine.upper_bound(found, most, self.should_stop)
        if bound is None:
            _LOG.info("no deterministic bound from above: %s", reason)
            return None
        return bound + self.device_yearly

    def _run(
        self,
        name: str,
        inner: float,
        deadline: float,
        end: float,
        bounds: tuple[FloatArray, FloatArray],
        rows: list[ConvergenceRow],
    ) -> DecompositionResult:
        before = rows[-1].seconds if rows else 0.0

        extra = self.device_yearly

        def tell(record: IterationRecord) -> None:
            has_cost = math.isfinite(record.cost_mean)
            rows.append(
                ConvergenceRow(
                    before + record.seconds,
                    record.lower_bound + extra,
                    record.cost_mean + extra if has_cost else math.nan,
                    record.cost_high + extra if has_cost else math.nan,
                    record.gap_frac,
                    "whole numbers" if record.is_mixed_integer else "relaxed",
                )
            )
            self.on_progress(
                Progress(
                    name,
                    "solving",
                    record.lower_bound + extra,
                    record.cost_mean + extra if has_cost else None,
                    record.gap_frac if math.isfinite(record.gap_frac) else None,
                    max(0.0, end - time.monotonic()),
                )
            )

        found = self.engine.run(
            inner,
            deadline=deadline,
            x_bounds=bounds,
            on_progress=tell,
            should_stop=self.should_stop,
        )
        if not found.has_plan:
            raise NoPlanError(f"Stopped before there was a plan for '{name}'.")
        return found

    def _ignoring_outages(self, wish: Wish) -> SolvedPlan:
        """Bought and run as if nothing could fail, followed through what does."""
        name = wish.name
        started = time.monotonic()
        self.on_progress(Progress(name, "planning without outages"))
        if self._blind is None:
            graph = build_study_graph(
                self.study,
                self.feeder,
                self.windows,
                plans_for_outages=False,
                choices=self.choices,
            )
            attach_meters(graph, self.windows)
            engine = Engine(
                graph.graph,
                self.options.seed,
                self.options.workers,
                memory_bytes=self.options.memory_bytes,
            )
            self._blind = (graph, engine)
        graph, engine = self._blind
        deadline = started + self._limit_s(wish) * (1.0 - RESERVE)
        bounds = self._bounds(graph, wish)
        found = engine.run(
            BLIND_GAP, deadline=deadline, x_bounds=bounds, should_stop=self.should_stop
        )
        if not found.has_plan:
            raise NoPlanError(f"Stopped before there was a plan for '{name}'.")
        found = self._without_remnants(graph, engine, wish, found, BLIND_GAP, deadline)
        self.on_progress(Progress(name, "following the plan"))
        follower = replace(self._follower(graph, engine), breaks_ties_by_energy=True)
        follow = follower.follow(found.capacities[0], self.options.samples, self.options.seed)
        reached = found.termination is StopReason.GAP_REACHED
        facts = PlanFacts(
            name=name,
            kind=wish.kind,
            description=wish.description,
            bought=read_purchases(graph.first_stage, found.x),
            lower_bound=None,
            bound_upper=None,
            status="gap reached" if reached else self._stopped(),
            method="decomposed",
            method_reason="It is one plan without failures, whatever the size of the tree.",
            convergence=(),
            solve_seconds=time.monotonic() - started,
            device_changes=self.device_changes,
        )
        return self._evaluated(wish, facts, follow, graph, engine, found)

    def _evaluated(
        self,
        wish: Wish,
        facts: PlanFacts,
        follow: FollowResult,
        graph: StudyGraph,
        engine: Engine,
        found: DecompositionResult,
    ) -> SolvedPlan:
        study, bought = self.study_of(wish), facts.bought
        traces: tuple[Trace, ...] = ()
        audit: tuple[CheckLine, ...] = ()
        dispatches: Sequence[Operated] = ()
        if not wish.is_brief:
            capacity = found.capacities[0]
            follower = self._follower(graph, engine)
            if wish.ignores_outages:
                follower = replace(follower, breaks_ties_by_energy=True)
            traces, dispatches = plan_traces(self.study, follower, follow, capacity)
            bought = with_peak_purchase(self.study, self.windows, bought, dispatches)
            facts = replace(facts, bought=bought)
            audit = audit_operation(self.study, self.feeder, self.windows, bought, dispatches)
        result = build_plan_result(
            study, self.windows, follow, facts, traces, audit, self.options.seed
        )
        if not wish.is_brief:
            result = self._with_ac(result, bought, dispatches)
        return SolvedPlan(self._with_status(result), follow, bought)

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


def is_same_purchase(first: Purchases, second: Purchases) -> bool:
    """Whether two plans buy the same, to a watt; the demand that they decide is left out."""
    return bool(
        np.allclose(first.generator_kw, second.generator_kw, rtol=0.0, atol=SAME_KW)
        and np.allclose(first.storage_kw, second.storage_kw, rtol=0.0, atol=SAME_KW)
        and np.allclose(first.storage_kwh, second.storage_kwh, rtol=0.0, atol=SAME_KW)
        and np.array_equal(first.is_hardened, second.is_hardened)
    )


SAME_KW = 1e-3


def fixed_demand(found: Purchases, fixed: Purchases | None) -> Purchases:
    """Purchases as given, with the demand that the tree decided."""
    return found if fixed is None else replace(fixed, demand_kw=found.demand_kw)


def _gap(upper: float, lower: float, cost: float) -> float:
    return max(0.0, upper - lower) / max(abs(cost), 1e-9)
