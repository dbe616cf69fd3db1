"""The decomposition: plans forward, cuts backward, until the measured gap is small.

Enters: a ``ValueGraph`` (``xlplan.model.value_graph``). Leaves: ``DecompositionResult``.

One pass of ``Engine.run``:

1. first stage and roots in turn, until they agree well against the gap that is open;
2. the events that can strike the roots' plans, all of them or those that matter and a rotating
   part of the rest, each at the plan's own state;
3. chains of what may come after, drawn by weight;
4. the cuts of all these go into the pools, and where every event was followed the cost of
   following the plan is known up to its interval, and so is the gap.

A root may have an aim that is no expectation (``Family.aim``): what is then bounded and measured is
that aim, and every exit counts as much as it can in the tolerances.

Whole numbers are left to the first stage, and there to the time when the relaxed bound has
settled. This is stochastic dual dynamic programming (Pereira and Pinto 1991) on an acyclic graph.
"""

from __future__ import annotations

import logging
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.base.rng import stream
from xlplan.model.value_graph import Family, ValueGraph
from xlplan.solve.first_stage import FirstStage, FirstStagePlan, capacities_of, state_of
from xlplan.solve.follow import Follower, Following, RootPoint, Sampled, Term
from xlplan.solve.inner_bound import inner_bound
from xlplan.solve.member_cache import CACHE_BYTES, MemberCache
from xlplan.solve.node_solver import Measure, NodeRequest, NodeSolution, Share, new_pools
from xlplan.solve.result import (
    CostEstimate,
    DecompositionResult,
    IterationRecord,
    StopReason,
    relative_gap,
)
from xlplan.solve.savepoint import Saved, Savepoint
from xlplan.solve.stopping import (
    INNER_SHARE,
    Clock,
    is_relaxation_settled,
    must_measure_now,
)
from xlplan.solve.tables import gather_tables
from xlplan.solve.workers import Workers

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

_LOG = logging.getLogger(__name__)

Progress = Callable[[IterationRecord], None]
RequestMaker = Callable[[tuple[int, int], FloatArray, FloatArray], NodeRequest]

CACHE_SHARE = 0.2
"""Share of the memory allowed that all processes together may keep members in."""

POOR_AGREEMENT = 0.1
"""First stage and roots this far apart have hardly met yet."""

LEAST_OPEN_SHARE = 0.5
"""Share of the target below which a gap seen in a part of the events is not believed."""

LEAST_TURNS = 10
"""Turns of first stage and roots that a stopped run still makes while they are that far apart."""


@dataclass(frozen=True)
class EngineOptions:
    """How the work is cut up; none of these changes what is solved.

    n_sample_first, n_sample_most : chains drawn per pass, at first and when the interval is wide
    stride : a partial pass follows every so-manieth event, and those that mattered last time
    small_exits : with fewer events than this every pass is full
    full_every : so many partial passes, then a full one
    enumerate_up_to : with no more nodes on all paths than this every path is followed
    n_inner, n_pass : most turns of first stage and roots in a pass, most passes
    n_replica : kept models of a root's family for its other members, so that they can be shared
        out; the same for any number of workers
    first_gap_frac : gap that counts as open before one has been measured
    tolerance_share : share of the open gap that may be lost by leaving out slightly violated cuts
    """

    n_sample_first: int = 16
    n_sample_most: int = 512
    stride: int = 6
    small_exits: int = 200
    full_every: int = 4
    enumerate_up_to: int = 400
    n_inner: int = 20
    n_pass: int = 1000
    n_replica: int = 2
    first_gap_frac: float = 0.02
    tolerance_share: float = 0.03


@dataclass(frozen=True)
class _Plan:
    """A plan whose cost has been measured."""

    first: FirstStagePlan
    capacities: tuple[FloatArray, ...]
    cost: CostEstimate


