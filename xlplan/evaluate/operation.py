"""Operation to look at: a normal day and the worst outage event, as charts and under audit."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.evaluate.audit import audit_dispatch
from xlplan.evaluate.audit_tree import audit_tree
from xlplan.evaluate.follow_plan import Follower, FollowResult
from xlplan.evaluate.meters import read_dispatch
from xlplan.evaluate.results import CheckLine, Trace
from xlplan.evaluate.traces import describe_stages, trace_of
from xlplan.evaluate.violations import (
    UnitState,
    Violation,
    capacities_in_service,
    start_of_window,
    state_after,
)
from xlplan.model.dispatch import Dispatch, Purchases, SegmentKind, TreeSegment
from xlplan.network.feeder import Feeder
from xlplan.outages.sections import build_sections
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Operated:
    """A dispatch with its place: a plan (``i_scenario`` None) or an event that struck in ``k``."""

    i_window: int
    i_scenario: int | None
    failure_period: int
    dispatch: Dispatch


def normal_window(windows: Sequence[WindowModel]) -> int:
    """The window that stands for an ordinary day: the most frequent one."""
    return int(np.argmax([w.series.occurrences_per_year for w in windows]))


def worst_event(follow: FollowResult) -> tuple[int, int, int] | None:
    """(window, scenario, period) of the possible first event with the most unserved energy."""
    best: tuple[float, tuple[int, int, int]] | None = None
    for i_window, window in enumerate(follow.windows):
        ens = window.events[:, :, follow.slots.per_load("ens_kwh")].sum(axis=2)
        ens = np.where(window.first_chance > 0.0, ens, -1.0)
        if ens.size and ens.max() >= 0.0:
            k, w = np.unravel_index(int(ens.argmax()), ens.shape)
            if best is None or ens.max() > best[0] * (1.0 + 1e-9):
                best = (float(ens.max()), (i_window, int(w), int(k)))
    return None if best is None else best[1]


def plan_traces(
    study: Study, follower: Follower, follow: FollowResult, capacity: FloatArray
) -> tuple[tuple[Trace, ...], list[Operated]]:
    """Charts of a followed plan, and every window's plan and worst event for the audit."""
    graph = follower.graph
    operated = []
    worst = worst_event(follow)
    wanted: list[tuple[int, int | None, int]] = [(i, None, -1) for i in range(len(graph.windows))]
    if worst is not None:
        wanted.append(worst)
    for i_window, i_scenario, k in wanted:
        if i_scenario is None:
            root = graph.graph.roots[i_window]
            state = root.state_matrix @ capacity + root.state_offset
            request = follower.plan_request(i_window, 0, state, capacity)
        else:
            state = follow.windows[i_window].plan.states[k]
            request = follower.event_request(i_window, i_scenario, k, state, capacity)
        solution = follower.solve([request], read_dispatch)[0]
        dispatch = solution.measured
        assert isinstance(dispatch, Dispatch)
        operated.append(Operated(i_window, i_scenario, k, dispatch))
    layout = graph.layout
    start = layout.storage_kwh(0)
    kwh = capacity[start : start + layout.n_storage]
    traces = make_traces(study, follower.windows, graph.models[0].feeder, operated, kwh)
    return traces, operated


def make_traces(
    study: Study,
    windows: Sequence[WindowModel],
    feeder: Feeder,
    operated: Sequence[Operated],
    storage_kwh: FloatArray,
) -> tuple[Trace, ...]:
    """The normal day first, then the worst event."""
    traces = []
    normal = normal_window(windows)
    for item in operated:
        window, series = study.windows[item.i_window], windows[item.i_window].series
        if item.i_scenario is None:
            if item.i_window == normal:
                title = f"Normal service: {window.window}"
                text = "The plan followed as long as nothing fails."
                traces.append(
                    trace_of(study, window, series, 0, item.dispatch, storage_kwh, title, text)
                )
            continue
        scenario = windows[item.i_window].scenarios[item.i_scenario]
        title = f"Worst outage event: {scenario.name} in {window.window}"
        text = (
            f"The possible first event with the most unserved energy. It strikes in the period "
            f"before the first one shown; repair takes {scenario.repair_h:g} h."
        )
        traces.append(
            trace_of(
                study,
                window,
                series,
                item.failure_period + 1,
                item.dispatch,
                storage_kwh,
                title,
                text,
                describe_stages(study, feeder, scenario),
            )
        )
    return tuple(traces)


