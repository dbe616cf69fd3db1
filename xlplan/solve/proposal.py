"""The best decision that the cuts know, with a bound; what it costs to follow is left to others.

``Engine.run`` measures its plans by following every first event. Where a plan is followed
afterwards in any case, for its full figures, that would be the same work twice. ``propose`` makes
first stage and roots agree, looks at a part of the events until these tell little new, and hands
back the decision. ``LearningService`` then lets whoever follows the plan make cuts on the way.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.solve.decomposition import Engine, _Run
from xlplan.solve.follow import Following, RootPoint
from xlplan.solve.node_solver import Measure, NodeRequest, NodeSolution
from xlplan.solve.stopping import Clock

FloatArray = NDArray[np.float64]


NOTHING_NEW = 1e-9
"""Relative difference of a node's value and of what the cuts knew that is rounding."""


@dataclass(frozen=True)
class Proposal:
    """A decision that was not followed.

    x (n_x,), capacities per root, first_stage_cost; lower_bound : of everything within the bounds
    of ``x``; open_abs : distance to it from the cost of following that the last look saw,
    infinite where there was no look; event_tolerance : by how much an
    event's value may be too low for that
    """

    x: FloatArray
    capacities: tuple[FloatArray, ...]
    first_stage_cost: float
    lower_bound: float
    open_abs: float
    event_tolerance: float


def propose(
    engine: Engine,
    x_bounds: tuple[FloatArray, FloatArray],
    closeness_abs: float,
    n_look: int,
    deadline: float | None = None,
    should_stop: Callable[[], bool] | None = None,
    draws_chains: bool = False,
) -> Proposal:
    """Finds a decision within bounds, in whole numbers.

    Parameters
    ----------
    engine : Engine, whose cuts are used and added to
    x_bounds : pair of arrays, shape (n_x,)
    closeness_abs : money per year; when no more than this is seen to be open there is no further
        look, and first stage and roots agree to a part of it
    n_look : most looks; 0 where the cuts as they are have to do
    deadline : value of ``time.monotonic()`` after which there is no further look, or None
    should_stop : asked now and then
    draws_chains : whether every look also estimates what comes after the events it looked at; a
        plan that is followed afterwards anyhow does not need it

    Returns
    -------
    Proposal
    """
    first_stage = engine._first_stage
    first_stage.set_bounds(*x_bounds)
    first_stage.sync(engine.pools)
    run = _Run(engine, 0.0, Clock(deadline, should_stop), None)
    run.is_integer_phase = True
    run.is_enumerating = engine._n_path <= engine.options.enumerate_up_to
    run.gap_abs = closeness_abs if engine.is_warm else np.inf
    cost, n_done = np.inf, 0
    while True:
        if run.lower_bound > -np.inf:
            run.target = closeness_abs / max(abs(run.lower_bound), 1e-9)
        points = run._agree(is_first=not np.isfinite(run.gap_abs))
        open_abs = max(cost - run.lower_bound, 0.0)
        if n_done >= n_look or open_abs <= closeness_abs or run.clock.should_stop():
            break
        is_partial = not run.is_enumerating and (
            sum(len(p.exits) for p in points) > engine.options.small_exits
        )
        found = run._look(points, is_partial)
        engine.add_cuts_of(found)
        n_done += 1
        chains = _chains(run, points, found) if draws_chains else found.sampled_part
        cost = _seen_cost(run, points, found) + chains
        run._record(found)
        run.gap_abs = max(closeness_abs, cost - run.lower_bound)
    engine.is_warm = engine.is_warm or n_done > 0
    run.gap_abs = closeness_abs
    first = run.current
    assert first is not None
    return Proposal(
        x=first.x,
        capacities=tuple(p.capacity for p in points),
        first_stage_cost=first.cost,
        lower_bound=run.lower_bound,
        open_abs=float(open_abs),
        event_tolerance=run._event_tolerance(points),
    )


def _seen_cost(run: _Run, points: Sequence[RootPoint], found: Following) -> float:
    """Cost of following by what a look found of it, scaled to all events, without what comes after.

    The look is at events that mattered before and a part of the others, so it is rather too high.
    Infinite where it left out all events of a root.
    """
    if run.is_enumerating:
        assert found.estimate is not None
        return found.estimate.mean
    if any(len(p.exits) and np.isnan(e).all() for p, e in zip(points, found.errors, strict=True)):
        return float("inf")
    first = run.current
    assert first is not None
    known = sum(run.graph.roots[p.i_root].weight * p.solution.value for p in points)
    return first.cost + known + max(run._open_seen - found.sampled_part, 0.0)


def _chains(run: _Run, points: Sequence[RootPoint], found: Following) -> float:
    """What chains from the events of a look find open after them, scaled to all events."""
    if run.is_enumerating:
        return 0.0
    drawn = run._chain(list(points), run._request_maker(list(points)))
    if drawn is None:
        return 0.0
    total = seen = 0.0
    for point, error in zip(points, found.errors, strict=True):
        weight = run.graph.roots[point.i_root].weight * point.exits.weight
        total += float(weight.sum())
        seen += float(weight[~np.isnan(error[point.exits.index])].sum())
    return drawn.total * total / seen if seen > 0.0 else float("inf")


class LearningService:
    """Solves nodes for whoever follows a plan, and keeps the cuts that say something new.

    Nothing is added to the pools before ``take_in``, so that one policy is followed.

    Parameters
    ----------
    engine : Engine
    tolerance : by how much a node's value may be too low
    """

    def __init__(self, engine: Engine, tolerance: float) -> None:
        self.engine, self.tolerance = engine, tolerance
        self._found: list[NodeSolution | None] = []

    def solve_nodes(
        self, requests: Sequence[NodeRequest], measure: Measure | None = None
    ) -> list[NodeSolution | None]:
        """As ``Engine.solve_nodes``."""
        solutions = self.engine.solve_nodes([self._asked(r) for r in requests], measure)
        self._found += [s for s in solutions if s is not None and s.cuts]
        return solutions

    def take_in(self) -> int:
        """Hands the cuts to the engine; their number."""
        n = self.engine.add_cuts(self._found)
        self._found = []
        return n

    def _asked(self, request: NodeRequest) -> NodeRequest:
        """With a cut to be made where the node turns out to cost more than the cuts know."""
        engine = self.engine
        is_root = (request.family, request.member) in engine._root_members
        if not is_root and not engine.graph.families[request.family].is_expanded:
            # A plan's multipliers give cuts for all later periods as well: many for one state.
            return replace(request, cut_tolerance=self.tolerance)
        known = engine.value_of(
            request.family, request.member, request.state[None, :], request.capacity
        )
        return replace(
            request,
            group=engine.next_group(),
            cut_tolerance=self.tolerance,
            known=float(known[0]) + self.tolerance + NOTHING_NEW * abs(float(known[0])),
        )