class Engine:
    """Solves a value graph; cuts stay from run to run, whatever ``x`` is fixed to.

    Parameters
    ----------
    graph : ValueGraph
    seed : int, of the chains that are drawn
    workers : int, processes; 1 solves in this one
    options : EngineOptions
    savepoint : Savepoint or None, where to keep what is learnt
    resumes : bool, whether to go on from what the savepoint holds
    memory_bytes : int or None; a run that uses more, all processes together, stops with its best
        plan

    Use ``close`` or a ``with`` statement to end the processes.
    """

    def __init__(
        self,
        graph: ValueGraph,
        seed: int,
        workers: int = 1,
        options: EngineOptions | None = None,
        savepoint: Savepoint | None = None,
        resumes: bool = False,
        memory_bytes: int | None = None,
    ) -> None:
        self.graph, self.seed = graph, seed
        self.options = options or EngineOptions()
        self.memory_bytes = memory_bytes
        cache_bytes = CACHE_BYTES
        if memory_bytes is not None:
            cache_bytes = min(CACHE_BYTES, int(CACHE_SHARE * memory_bytes / (workers + 1)))
        self._cache = MemberCache(graph.families, cache_bytes)
        self.tables = gather_tables(graph, self._cache)
        self.pools = new_pools(graph, self.tables)
        self._first_stage = FirstStage(graph, self.tables)
        self._follower = Follower(graph, self.tables, self._cache)
        self.most_weight = max(_most_weight(graph.families[r.family]) for r in graph.roots)
        self._root_members = {(r.family, r.member) for r in graph.roots}
        self._root_families = {r.family for r in graph.roots}
        self._workers = Workers(
            graph, self.tables, self.pools, workers, self._work_weights(), self._cache
        )
        self._n_group = 0
        self.is_warm = False
        """Whether an earlier search has got as far as whole numbers: later ones begin there."""
        self._n_replica_used = 0
        self._n_path = self._follower.n_path(self.options.enumerate_up_to + 1)
        self._seconds_per_full: float = 0.0
        self._last_errors: list[FloatArray | None] = [None] * len(graph.roots)
        self._savepoint = savepoint
        self._saved: Saved | None = None
        if savepoint is not None and resumes:
            self._saved = savepoint.load(self.pools)
            if self._saved is not None:
                for batch in self._saved.cuts:
                    self.pools[batch.family].add(batch)
                self._n_group = self._saved.n_group

    def __enter__(self) -> Engine:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Ends the worker processes."""
        self._workers.close()

    # -- for others ----------------------------------------------------------------------------

    def value_of(
        self, family: int, member: int, states: FloatArray, capacity: FloatArray
    ) -> FloatArray:
        """What the cuts know about a node's value at some states, (n,), from (n, n_state)."""
        lower = float(self.tables.families[family].value_lower[member])
        values = [self.pools[family].value(member, state, capacity) for state in states]
        found: FloatArray = np.maximum(np.array(values, dtype=float), lower)
        return found

    def solve_nodes(
        self,
        requests: Sequence[NodeRequest],
        measure: Measure | None = None,
        should_stop: Callable[[], bool] | None = None,
    ) -> list[NodeSolution | None]:
        """Solves nodes with the cuts as they are, through the workers.

        Parameters
        ----------
        requests : sequence of NodeRequest; their replicas are chosen here
        measure : picklable, called where the node is solved with the family, the member and
            ``y``; what it returns is ``NodeSolution.measured``
        should_stop : asked now and then; what is not solved by then is None

        Returns
        -------
        list of NodeSolution in the order of the requests
        """
        return self._workers.solve([self._placed(r) for r in requests], measure, should_stop)

    def counts(self) -> dict[str, float]:
        """Counted events of all processes since the start."""
        counts = self._workers.counts()
        counts.pop("resident bytes", None)  # no count of events
        return counts

    def upper_bound(
        self,
        result: DecompositionResult,
        most_solves: int,
        should_stop: Callable[[], bool] | None = None,
    ) -> tuple[float | None, str]:
        """Deterministic bound from above of the cost at a result's decision.

        Parameters
        ----------
        result : DecompositionResult of this engine, with a plan
        most_solves : int, give up beforehand where more nodes would have to be solved
        should_stop : asked now and then

        Returns
        -------
        (bound, ""), or (None, why there is none)
        """
        if any(self.graph.families[r.family].exit_columns is not None for r in self.graph.roots):
            return None, "it is worked out for the expected cost alone"
        states = [state_of(r, c) for r, c in zip(self.graph.roots, result.capacities, strict=True)]
        found = inner_bound(
            self.graph,
            self._follower,
            result.capacities,
            states,
            lambda requests: self.solve_nodes(requests, should_stop=should_stop),
            most_solves,
        )
        if found.values is None:
            return None, found.reason
        total = sum(r.weight * v for r, v in zip(self.graph.roots, found.values, strict=True))
        return result.first_stage_cost + total, ""

    # -- the run -------------------------------------------------------------------------------

    def run(
        self,
        target_gap_frac: float,
        deadline: float | None = None,
        fixed_x: FloatArray | None = None,
        x_bounds: tuple[FloatArray, FloatArray] | None = None,
        on_progress: Progress | None = None,
        should_stop: Callable[[], bool] | None = None,
        enumerate_paths: bool | None = None,
    ) -> DecompositionResult:
        """Finds the best ``x`` and measures what following it costs.

        Parameters
        ----------
        target_gap_frac : float, stop at this gap
        deadline : value of ``time.monotonic()`` at which to stop, or None
        fixed_x : array, shape (n_x,), evaluate this decision only
        x_bounds : pair of arrays, narrower bounds of ``x``
        on_progress : called after every pass
        should_stop : asked now and then
        enumerate_paths : follow every path (small graphs); None: where there are few

        Returns
        -------
        DecompositionResult; the best plan with its true gap, whatever made the run stop
        """
        program = self.graph.first_stage
        lower, upper = x_bounds or (program.col_lower, program.col_upper)
        if fixed_x is not None:
            lower = upper = np.asarray(fixed_x, dtype=float)
        self._first_stage.set_bounds(lower, upper)
        self._first_stage.sync(self.pools)
        if enumerate_paths is None:
            enumerate_paths = self._n_path <= self.options.enumerate_up_to
        run = _Run(self, target_gap_frac, Clock(deadline, should_stop), on_progress)
        run.is_enumerating = enumerate_paths
        if self._saved is not None and self._saved.is_integer_phase:
            run.is_integer_phase = True
            self._saved = None  # its phase is that of the run that was stopped
        run.is_integer_phase = run.is_integer_phase or self.is_warm
        try:
            reason = run.go()
        except KeyboardInterrupt:
            run.clock.is_interrupted = True
            reason = StopReason.INTERRUPTED
        if reason is not StopReason.GAP_REACHED:
            run.save()
        has_choice = self._first_stage.has_integers  # given decisions say little of the others
        self.is_warm = self.is_warm or (run.is_integer_phase and has_choice)
        return run.result(reason)

    # -- parts used by the run -----------------------------------------------------------------

    def next_group(self) -> int:
        """A number for the cuts of one solve."""
        self._n_group += 1
        return self._n_group

    def _placed(self, request: NodeRequest) -> NodeRequest:
        """Chooses the kept model: the roots' own is left to them."""
        is_root = (request.family, request.member) in self._root_members
        if is_root or request.family not in self._root_families:
            return request if request.replica == 0 else replace(request, replica=0)
        # Equal members go to the same model, whatever else is in the batch.
        return replace(request, replica=1 + request.member % self.options.n_replica)

    def solve_batch(
        self, requests: Sequence[NodeRequest], clock: Clock
    ) -> list[NodeSolution | None]:
        """Solves for the run, watching the clock."""
        placed = [self._placed(r) for r in requests]
        return self._workers.solve(placed, None, clock.should_stop)

    def add_cuts(self, solutions: Sequence[NodeSolution | None]) -> int:
        """New cuts into the pools, in order; their number."""
        n = 0
        for solution in solutions:
            for batch in solution.cuts if solution is not None else ():
                self.pools[batch.family].add(batch)
                n += len(batch)
        return n

    def add_cuts_of(self, found: Following) -> int:
        """Cuts found while following, in order; their number."""
        for batch in found.cuts:
            self.pools[batch.family].add(batch)
        return sum(len(batch) for batch in found.cuts)

    def _work_weights(self) -> dict[tuple[int, int], float]:
        """Expected work of each kept model, in columns solved per pass."""
        weights: dict[tuple[int, int], float] = {}
        root_families = {r.family for r in self.graph.roots}
        for i, family in enumerate(self.graph.families):
            size = float(family.program.n_col)
            if i in root_families:
                for replica in range(self.options.n_replica + 1):
                    weights[i, replica] = 20.0 * size
            else:
                weights[i, 0] = size * family.n_member
        return weights


