"""Requests for nodes in, solutions and cuts out: what one process does.

``NodeSolver`` owns the kept models of the families that it is asked for, and its copies of the cut
pools. A model's history depends on its own requests alone, so the numbers are the same whichever
process holds it.
"""

from __future__ import annotations

import logging
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.base.memory import resident_bytes
from xlplan.model.value_graph import Family, ValueGraph
from xlplan.solve.cut_pool import CutBatch, CutPool, joined
from xlplan.solve.cuts import DualBound
from xlplan.solve.highs import SolverFailureError
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.node import DUAL_TOLERANCE, NodeModel, NodeOutcome, NodePoint
from xlplan.solve.node_cuts import NodeCuts
from xlplan.solve.tables import GraphTables, clip_states

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

_LOG = logging.getLogger(__name__)

SHARE_MARGIN = 1e-3
"""A cut shared with another member is kept where it beats the known value by this share."""


REST_ROWS = 1_000_000
"""Models of events give their working memory back after each run where all families together have
more rows than this; what is then lost is small beside solving such large programs."""


@dataclass(frozen=True)
class Share:
    """Other members (n,), ascending, with a state of each (n, n_state) and what is known there.

    A shared cut is kept where it beats the known value (n,) at that state.
    """

    members: IntArray
    states: FloatArray
    known: FloatArray


@dataclass(frozen=True)
class NodeRequest:
    """One node to be solved.

    state : (n_state,), clipped into its domain before use; capacity : (n_capacity,)
    second_cost : (n_col,), minimised among the optimal points, or None
    replica : which of the family's kept models to use; each has its own history
    group : number of the cuts made, -1 for no cuts
    share : other members for which the same multipliers are tried, or None
    cut_tolerance : how much too low the value may be for want of the children's last cuts
    known : no cut is made where the value is no higher than this
    wants_primal : whether ``y`` is handed back
    """

    family: int
    member: int
    state: FloatArray
    capacity: FloatArray
    second_cost: FloatArray | None = None
    replica: int = 0
    group: int = -1
    share: Share | None = None
    cut_tolerance: float = 0.0
    known: float = float("-inf")
    wants_primal: bool = False


@dataclass(frozen=True)
class NodeSolution:
    """What a request gives.

    value : cost from here on as the cuts know it; cost : the node's own part of it; both in true
    scale. theta (n_exit,), out_states (n_exit, n_state). has_failed: the solver found nothing;
    value is then the best known bound, and the arrays are empty.
    """

    value: float
    cost: float
    theta: FloatArray
    out_states: FloatArray
    y: FloatArray | None
    measured: object
    cuts: tuple[CutBatch, ...] = ()
    has_failed: bool = False


Measure = Callable[[Family, int, FloatArray], object]
"""Called with the family, the member and the primal point ``y``; must be picklable."""


