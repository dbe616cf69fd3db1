"""Operation to look at: a normal day and chosen outage events, as charts and under audit."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.evaluate.audit import audit_dispatch
from xlplan.evaluate.audit_tree import audit_tree
from xlplan.evaluate.follow_plan import Follower, FollowResult, WindowFollow
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


EVENT_WORDS = {
    "worst": "The possible first event with the most unserved energy.",
    "most frequent": "The scenario that is expected most often, at its worst time.",
    "longest": "The scenario whose repair takes longest, at its worst time.",
}
"""What each of the chosen events is."""


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
    return _leading_event(follow, lambda window: np.zeros(window.first_chance.shape))


def chosen_events(follow: FollowResult) -> dict[tuple[int, int, int], list[str]]:
    """The worst, the most frequent and the longest event, as (window, scenario, period) -> words.

    The most frequent and the longest are shown at the failure time at which they do most harm. One
    event may be several of the three; empty where nothing can fail.
    """
    found: dict[tuple[int, int, int], list[str]] = {}

    def add(event: tuple[int, int, int] | None, word: str) -> None:
        if event is not None:
            same = next((known for known in found if known[:2] == event[:2]), event)
            found.setdefault(same, []).append(word)

    occurrences = {id(w): n for w, n in zip(follow.windows, follow.occurrences, strict=True)}

    def often(window: WindowFollow) -> FloatArray:
        count = occurrences[id(window)] * window.event_count.sum(axis=0)
        return np.broadcast_to(count, window.first_chance.shape)

    def long(window: WindowFollow) -> FloatArray:
        hours = window.clock.event_periods * window.clock.period_h
        return np.broadcast_to(hours, window.first_chance.shape)

    add(worst_event(follow), "worst")
    add(_leading_event(follow, often), "most frequent")
    add(_leading_event(follow, long), "longest")
    return found


def _leading_event(
    follow: FollowResult, rank: Callable[[WindowFollow], FloatArray]
) -> tuple[int, int, int] | None:
    """The possible first event that ranks highest, the most unserved energy among equals."""
    best: tuple[float, float] | None = None
    found: tuple[int, int, int] | None = None
    for i_window, window in enumerate(follow.windows):
        ens = window.events[:, :, follow.slots.per_load("ens_kwh")].sum(axis=2)
        possible = window.first_chance > 0.0
        if not possible.any():
            continue
        ranks = np.where(possible, rank(window), -1.0)
        highest = float(ranks.max())
        leading = np.where(ranks >= highest * (1.0 - 1e-9), ens, -1.0)
        k, w = np.unravel_index(int(leading.argmax()), leading.shape)
        key = (highest, float(leading.max()))
        if (
            best is None
            or key[0] > best[0] * (1.0 + 1e-9)
            or (key[0] >= best[0] * (1.0 - 1e-9) and key[1] > best[1] * (1.0 + 1e-9))
        ):
            best, found = key, (i_window, int(w), int(k))
    return found


def plan_traces(
    study: Study, follower: Follower, follow: FollowResult, capacity: FloatArray
) -> tuple[tuple[Trace, ...], list[Operated]]:
    """Charts of a followed plan, and every window's plan and chosen event for the audit."""
    graph = follower.graph
    operated = []
    chosen = chosen_events(follow)
    wanted: list[tuple[int, int | None, int]] = [(i, None, -1) for i in range(len(graph.windows))]
    wanted += chosen
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
    feeder = graph.models[0].feeder
    traces = make_traces(study, follower.windows, feeder, operated, kwh, chosen)
    return traces, operated


def make_traces(
    study: Study,
    windows: Sequence[WindowModel],
    feeder: Feeder,
    operated: Sequence[Operated],
    storage_kwh: FloatArray,
    chosen: dict[tuple[int, int, int], list[str]],
) -> tuple[Trace, ...]:
    """The normal day first, then the chosen events."""
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
        words = chosen[item.i_window, item.i_scenario, item.failure_period]
        name = " and ".join(words)
        title = f"{name[0].upper()}{name[1:]} outage event: {scenario.name} in {window.window}"
        text = " ".join(EVENT_WORDS[word] for word in words) + (
            " It strikes in the period before the first one shown; repair takes "
            f"{scenario.repair_h:g} h."
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
                scenario.name,
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
    """Audit of the first plans and the chosen events, as a check line."""
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
    chosen = chosen_events(follow)
    for i_window, w, k in chosen:
        event = next(
            s
            for s in segments
            if s.kind is SegmentKind.EVENT
            and (s.i_window, s.i_scenario, s.start_period) == (i_window, w, k + 1)
        )
        operated.append(Operated(i_window, w, k, event.dispatch))
    storage_kwh = np.array([s.existing_kwh for s in study.storage]) + bought.storage_kwh
    traces = make_traces(study, windows, feeder, operated, storage_kwh, chosen)
    violations = [v for _, v in audit_tree(study, feeder, windows, bought, segments)]
    return traces, (audit_line(violations, len(segments)),), operated
