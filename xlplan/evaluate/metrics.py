"""What is counted: one vector of sums per plan period and per outage event.

Every entry adds up over periods and events, so its expectation is a weighted sum. Entries: cost
parts of running a window, interruption cost on each load's own clock, energy burnt in the relaxed
area of the loss curves, energy shed in normal service; and per load energy not supplied,
interruptions (sustained and momentary, in shares of its customers), interrupted hours and the
interruption cost.

Shares follow IEEE 1366 where they are 0 or 1: an event counts the largest share of the load shed,
interruptions of up to five minutes count apart as momentary, their minutes in no index. Isolation
counts with its true minutes for the loads that it alone interrupts. Shedding in normal service is
in no index.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.base.units import hours_from_minutes
from xlplan.model.dispatch import Dispatch
from xlplan.network.feeder import Feeder
from xlplan.outages.damage import (
    first_moment_cost,
    normal_service_price_per_kwh,
    prices_per_kwh,
    step_of,
)
from xlplan.outages.records import Scenario
from xlplan.outages.sections import build_sections
from xlplan.study.study import Study, Technology
from xlplan.study.windows import WindowSeries

FloatArray = NDArray[np.float64]

MOMENTARY_H = hours_from_minutes(5.0)
"""Longest interruption that counts as momentary (IEEE Std 1366)."""

SHARE_TOLERANCE = 1e-6
"""Shares below this are rounding of the solver, not interruptions."""

SINGLE = (
    "energy",
    "fuel",
    "repair",
    "interruption",
    "normal_shedding",
    "surplus",
    "end_of_window",
    "interruption_own_clock",
    "burnt_kwh",
    "normal_shed_kwh",
)
"""Entries that are one number each, in their order."""

COST_PARTS = SINGLE[:7]
"""Entries that add up to the cost of running a window."""

PER_LOAD = ("ens_kwh", "sustained", "momentary", "hours", "cost")
"""Entries with one number per load."""


@dataclass(frozen=True)
class Slots:
    """Where each entry stands in the vector."""

    n_load: int

    @property
    def n_slot(self) -> int:
        """Length of the vector."""
        return len(SINGLE) + len(PER_LOAD) * self.n_load

    def single(self, name: str) -> int:
        """Position of a single entry."""
        return SINGLE.index(name)

    def per_load(self, name: str) -> slice:
        """Positions of a per-load entry."""
        start = len(SINGLE) + PER_LOAD.index(name) * self.n_load
        return slice(start, start + self.n_load)

    def cost(self, vector: FloatArray) -> FloatArray:
        """Cost of running, (...,) from (..., n_slot)."""
        total: FloatArray = vector[..., : len(COST_PARTS)].sum(axis=-1)
        return total


@dataclass(frozen=True)
class WindowContext:
    """What counting needs to know about a window."""

    study: Study
    feeder: Feeder
    series: WindowSeries
    slots: Slots
    normal_price: FloatArray
    first_moment: FloatArray
    section_of_load: NDArray[np.int64]
    prices: FloatArray
    """(n_load, 4), price per kWh missed by the step of the clock (``damage.prices_per_kwh``)."""
    keep: float
    """Share of what is shed that customers miss: 1 / (1 + loss allowance)."""

    def event_price(self, clock_h: FloatArray) -> FloatArray:
        """Price per kWh missed, (n_period, n_load), or by load where ``clock_h`` is 2-D."""
        clock = clock_h if clock_h.ndim == 2 else np.repeat(clock_h[:, None], self.slots.n_load, 1)
        price: FloatArray = self.prices[np.arange(self.slots.n_load), step_of(clock)]
        return price


def build_context(study: Study, feeder: Feeder, series: WindowSeries) -> WindowContext:
    """Context of one window."""
    classes = {c.customer_class: c for c in study.customer_classes}
    of_load = [classes[load.customer_class] for load in study.loads]
    return WindowContext(
        study=study,
        feeder=feeder,
        series=series,
        slots=Slots(len(study.loads)),
        normal_price=np.array([normal_service_price_per_kwh(c) for c in of_load]),
        first_moment=np.array([first_moment_cost(c) for c in of_load]),
        section_of_load=build_sections(feeder).section_of_bus[feeder.load_bus],
        prices=np.array([prices_per_kwh(c) for c in of_load]).reshape(len(of_load), 4),
        keep=1.0 / (1.0 + study.settings.loss_allowance_frac),
    )


def _running(context: WindowContext, dispatch: Dispatch, rows: NDArray[np.int64]) -> FloatArray:
    """Energy, fuel, surplus and burnt energy by period, (n_period, n_slot)."""
    study, series, slots = context.study, context.series, context.slots
    dt = series.period_h
    out = np.zeros((len(rows), slots.n_slot))
    bought = dispatch.import_kw + dispatch.supply_kw.sum(axis=1)
    energy = bought * series.price_per_kwh[rows]
    if series.export_price_per_kwh is not None:
        energy = energy - dispatch.export_kw * series.export_price_per_kwh
    out[:, slots.single("energy")] = energy * dt
    running = np.array([unit.running_cost_per_kwh for unit in study.generators])
    out[:, slots.single("fuel")] = dispatch.generator_kw @ running * dt if len(running) else 0.0
    spare = dispatch.surplus_kw.sum(axis=1) + dispatch.trip_kw.sum(axis=1)
    out[:, slots.single("surplus")] = spare * study.settings.surplus_cost_per_kwh * dt
    return out


def burnt_kw(context: WindowContext, dispatch: Dispatch, kw: FloatArray) -> FloatArray:
    """Power lost below the loss curves, (n_period,); ``kw`` (n_storage,) in service."""
    burnt = np.zeros(len(dispatch.import_kw))
    for i, unit in enumerate(context.study.storage):
        edges = np.array(unit.edges)
        draw = dispatch.storage_draw_kw[:, i]
        best = (edges[:, 0] * draw[:, None] + edges[:, 1] * kw[i]).min(axis=1)
        burnt += np.maximum(best - dispatch.storage_kw[:, i], 0.0)
    return burnt


def plan_metrics(
    context: WindowContext, dispatch: Dispatch, start: int, storage_kw: FloatArray
) -> FloatArray:
    """Metrics of normal service by period.

    Parameters
    ----------
    context : WindowContext
    dispatch : Dispatch, of periods ``start`` on
    start : int, first period
    storage_kw : array, shape (n_storage,), in service

    Returns
    -------
    array, shape (n_period of the dispatch, n_slot)
    """
    rows = start + np.arange(len(dispatch.import_kw))
    out = _running(context, dispatch, rows)
    slots, dt = context.slots, context.series.period_h
    missed = dispatch.shed_kw * context.keep * dt
    out[:, slots.single("normal_shedding")] = missed @ context.normal_price
    out[:, slots.single("normal_shed_kwh")] = missed.sum(axis=1)
    out[:, slots.single("burnt_kwh")] = burnt_kw(context, dispatch, storage_kw) * dt
    return out


def end_cost(context: WindowContext, energy_kwh: FloatArray, storage_kwh: FloatArray) -> float:
    """Price of the energy missing against the window's start."""
    series = context.series
    missing = np.maximum(series.start_soc_frac * storage_kwh - energy_kwh, 0.0)
    return float(missing @ series.stored_energy_price_per_kwh)