def _most_weight(family: Family) -> float:
    """Largest factor by which the value of a family's exits can count beyond their weight."""
    return 1.0 if family.aim is None else family.aim.most_weight


class _Run:
    """State of one call of ``Engine.run``."""

    def __init__(
        self, engine: Engine, target_gap_frac: float, clock: Clock, on_progress: Progress | None
    ) -> None:
        self.engine, self.graph, self.options = engine, engine.graph, engine.options
        self.first_stage = engine._first_stage
        self.target, self.clock, self.on_progress = target_gap_frac, clock, on_progress
        self.is_enumerating = False
        self.is_integer_phase = not self.first_stage.has_integers
        self.lower_bound = -np.inf
        self.relaxed_bounds: list[float] = []
        self.gap_abs = np.inf
        self.best: _Plan | None = None
        self.current: FirstStagePlan | None = None
        self.log: list[IterationRecord] = []
        self.n_sample = self.options.n_sample_first
        self.rng = stream(engine.seed, "chains")
        self.n_since_full = 0
        self._terms: list[list[Term]] = []
        self.n_solve = 0
        self.n_cut = 0
        self.most_weight = engine.most_weight
        """By how much more than by its chance what follows an exit of a root can count."""

    # -- passes --------------------------------------------------------------------------------

    def go(self) -> StopReason:
        """Passes until something says stop."""
        for i_pass in range(self.options.n_pass):
            begin = self.clock.seconds()
            points = self._agree(is_first=i_pass == 0)
            self._solve_beside(points)
            is_partial = self._is_partial(points)
            found = self._look(points, is_partial)
            self.n_cut += self.engine.add_cuts_of(found)
            if not is_partial and found.estimate is not None:
                self._measured(points, found, self.clock.seconds() - begin)
            self._record(found)
            if self.engine._savepoint is not None and self.engine._savepoint.is_due():
                self.save()
            if self._is_reached():
                return StopReason.GAP_REACHED
            if self.clock.should_stop():
                self._finish_with_integers()
                return self.clock.reason()
            limit = self.engine.memory_bytes
            if limit is not None and self.engine._workers.resident_bytes() > limit:
                _LOG.warning("more memory in use than allowed: stopping with the best plan")
                self._finish_with_integers()
                return StopReason.MEMORY_LIMIT
            if not self.is_integer_phase:
                self.relaxed_bounds.append(self.lower_bound)
                half = 0.5 * self._target_abs()
                if is_relaxation_settled(self.relaxed_bounds, self.gap_abs, half, self.clock):
                    self.is_integer_phase = True
                    _LOG.info("first stage in whole numbers from pass %d on", i_pass + 1)
        self._finish_with_integers()
        return StopReason.PASS_LIMIT

    def save(self) -> None:
        """Keeps what is learnt, where that is asked for."""
        if self.engine._savepoint is not None:
            self.engine._savepoint.save(
                self.engine.pools, self.engine._n_group, self.is_integer_phase
            )

    def _agree(self, is_first: bool) -> list[RootPoint]:
        """First stage and roots in turn until they agree."""
        points: list[RootPoint] = []
        for i_turn in range(self.options.n_inner):
            first = self._decide()
            self.current = first
            self.lower_bound = max(self.lower_bound, first.bound)
            points = self._solve_roots(first)
            values = np.array([p.solution.value for p in points])
            weights = np.array([r.weight for r in self.graph.roots])
            if not (self.first_stage.lower < self.first_stage.upper).any():
                self.lower_bound = max(self.lower_bound, first.cost + float(weights @ values))
                break
            apart = first.cost + float(weights @ values) - first.bound
            if apart <= self._inner_tolerance(first, is_first):
                break
            # Stopped or not, a plan that first stage and roots see quite differently is no plan
            # worth following: a few more turns are cheap against following it.
            is_poor = apart > POOR_AGREEMENT * max(abs(first.bound), 1e-9) and i_turn < LEAST_TURNS
            if self.clock.should_stop() and not is_poor:
                break
        return points

    def _inner_tolerance(self, first: FirstStagePlan, is_first: bool) -> float:
        size = max(abs(first.bound), 1e-9)
        if is_first or not np.isfinite(self.gap_abs):
            return self.options.first_gap_frac * size
        return max(INNER_SHARE * self._open_gap(), 0.1 * self.target * size)

    def _decide(self) -> FirstStagePlan:
        """The first stage as this phase asks for it."""
        if self.is_integer_phase and self.first_stage.has_integers:
            size = max(abs(self.lower_bound), 1e-9) if np.isfinite(self.lower_bound) else 1.0
            open_frac = self.gap_abs / size if np.isfinite(self.gap_abs) else 0.01
            gap = float(np.clip(0.3 * open_frac, 0.2 * self.target, 0.01))
            found = self.first_stage.solve_integer(max(gap, 1e-9), self.clock.remaining())
            if found is not None:
                return found
            _LOG.warning("no time for a first stage in whole numbers")
        return self.first_stage.solve_relaxed()

    def _solve_roots(self, first: FirstStagePlan) -> list[RootPoint]:
        """Every root at a decision; their cuts go to the first stage."""
        graph, engine = self.graph, self.engine
        points, requests = [], []
        tolerance = self._root_tolerance(first)
        for root in graph.roots:
            capacity = capacities_of(root, first.x, graph.capacity_lower, graph.capacity_upper)
            requests.append(
                NodeRequest(
                    root.family,
                    root.member,
                    state_of(root, capacity),
                    capacity,
                    group=engine.next_group(),
                    cut_tolerance=tolerance / max(root.weight, 1e-12) / self.most_weight,
                    wants_primal=graph.families[root.family].exit_columns is not None,
                )
            )
        # Not watched by the clock: without the roots there is no plan.
        solutions = engine._workers.solve([engine._placed(r) for r in requests])
        self.n_solve += len(requests)
        self.n_cut += engine.add_cuts(solutions)
        self.first_stage.sync(engine.pools)
        for i, (request, solution) in enumerate(zip(requests, solutions, strict=True)):
            if solution is None or solution.has_failed:
                raise RuntimeError(f"root {graph.roots[i].name} could not be solved")
            exits = engine._follower.exits(request.family, request.member, request.capacity)
            outcomes = None
            if solution.y is not None:
                outcomes = graph.families[request.family].outcomes(solution.y)
            points.append(RootPoint(i, request.capacity, request.state, solution, exits, outcomes))
        return points

    def _solve_beside(self, points: list[RootPoint]) -> None:
        """Solves the nodes beside the roots, for their cuts."""
        requests = []
        for point in points:
            beside = self.graph.roots[point.i_root].beside
            if beside is not None:
                group = self.engine.next_group()
                requests.append(NodeRequest(*beside, point.state, point.capacity, group=group))
        if requests:
            self.n_cut += self.engine.add_cuts(self.engine.solve_batch(requests, self.clock))
            self.n_solve += len(requests)

    def _root_tolerance(self, first: FirstStagePlan) -> float:
        """By how much the roots together may be too low, weighted."""
        gap = self._open_gap()
        if not np.isfinite(gap):
            gap = self.options.first_gap_frac * max(abs(first.bound), 1e-9)
        if self.is_enumerating:
            gap = 0.0
        return self.options.tolerance_share * gap / max(len(self.graph.roots), 1)

    # -- looking at what may happen ------------------------------------------------------------

    def _is_partial(self, points: list[RootPoint]) -> bool:
        """Whether this pass follows only a part of the events."""
        n_exit = sum(len(p.exits) for p in points)
        if self.is_enumerating or n_exit <= self.options.small_exits:
            return False
        if not self.is_integer_phase and self.n_since_full >= self.options.full_every:
            return False
        has_plan = self.best is not None
        if must_measure_now(self.clock, self.engine._seconds_per_full or 0.0, has_plan):
            return False
        is_due = self.n_since_full >= self.options.full_every or self._seems_reached()
        return not is_due

    def _seems_reached(self) -> bool:
        """Whether the last partial pass found little that the cuts did not know."""
        return self._open_seen <= self._target_abs()

    _open_seen = float("inf")

    def _open_gap(self) -> float:
        """Gap that tolerances go by: the measured one, or what the last pass saw if that is less.

        The gap is measured in full passes only; tolerances of a gap long closed would keep the
        bound from rising in the passes between.
        """
        return min(self.gap_abs, max(self._open_seen, LEAST_OPEN_SHARE * self._target_abs()))

    def _target_abs(self) -> float:
        """The target in money."""
        return self.target * max(abs(self.lower_bound), 1e-12)

    def _request_maker(self, points: list[RootPoint]) -> RequestMaker:
        """Makes requests for what follows these plans: with cuts, as close as the gap asks for."""
        engine, tolerance = self.engine, self._event_tolerance(points)

        def request(child: tuple[int, int], state: FloatArray, capacity: FloatArray) -> NodeRequest:
            return NodeRequest(
                child[0],
                child[1],
                state,
                capacity,
                group=engine.next_group(),
                cut_tolerance=tolerance,
            )

        return request

    def _look(self, points: list[RootPoint], is_partial: bool) -> Following:
        """Follows the plans of the roots."""
        engine, request = self.engine, self._request_maker(points)
        first = self.current
        assert first is not None

        def solve(requests: Sequence[NodeRequest]) -> list[NodeSolution | None]:
            return engine.solve_batch(requests, self.clock)

        if self.is_enumerating:
            found = engine._follower.enumerate(points, solve, request, first.cost)
        else:
            chained = self._chain(points, request) if is_partial else None
            selected = [self._select(p, is_partial) for p in points]
            shares = [
                self._left_out(p, s) if is_partial else {}
                for p, s in zip(points, selected, strict=True)
            ]

            def first_request(point: RootPoint, j: int, child: tuple[int, int]) -> NodeRequest:
                e = int(point.exits.index[j])
                made = request(child, point.solution.out_states[e], point.capacity)
                return replace(made, share=shares[point.i_root].get(child[0]))

            found = engine._follower.follow(
                points,
                selected,
                0 if is_partial else self.n_sample,
                solve,
                request,
                first_request,
                first.cost,
                self.rng,
                is_partial,
            )
            self._terms = found.terms
            if chained is not None:
                found.sampled_part = chained.total
                found.n_solve += chained.n_solve
            self._learn(points, selected, found)
        self.n_solve += found.n_solve
        self.n_since_full = self.n_since_full + 1 if is_partial else 0
        return found

    def _chain(
        self,
        points: list[RootPoint],
        request: RequestMaker,
    ) -> Sampled | None:
        """Draws chains from the last pass's events; their cuts serve this pass's events.

        Nothing is measured here, so cuts go into the pools at once.
        """
        if not any(self._terms):
            return None
        engine = self.engine

        def solve(requests: Sequence[NodeRequest]) -> list[NodeSolution | None]:
            solutions = engine.solve_batch(requests, self.clock)
            self.n_cut += engine.add_cuts(solutions)
            return solutions

        return engine._follower.sample(
            [p.i_root for p in points],
            [p.capacity for p in points],
            self._terms,
            self.n_sample,
            solve,
            request,
            self.rng,
        )

    def _event_tolerance(self, points: list[RootPoint]) -> float:
        """By how much an event's value may be too low."""
        total = sum(self.graph.roots[p.i_root].weight * float(p.exits.weight.sum()) for p in points)
        gap = self._open_gap()
        if self.is_enumerating or total <= 0.0:
            return 0.0
        if not np.isfinite(gap):
            gap = self.options.first_gap_frac * max(abs(self.lower_bound), 1e-9)
        return self.options.tolerance_share * gap / (total * self.most_weight)

    def _select(self, point: RootPoint, is_partial: bool) -> BoolArray:
        """Which events to follow in this pass, (n,) over the exits that count."""
        n = len(point.exits)
        if not is_partial:
            return np.ones(n, dtype=bool)
        stride = self.options.stride
        child = point.exits.child
        # A different part of each family's members, so that neighbours fill in by sharing.
        chosen: BoolArray = (child[:, 1] + 5 * child[:, 0]) % stride == len(self.log) % stride
        last = self.engine._last_errors[point.i_root]
        if last is not None:
            error = np.nan_to_num(last[point.exits.index])
            order = np.argsort(-error, kind="stable")[: max(n // 6, 1)]
            large = order[np.cumsum(error[order]) <= 0.7 * error.sum() + error[order[:1]]]
            chosen[large[error[large] > 0.0]] = True
        return chosen

    def _left_out(self, point: RootPoint, selected: BoolArray) -> dict[int, Share]:
        """By family: members that this pass leaves out, their states and what is known of them."""
        child, index = point.exits.child, point.exits.index
        shares = {}
        for i_family in np.unique(child[:, 0]).tolist():
            left = np.flatnonzero(~selected & (child[:, 0] == i_family))
            # A family may be reached by several exits of one period: one state will do.
            members, first = np.unique(child[left, 1], return_index=True)
            places = index[left[first]]
            shares[i_family] = Share(
                members, point.solution.out_states[places], point.solution.theta[places]
            )
        return shares

    def _learn(self, points: list[RootPoint], selected: list[BoolArray], found: Following) -> None:
        """Remembers where the cuts were off, and guesses the gap from a part of the events."""
        seen = 0.0
        for point, chosen, error in zip(points, selected, found.errors, strict=True):
            last = self.engine._last_errors[point.i_root]
            new = np.where(np.isnan(error), np.nan if last is None else last, error)
            self.engine._last_errors[point.i_root] = new
            weight = point.exits.weight
            followed = float(weight[chosen].sum())
            if followed > 0.0:
                scale = float(weight.sum()) / followed
                seen += self.graph.roots[point.i_root].weight * float(np.nansum(error)) * scale
        self._open_seen = seen + found.sampled_part

    # -- what was found ------------------------------------------------------------------------

    def _measured(self, points: list[RootPoint], found: Following, seconds: float) -> None:
        """Takes the estimate of a full pass in."""
        estimate = found.estimate
        assert estimate is not None
        assert self.current is not None
        self.engine._seconds_per_full = seconds
        self.gap_abs = max(estimate.high - self.lower_bound, 0.0)
        is_plan = self.is_integer_phase and self._is_whole(self.current.x)
        if is_plan and (self.best is None or estimate.high < self.best.cost.high):
            self.best = _Plan(self.current, tuple(p.capacity for p in points), estimate)
        if self.best is not None and self.is_integer_phase:
            self.gap_abs = max(self.best.cost.high - self.lower_bound, 0.0)
        allowed = 0.25 * max(self.target * abs(estimate.mean), 0.3 * self.gap_abs)
        if found.half_width > allowed:
            factor = 2 if found.half_width < 2.0 * allowed else 4
            self.n_sample = min(self.n_sample * factor, self.options.n_sample_most)

    def _is_whole(self, x: FloatArray) -> bool:
        integers = self.graph.first_stage.is_integer
        return bool((np.abs(x[integers] - np.round(x[integers])) <= 1e-9).all())

    def _is_reached(self) -> bool:
        if self.best is None or not self.is_integer_phase:
            return False
        cost = self.best.cost
        return self._gap() <= self.target and np.isfinite(cost.high)

    def _gap(self) -> float:
        """Upper end of the best plan's cost against the bound, over its mean."""
        if self.best is None:
            return float("inf")
        cost = self.best.cost
        difference = max(cost.high - self.lower_bound, 0.0)
        if difference <= 1e-12 * max(abs(cost.high), abs(self.lower_bound)):
            return 0.0
        if not np.isfinite(difference) or cost.mean == 0.0:
            return relative_gap(cost.high, self.lower_bound)
        return difference / abs(cost.mean)

    def _record(self, found: Following) -> None:
        estimate = found.estimate
        record = IterationRecord(
            i_pass=len(self.log) + 1,
            is_mixed_integer=self.is_integer_phase and self.first_stage.has_integers,
            seconds=self.clock.seconds(),
            lower_bound=self.lower_bound,
            cost_mean=estimate.mean if estimate is not None else float("nan"),
            cost_high=estimate.high if estimate is not None else float("nan"),
            gap_frac=self._gap(),
            n_solve=self.n_solve,
            n_cut=self.n_cut,
        )
        self.log.append(record)
        _LOG.debug("%s", record)
        if self.on_progress is not None:
            self.on_progress(record)

    def _finish_with_integers(self) -> None:
        """At a stop without a measured plan: whole numbers, and a bound of the cost from above."""
        if self.best is not None or self.current is None:
            return
        first = self.current
        if self.first_stage.has_integers and not self._is_whole(first.x):
            found = self.first_stage.solve_integer(0.01, 10.0)
            if found is None:
                return
            first = found
            self.current = first
        points = self._solve_roots(first)
        cost = self._bounded_cost(first, points)
        self.best = _Plan(first, tuple(p.capacity for p in points), cost)

    def _bounded_cost(self, first: FirstStagePlan, points: list[RootPoint]) -> CostEstimate:
        """Cost of following with every exit at its upper bound: true, and usually far too high."""
        by_root, n = [], 0
        for point in points:
            value = point.solution.value
            extra = np.zeros(len(point.solution.theta))
            for e, weight, child in zip(
                point.exits.index, point.exits.weight, point.exits.child, strict=True
            ):
                upper = self.engine._follower.upper((int(child[0]), int(child[1])))
                more = float(weight) * max(upper - float(point.solution.theta[e]), 0.0)
                value += more
                extra[e] += more
                n += 1
            by_root.append(value if point.outcomes is None else point.value(extra))
        weights = [r.weight for r in self.graph.roots]
        high = first.cost + sum(w * v for w, v in zip(weights, by_root, strict=True))
        return CostEstimate(high, high, high, False, 0, tuple(by_root), n_unmeasured=n)

    def result(self, reason: StopReason) -> DecompositionResult:
        """What the run has to show."""
        if self.best is None and self.current is not None:
            self._finish_with_integers()
        n_root = len(self.graph.roots)
        plan = self.best
        nothing = CostEstimate(
            float("inf"), float("inf"), float("inf"), False, 0, (float("inf"),) * n_root
        )
        return DecompositionResult(
            termination=reason,
            has_plan=plan is not None,
            lower_bound=self.lower_bound,
            x=plan.first.x if plan is not None else np.full(self.first_stage.n_x, np.nan),
            capacities=plan.capacities if plan is not None else (),
            cost=plan.cost if plan is not None else nothing,
            first_stage_cost=plan.first.cost if plan is not None else float("nan"),
            gap_frac=self._gap(),
            log=tuple(self.log),
            seconds=self.clock.seconds(),
            counts={**self.engine.counts(), "node": float(self.n_solve), "cut": float(self.n_cut)},
        )