class NodeSolver:
    """Kept models, members and pools of one process."""

    def __init__(self, graph: ValueGraph, tables: GraphTables, cache: MemberCache | None = None):
        self.graph, self.tables = graph, tables
        self.cache = cache or MemberCache(graph.families)
        self.pools = new_pools(graph, tables)
        self.counts: Counter[str] = Counter()
        self._models: dict[tuple[int, int], NodeModel] = {}
        self._bounds: dict[int, DualBound] = {}
        self._cuts: dict[int, NodeCuts] = {}
        self._do_models_rest = tables.n_row > REST_ROWS

    def add_cuts(self, batches: Sequence[CutBatch]) -> None:
        """Cuts made elsewhere."""
        for batch in batches:
            self.pools[batch.family].add(batch)

    def bound(self, i_family: int) -> DualBound:
        """The family's maker of cuts."""
        if i_family not in self._bounds:
            self._bounds[i_family] = DualBound(
                i_family,
                self.graph.families[i_family],
                self.graph.capacity_lower,
                self.graph.capacity_upper,
                self.tables.families[i_family].theta_lower,
                self.cache,
            )
        return self._bounds[i_family]

    def model(self, i_family: int, replica: int) -> NodeModel:
        """One kept model, made when first asked for."""
        key = (i_family, replica)
        if key not in self._models:
            self._models[key] = NodeModel(
                self.graph, self.tables, self.cache, self.pools, i_family, self.bound(i_family)
            )
        return self._models[key]

    def cuts(self, i_family: int) -> NodeCuts:
        """What makes the cuts of a family's nodes."""
        if i_family not in self._cuts:
            is_fixed = self.tables.families[i_family].is_fixed
            bound = self.bound(i_family)
            self._cuts[i_family] = NodeCuts(i_family, bound, self.cache, self.pools, is_fixed)
        return self._cuts[i_family]

    def solve(self, request: NodeRequest, measure: Measure | None = None) -> NodeSolution:
        """One node."""
        return self.solve_run([request], measure)[0]

    def solve_run(
        self, requests: Sequence[NodeRequest], measure: Measure | None = None
    ) -> list[NodeSolution]:
        """Nodes of one kept model, one after the other; their cuts are made together.

        The pools are left as they are: new cuts come back with the solutions, all of them with the
        first one that has any.
        """
        i_family, family = requests[0].family, self.graph.families[requests[0].family]
        model, table = self.model(i_family, requests[0].replica), self.tables.families[i_family]
        solutions: list[NodeSolution] = []
        asked: list[int] = []
        outcomes: list[NodeOutcome] = []
        self.counts["node solve"] += len(requests)
        states = clip_states(
            table, np.array([r.state for r in requests]), np.array([r.capacity for r in requests])
        )
        points = [
            NodePoint(r.member, state, r.capacity, r.cut_tolerance, r.second_cost)
            for r, state in zip(requests, states, strict=True)
        ]
        for request, state, outcome in zip(requests, states, model.solve_run(points), strict=True):
            if isinstance(outcome, SolverFailureError):
                _LOG.warning("member %d: %s", request.member, outcome)
                solutions.append(self._failed(request, state))
                continue
            if request.group >= 0 and outcome.value > request.known:
                asked.append(len(solutions))
                outcomes.append(outcome)
            solutions.append(
                NodeSolution(
                    value=outcome.value,
                    cost=outcome.cost,
                    theta=outcome.theta,
                    out_states=outcome.out_states,
                    y=outcome.y if request.wants_primal else None,
                    measured=None
                    if measure is None
                    else measure(family, request.member, outcome.y),
                )
            )
        if asked:
            cuts = self._checked_cuts(model, outcomes, [requests[i] for i in asked], states[asked])
            solutions[asked[0]] = replace(solutions[asked[0]], cuts=(cuts,))
        if self._do_models_rest and family.is_expanded:
            model.rest()
        return solutions

    def _checked_cuts(
        self,
        model: NodeModel,
        outcomes: Sequence[NodeOutcome],
        requests: Sequence[NodeRequest],
        states: FloatArray,
    ) -> CutBatch:
        """Cuts of nodes and of others by sharing; a cut far off the objective is counted."""
        maker = self.cuts(model.i_family)
        cuts, places = maker.cuts_from(
            outcomes, [r.member for r in requests], [r.group for r in requests]
        )
        capacities = np.array([r.capacity for r in requests])
        reached = (
            cuts.intercept[places]
            + np.einsum("ij,ij->i", cuts.state_slope[places], states)
            + np.einsum("ij,ij->i", cuts.capacity_slope[places], capacities)
        )
        values = np.array([o.value for o in outcomes])
        loose = np.flatnonzero(np.abs(reached - values) > DUAL_TOLERANCE * (1.0 + np.abs(values)))
        if len(loose):
            self.counts["cut not tight"] += len(loose)
            for i in loose.tolist():
                _LOG.debug(
                    "%s, member %d: cut gives %r, the solver %r",
                    model.family.name, requests[i].member, reached[i], values[i],
                )  # fmt: skip
            model.forget_basis()
        batches = [cuts]
        sharing = [
            i for i, r in enumerate(requests) if r.share is not None and len(r.share.members)
        ]
        shares = [requests[i].share for i in sharing]
        shared = maker.shared_cuts(
            [outcomes[i] for i in sharing],
            [share.members for share in shares if share is not None],
            [requests[i].group for i in sharing],
        )
        if shared is not None:
            batches.append(_gaining(shared, shares, capacities[sharing]))
        return joined(batches)

    def _failed(self, request: NodeRequest, state: FloatArray) -> NodeSolution:
        self.counts["failed node"] += 1
        known = self.pools[request.family].value(request.member, state, request.capacity)
        lower = self.tables.families[request.family].value_lower[request.member]
        return NodeSolution(
            value=max(known, float(lower)),
            cost=float("nan"),
            theta=np.zeros(0),
            out_states=np.zeros((0, len(state))),
            y=None,
            measured=None,
            has_failed=True,
        )

    def all_counts(self) -> dict[str, float]:
        """Events and seconds since the process began."""
        total: Counter[str] = Counter(self.counts)
        seconds = 0.0
        for model in self._models.values():
            total.update(model.all_counts())
            seconds += model.seconds_in_solver
        return {
            **{name: float(n) for name, n in total.items()},
            "seconds in solver": seconds,
            "resident bytes": float(resident_bytes()),
        }


def _gaining(
    shared: tuple[CutBatch, IntArray], shares: Sequence[Share | None], capacities: FloatArray
) -> CutBatch:
    """The shared cuts that beat what is known where they were asked for."""
    cuts, origin = shared
    states, known = np.zeros_like(cuts.state_slope), np.zeros(len(cuts))
    for i, share in enumerate(shares):
        assert share is not None
        here = (origin == i).nonzero()[0]
        at = np.searchsorted(share.members, cuts.member[here])
        states[here], known[here] = share.states[at], share.known[at]
    values = (
        cuts.intercept
        + np.einsum("ij,ij->i", cuts.state_slope, states)
        + np.einsum("ij,ij->i", cuts.capacity_slope, capacities[origin])
    )
    return cuts.take(values - known > SHARE_MARGIN * np.abs(known))


def new_pools(graph: ValueGraph, tables: GraphTables) -> list[CutPool]:
    """Empty pools, one per family."""
    n_capacity = len(graph.capacity_lower)
    return [
        CutPool(i, family.n_member, tables.families[i].n_state, n_capacity)
        for i, family in enumerate(graph.families)
    ]