def event_metrics(
    context: WindowContext,
    scenario: Scenario,
    failure_period: int,
    dispatch: Dispatch,
    generator_kw: FloatArray,
    storage_kw: FloatArray,
    storage_kwh: FloatArray,
) -> FloatArray:
    """Metrics of one outage event, its end of the window included where it outlasts it.

    Parameters
    ----------
    context : WindowContext
    scenario : Scenario
    failure_period : int, ``k``; the event's periods are ``k + 1 ..``
    dispatch : Dispatch, of the event
    generator_kw, storage_kw, storage_kwh : arrays, in service

    Returns
    -------
    array, shape (n_slot,)
    """
    series, slots, study = context.series, context.slots, context.study
    dt, n_window = series.period_h, series.n_period
    period = failure_period + 1 + np.arange(scenario.n_period)
    rows = period % n_window
    out: FloatArray = _running(context, dispatch, rows).sum(axis=0)
    beyond = period >= n_window
    if beyond.any():
        load = series.load_kw[rows].sum(axis=1)
        for i, unit in enumerate(study.generators):
            if unit.technology is not Technology.DISPATCHABLE:
                load = load - generator_kw[i] * series.availability[rows, i]
        normal_supply = series.price_per_kwh[rows] * load * dt
        out[slots.single("energy")] -= normal_supply[beyond].sum()
    if period[-1] + 1 >= n_window:
        out[slots.single("end_of_window")] = end_cost(context, dispatch.energy_kwh[-1], storage_kwh)
    out[slots.single("burnt_kwh")] = burnt_kw(context, dispatch, storage_kw).sum() * dt
    out[slots.single("repair")] = scenario.repair_cost[failure_period]
    shed = dispatch.shed_kw
    missed = shed * context.keep * dt
    clock = np.arange(scenario.n_period, dtype=float) * dt
    first_moment = shed.max(axis=0) * context.keep * context.first_moment
    by_load = (missed * context.event_price(clock)).sum(axis=0) + first_moment
    out[slots.single("interruption")] = by_load.sum()
    out[slots.per_load("cost")] = by_load
    load = series.load_kw[rows]
    share = np.divide(shed, load, out=np.zeros_like(shed), where=load > 0.0)
    share = np.where(share < SHARE_TOLERANCE, 0.0, np.minimum(share, 1.0))
    own = context.event_price(_own_clock(share > 0.0) * dt)
    out[slots.single("interruption_own_clock")] = float((missed * own).sum() + first_moment.sum())
    out[slots.per_load("ens_kwh")] = missed.sum(axis=0)
    sustained, momentary, hours = count_interruptions(
        share, dt, scenario.n_isolation, scenario.switching_h
    )
    out[slots.per_load("sustained")] = sustained
    out[slots.per_load("momentary")] = momentary
    out[slots.per_load("hours")] = hours
    return out


