"""A deterministic bound of the cost from above, backward in time from the corners of the state box.

At fixed capacities the value of a node is convex in its incoming state, so it lies below any convex
combination of its values at other states. Solve each node at the corners of the state box and at
one state inside, with the cuts as they are; charge at every exit what the child costs at most there
(its own corners and inner state, combined); go backward:

    U(node, s) = cost of the solved node + sum_e weight_e * interpolated U(child of e, state at e)

Every term is the cost of something that can be done, so U is an upper bound, whatever the cuts
are. This is inner approximation (Philpott, de Matos and Finardi 2013, recalled); the interpolation
here needs no program: multilinear between the corners, and along the ray from the inner state.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import ValueGraph
from xlplan.solve.follow import Exits, Follower
from xlplan.solve.node_solver import NodeRequest, NodeSolution

FloatArray = NDArray[np.float64]

Node = tuple[int, int]
Solve = Callable[[Sequence[NodeRequest]], Sequence[NodeSolution | None]]

MOST_DIMENSIONS = 8
"""Components of the state beyond this would need too many corners."""

FLAT = 1e-9
"""A state component whose range is below this share of the largest one is taken to be fixed."""


@dataclass(frozen=True)
class InnerBound:
    """What came out: the value of each root from above, or why there is none.

    values : one per root, without weights; None where it was not worked out
    reason : empty, or a few words
    """

    values: tuple[float, ...] | None
    reason: str = ""
    n_solve: int = 0


@dataclass(frozen=True)
class _Box:
    """The state's domain at fixed capacities."""

    low: FloatArray
    high: FloatArray
    live: NDArray[np.int64]

    @staticmethod
    def of(graph: ValueGraph, i_family: int, capacity: FloatArray) -> _Box:
        low = graph.state_lower_matrix[i_family] @ capacity
        high = np.maximum(graph.state_upper_matrix[i_family] @ capacity, low)
        span = high - low
        live = np.flatnonzero(span > FLAT * max(1.0, float(np.abs(high).max(initial=0.0))))
        return _Box(low, high, live)

    def corners(self) -> FloatArray:
        """(2 ** n, n_state), the first live component changing slowest."""
        n = len(self.live)
        bits = (np.arange(2**n)[:, None] >> np.arange(n)[::-1]) & 1
        states = np.tile(self.low, (2**n, 1))
        # A component with hardly any range stands at its lower end: clipping moves it by less
        # than the solver's tolerance.
        states[:, self.live] = np.where(bits == 1, self.high[self.live], self.low[self.live])
        return states

    def unit(self, states: FloatArray) -> FloatArray:
        """Live components between 0 and 1, (..., n)."""
        low, high = self.low[self.live], self.high[self.live]
        return np.clip((states[..., self.live] - low) / (high - low), 0.0, 1.0)


@dataclass
class _Upper:
    """Upper values of one node: (2 ** n,) at the corners, and at one inner state in unit terms."""

    corner: FloatArray
    centre: FloatArray
    at_centre: float


def inner_bound(
    graph: ValueGraph,
    follower: Follower,
    capacities: Sequence[FloatArray],
    states: Sequence[FloatArray],
    solve: Solve,
    most_solves: int,
) -> InnerBound:
    """Upper bounds of the roots' values at given capacities.

    Parameters
    ----------
    graph : ValueGraph
    follower : Follower, for exits and ceilings
    capacities, states : capacities (n_capacity,) and first state (n_state,) of each root
    solve : solves a batch; None where it was stopped
    most_solves : more nodes than this are not begun with

    Returns
    -------
    InnerBound
    """
    values: list[float] = []
    n_solve = 0
    for root, capacity, state in zip(graph.roots, capacities, states, strict=True):
        sweep = _Sweep(graph, follower, capacity, solve)
        reason = sweep.prepare((root.family, root.member), most_solves - n_solve)
        value = None
        if not reason:
            value = sweep.run((root.family, root.member), state)
        n_solve += sweep.n_solve
        if value is None:
            return InnerBound(None, reason or "stopped before it was finished", n_solve)
        values.append(value)
    return InnerBound(tuple(values), "", n_solve)


