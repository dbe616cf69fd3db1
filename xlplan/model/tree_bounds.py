"""Bounds on the cost of every node of the whole tree, at any state and purchase.

They size the two inequalities of failures that a measure avoids (``whole_tree.py``), so they must
be valid, and should be small. Upper: the cost of a policy that is always feasible (all load shed,
all units at 0). Lower: everything served for nothing, every kW sold.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.tree_size import hardening_slices
from xlplan.outages.damage import (
    first_moment_cost,
    normal_service_price_per_kwh,
    price_per_kwh,
)
from xlplan.outages.records import Scenario
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study, Technology

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class ValueBounds:
    """Bounds on expected cost from a node on.

    plan_low, plan_high : (n_period + 1,), a plan from period u; at n_period the end of the window
    event_low, event_high : (n_scenario, n_period + 1), an event whose first period is t >= 1
    trip : float, most that can be paid to bring every unit from full output to 0 in one period;
        to be added once to an upper bound (the policy stays at 0 from then on)
    """

    plan_low: FloatArray
    plan_high: FloatArray
    event_low: FloatArray
    event_high: FloatArray
    trip: float


def bound_values(study: Study, window: WindowModel) -> ValueBounds:
    """Bounds of one window by recursion from its last period to its first.

    Parameters
    ----------
    study : Study
    window : WindowModel

    Returns
    -------
    ValueBounds; without repair costs of the failure that starts an event, those are data
    """
    n_period = window.series.n_period
    n_scenario = len(window.scenarios)
    sold = _most_sold(study, window)
    shed_cost = _normal_shed_cost(study, window)
    plan_low, plan_high = np.zeros(n_period + 1), np.zeros(n_period + 1)
    event_low = np.full((n_scenario, n_period + 1), np.nan)
    event_high = np.full((n_scenario, n_period + 1), np.nan)
    plan_high[n_period] = _largest_end_cost(study, window)
    next_low, next_high = np.zeros(n_period), np.zeros(n_period)
    for u in range(n_period - 1, -1, -1):
        for i_scenario, scenario in enumerate(window.scenarios):
            t = u + 1
            after = min(t + scenario.n_period, n_period)
            low, high = _event_bounds(study, window, scenario, t, sold)
            event_low[i_scenario, t] = low + plan_low[after]
            event_high[i_scenario, t] = high + plan_high[after]
            chance = window.clock.scenario_chance[u, i_scenario]
            if chance <= 0.0:
                continue
            for part in hardening_slices(scenario):
                event_cost = scenario.repair_cost[u] + event_low[i_scenario, t]
                worst_cost = scenario.repair_cost[u] + event_high[i_scenario, t]
                if part.avoided_by:
                    event_cost = min(event_cost, plan_low[t])
                    worst_cost = max(worst_cost, plan_high[t])
                next_low[u] += chance * part.share * event_cost
                next_high[u] += chance * part.share * worst_cost
        # One period, then either a failure in it or the plan one period later.
        q = window.clock.failure_chance[u]
        plan_low[u] = -sold[u] + q * next_low[u] + (1.0 - q) * plan_low[u + 1]
        plan_high[u] = shed_cost[u] + q * next_high[u] + (1.0 - q) * plan_high[u + 1]
    return ValueBounds(plan_low, plan_high, event_low, event_high, _largest_trip_cost(study))


def _event_bounds(
    study: Study, window: WindowModel, scenario: Scenario, start: int, sold: FloatArray
) -> tuple[float, float]:
    """Lowest and highest cost of one event's own periods, all shed at the top."""
    series = window.series
    per_kwh_sold = 1.0 / (1.0 + study.settings.loss_allowance_frac)
    existing = np.array([unit.existing_kw for unit in study.generators])
    largest = existing + [unit.max_new_kw for unit in study.generators]
    renewable = [unit.technology is not Technology.DISPATCHABLE for unit in study.generators]
    class_of = {record.customer_class: record for record in study.customer_classes}
    low = high = 0.0
    peak_kw = np.zeros(len(study.loads))
    for i, service in enumerate(scenario.service):
        row = (start + i) % series.n_period
        hourly = series.price_per_kwh[row] * series.period_h
        low -= sold[row]
        peak_kw = np.maximum(peak_kw, series.load_kw[row])
        for load, kw in zip(study.loads, series.load_kw[row], strict=True):
            price = float(price_per_kwh(class_of[load.customer_class], service.clock_h))
            high += price * kw * per_kwh_sold * series.period_h
        if start + i >= series.n_period:
            given = series.availability[row] * renewable
            low -= hourly * (series.load_kw[row].sum() - float(given @ existing))
            high -= hourly * (series.load_kw[row].sum() - float(given @ largest))
    for load, kw in zip(study.loads, peak_kw, strict=True):
        high += first_moment_cost(class_of[load.customer_class]) * kw * per_kwh_sold
    return low, high


def _most_sold(study: Study, window: WindowModel) -> FloatArray:
    """Most that sale can bring in each period: all units at full power, within the limit."""
    series = window.series
    if series.export_price_per_kwh is None:
        return np.zeros(series.n_period)
    units = np.array([unit.existing_kw + unit.max_new_kw for unit in study.generators])
    stores = sum(unit.existing_kw + unit.max_new_kw for unit in study.storage)
    kw = np.minimum(series.availability @ units + stores, study.settings.substation_limit_kva)
    sale: FloatArray = series.export_price_per_kwh * series.period_h * kw
    return sale


def _normal_shed_cost(study: Study, window: WindowModel) -> FloatArray:
    """Cost of shedding everything in normal service, by period."""
    class_of = {record.customer_class: record for record in study.customer_classes}
    price = np.array(
        [normal_service_price_per_kwh(class_of[load.customer_class]) for load in study.loads]
    )
    sold_kw = window.series.load_kw / (1.0 + study.settings.loss_allowance_frac)
    cost: FloatArray = sold_kw @ price * window.series.period_h
    return cost


def _largest_end_cost(study: Study, window: WindowModel) -> float:
    """Every store at its lowest charge at the end."""
    series = window.series
    total = 0.0
    for i, unit in enumerate(study.storage):
        missing_frac = max(0.0, series.start_soc_frac[i] - unit.min_soc_frac)
        kwh = unit.existing_kwh + unit.max_new_kwh
        total += series.stored_energy_price_per_kwh[i] * missing_frac * kwh
    return float(total)


def _largest_trip_cost(study: Study) -> float:
    """Every ramp-limited unit tripped from full output."""
    settings = study.settings
    kw = sum(
        unit.existing_kw + unit.max_new_kw
        for unit in study.generators
        if unit.ramp_frac_per_period is not None
    )
    return kw * settings.surplus_cost_per_kwh * settings.period_h
