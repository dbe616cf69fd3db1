"""Cost of following a plan: every first event, and what comes after by sampling.

The value of a node's program is its own cost plus the weighted values that the cuts promise at its
exits, so the cost of following telescopes:

    cost of following(node) = value of its program
                              + sum_e weight_e (cost of following(child of e) - theta_e)

Each difference is what the cuts did not know yet, never below 0 but for rounding. From the roots
every exit to an expanded family is followed; below them exits are drawn with chances in proportion
to their weights, which leaves only these differences to chance (the cuts are a control variate).
Nothing is added to the pools while a plan is followed, so that it is one policy that is measured.
An exit that could not be followed is charged the upper bound of its child: the figure stays a
bound from above.

A root whose aim is no expectation (``Family.outcomes``) is not a sum of these differences: they are
added to the values of the exits they belong to, and the aim is taken over the outcomes with these.
A chain's difference goes to the exit it began at, over the chance that it was drawn there. So the
value of every exit is without bias, and a mean of the worst ones is then biased upward (Jensen: the
aim is convex in the values): as an upper end it is on the safe side.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import Outcomes, ValueGraph
from xlplan.solve.cut_pool import CutBatch
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.node_solver import NodeRequest, NodeSolution
from xlplan.solve.result import CostEstimate
from xlplan.solve.tables import GraphTables

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

ROULETTE = 0.05
"""Chains whose weight has fallen below this share of their start go on by chance, unbiased."""

FAN = 8
"""Exits solved below a sampled node with many of them: events are cheap beside the plan itself."""

MAX_DEPTH = 400
"""Steps of one chain; a graph with longer paths than this is cut off and counted."""

SolveBatch = Callable[[Sequence[NodeRequest]], Sequence[NodeSolution | None]]


@dataclass
class RootPoint:
    """A root solved at the plan: what following starts from.

    outcomes : what its aim is taken over, None where that is the expectation
    """

    i_root: int
    capacity: FloatArray
    state: FloatArray
    solution: NodeSolution
    exits: Exits
    outcomes: Outcomes | None = None

    def value(self, extra: FloatArray) -> float:
        """The aim if the exits cost ``extra`` (n_exit,) more than promised, times their chance."""
        assert self.outcomes is not None
        return self.outcomes.value(self._values(extra))

    def slope(self, extra: FloatArray) -> FloatArray:
        """Factor by which more at each exit counts beyond its chance, (n_exit,)."""
        assert self.outcomes is not None
        return self.outcomes.slope(self._values(extra))

    def _values(self, extra: FloatArray) -> FloatArray:
        theta = self.solution.theta.copy()
        theta[self.exits.index] += extra[self.exits.index] / self.exits.weight
        return theta


@dataclass(frozen=True)
class Exits:
    """Exits of a node that count, with true weights and the child by the state of the gate.

    index (n,), weight (n,), child (n, 2), gate (n,) sum of the gate's capacities, 0 if not gated
    """

    index: IntArray
    weight: FloatArray
    child: IntArray
    gate: FloatArray

    def __len__(self) -> int:
        return len(self.index)


@dataclass(frozen=True)
class Term:
    """An exit to be followed by sampling: its part of the root's value, child, state, theta.

    origin : the exit of the root that it is, or is below
    """

    weight: float
    child: tuple[int, int]
    state: FloatArray
    theta: float
    origin: int = -1


@dataclass(frozen=True)
class _Step:
    """One node of a chain: chain j of root i, what its difference counts, and what goes on."""

    i: int
    j: int
    start: float
    weight: float
    onward: float
    term: Term


@dataclass
class Following:
    """What a pass found out.

    error (n_exit of the root,) per root: weight times difference at each exit followed, nan where
    it was not; cuts made on the way; estimate, None where exits were left out on purpose.
    """

    errors: list[FloatArray]
    cuts: list[CutBatch] = field(default_factory=list)
    estimate: CostEstimate | None = None
    terms: list[list[Term]] = field(default_factory=list)
    expanded_part: float = 0.0
    sampled_part: float = 0.0
    half_width: float = 0.0
    n_solve: int = 0


@dataclass
class Sampled:
    """What chains found: their sums per root, the exits they began at, the cuts on the way."""

    sums: list[FloatArray]
    origins: list[IntArray] = field(default_factory=list)
    weights: list[float] = field(default_factory=list)
    cuts: list[CutBatch] = field(default_factory=list)
    n_solve: int = 0
    n_left: int = 0

    @property
    def n_chain(self) -> int:
        """Chains drawn."""
        return sum(len(s) for s in self.sums)

    @property
    def means(self) -> list[float]:
        """Mean of each root's chains."""
        return [float(s.mean()) if len(s) else 0.0 for s in self.sums]

    @property
    def total(self) -> float:
        """Weighted mean over all roots."""
        return sum(w * m for w, m in zip(self.weights, self.means, strict=True))

    @property
    def half_width(self) -> float:
        """Half of the 95 % interval of ``total``; degrees of freedom after Welch (1947)."""
        parts = [
            (w * w * float(s.var(ddof=1)) / len(s), len(s) - 1)
            for w, s in zip(self.weights, self.sums, strict=True)
            if len(s) > 1
        ]
        variance = sum(v for v, _ in parts)
        if variance <= 0.0:
            return 0.0
        freedom = variance**2 / sum(v * v / f for v, f in parts)
        return student_factor(freedom) * float(np.sqrt(variance))