class _Sweep:
    """One root's graph at its capacities."""

    def __init__(
        self, graph: ValueGraph, follower: Follower, capacity: FloatArray, solve: Solve
    ) -> None:
        self.graph, self.follower, self.capacity, self._solve = graph, follower, capacity, solve
        self._boxes: dict[int, _Box] = {}
        self._exits: dict[Node, Exits] = {}
        self._upper: dict[Node, _Upper] = {}
        self._centres: dict[Node, FloatArray] = {}
        self.n_solve = 0

    def box(self, i_family: int) -> _Box:
        """Domain of a family's states."""
        if i_family not in self._boxes:
            self._boxes[i_family] = _Box.of(self.graph, i_family, self.capacity)
        return self._boxes[i_family]

    def exits(self, node: Node) -> Exits:
        """Exits of a node that count at these capacities."""
        if node not in self._exits:
            self._exits[node] = self.follower.exits(node[0], node[1], self.capacity)
        return self._exits[node]

    def prepare(self, root: Node, most_solves: int) -> str:
        """Finds the nodes below the root; words where there is too much to do."""
        waiting, found = [root], {root}
        while waiting:
            for child in self.exits(waiting.pop()).child.tolist():
                node = (child[0], child[1])
                if node not in found:
                    found.add(node)
                    waiting.append(node)
        self._nodes = found
        n = max((len(self.box(family).live) for family, _ in found), default=0)
        if n > MOST_DIMENSIONS:
            return f"the state has {n} components, more than {MOST_DIMENSIONS}"
        total = sum(2 ** len(self.box(family).live) + 1 for family, _ in found)
        if total > most_solves:
            return f"it would take {total} subproblems, more than {max(most_solves, 0)}"
        return ""

    def _ask(self, requests: list[NodeRequest]) -> list[NodeSolution] | None:
        solutions = self._solve(requests)
        self.n_solve += len(requests)
        if any(s is None or s.has_failed for s in solutions):
            return None
        return [s for s in solutions if s is not None]

    def run(self, root: Node, state: FloatArray) -> float | None:
        """The root's value from above; None where it was stopped."""
        first = self._find_centres(root, state)
        if first is None:
            return None
        order = [
            (f, m) for f, m in self.graph.order.tolist() if (f, m) in self._nodes and (f, m) != root
        ]
        batch: list[Node] = []
        inside: set[Node] = set()
        for node in order:
            children = {(c[0], c[1]) for c in self.exits(node).child.tolist()}
            if children & inside:
                if not self._value(batch):
                    return None
                batch, inside = [], set()
            batch.append(node)
            inside.add(node)
        if batch and not self._value(batch):
            return None
        return float(self._charged(root, [first])[0])

    def _find_centres(self, root: Node, state: FloatArray) -> NodeSolution | None:
        """An inner state of every node: the mean of those in which it is first reached."""
        front: dict[Node, FloatArray] = {root: state}
        first = None
        while front:
            nodes = list(front)
            solutions = self._ask([NodeRequest(f, m, front[f, m], self.capacity) for f, m in nodes])
            if solutions is None:
                return None
            first = first or solutions[0]
            self._centres.update(front)
            total: dict[Node, tuple[float, FloatArray]] = {}
            for node, solution in zip(nodes, solutions, strict=True):
                exits = self.exits(node)
                for e, weight, child in zip(
                    exits.index, exits.weight, exits.child.tolist(), strict=True
                ):
                    key = (child[0], child[1])
                    if key in self._centres:
                        continue
                    known, mean = total.get(key, (0.0, np.zeros(0)))
                    out = weight * solution.out_states[e]
                    total[key] = (known + weight, out if known == 0.0 else mean + out)
            front = {key: mean / weight for key, (weight, mean) in total.items()}
        return first

    def _value(self, batch: list[Node]) -> bool:
        """Upper values of some nodes, none of which is below another; False where stopped."""
        requests = []
        for family, member in batch:
            for corner in self.box(family).corners():
                requests.append(NodeRequest(family, member, corner, self.capacity))
            requests.append(
                NodeRequest(family, member, self._centres[family, member], self.capacity)
            )
        solutions = self._ask(requests)
        if solutions is None:
            return False
        begin = 0
        for node in batch:
            box = self.box(node[0])
            n = 2 ** len(box.live)
            values = self._charged(node, solutions[begin : begin + n + 1])
            values = np.minimum(values, self.follower.upper(node))
            self._upper[node] = _Upper(values[:n], box.unit(self._centres[node]), float(values[n]))
            begin += n + 1
        return True

    def _charged(self, node: Node, solutions: Sequence[NodeSolution]) -> FloatArray:
        """Cost of solved points of one node with every exit charged from above, (n_point,)."""
        values = np.array([s.cost for s in solutions])
        exits = self.exits(node)
        if not len(exits):
            return values
        states = np.array([s.out_states[exits.index] for s in solutions])
        for i_family in np.unique(exits.child[:, 0]).tolist():
            here = np.flatnonzero(exits.child[:, 0] == i_family)
            below = [self._upper[i_family, int(m)] for m in exits.child[here, 1]]
            box = self.box(i_family)
            points = box.unit(states[:, here])
            reach = _interpolated(
                points,
                np.array([u.corner for u in below]),
                np.array([u.centre for u in below]),
                np.array([u.at_centre for u in below]),
            )
            values = values + reach @ exits.weight[here]
        return values


