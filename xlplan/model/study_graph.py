"""A study as a value graph: families of plans and events, roots, first stage.

Enters: study, feeder, window models. Leaves: ``StudyGraph``, the graph that the decomposition
solves together with the meaning of its families. With a weight on bad outcomes the first plan of
every window is of a family of its own, whose cuts serve no other plan. The same graph without exits
(``plans_for_outages`` False) is the planner who thinks that nothing can fail, and in an event that
nothing more can; nothing is at risk then.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.aimed_plan import AimedPlanFamily, aimed_plan
from xlplan.model.layout import Layout, build_layout, start_state, state_domain
from xlplan.model.loads import build_loads
from xlplan.model.period import FeederModel, build_feeder_model
from xlplan.model.purchase import Choices, FirstStage, build_first_stage
from xlplan.model.risk_aim import RiskAim, aim_of
from xlplan.model.subproblem import (
    EventFamily,
    PlanFamily,
    build_event_family,
    build_plan_family,
)
from xlplan.model.value_graph import Root, ValueGraph
from xlplan.network.feeder import Feeder
from xlplan.outages.records import Scenario
from xlplan.outages.sections import build_sections
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study, Technology

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class WindowFamilies:
    """Positions of one window's families in the graph.

    first_plan : the family that the root is of: ``plan``, or its own under a weight on bad outcomes
    """

    plan: int
    events: tuple[int, ...]
    first_plan: int


@dataclass(frozen=True)
class StudyGraph:
    """The graph, and what its parts mean."""

    graph: ValueGraph
    layout: Layout
    first_stage: FirstStage
    windows: tuple[WindowFamilies, ...]
    models: tuple[FeederModel, ...]

    def plan_family(self, i_window: int) -> PlanFamily:
        """Plans of a window."""
        family = self.graph.families[self.windows[i_window].plan]
        assert isinstance(family, PlanFamily)
        return family

    def first_plan_family(self, i_window: int) -> PlanFamily:
        """Plans of a window from its start: those before anything fails."""
        family = self.graph.families[self.windows[i_window].first_plan]
        assert isinstance(family, PlanFamily)
        return family

    def event_family(self, i_window: int, i_scenario: int) -> EventFamily:
        """Events of a scenario of a window."""
        family = self.graph.families[self.windows[i_window].events[i_scenario]]
        assert isinstance(family, EventFamily)
        return family


def build_study_graph(
    study: Study,
    feeder: Feeder,
    windows: Sequence[WindowModel],
    plans_for_outages: bool = True,
    choices: Choices | None = None,
) -> StudyGraph:
    """The value graph of a study.

    Parameters
    ----------
    study : Study
    feeder : Feeder
    windows : sequence of WindowModel
    plans_for_outages : bool, False: plans see no failures, events see no further ones
    choices : Choices or None, what the first stage leaves open to bounds of its columns

    Returns
    -------
    StudyGraph
    """
    all_series = [window.series for window in windows]
    layout = build_layout(study, all_series)
    first_stage = build_first_stage(study, layout, choices)
    sections = build_sections(feeder)
    section_of_load = sections.section_of_bus[feeder.load_bus]
    lower, upper = state_domain(study, layout)
    aim = aim_of(study.settings) if plans_for_outages else None
    families: list[PlanFamily | EventFamily] = []
    roots, places, models, order = [], [], [], []
    for window in windows:
        loads = build_loads(study, window.series, section_of_load)
        model = build_feeder_model(study, feeder, window.series, all_series, layout, loads)
        n_scenario = len(window.scenarios)
        plan = len(families)
        events = [plan + 1 + w for w in range(n_scenario)]
        plan_upper, event_upper = _value_bounds(model, window, plans_for_outages)
        families.append(
            build_plan_family(
                model,
                window.normal,
                window.clock if plans_for_outages else None,
                window.scenarios,
                plan,
                events,
                plan_upper,
            )
        )
        for w, scenario in enumerate(window.scenarios):
            families.append(build_event_family(model, scenario, plan, event_upper[:, w]))
        n_period = window.series.n_period
        order.append((plan, n_period))
        for k in reversed(range(n_period)):
            order += [(event, k) for event in events]
            order.append((plan, k))
        first_plan = plan
        if aim is not None:
            first_plan = len(families)
            families.append(
                _first_plan(families[plan], window, aim, model, plan_upper, event_upper)
            )
            order.append((first_plan, 0))
        roots.append(
            Root(
                name=window.series.window,
                family=first_plan,
                member=0,
                weight=window.series.occurrences_per_year,
                capacity_matrix=first_stage.capacity_matrix,
                capacity_offset=first_stage.capacity_offset,
                state_matrix=start_state(study, layout, window.series),
                state_offset=np.zeros(layout.n_state),
                # Its cuts serve the plans after every repair.
                beside=None if aim is None else (plan, 0),
            )
        )
        places.append(WindowFamilies(plan, tuple(events), first_plan))
        models.append(model)
    capacity_lower = layout.capacity_lower.copy()
    capacity_lower[layout.demand_kw] = 0.0
    graph = ValueGraph(
        families=tuple(families),
        roots=tuple(roots),
        first_stage=first_stage.program,
        order=np.array(order, dtype=np.int64),
        capacity_names=layout.capacity_names,
        capacity_lower=capacity_lower,
        capacity_upper=layout.capacity_upper,
        state_names=tuple(layout.state_names for _ in families),
        state_lower_matrix=tuple(lower for _ in families),
        state_upper_matrix=tuple(upper for _ in families),
    )
    return StudyGraph(graph, layout, first_stage, tuple(places), tuple(models))


def _first_plan(
    plan: PlanFamily | EventFamily,
    window: WindowModel,
    aim: RiskAim,
    model: FeederModel,
    plan_upper: FloatArray,
    event_upper: FloatArray,
) -> AimedPlanFamily:
    """The first plan of a window under an aim."""
    assert isinstance(plan, PlanFamily)
    plan_lower, event_lower = _least_values(model, window)
    k, w = plan.exit_period, plan.exit_scenario
    is_gated = np.array([bool(gate) for gate in plan.exit_gate], dtype=bool)
    low, high = event_lower[k, w], event_upper[k, w]
    return aimed_plan(
        plan,
        aim,
        np.where(is_gated, np.minimum(low, plan_lower[k + 1]), low),
        np.where(is_gated, np.maximum(high, plan_upper[k + 1]), high),
    )


def _least_values(model: FeederModel, window: WindowModel) -> tuple[FloatArray, FloatArray]:
    """Bounds of the values from below: everything sold that the substation lets through.

    No price is below 0; what can be earned besides is the normal supply that an event beyond the
    window takes off.

    Returns
    -------
    plan_lower : (n_period + 1,); event_lower : (n_period, n_scenario)
    """
    series, n_period, dt = model.series, model.series.n_period, model.series.period_h
    limit = float(model.study.settings.substation_limit_kva)
    sold = np.zeros(n_period)
    if series.export_price_per_kwh is not None:
        sold += max(series.export_price_per_kwh, 0.0) * min(limit, model.flow_limit_kw) * dt
    supply = series.price_per_kwh * series.load_kw.sum(axis=1) * dt
    plan = np.zeros(n_period + 1)
    event = np.zeros((n_period, len(window.scenarios)))
    for k in reversed(range(n_period)):
        for w, scenario in enumerate(window.scenarios):
            period = k + 1 + np.arange(scenario.n_period)
            row = period % n_period
            back = k + 1 + scenario.n_period
            event[k, w] = -sold[row].sum() - supply[row][period >= n_period].sum()
            event[k, w] += plan[back] if back < n_period else 0.0
        # Values fall with the time that is left, so the least of all is a bound of any mean.
        plan[k] = -sold[k] + min(plan[k + 1], float(event[k].min(initial=0.0)))
    return plan, event


def _value_bounds(
    model: FeederModel, window: WindowModel, plans_for_outages: bool
) -> tuple[FloatArray, FloatArray]:
    """Cost of shedding everything with every unit at 0, which is always possible.

    Returns
    -------
    plan_upper : (n_period + 1,); event_upper : (n_period, n_scenario)
    """
    study, series, layout = model.study, model.series, model.layout
    n_period, dt = series.n_period, series.period_h
    stored = sum(
        float(layout.capacity_upper[layout.storage_kwh(i)])
        * float(series.start_soc_frac[i])
        * float(series.stored_energy_price_per_kwh[i])
        for i in range(layout.n_storage)
    )
    running = sum(float(layout.capacity_upper[i]) for i in range(layout.n_generator))
    trip = running * dt * study.settings.surplus_cost_per_kwh
    shed = series.load_kw @ model.price_of_shed(0.0, is_event=False) * dt
    clock = window.clock
    chance = clock.failure_chance if plans_for_outages else np.zeros(n_period)
    plan = np.full(n_period + 1, stored)
    event = np.zeros((n_period, len(window.scenarios)))
    immediate = [_event_bound(model, scenario) + trip for scenario in window.scenarios]
    for k in reversed(range(n_period)):
        expected = 0.0
        for w, scenario in enumerate(window.scenarios):
            back = k + 1 + scenario.n_period
            after = plan[back] if back < n_period else stored
            event[k, w] = immediate[w][k] + after
            if chance[k] > 0.0:
                worst = max(event[k, w], plan[k + 1])
                expected += float(clock.scenario_chance[k, w]) * worst
        plan[k] = shed[k] + chance[k] * expected + (1.0 - chance[k]) * plan[k + 1]
    return plan + trip, event


def _event_bound(model: FeederModel, scenario: Scenario) -> FloatArray:
    """Repair and interruption of everything for the whole event, (n_period,)."""
    series, n_period, dt = model.series, model.series.n_period, model.series.period_h
    rows = np.arange(n_period)
    bound: FloatArray = scenario.repair_cost + model.first_moment_price() @ series.load_kw.max(
        axis=0
    )
    upper = model.layout.capacity_upper
    for j, service in enumerate(scenario.service):
        row = (rows + 1 + j) % n_period
        bound = bound + series.load_kw[row] @ model.price_of_shed(service.clock_h, True) * dt
        beyond = rows + 1 + j >= n_period
        for i, unit in enumerate(model.study.generators):
            if unit.technology is not Technology.DISPATCHABLE:
                credit = series.price_per_kwh[row] * series.availability[row, i] * upper[i] * dt
                bound = bound + credit * beyond
    return bound