def _own_clock(interrupted: NDArray[np.bool_]) -> FloatArray:
    """Periods since each load's present interruption began, (n_period, n_load)."""
    clock = np.zeros(interrupted.shape)
    for j in range(1, len(interrupted)):
        clock[j] = np.where(interrupted[j] & interrupted[j - 1], clock[j - 1] + 1.0, 0.0)
    return clock


def count_interruptions(
    share: FloatArray, period_h: float, n_isolation: int, switching_h: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Interruptions and interrupted hours of one event, in shares of each load's customers.

    Parameters
    ----------
    share : array, shape (n_period, n_load), share of the load shed
    period_h : float
    n_isolation : int, leading periods of isolation
    switching_h : float, true duration of isolation

    Returns
    -------
    sustained, momentary, hours : arrays, shape (n_load,); hours are those of sustained
        interruptions, as SAIDI counts them (IEEE Std 1366)
    """
    largest = share.max(axis=0)
    hours = share.sum(axis=0) * period_h
    n_load = share.shape[1]
    if n_isolation == 0:
        short = np.zeros(n_load)
    else:
        # What isolation alone interrupts comes back after the true switching time.
        isolated = share[:n_isolation].max(axis=0)
        later = share[n_isolation:]
        after = later[0] if len(later) else np.zeros(n_load)
        restored = np.maximum(isolated - after, 0.0)
        hours = hours - restored * (n_isolation * period_h - switching_h)
        again = later.max(axis=0) if len(later) else np.zeros(n_load)
        short = np.maximum(isolated - again, 0.0) * (switching_h <= MOMENTARY_H)
        hours = hours - short * switching_h
    lasting = (share > 0.0).sum(axis=0) * period_h <= MOMENTARY_H
    momentary = np.where(lasting, largest, short)
    return largest - momentary, momentary, np.where(lasting, 0.0, hours)