class Follower:
    """Follows plans through a graph. Solves through ``solve``, draws from ``rng``."""

    def __init__(self, graph: ValueGraph, tables: GraphTables, cache: MemberCache) -> None:
        self.graph, self.tables, self.cache = graph, tables, cache

    def exits(self, i_family: int, i_member: int, capacity: FloatArray) -> Exits:
        """Exits of a node that count."""
        weight, child, child_if_gated = self._exits_of(i_family, i_member)
        index = (weight > 0.0).nonzero()[0]
        gates = self.graph.families[i_family].exit_gate
        gate = np.array(
            [capacity[list(gates[e])].sum() if gates[e] else 0.0 for e in index.tolist()]
        )
        is_gated = gate > 0.5
        child = child[index]
        if is_gated.any():
            child = np.where(is_gated[:, None], child_if_gated[index], child)
        return Exits(index, weight[index], child, gate)

    def _exits_of(self, i_family: int, i_member: int) -> tuple[FloatArray, IntArray, IntArray]:
        """Weight (n_exit,) in true scale of a node's exits, and their children (n_exit, 2)."""
        known = self.tables.families[i_family].exits
        if known is not None:
            return known.weight[i_member], known.child[i_member], known.child_if_gated[i_member]
        member = self.cache.get(i_family, i_member)
        return member.exit_weight / member.scale, member.exit_child, member.exit_child_if_gated

    def n_path(self, limit: int) -> int:
        """Nodes on all paths from the roots, or ``limit`` where there are more."""
        number = [np.ones(f.n_member) for f in self.graph.families]
        for i_family, i_member in self.graph.order.tolist():
            weight, *tables = self._exits_of(i_family, i_member)
            total = 1.0
            for table in tables:
                used = (weight > 0.0) & (table[:, 1] >= 0)
                for child_family, child_member in table[used].tolist():
                    total += number[child_family][child_member]
                    if total > limit:
                        break
            number[i_family][i_member] = min(total, float(limit))
        return int(min(sum(number[r.family][r.member] for r in self.graph.roots), limit))

    def upper(self, child: tuple[int, int]) -> float:
        """Upper bound of a node's value."""
        return float(self.tables.families[child[0]].value_upper[child[1]])

    # -- every path ----------------------------------------------------------------------------

    def enumerate(
        self,
        points: Sequence[RootPoint],
        solve: SolveBatch,
        request: Callable[[tuple[int, int], FloatArray, FloatArray], NodeRequest],
        first_stage_cost: float,
    ) -> Following:
        """Follows every path; the estimate is exact for the cuts as they are."""
        found = Following(errors=[np.full(len(p.solution.theta), np.nan) for p in points])
        by_root = [p.solution.value for p in points]
        extra = [np.zeros(len(p.solution.theta)) for p in points]
        n_unmeasured = 0
        front: list[tuple[int, int, float, tuple[int, int], FloatArray, float]] = []
        for i, point in enumerate(points):
            front += self._front(i, point.exits, point.solution, 1.0, None)
        while front:
            requests = [
                request(child, state, points[i].capacity) for i, _, _, child, state, _ in front
            ]
            solutions = solve(requests)
            following = []
            for (i, e, weight, child, _, theta), solution in zip(front, solutions, strict=True):
                if solution is None or solution.has_failed:
                    by_root[i] += weight * (self.upper(child) - theta)
                    extra[i][e] += weight * (self.upper(child) - theta)
                    n_unmeasured += 1
                    continue
                found.n_solve += 1
                found.cuts += solution.cuts
                difference = weight * (solution.value - theta)
                by_root[i] += difference
                extra[i][e] += difference
                before = found.errors[i][e]
                found.errors[i][e] = difference + (0.0 if np.isnan(before) else before)
                exits = self.exits(child[0], child[1], points[i].capacity)
                following += self._front(i, exits, solution, weight, e)
            front = following
        for i, point in enumerate(points):
            if point.outcomes is not None:
                by_root[i] = point.value(extra[i])
        mean = first_stage_cost + sum(
            self.graph.roots[p.i_root].weight * value
            for p, value in zip(points, by_root, strict=True)
        )
        found.expanded_part = mean
        found.estimate = CostEstimate(
            mean, mean, mean, False, 0, tuple(by_root), n_unmeasured=n_unmeasured
        )
        return found

    def _front(
        self, i: int, exits: Exits, solution: NodeSolution, weight: float, origin: int | None
    ) -> list[tuple[int, int, float, tuple[int, int], FloatArray, float]]:
        return [
            (
                i,
                int(e) if origin is None else origin,
                weight * float(w),
                (int(child[0]), int(child[1])),
                solution.out_states[e],
                float(solution.theta[e]),
            )
            for e, w, child in zip(exits.index, exits.weight, exits.child, strict=True)
        ]

    # -- first events all, the rest sampled ----------------------------------------------------

    def follow(
        self,
        points: Sequence[RootPoint],
        selected: Sequence[NDArray[np.bool_]],
        n_sample: int,
        solve: SolveBatch,
        request: Callable[[tuple[int, int], FloatArray, FloatArray], NodeRequest],
        first_request: Callable[[RootPoint, int, tuple[int, int]], NodeRequest],
        first_stage_cost: float,
        rng: np.random.Generator,
        is_partial: bool,
    ) -> Following:
        """Follows first events (those selected) and samples what comes after.

        Parameters
        ----------
        points : solved roots
        selected : per root, (n,) over ``point.exits``: which to follow in a partial pass
        n_sample : chains to draw, over all roots
        solve : solves a batch, None where it was stopped
        request, first_request : make the requests below, and right under the roots
        first_stage_cost : cost of the decision itself
        rng : random generator
        is_partial : True where exits are left out on purpose: then there is no estimate

        Returns
        -------
        Following
        """
        found = Following(errors=[np.full(len(p.solution.theta), np.nan) for p in points])
        places: list[tuple[int, int]] = []
        terms: list[list[Term]] = [[] for _ in points]
        for i, point in enumerate(points):
            for j in range(len(point.exits)):
                child = (int(point.exits.child[j, 0]), int(point.exits.child[j, 1]))
                if self.graph.families[child[0]].is_expanded:
                    if selected[i][j]:
                        places.append((i, j))
                else:
                    weight = float(point.exits.weight[j])
                    e = int(point.exits.index[j])
                    terms[i].append(_term(point.exits, point.solution, j, weight, e))
        # One kept model after the other, each in the order of its members: nearby states follow.
        places.sort(key=lambda p: (*points[p[0]].exits.child[p[1]].tolist(), p))
        requests = []
        for i, j in places:
            child = (int(points[i].exits.child[j, 0]), int(points[i].exits.child[j, 1]))
            requests.append(first_request(points[i], j, child))
        by_root = [p.solution.value for p in points]
        extra = [np.zeros(len(p.solution.theta)) for p in points]
        n_unmeasured = 0
        for (i, j), solution in zip(places, solve(requests), strict=True):
            point = points[i]
            e = int(point.exits.index[j])
            weight, theta = float(point.exits.weight[j]), float(point.solution.theta[e])
            child = (int(point.exits.child[j, 0]), int(point.exits.child[j, 1]))
            if solution is None or solution.has_failed:
                by_root[i] += weight * (self.upper(child) - theta)
                extra[i][e] += weight * (self.upper(child) - theta)
                n_unmeasured += 1
                continue
            found.n_solve += 1
            found.cuts += solution.cuts
            found.errors[i][e] = weight * (solution.value - theta)
            by_root[i] += found.errors[i][e]
            extra[i][e] += found.errors[i][e]
            terms[i] += self._terms_below(child, solution, weight, point.capacity, e)
        found.expanded_part = sum(
            self.graph.roots[p.i_root].weight * float(np.nansum(error))
            for p, error in zip(points, found.errors, strict=True)
        )
        found.terms = terms
        sampled = self.sample([p.i_root for p in points], [p.capacity for p in points], terms,
                              n_sample, solve, request, rng)  # fmt: skip
        found.n_solve += sampled.n_solve
        found.cuts += sampled.cuts
        found.sampled_part, found.half_width = sampled.total, sampled.half_width
        if not is_partial:
            by_root = [value + mean for value, mean in zip(by_root, sampled.means, strict=True)]
            if any(p.outcomes is not None for p in points):
                self._apply_aims(points, extra, sampled, by_root, found)
            weights = [self.graph.roots[p.i_root].weight for p in points]
            mean = first_stage_cost + sum(w * v for w, v in zip(weights, by_root, strict=True))
            found.estimate = CostEstimate(
                mean=float(mean),
                low=float(mean - found.half_width),
                high=float(mean + found.half_width),
                is_statistical=any(terms),
                n_sample=sampled.n_chain,
                by_root=tuple(float(v) for v in by_root),
                n_unmeasured=n_unmeasured + sampled.n_left,
            )
        return found

    @staticmethod
    def _apply_aims(
        points: Sequence[RootPoint],
        extra: Sequence[FloatArray],
        sampled: Sampled,
        by_root: list[float],
        found: Following,
    ) -> None:
        """Puts values under an aim in the place of sums, and the interval of the aim."""
        counted = list(sampled.sums)
        for i, point in enumerate(points):
            if point.outcomes is None:
                continue
            more, sums, origins = extra[i], sampled.sums[i], sampled.origins[i]
            if len(sums):
                more = more + np.bincount(origins, sums / len(sums), len(more))
            by_root[i] = point.value(more)
            counted[i] = sums * point.slope(more)[origins]
        found.half_width = replace(sampled, sums=counted).half_width

    def _terms_below(
        self,
        node: tuple[int, int],
        solution: NodeSolution,
        weight: float,
        capacity: FloatArray,
        origin: int,
    ) -> list[Term]:
        exits = self.exits(node[0], node[1], capacity)
        return [
            _term(exits, solution, j, weight * float(exits.weight[j]), origin)
            for j in range(len(exits))
        ]

    def sample(
        self,
        roots: Sequence[int],
        capacities: Sequence[FloatArray],
        terms: Sequence[Sequence[Term]],
        n_sample: int,
        solve: SolveBatch,
        request: Callable[[tuple[int, int], FloatArray, FloatArray], NodeRequest],
        rng: np.random.Generator,
    ) -> Sampled:
        """Follows chains drawn from terms.

        A chain starts at a term drawn by weight. Where a node has several exits, a few of them
        are solved, spread evenly over all in their order (a systematic sample), and the chain goes
        on from one of these.

        Parameters
        ----------
        roots, capacities : root of each list of terms, and its capacities
        terms : what is to be followed, per root
        n_sample : chains over all roots, at least 2 for each root; 0 for none
        solve, request, rng : as in ``follow``

        Returns
        -------
        Sampled
        """
        weights = [
            self.graph.roots[r].weight * sum(t.weight for t in below)
            for r, below in zip(roots, terms, strict=True)
        ]
        found = Sampled(sums=[])
        front: list[_Step] = []
        for i, below in enumerate(terms):
            share = weights[i] / sum(weights) if weights[i] > 0.0 else 0.0
            n = max(2, int(np.ceil(n_sample * share))) if n_sample and share > 0.0 else 0
            found.sums.append(np.zeros(n))
            found.origins.append(np.zeros(n, dtype=np.int64))
            if n:
                chance = np.array([t.weight for t in below])
                whole = float(chance.sum())
                for j, pick in enumerate(rng.choice(len(below), size=n, p=chance / whole)):
                    found.origins[i][j] = below[int(pick)].origin
                    front.append(_Step(i, j, whole, whole, whole, below[int(pick)]))
        for _ in range(MAX_DEPTH):
            if not front:
                break
            front.sort(key=lambda step: (step.term.child, step.i, step.j))
            solutions = solve(
                [request(step.term.child, step.term.state, capacities[step.i]) for step in front]
            )
            going: list[_Step] = []
            for step, solution in zip(front, solutions, strict=True):
                value = found.sums[step.i]
                if solution is None or solution.has_failed:
                    upper = max(step.weight, step.onward) * self.upper(step.term.child)
                    value[step.j] += upper - step.weight * step.term.theta
                    found.n_left += 1
                    continue
                found.n_solve += 1
                found.cuts += solution.cuts
                value[step.j] += step.weight * (solution.value - step.term.theta)
                if step.onward > 0.0:
                    going += self._onward(step, solution, capacities[step.i], rng)
            front = going
        found.weights = [self.graph.roots[r].weight for r in roots]
        return found

    def _onward(
        self, step: _Step, solution: NodeSolution, capacity: FloatArray, rng: np.random.Generator
    ) -> list[_Step]:
        """Draws the next steps of a chain below a solved node."""
        exits = self.exits(step.term.child[0], step.term.child[1], capacity)
        if not len(exits):
            return []
        whole = float(exits.weight.sum())
        n = 1 if len(exits) == 1 else FAN
        reached = np.cumsum(exits.weight) / whole
        picks = np.searchsorted(reached, (np.arange(n) + rng.random()) / n)
        picks = np.minimum(picks, len(exits) - 1)
        weight = step.onward * whole
        chance_to_go = min(1.0, weight / (ROULETTE * step.start))
        goes = int(rng.integers(n))
        if chance_to_go < 1.0 and rng.random() >= chance_to_go:
            goes = -1
        return [
            _Step(
                step.i,
                step.j,
                step.start,
                weight / n,
                weight / chance_to_go if k == goes else 0.0,
                _term(exits, solution, int(pick), 1.0),
            )
            for k, pick in enumerate(picks)
        ]


def _term(exits: Exits, solution: NodeSolution, j: int, weight: float, origin: int = -1) -> Term:
    e = int(exits.index[j])
    child = (int(exits.child[j, 0]), int(exits.child[j, 1]))
    return Term(weight, child, solution.out_states[e], float(solution.theta[e]), origin)


def student_factor(freedom: float) -> float:
    """Half width of a 95 % interval in standard errors, for some degrees of freedom.

    Expansion of Student's t in 1 / freedom to third order (Abramowitz and Stegun 1964, 26.7.5,
    recalled); for fewer than 2 degrees of freedom it falls short, so 12.7 (1 degree) is used.

    >>> round(student_factor(10), 2)  # tables give 2.23
    2.23
    """
    if freedom < 2.0:
        return 12.706
    z = 1.959964
    first = (z**3 + z) / 4
    second = (5 * z**5 + 16 * z**3 + 3 * z) / 96
    third = (3 * z**7 + 19 * z**5 + 17 * z**3 - 15 * z) / 384
    return float(z + first / freedom + second / freedom**2 + third / freedom**3)