def _multilinear(points: FloatArray, corner: FloatArray) -> FloatArray:
    """Corner values (n_child, 2 ** n) at points (n_point, n_child, n), (n_point, n_child)."""
    weight = np.ones((*points.shape[:2], 1))
    for i in range(points.shape[2]):
        z = points[:, :, i, None]
        weight = np.concatenate([weight * (1.0 - z), weight * z], axis=2).reshape(
            *points.shape[:2], 2, -1
        )
        # The newest component must change fastest.
        weight = np.swapaxes(weight, 2, 3).reshape(*points.shape[:2], -1)
    total: FloatArray = (weight * corner[None]).sum(axis=2)
    return total


def _interpolated(
    points: FloatArray, corner: FloatArray, centre: FloatArray, at_centre: FloatArray
) -> FloatArray:
    """Upper values at points: between the corners, or along the ray from the inner state.

    Parameters
    ----------
    points : array, shape (n_point, n_child, n), in unit terms
    corner : array, shape (n_child, 2 ** n)
    centre : array, shape (n_child, n), in unit terms
    at_centre : array, shape (n_child,)

    Returns
    -------
    array, shape (n_point, n_child)

    >>> _interpolated(np.array([[[0.25]]]), np.array([[4.0, 0.0]]), np.array([[0.5]]),
    ...               np.array([0.5]))
    array([[2.25]])
    """
    plain = _multilinear(points, corner)
    if not points.shape[2]:
        return np.minimum(plain, at_centre[None])
    away = points - centre[None]
    with np.errstate(divide="ignore", invalid="ignore"):
        reach = np.where(away > 0.0, (1.0 - centre) / away, np.where(away < 0.0, -centre / away,
                                                                      np.inf))  # fmt: skip
    longest = np.maximum(reach.min(axis=2), 1.0)
    share = np.where(np.isfinite(longest), 1.0 / longest, 0.0)
    far = np.where(np.isfinite(longest), longest, 0.0)
    border = np.clip(centre[None] + far[..., None] * away, 0.0, 1.0)
    by_ray = (1.0 - share) * at_centre[None] + share * _multilinear(border, corner)
    return np.minimum(plain, by_ray)