def with_peak_purchase(
    study: Study,
    windows: Sequence[WindowModel],
    bought: Purchases,
    operated: Sequence[Operated],
) -> Purchases:
    """Purchases with the highest purchase of the first plans as the demand, where none is charged.

    Without a demand charge the model leaves the demand limit out, so that its value says nothing.
    """
    if study.settings.demand_charge_per_kw_year > 0.0:
        return bought
    highest = [
        float(item.dispatch.import_kw.max())
        for item in operated
        if item.i_scenario is None and windows[item.i_window].series.counts_for_demand
    ]
    return replace(bought, demand_kw=max(highest, default=0.0))


def audit_operation(
    study: Study,
    feeder: Feeder,
    windows: Sequence[WindowModel],
    bought: Purchases,
    operated: Sequence[Operated],
) -> tuple[CheckLine, ...]:
    """Audit of the first plans and the worst event, as a check line."""
    capacities = capacities_in_service(study, bought)
    section_of_bus = build_sections(feeder).section_of_bus
    found: list[Violation] = []
    plans = {o.i_window: o for o in operated if o.i_scenario is None}
    for item in operated:
        window = windows[item.i_window]
        before: UnitState = start_of_window(study, capacities, window.series.start_soc_frac)
        demand = None
        if item.i_scenario is None:
            service = [window.normal] * window.series.n_period
            start = 0
            if window.series.counts_for_demand:
                demand = bought.demand_kw
        else:
            service = list(window.scenarios[item.i_scenario].service)
            start = item.failure_period + 1
            before = state_after(plans[item.i_window].dispatch, item.failure_period, window.normal)
        found += audit_dispatch(
            study,
            feeder,
            section_of_bus,
            window.series,
            service,
            item.dispatch,
            capacities,
            before,
            start,
            item.i_scenario is not None,
            demand,
        )
    return (audit_line(found, len(operated)),)


def audit_line(found: Sequence[Violation], n_stretch: int) -> CheckLine:
    """Number of violations against none."""
    what = (
        f"Limits broken in {n_stretch} stretches of operation (balances, voltages, ratings, "
        "ramps, tanks, charge, islands), counted by code that takes no part in the model"
    )
    if found:
        what += "; first: " + found[0].text()
    return CheckLine("Operation audited", what, float(len(found)), 0.0, 0.5)


def tree_operation(
    study: Study,
    feeder: Feeder,
    windows: Sequence[WindowModel],
    bought: Purchases,
    segments: Sequence[TreeSegment],
    follow: FollowResult,
) -> tuple[tuple[Trace, ...], tuple[CheckLine, ...], list[Operated]]:
    """The same of a whole tree: charts, and every node under audit."""
    operated = [
        Operated(s.i_window, None, -1, s.dispatch)
        for s in segments
        if s.kind is SegmentKind.PLAN and s.i_parent < 0
    ]
    worst = worst_event(follow)
    if worst is not None:
        i_window, w, k = worst
        event = next(
            s
            for s in segments
            if s.kind is SegmentKind.EVENT
            and (s.i_window, s.i_scenario, s.start_period) == (i_window, w, k + 1)
        )
        operated.append(Operated(i_window, w, k, event.dispatch))
    storage_kwh = np.array([s.existing_kwh for s in study.storage]) + bought.storage_kwh
    traces = make_traces(study, windows, feeder, operated, storage_kwh)
    violations = [v for _, v in audit_tree(study, feeder, windows, bought, segments)]
    return traces, (audit_line(violations, len(segments)),), operated
