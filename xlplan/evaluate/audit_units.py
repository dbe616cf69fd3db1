"""Audit of generators, storage and islands in one period, from model.md section 4 alone.

Every check is one sentence of the model and one comparison of numbers. Ratings are held against
true circles: the polygons of the linear programs lie inside them.
"""

from __future__ import annotations

import math

import numpy as np

from xlplan.evaluate.violations import Capacities, Findings, UnitState
from xlplan.model.dispatch import Dispatch
from xlplan.network.feeder import Feeder
from xlplan.outages.records import Island, ServicePeriod
from xlplan.study.study import Generator, Storage, Study
from xlplan.study.windows import WindowSeries


def audit_generators(
    findings: Findings,
    study: Study,
    series: WindowSeries,
    service: ServicePeriod,
    dispatch: Dispatch,
    i: int,
    capacities: Capacities,
    before: UnitState,
    is_event: bool,
) -> None:
    """Checks every generator in one period.

    Parameters
    ----------
    findings : Findings, of the period; violations are added
    study, series : of the window
    service : ServicePeriod, what can run
    dispatch : Dispatch
    i : int, position of the period within the dispatch
    capacities : Capacities
    before : UnitState, before the period
    is_event : bool, outage event or normal service
    """
    row = findings.period % series.n_period
    for g, unit in enumerate(study.generators):
        where, size = unit.generator, float(capacities.generator_kw[g])
        kw, kvar = float(dispatch.generator_kw[i, g]), float(dispatch.generator_kvar[i, g])
        fuel, fuel_before = float(dispatch.fuel_kwh[i, g]), float(before.fuel_kwh[g])
        if not service.generator_live[g]:
            # A failed unit and a unit on a dead bus stand still, the tank unchanged.
            findings.equal("output of a unit that stands still", where, kw, 0.0)
            findings.equal("kvar of a unit that stands still", where, kvar, 0.0)
            if unit.tank_h is not None:
                findings.equal("fuel of a unit that stands still", where, fuel, fuel_before)
            continue
        # Output lies between 0 and the rating; solar and wind below rating times profile.
        share = float(series.availability[row, g])
        findings.at_least("output below 0", where, kw, 0.0)
        findings.at_most("output above what is available", where, kw, size * share)
        findings.at_most("kVA above the rating", where, math.hypot(kw, kvar), size)
        # A unit that may not run yet, or runs in outages only, gives neither kW nor kvar.
        if not service.generator_may_run[g] or (unit.is_outage_only and not is_event):
            findings.equal("output of a unit that may not run", where, kw, 0.0)
            findings.equal("kvar of a unit that may not run", where, kvar, 0.0)
        trip = float(dispatch.trip_kw[i, g])
        _audit_ramp(findings, unit, kw, trip, size, float(before.output_kw[g]))
        if unit.tank_h is not None:
            refills = bool(service.generator_refills[g])
            _audit_tank(findings, unit, kw, size, fuel, fuel_before, refills, series.period_h)


def _audit_ramp(
    findings: Findings, unit: Generator, kw: float, trip: float, size: float, before: float
) -> None:
    """Output rises by at most the ramp, and falls by at most the ramp and what is tripped."""
    findings.at_least("trip below 0", unit.generator, trip, 0.0)
    if unit.ramp_frac_per_period is None or math.isnan(before):
        return
    step = unit.ramp_frac_per_period * size
    findings.at_most("rise above the ramp", unit.generator, kw, before + step)
    findings.at_least("fall beyond the ramp", unit.generator, kw, before - step - trip)


def _audit_tank(
    findings: Findings,
    unit: Generator,
    kw: float,
    size: float,
    fuel: float,
    before: float,
    refills: bool,
    period_h: float,
) -> None:
    """The tank never holds more than its size, nor more than was left, less used, plus refilled."""
    assert unit.tank_h is not None
    tank = unit.tank_h * size
    findings.at_least("fuel below 0", unit.generator, fuel, 0.0)
    findings.at_most("fuel above the tank", unit.generator, fuel, tank)
    if refills and unit.refill_frac_per_h is None:
        return  # refilled at once, whatever was used
    rate = 0.0 if unit.refill_frac_per_h is None or not refills else unit.refill_frac_per_h
    left = before - kw * period_h + rate * tank * period_h
    findings.at_most("fuel from nowhere", unit.generator, fuel, left)


