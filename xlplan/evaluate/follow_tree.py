"""A solved whole tree read as a ``FollowResult``: every node counted with its weight."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xlplan.evaluate.follow_plan import (
    FollowResult,
    WindowFollow,
    avoided_shares,
    expected_metrics,
)
from xlplan.evaluate.meters import PlanReading
from xlplan.evaluate.metrics import (
    Slots,
    WindowContext,
    build_context,
    end_cost,
    event_metrics,
    plan_metrics,
)
from xlplan.evaluate.outcomes import WindowOutcomes, counted_outcomes
from xlplan.evaluate.pro_rata import share_pro_rata
from xlplan.model.dispatch import Purchases, SegmentKind, TreeSegment
from xlplan.model.risk_aim import aim_of
from xlplan.network.feeder import Feeder
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]


def follow_tree(
    study: Study,
    feeder: Feeder,
    windows: Sequence[WindowModel],
    bought: Purchases,
    segments: Sequence[TreeSegment],
) -> FollowResult:
    """Expected metrics of a whole tree.

    Parameters
    ----------
    study, feeder, windows : what the tree was built from
    bought : Purchases of the plan
    segments : every node the plan can reach

    Returns
    -------
    FollowResult, enumerated
    """
    generator_kw = np.array([u.existing_kw for u in study.generators]) + bought.generator_kw
    storage_kw = np.array([s.existing_kw for s in study.storage]) + bought.storage_kw
    storage_kwh = np.array([s.existing_kwh for s in study.storage]) + bought.storage_kwh
    results = []
    for i_window, window in enumerate(windows):
        context = build_context(study, feeder, window.series)
        own = [(i, s) for i, s in enumerate(segments) if s.i_window == i_window]
        readings = {
            i: _read(context, window, s, generator_kw, storage_kw, storage_kwh) for i, s in own
        }
        results.append(_window(context, window, bought, own, readings, storage_kwh))
    return FollowResult(
        windows=tuple(results),
        occurrences=np.array([w.series.occurrences_per_year for w in windows]),
        slots=Slots(len(study.loads)),
        is_enumerated=True,
        n_sample=0,
    )


def _read(
    context: WindowContext,
    window: WindowModel,
    segment: TreeSegment,
    generator_kw: FloatArray,
    storage_kw: FloatArray,
    storage_kwh: FloatArray,
) -> FloatArray:
    """Metrics of one segment: (n_period, n_slot) of a plan, (n_slot,) of an event."""
    if segment.kind is SegmentKind.PLAN:
        return plan_metrics(context, segment.dispatch, segment.start_period, storage_kw)
    assert segment.i_scenario is not None
    scenario = window.scenarios[segment.i_scenario]
    failed_in = segment.start_period - 1
    dispatch = share_pro_rata(context, scenario, failed_in, segment.dispatch)
    return event_metrics(
        context, scenario, failed_in, dispatch, generator_kw, storage_kw, storage_kwh
    )


def _window(
    context: WindowContext,
    window: WindowModel,
    bought: Purchases,
    own: list[tuple[int, TreeSegment]],
    readings: dict[int, FloatArray],
    storage_kwh: FloatArray,
) -> WindowFollow:
    slots, n_period = context.slots, window.series.n_period
    clock = window.clock.thinned(avoided_shares(window, bought.is_hardened.astype(float)))
    total = np.zeros(slots.n_slot)
    end_slot = slots.single("end_of_window")
    events = np.zeros((n_period, len(window.scenarios), slots.n_slot))
    root = next(i for i, s in own if s.i_parent < 0)
    for i, segment in own:
        if segment.kind is SegmentKind.PLAN:
            total += segment.period_weight @ readings[i]
            energy = segment.dispatch.energy_kwh[-1] if segment.n_period else None
            if energy is not None:
                total[end_slot] += segment.end_weight * end_cost(context, energy, storage_kwh)
        else:
            total += segment.weight * readings[i]
            if segment.i_parent == root:
                assert segment.i_scenario is not None
                events[segment.start_period - 1, segment.i_scenario] = readings[i]
    first_plan = next(s for i, s in own if i == root)
    end = np.zeros((1, slots.n_slot))
    end[0, end_slot] = end_cost(context, first_plan.dispatch.energy_kwh[-1], storage_kwh)
    plan = PlanReading(np.vstack([readings[root], end]), np.zeros((n_period, 0)))
    first = clock.survival[:-1, None] * clock.failure_chance[:, None] * clock.scenario_chance
    in_service, count = clock.occupancy()
    base = expected_metrics(clock, plan.metrics, events)
    return WindowFollow(
        clock=clock,
        plan=plan,
        events=events,
        first_chance=first,
        in_service=in_service,
        event_count=count,
        base=base,
        correction=total - base,
        sample_cost=np.zeros(0),
        expected_cost=float(slots.cost(total)),
        standard_error=0.0,
        clock_plan=clock.survival,
        solver_plan_cost=None,
        solver_event_cost=None,
        outcomes=_outcomes(context, own, readings, plan.metrics, storage_kwh),
    )


def _outcomes(
    context: WindowContext,
    own: list[tuple[int, TreeSegment]],
    readings: dict[int, FloatArray],
    plan: FloatArray,
    storage_kwh: FloatArray,
) -> WindowOutcomes | None:
    """Outcomes of the window where bad ones have a weight: all below a first failure summed up.

    A failure avoided in the last period leaves the window as if nothing had failed.
    """
    aim = aim_of(context.study.settings)
    if aim is None:
        return None
    slots = context.slots
    end = slots.single("end_of_window")
    paid = np.cumsum(slots.cost(plan))
    root = next(i for i, s in own if s.i_parent < 0)
    first: dict[int, int] = {}
    total: dict[int, float] = {}
    for i, segment in own:
        if i == root:
            continue
        top = first[i] = i if segment.i_parent == root else first[segment.i_parent]
        if segment.kind is SegmentKind.EVENT:
            cost = segment.weight * float(slots.cost(readings[i]))
        else:
            metrics = segment.period_weight @ readings[i]
            energy = segment.dispatch.energy_kwh[-1]
            metrics[end] += segment.end_weight * end_cost(context, energy, storage_kwh)
            cost = float(slots.cost(metrics))
        total[top] = total.get(top, 0.0) + cost
    of = dict(own)
    return counted_outcomes(
        aim,
        [of[i].weight for i in total],
        [float(paid[of[i].start_period - 1]) + cost / of[i].weight for i, cost in total.items()],
        float(paid[-1]),
    )
