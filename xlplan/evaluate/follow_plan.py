"""What it costs to follow a plan, and what else happens: exact for first failures, then sampled.

A plan is followed from the start of a window until something fails; the event is then run by its
own program, and after the repair the rest of the window is planned anew. With thinned chances
(hardening bought) ``f_k p_kw`` of a first real failure, the expectation of every metric is

    sum_k S_k plan_k + S_T end + sum_kw f_k p_kw (event_kw + J_{k+1+tau}(s'))

The events of the first plan are solved one by one, all of them. For the continuation ``J`` the same
numbers serve a second time: if every later event and plan were like those of the first plan, the
expectation would follow from the chances of being in service (``Clock.occupancy``); that is the
*base*. What is left is the difference that the state after an event makes (a store not yet full,
say). It is 0 where nothing has a memory, and is sampled along random histories, pathwise against
the base, with the cuts of ``V`` as control variate; on small trees every history is enumerated.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from xlplan.base.errors import NoPlanError
from xlplan.base.rng import stream
from xlplan.evaluate.meters import PlanReading, read_solution
from xlplan.evaluate.metrics import COST_PARTS, Slots
from xlplan.evaluate.outcomes import Noise, WindowOutcomes, followed_outcomes, return_period
from xlplan.model.aimed_plan import AimedPlanFamily
from xlplan.model.risk_aim import aim_of
from xlplan.model.study_graph import StudyGraph
from xlplan.model.tree_size import count_window
from xlplan.model.value_graph import Family
from xlplan.outages.clock import Clock
from xlplan.outages.window_model import WindowModel
from xlplan.solve.node_solver import NodeRequest, NodeSolution

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

ENUMERATION_LIMIT = 3000
"""Histories of a window are enumerated up to this many nodes: some seconds of solving."""

NORMAL_95 = 1.959964
"""Two-sided 95 % point of the normal distribution."""

MOST_FAILURES = 60
"""A history is cut off after this many failures in one window; the chance is below rounding."""


class NodeService(Protocol):
    """Whoever solves nodes: the engine."""

    def solve_nodes(
        self, requests: Sequence[NodeRequest], measure: Callable[..., object] | None = None
    ) -> Sequence[NodeSolution | None]:
        """Solves nodes; each solution carries what ``measure`` read."""


Guide = Callable[[int, int, FloatArray], float]
"""(window, member, state) -> value of the cuts of ``V`` there."""


@dataclass(frozen=True)
class WindowFollow:
    """One window, per occurrence, in the metrics of ``Slots``.

    plan : PlanReading of the first plan; ``events`` (n_period, n_scenario, n_slot)
    first_chance : (n_period, n_scenario), chance of a first real failure
    in_service : (n_period + 1,); ``event_count`` (n_period, n_scenario), expected real failures
    base, correction : (n_slot,); their sum is the expectation
    sample_cost : (n_sample,), cost correction of each history (mean: the cost's correction)
    expected_cost, standard_error : float, per occurrence
    solver_plan_cost, solver_event_cost : what the programs say of the same operation, the plan
        weighted by ``clock_plan``; None where the method has no such programs
    """

    clock: Clock
    plan: PlanReading
    events: FloatArray
    first_chance: FloatArray
    in_service: FloatArray
    event_count: FloatArray
    base: FloatArray
    correction: FloatArray
    sample_cost: FloatArray
    expected_cost: float
    standard_error: float
    clock_plan: FloatArray
    solver_plan_cost: float | None
    solver_event_cost: float | None
    outcomes: WindowOutcomes | None = None
    """Where bad outcomes have a weight: what may happen in an occurrence and what it costs."""

    @property
    def metrics(self) -> FloatArray:
        """Expected metrics of one occurrence, (n_slot,)."""
        return self.base + self.correction

    @property
    def expected_events(self) -> float:
        """Expected number of real failures in one occurrence."""
        return float(self.event_count.sum())


@dataclass(frozen=True)
class FollowResult:
    """Cost of running all windows for a year, with its 95 % interval."""

    windows: tuple[WindowFollow, ...]
    occurrences: FloatArray
    slots: Slots
    is_enumerated: bool
    n_sample: int

    @property
    def running_cost(self) -> float:
        """Expected cost of all windows, per year."""
        costs = np.array([window.expected_cost for window in self.windows])
        return float(self.occurrences @ costs)

    @property
    def half_width(self) -> float:
        """Half of the 95 % interval of ``running_cost``."""
        errors = self.occurrences * np.array([w.standard_error for w in self.windows])
        return NORMAL_95 * float(np.sqrt(np.square(errors).sum()))

    @property
    def tail_cost(self) -> float | None:
        """Cost of a year whose every occurrence costs the mean of its worst outcomes, or None."""
        tails = [window.outcomes.tail_cost for window in self.windows if window.outcomes]
        if not tails:
            return None
        return float(self.occurrences @ np.array(tails))

    @property
    def aim_half_width(self) -> float:
        """Half of the 95 % interval of the aim (mean and worst outcomes), per year."""
        errors = self.occurrences * np.array(
            [w.outcomes.standard_error if w.outcomes else w.standard_error for w in self.windows]
        )
        return NORMAL_95 * float(np.sqrt(np.square(errors).sum()))

    def aimed(self) -> tuple[float, float]:
        """What plans are chosen by, per year, and half of its 95 % interval."""
        tail = self.tail_cost
        if tail is None:
            return self.running_cost, self.half_width
        outcomes = self.windows[0].outcomes
        assert outcomes is not None
        weight = outcomes.aim.weight_frac
        return (1.0 - weight) * self.running_cost + weight * tail, self.aim_half_width

    def difference_half_width(self, other: FollowResult) -> float:
        """Half of the 95 % interval of the difference of two costs, on the same histories."""
        variance = 0.0
        for n, mine, theirs in zip(self.occurrences, self.windows, other.windows, strict=True):
            if len(mine.sample_cost) == len(theirs.sample_cost) and len(mine.sample_cost) > 1:
                paired = mine.sample_cost - theirs.sample_cost
                variance += n**2 * float(paired.var(ddof=1)) / len(paired)
            else:
                variance += n**2 * (mine.standard_error**2 + theirs.standard_error**2)
        return NORMAL_95 * float(np.sqrt(variance))


@dataclass(frozen=True)
class Follower:
    """Follows plans of one graph at given capacities.

    ``breaks_ties_by_energy``: among equal optima the plan with the most stored energy summed over
    the periods (the plan ignoring outages, model.md section 6).
    """

    graph: StudyGraph
    windows: tuple[WindowModel, ...]
    service: NodeService
    guide: Guide
    breaks_ties_by_energy: bool = False

    def follow(self, capacity: FloatArray, n_sample: int, seed: int) -> FollowResult:
        """Cost and metrics of following the plan.

        Parameters
        ----------
        capacity : array, shape (n_capacity,), in service
        n_sample : int, least number of sampled histories over all windows
        seed : int

        Returns
        -------
        FollowResult
        """
        counts = [count_window(window).n_node for window in self.windows]
        enumerates = max(counts) <= ENUMERATION_LIMIT
        shares = allocate(self.windows, n_sample)
        plans = self._first_plans(capacity)
        results = []
        for i, window in enumerate(self.windows):
            results.append(
                self._follow_window(i, window, capacity, plans[i], enumerates, shares[i], seed)
            )
        return FollowResult(
            windows=tuple(results),
            occurrences=np.array([w.series.occurrences_per_year for w in self.windows]),
            slots=Slots(len(self.graph.models[0].study.loads)),
            is_enumerated=enumerates,
            n_sample=0 if enumerates else sum(len(r.sample_cost) for r in results),
        )

    def _first_plans(self, capacity: FloatArray) -> list[NodeSolution]:
        requests = []
        for i, root in enumerate(self.graph.graph.roots):
            state = root.state_matrix @ capacity + root.state_offset
            requests.append(self.plan_request(i, 0, state, capacity))
        return self.solve(requests, read_solution)

    def solve(
        self, requests: Sequence[NodeRequest], measure: Callable[..., object]
    ) -> list[NodeSolution]:
        """Solves nodes, all of them; raises NoPlanError naming one that cannot be solved."""
        solutions = []
        for request, solution in zip(
            requests, self.service.solve_nodes(requests, measure), strict=True
        ):
            if solution is None or solution.has_failed:
                name = self.graph.graph.families[request.family].name
                raise NoPlanError(
                    f"The program of '{name}' from period {request.member} on could not be solved, "
                    "so the plan's cost is not known. The log (--log) names the model file."
                )
            solutions.append(solution)
        return solutions

    def plan_request(
        self, i_window: int, member: int, state: FloatArray, capacity: FloatArray
    ) -> NodeRequest:
        """Asks for the plan of a window from a period on."""
        places = self.graph.windows[i_window]
        is_first = member == 0
        family = (self.graph.first_plan_family if is_first else self.graph.plan_family)(i_window)
        second = None
        if self.breaks_ties_by_energy:
            second = np.zeros(family.program.n_col)
            energy = family.columns["energy_kwh"][member:]
            np.add.at(second, energy[energy >= 0], -1.0)
        return NodeRequest(
            places.first_plan if is_first else places.plan,
            member,
            state,
            capacity,
            second,
            wants_primal=isinstance(family, AimedPlanFamily),
        )

    def event_request(
        self, i_window: int, w: int, k: int, state: FloatArray, capacity: FloatArray
    ) -> NodeRequest:
        """Asks for the event of scenario ``w`` whose failure strikes in period ``k``."""
        family = self.graph.windows[i_window].events[w]
        return NodeRequest(family, k, state, capacity)

    def _follow_window(
        self,
        i_window: int,
        window: WindowModel,
        capacity: FloatArray,
        plan_solution: NodeSolution,
        enumerates: bool,
        n_sample: int,
        seed: int,
    ) -> WindowFollow:
        layout = self.graph.layout
        slots = Slots(len(self.graph.models[0].study.loads))
        hardened = capacity[layout.hardening(0) : layout.hardening(0) + layout.n_measure]
        avoided = avoided_shares(window, hardened)
        clock = window.clock.thinned(avoided)
        plan = plan_solution.measured
        assert isinstance(plan, PlanReading)
        n_period, n_scenario = window.series.n_period, len(window.scenarios)
        first = clock.survival[:-1, None] * clock.failure_chance[:, None] * clock.scenario_chance
        pairs = np.argwhere(first > 0.0)
        requests = [
            self.event_request(i_window, int(w), int(k), plan.states[k], capacity) for k, w in pairs
        ]
        solutions = self.solve(requests, read_solution)
        events = np.zeros((n_period, n_scenario, slots.n_slot))
        after = np.zeros((n_period, n_scenario, layout.n_state))
        solver_event_cost = 0.0
        for (k, w), solution in zip(pairs, solutions, strict=True):
            events[k, w] = np.asarray(solution.measured)
            after[k, w] = solution.out_states[0]
            solver_event_cost += float(first[k, w]) * solution.cost
        in_service, count = clock.occupancy()
        base = expected_metrics(clock, plan.metrics, events)
        settings = self.graph.models[0].study.settings
        charged = settings.demand_charge_per_kw_year > 0.0 and window.series.counts_for_demand
        aim = aim_of(settings)
        if avoided.any() and (charged or aim is not None):
            # Only the first plan is held to the demand limit and to the aim: after an avoided
            # failure the model plans anew without them, so that moment counts as an event that
            # lasts no time.
            arrivals = _with_avoided(window.clock, avoided)
            events_seen = np.concatenate([events, np.zeros((n_period, 1, slots.n_slot))], axis=1)
            after_seen = np.concatenate([after, plan.states[:, None, :]], axis=1)
        else:
            arrivals, events_seen, after_seen = clock, events, after
        history = _History(
            self, i_window, window, arrivals, plan, events_seen, after_seen, capacity, slots
        )
        noise = None
        if enumerates:
            correction, by_first = history.enumerate()
            samples = np.zeros(0)
        else:
            correction, samples, by_first, noise = history.sample(n_sample, seed)
        outcomes = None
        if aim is not None:
            outcomes = followed_outcomes(
                aim,
                arrivals,
                slots.cost(plan.metrics),
                slots.cost(events_seen),
                n_scenario,
                by_first,
                noise,
            )
        n = len(samples)
        error = float(samples.std(ddof=1) / np.sqrt(n)) if n > 1 else 0.0
        return WindowFollow(
            clock=clock,
            plan=plan,
            events=events,
            first_chance=first,
            in_service=in_service,
            event_count=count,
            base=base,
            correction=correction,
            sample_cost=samples,
            expected_cost=float(slots.cost(base + correction)),
            standard_error=error,
            clock_plan=self.graph.plan_family(i_window).survival,
            solver_plan_cost=_own_cost(self.graph.first_plan_family(i_window), plan_solution),
            solver_event_cost=solver_event_cost,
            outcomes=outcomes,
        )


def _own_cost(family: Family, solution: NodeSolution) -> float:
    """Expected cost of a plan's own periods, whatever its aim is."""
    if isinstance(family, AimedPlanFamily):
        assert solution.y is not None
        assert family.expected_cost is not None
        return float(family.expected_cost @ solution.y)
    return solution.cost


def expected_metrics(clock: Clock, plan: FloatArray, events: FloatArray) -> FloatArray:
    """Expected metrics of one occurrence if every plan and event is like those of the first plan.

    Parameters
    ----------
    clock : Clock of real failures
    plan : array, shape (n_period + 1, n_slot), by period, then the end of the window
    events : array, shape (n_period, n_scenario, n_slot)

    Returns
    -------
    array, shape (n_slot,)
    """
    in_service, count = clock.occupancy()
    reached = in_service.copy()
    # An event that comes back just at the end has the end of the window in it already.
    for w, tau in enumerate(clock.event_periods):
        if tau < clock.n_period:
            reached[-1] -= count[clock.n_period - 1 - tau, w]
    total: FloatArray = reached @ plan + np.tensordot(count, events, axes=2)
    return total


def avoided_shares(window: WindowModel, hardened: FloatArray) -> FloatArray:
    """Share of each scenario's failures that the measures bought avoid, (n_scenario,)."""
    return np.array(
        [
            max((share for m, share in scenario.hardening if hardened[m] > 0.5), default=0.0)
            for scenario in window.scenarios
        ]
    )


def _with_avoided(clock: Clock, avoided: FloatArray) -> Clock:
    """Potential failures with the avoided ones as one more scenario, of no length."""
    real = clock.scenario_chance * (1.0 - avoided)
    nothing = (clock.scenario_chance * avoided).sum(axis=1, keepdims=True)
    rate = clock.rate_per_year
    return replace(
        clock,
        rate_per_year=np.hstack(
            [rate * (1.0 - avoided), (rate * avoided).sum(axis=1, keepdims=True)]
        ),
        scenario_chance=np.hstack([real, nothing]),
        event_periods=np.append(clock.event_periods, 0),
    )


def allocate(windows: Sequence[WindowModel], n_sample: int) -> list[int]:
    """Histories per window: by how often a repair ends within it and what hangs on it."""
    size = []
    for window in windows:
        clock = window.clock
        first = clock.survival[:-1] * clock.failure_chance
        size.append(
            window.series.occurrences_per_year
            * float(first.sum())
            * float(window.series.load_kw.sum())
            * window.series.period_h
        )
    total = sum(size)
    least = max(10, n_sample // (5 * len(windows)))
    return [max(least, round(n_sample * s / total)) if total > 0 else 0 for s in size]


def controlled(cost: FloatArray, control: FloatArray, expected: float) -> FloatArray:
    """Samples with a control variate taken off.

    The control may be subtracted with any coefficient; the best one is regressed, within limits:
    where the control hardly varies the regression would divide by rounding.

    Parameters
    ----------
    cost : array, shape (n,)
    control : array, shape (n,), in the same unit, much like the cost
    expected : float, the control's true mean

    Returns
    -------
    array, shape (n,), of the same mean in expectation
    """
    factor = control_factor(cost, control)
    return cost if factor is None else cost - factor * (control - expected)


def control_factor(cost: FloatArray, control: FloatArray) -> float | None:
    """Coefficient with which the control is taken off; None where it says nothing."""
    variance = float(control.var())
    if len(cost) < 2 or variance <= 0.0:
        return None
    beta = float(np.cov(cost, control)[0, 1]) / variance
    return min(max(beta, 0.0), MOST_CONTROL)


MOST_CONTROL = 2.0
"""The control is a forecast of the cost itself: its coefficient is near 1."""


@dataclass(frozen=True)
class _History:
    """Histories after a first event, as differences from the base."""

    follower: Follower
    i_window: int
    window: WindowModel
    clock: Clock
    plan: PlanReading
    events: FloatArray
    after: FloatArray
    capacity: FloatArray
    slots: Slots

    @property
    def first(self) -> FloatArray:
        """Chance of each first arrival, (n_period, n_scenario)."""
        clock = self.clock
        return clock.survival[:-1, None] * clock.failure_chance[:, None] * clock.scenario_chance

    def _back(self, k: int, w: int) -> int | None:
        """Period from which the rest of the window is planned after an event, or None."""
        return return_period(self.clock, k, w, len(self.window.scenarios))

    def _plans(self, at: list[tuple[int, FloatArray]]) -> list[PlanReading]:
        follower = self.follower
        requests = [
            follower.plan_request(self.i_window, u, state, self.capacity) for u, state in at
        ]
        solutions = follower.solve(requests, read_solution)
        readings = []
        for solution in solutions:
            assert isinstance(solution.measured, PlanReading)
            readings.append(solution.measured)
        return readings

    def _plan_difference(self, u: int, reading: PlanReading) -> FloatArray:
        """Expected metrics of the plan from ``u`` until a failure, less those of the first plan."""
        return self.clock.survival_from(u) @ (reading.metrics - self.plan.metrics[u:])

    def _after_events(
        self, at: list[tuple[int, int, FloatArray]]
    ) -> list[tuple[FloatArray, FloatArray]]:
        """Metrics of events less those of the first plan's, and the state after each.

        An avoided failure (beyond the last scenario) changes nothing.
        """
        follower, n_scenario = self.follower, len(self.window.scenarios)
        real = [(k, w, state) for k, w, state in at if w < n_scenario]
        requests = [
            follower.event_request(self.i_window, w, k, state, self.capacity)
            for k, w, state in real
        ]
        solutions = iter(follower.solve(requests, read_solution))
        found = []
        for k, w, state in at:
            if w >= n_scenario:
                found.append((np.zeros(self.slots.n_slot), state))
            else:
                solution = next(solutions)
                difference = np.asarray(solution.measured) - self.events[k, w]
                found.append((difference, solution.out_states[0]))
        return found

    def enumerate(self) -> tuple[FloatArray, FloatArray]:
        """Exact correction, (n_slot,), and of the cost by first arrival, (n_period, n_scenario)."""
        total = np.zeros(self.slots.n_slot)
        by_first = np.zeros(self.first.shape)
        level = [
            (u, self.after[k, w], float(self.first[k, w]), (int(k), int(w)))
            for k, w in np.argwhere(self.first > 0.0)
            if (u := self._back(int(k), int(w))) is not None
        ]
        while level:
            readings = self._plans([(u, state) for u, state, *_ in level])
            at, weights, origins = [], [], []
            for (u, _, weight, origin), reading in zip(level, readings, strict=True):
                step = weight * self._plan_difference(u, reading)
                total += step
                by_first[origin] += float(self.slots.cost(step))
                chance = self.clock.first_failure_from(u)[:, None] * self.clock.scenario_chance[u:]
                for i, w in np.argwhere(chance > 0.0):
                    at.append((u + int(i), int(w), reading.states[i]))
                    weights.append(weight * float(chance[i, w]))
                    origins.append(origin)
            level = []
            for (k, w, _), weight, origin, (difference, state) in zip(
                at, weights, origins, self._after_events(at), strict=True
            ):
                step = weight * difference
                total += step
                by_first[origin] += float(self.slots.cost(step))
                if (back := self._back(k, w)) is not None:
                    level.append((back, state, weight, origin))
        return total, by_first

    def sample(
        self, n_sample: int, seed: int
    ) -> tuple[FloatArray, FloatArray, FloatArray, Noise | None]:
        """Correction by random histories, the cost correction of each, and by first arrival."""
        # Scenario by scenario, so that equal steps through the list reach each in proportion.
        pairs = [
            (int(k), int(w))
            for w, k in np.argwhere(self.first.T > 0.0)
            if self._back(int(k), int(w)) is not None
        ]
        if not pairs or n_sample < 1:
            return np.zeros(self.slots.n_slot), np.zeros(0), np.zeros(self.first.shape), None
        chance = np.array([self.first[k, w] for k, w in pairs])
        random = stream(seed, "continuations", self.window.series.window)
        draws = random.random((n_sample, 2 * MOST_FAILURES + 1))
        steps = (np.arange(n_sample) + draws[:, 0]) / n_sample
        chosen = np.searchsorted(np.cumsum(chance) / chance.sum(), steps).clip(0, len(pairs) - 1)
        difference = np.zeros((n_sample, self.slots.n_slot))
        level = []
        for i, pair in enumerate(chosen):
            k, w = pairs[pair]
            u = self._back(k, w)
            assert u is not None
            level.append((i, u, self.after[k, w], 1.0))
        guide = self._guide(pairs)
        for depth in range(MOST_FAILURES):
            if not level:
                break
            level = self._advance(level, depth, draws, difference)
        weight = float(chance.sum())
        control = guide[chosen]
        exact = float(chance @ guide)
        cost = weight * self.slots.cost(difference)
        samples = controlled(cost, weight * control, exact)
        correction = weight * difference.mean(axis=0)
        self._share_out(correction, weight * difference, control, float(samples.mean()))
        factor = control_factor(cost, weight * control) or 0.0
        noise = Noise(
            np.array(pairs, dtype=np.int64),
            chance / weight,
            weight,
            cost / weight - factor * control,
        )
        by_first = np.zeros(self.first.shape)
        known = chance * (factor * guide + noise.spread())
        by_first[noise.pairs[:, 0], noise.pairs[:, 1]] = known
        return correction, samples, by_first, noise

    def _guide(self, pairs: list[tuple[int, int]]) -> FloatArray:
        """What the cuts of ``V`` say of the state after each event, against the first plan's."""
        known: dict[int, float] = {}
        values = np.zeros(len(pairs))
        for i, (k, w) in enumerate(pairs):
            u = self._back(k, w)
            assert u is not None
            if u not in known:
                known[u] = self.follower.guide(self.i_window, u, self.plan.states[u - 1])
            values[i] = self.follower.guide(self.i_window, u, self.after[k, w]) - known[u]
        return values

    def _advance(
        self,
        level: list[tuple[int, int, FloatArray, float]],
        depth: int,
        draws: FloatArray,
        difference: FloatArray,
    ) -> list[tuple[int, int, FloatArray, float]]:
        """One plan and one failure further in every history that goes on.

        The first failure after the first event is forced and weighted by its chance, later ones
        strike by chance.
        """
        readings = self._plans([(u, state) for _, u, state, _ in level])
        at, heads = [], []
        for (i, u, _, weight), reading in zip(level, readings, strict=True):
            difference[i] += weight * self._plan_difference(u, reading)
            survival = self.clock.survival_from(u)
            fails = 1.0 - survival[-1]
            if fails <= 0.0:
                continue
            draw = draws[i, 2 * depth + 1]
            if depth == 0:
                weight, draw = weight * fails, draw * fails
            if draw >= fails:
                continue
            k = u + int(np.searchsorted(1.0 - survival[1:], draw, side="right"))
            k = min(k, self.window.series.n_period - 1)
            shares = np.cumsum(self.clock.scenario_chance[k])
            w = int(np.searchsorted(shares, draws[i, 2 * depth + 2] * shares[-1], side="right"))
            w = min(w, len(shares) - 1)
            at.append((k, w, reading.states[k - u]))
            heads.append((i, weight))
        further = []
        for (k, w, _), (i, weight), (extra, state) in zip(
            at, heads, self._after_events(at), strict=True
        ):
            difference[i] += weight * extra
            back = self._back(k, w)
            if back is not None:
                further.append((i, back, state, weight))
        return further

    def _share_out(
        self, correction: FloatArray, samples: FloatArray, control: FloatArray, cost: float
    ) -> None:
        """Moves the cost parts so that they add up to the cost with the control variate."""
        n_part = len(COST_PARTS)
        gap = cost - float(correction[:n_part].sum())
        spread = control - control.mean()
        share = samples[:, :n_part].T @ spread
        if abs(share.sum()) < 1e-9 * max(1.0, float(np.abs(share).sum())):
            share = np.zeros(n_part)
            share[0] = 1.0
        correction[:n_part] += gap * share / share.sum()