def audit_storage(
    findings: Findings,
    study: Study,
    service: ServicePeriod,
    dispatch: Dispatch,
    i: int,
    capacities: Capacities,
    before: UnitState,
) -> None:
    """Checks every store in one period.

    Parameters
    ----------
    findings : Findings, of the period; violations are added
    study : Study
    service : ServicePeriod, what can run
    dispatch : Dispatch
    i : int, position of the period within the dispatch
    capacities : Capacities
    before : UnitState, before the period
    """
    for s, unit in enumerate(study.storage):
        where, kwh = unit.storage, float(capacities.storage_kwh[s])
        draw, energy = float(dispatch.storage_draw_kw[i, s]), float(dispatch.energy_kwh[i, s])
        kw, kvar = float(dispatch.storage_kw[i, s]), float(dispatch.storage_kvar[i, s])
        # Energy falls by the power drawn from the store times the hours of the period.
        after = float(before.energy_kwh[s]) - draw * study.settings.period_h
        findings.equal("energy not balanced", where, energy, after)
        # Energy lies between the lowest charge and the rating.
        findings.at_most("energy above the rating", where, energy, kwh)
        findings.at_least("energy below the lowest charge", where, energy, unit.min_soc_frac * kwh)
        if not service.storage_live[s]:
            # A failed store and a store on a dead bus stand still.
            for what, value in (("power", kw), ("kvar", kvar), ("draw", draw)):
                findings.equal(f"{what} of a unit that stands still", where, value, 0.0)
            continue
        _audit_curve(findings, unit, kw, draw, float(capacities.storage_kw[s]))
        # The inverter's kVA is the rating in kW.
        size = float(capacities.storage_kw[s])
        findings.at_most("kVA above the rating", where, math.hypot(kw, kvar), size)


def _audit_curve(findings: Findings, unit: Storage, kw: float, draw: float, size: float) -> None:
    """Terminal power lies under the loss curve; the draw stays between the curve's end points.

    The curve is read off its points by interpolation, not by the edges of the programs.
    """
    store = np.array([z for z, _ in unit.curve]) * size
    terminal = np.array([b for _, b in unit.curve]) * size
    findings.at_least("draw below the curve's end", unit.storage, draw, store[0])
    findings.at_most("draw above the curve's end", unit.storage, draw, store[-1])
    on_curve = float(np.interp(draw, store, terminal)) if size > 0.0 else 0.0
    findings.at_most("power above the loss curve", unit.storage, kw, on_curve)


def audit_island(
    findings: Findings,
    study: Study,
    feeder: Feeder,
    dispatch: Dispatch,
    i: int,
    capacities: Capacities,
    island: Island,
    served_kw: float,
) -> None:
    """Checks the rules of one island in one period.

    Parameters
    ----------
    findings : Findings, of the period; violations are added
    study, feeder : of one study
    dispatch : Dispatch
    i : int, position of the period within the dispatch
    capacities : Capacities
    island : Island
    served_kw : float, load served in it
    """
    buses = set(island.buses)
    where = "island of " + feeder.bus_ids[island.buses[0]]
    size = sum(float(capacities.generator_kw[g]) for g in island.forming_generators)
    size += sum(float(capacities.storage_kw[s]) for s in island.forming_storage)
    held = sum(float(dispatch.generator_kw[i, g]) for g in island.forming_generators)
    held += sum(float(dispatch.storage_kw[i, s]) for s in island.forming_storage)
    inside = np.isin(feeder.generator_bus, sorted(buses))
    output = float(dispatch.generator_kw[i, inside].sum())
    output += float(dispatch.storage_kw[i, np.isin(feeder.storage_bus, sorted(buses))].sum())
    settings = study.settings
    # The other units together give at most island_ratio times the rating of the forming units.
    findings.at_most(
        "followers above the island ratio", where, output - held, settings.island_ratio * size
    )
    # What the forming units could give more covers island_headroom times the served load.
    findings.at_least(
        "headroom too small", where, size - held, settings.island_headroom_frac * served_kw
    )
    # Forming units are grid-forming and stand in the island.
    for g in island.forming_generators:
        if not study.generators[g].is_grid_forming or int(feeder.generator_bus[g]) not in buses:
            findings.at_most("formed by a unit that cannot", where, 1.0, 0.0)
    for s in island.forming_storage:
        if not study.storage[s].is_grid_forming or int(feeder.storage_bus[s]) not in buses:
            findings.at_most("formed by a unit that cannot", where, 1.0, 0.0)
