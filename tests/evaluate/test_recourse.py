"""Complete recourse: shedding everything with all units at 0 is feasible, whatever has happened.

No program is built and nothing is solved: the audit holds the dispatch against the model's rules in
every period of every scenario of random studies.
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.builders import random_study
from xlplan.evaluate.audit import audit_dispatch
from xlplan.evaluate.violations import (
    Capacities,
    UnitState,
    capacities_in_service,
    start_of_window,
)
from xlplan.model.dispatch import Dispatch, Purchases
from xlplan.network.feeder import Feeder, build_feeder
from xlplan.network.linear_flow import flows_and_voltages
from xlplan.network.tree import connected_parts
from xlplan.outages.records import ServicePeriod
from xlplan.outages.sections import build_sections
from xlplan.outages.window_model import build_window_models
from xlplan.study.study import Study


def largest_purchases(study: Study, share: float) -> Purchases:
    return Purchases(
        generator_kw=np.array([share * unit.max_new_kw for unit in study.generators]),
        storage_kw=np.array([share * unit.max_new_kw for unit in study.storage]),
        storage_kwh=np.array([share * unit.max_new_kwh for unit in study.storage]),
        is_hardened=np.zeros(len(study.measures), dtype=bool),
    )


def no_load_voltages(feeder: Feeder, service: ServicePeriod) -> np.ndarray:
    """Squared voltages with nothing flowing; islands at the source's level at their first bus."""
    live = service.line_live & service.bus_live[feeder.from_bus] & service.bus_live[feeder.to_bus]
    sources = [feeder.source] if service.source_live else []
    sources += [int(feeder.supply_bus[n]) for n in np.flatnonzero(service.supply_closed)]
    part = connected_parts(feeder, live, service.bus_live)
    roots: dict[int, int] = {}
    for bus in [*sources, *np.flatnonzero(service.bus_live).tolist()]:
        roots.setdefault(int(part[bus]), bus)
    held = dict.fromkeys(roots.values(), feeder.source_v_sq_pu)
    nothing = np.zeros(feeder.n_bus)
    return flows_and_voltages(feeder, live, held, nothing, nothing).v_sq_pu


def everything_shed(
    study: Study,
    feeder: Feeder,
    service: tuple[ServicePeriod, ...],
    load_kw: np.ndarray,
    before: UnitState,
) -> Dispatch:
    """All load shed, all units at 0; what a ramp would not allow is tripped at once."""
    n, stores = len(service), len(study.storage)
    tripped = np.zeros((n, len(study.generators)))
    tripped[0] = np.nan_to_num(before.output_kw)
    for_units = np.zeros((n, len(study.generators)))
    for_stores, for_buses = np.zeros((n, stores)), np.zeros((n, feeder.n_bus))
    for_lines, for_supplies = np.zeros((n, feeder.n_line)), np.zeros((n, len(study.supplies)))
    return Dispatch(
        import_kw=np.zeros(n),
        export_kw=np.zeros(n),
        source_kvar=np.zeros(n),
        supply_kw=for_supplies,
        supply_kvar=for_supplies,
        generator_kw=for_units,
        generator_kvar=for_units,
        storage_kw=for_stores,
        storage_draw_kw=for_stores,
        storage_kvar=for_stores,
        energy_kwh=np.tile(before.energy_kwh, (n, 1)),
        fuel_kwh=np.tile(before.fuel_kwh, (n, 1)),
        trip_kw=tripped,
        shed_kw=load_kw,
        surplus_kw=for_buses,
        capacitor_kvar=for_buses,
        line_kw=for_lines,
        line_kvar=for_lines,
        v_sq_pu=np.array([no_load_voltages(feeder, period) for period in service]),
    )


def states(study: Study, capacities: Capacities, start_soc_frac: np.ndarray) -> list[UnitState]:
    """The start of a window, and the far corner: stores and tanks at their lowest, output full."""
    start = start_of_window(study, capacities, start_soc_frac)
    floor = np.array([unit.min_soc_frac for unit in study.storage])
    corner = UnitState(
        energy_kwh=floor * capacities.storage_kwh,
        output_kw=capacities.generator_kw,
        fuel_kwh=0.0 * start.fuel_kwh,
    )
    return [start, corner]


@pytest.mark.parametrize("seed", range(30))
def test_shedding_everything_is_always_feasible(seed: int) -> None:
    study = random_study(seed)
    feeder = build_feeder(study)
    section_of_bus = build_sections(feeder).section_of_bus
    for window in build_window_models(study, feeder):
        normal = (window.normal,) * window.series.n_period
        stretches = [(normal, 0, False)]
        stretches += [(scenario.service, 1, True) for scenario in window.scenarios]
        for share in (0.0, 1.0):
            capacities = capacities_in_service(study, largest_purchases(study, share))
            for before in states(study, capacities, window.series.start_soc_frac):
                for service, start, is_event in stretches:
                    rows = (start + np.arange(len(service))) % window.series.n_period
                    load_kw = window.series.load_kw[rows]
                    dispatch = everything_shed(study, feeder, service, load_kw, before)
                    found = audit_dispatch(
                        study,
                        feeder,
                        section_of_bus,
                        window.series,
                        service,
                        dispatch,
                        capacities,
                        before,
                        start,
                        is_event,
                        demand_kw=0.0,
                    )
                    assert not found, [violation.text() for violation in found[:5]]
