"""Reading a solved subproblem where it was solved, so that only sums travel between processes.

A meter is attached to each family before the engine starts (``attach_meters``); ``read_solution``
is the function that the engine is asked to call on a solution.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.evaluate.metrics import (
    WindowContext,
    build_context,
    end_cost,
    event_metrics,
    plan_metrics,
)
from xlplan.evaluate.pro_rata import share_pro_rata, sheds_live_load
from xlplan.evaluate.unpack import event_dispatch, plan_dispatch
from xlplan.model.dispatch import Dispatch
from xlplan.model.period import FeederModel
from xlplan.model.study_graph import StudyGraph
from xlplan.model.subproblem import EventFamily, PlanFamily
from xlplan.model.value_graph import Family
from xlplan.outages.records import Scenario
from xlplan.outages.window_model import WindowModel

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class PlanReading:
    """A plan from period ``start`` on.

    metrics : (n_period - start + 1, n_slot), the last row is the end of the window
    states : (n_period - start, n_state), state after each period
    """

    metrics: FloatArray
    states: FloatArray


@dataclass(frozen=True)
class PlanMeter:
    """Reads plans of one window."""

    model: FeederModel
    context: WindowContext

    def dispatch(self, family: PlanFamily, member: int, y: FloatArray) -> Dispatch:
        """Operation, with flows and voltages."""
        return plan_dispatch(self.model, family, member, y)

    def __call__(self, family: PlanFamily, member: int, y: FloatArray) -> PlanReading:
        """Metrics and states."""
        layout = self.model.layout
        capacity = y[family.capacity_columns]
        kw, kwh = _storage(layout.n_generator, layout.n_storage, capacity)
        states = y[family.state_columns[member + 1 :]]
        dispatch = plan_dispatch(self.model, family, member, y, with_network=False)
        running = plan_metrics(self.context, dispatch, member, kw)
        end = np.zeros((1, running.shape[1]))
        energy = y[family.state_columns[-1]][: layout.n_storage]
        slots = self.context.slots
        end[0, slots.single("end_of_window")] = end_cost(self.context, energy, kwh)
        return PlanReading(np.vstack([running, end]), states)


@dataclass(frozen=True)
class EventMeter:
    """Reads events of one scenario."""

    model: FeederModel
    context: WindowContext
    scenario: Scenario

    def dispatch(self, family: EventFamily, member: int, y: FloatArray) -> Dispatch:
        """Operation, with flows and voltages; shares pro rata where the optimum is open."""
        dispatch = event_dispatch(self.model, family, member, y)
        return share_pro_rata(self.context, self.scenario, member, dispatch)

    def __call__(self, family: EventFamily, member: int, y: FloatArray) -> FloatArray:
        """Metrics, shape (n_slot,)."""
        layout = self.model.layout
        capacity = y[family.capacity_columns]
        kw, kwh = _storage(layout.n_generator, layout.n_storage, capacity)
        dispatch = event_dispatch(self.model, family, member, y, with_network=False)
        if sheds_live_load(self.scenario, dispatch, self.model.feeder.load_bus):
            dispatch = self.dispatch(family, member, y)
        generator_kw = capacity[: layout.n_generator]
        return event_metrics(self.context, self.scenario, member, dispatch, generator_kw, kw, kwh)


def _storage(
    n_generator: int, n_storage: int, capacity: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """kW and kWh of the stores in service."""
    kw = capacity[n_generator : n_generator + n_storage]
    return kw, capacity[n_generator + n_storage : n_generator + 2 * n_storage]


def attach_meters(graph: StudyGraph, windows: tuple[WindowModel, ...]) -> None:
    """Gives every family of the graph its meter."""
    for i_window, (model, window) in enumerate(zip(graph.models, windows, strict=True)):
        context = build_context(model.study, model.feeder, model.series)
        for family in (graph.plan_family(i_window), graph.first_plan_family(i_window)):
            family.meter = PlanMeter(model, context)
        for w, scenario in enumerate(window.scenarios):
            graph.event_family(i_window, w).meter = EventMeter(model, context, scenario)


def read_solution(family: Family, member: int, y: FloatArray) -> object:
    """What the family's meter reads: a ``PlanReading``, or an event's metrics."""
    return family.meter(family, member, y)  # type: ignore[attr-defined]


def read_dispatch(family: Family, member: int, y: FloatArray) -> Dispatch:
    """Full operation, for charts and audits."""
    return family.meter.dispatch(family, member, y)  # type: ignore[attr-defined,no-any-return]
