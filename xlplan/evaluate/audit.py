"""Re-checks a dispatch against the study, with code that takes no part in building the programs.

Enters: what runs in each period (``Dispatch``), what can run (``ServicePeriod``), what is in
service. Leaves: a list of violations, empty for a feasible dispatch. Flows and voltages are worked
out again from the injections; the reported ones are only compared with them. Nothing is taken from
``xlplan.model`` but the record of the results.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.evaluate.audit_units import audit_generators, audit_island, audit_storage
from xlplan.evaluate.violations import (
    TOLERANCE_V_SQ_PU,
    Capacities,
    Findings,
    UnitState,
    Violation,
    state_after,
)
from xlplan.model.dispatch import Dispatch
from xlplan.network.feeder import Feeder
from xlplan.network.linear_flow import flows_and_voltages
from xlplan.network.tree import radial_tree
from xlplan.outages.records import ServicePeriod
from xlplan.study.study import LoadControl, Study
from xlplan.study.windows import WindowSeries

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def audit_dispatch(
    study: Study,
    feeder: Feeder,
    section_of_bus: IntArray,
    series: WindowSeries,
    service: Sequence[ServicePeriod],
    dispatch: Dispatch,
    capacities: Capacities,
    before: UnitState,
    start_period: int,
    is_event: bool,
    demand_kw: float | None = None,
) -> list[Violation]:
    """Everything in a dispatch that breaks a rule of model.md section 4.

    Parameters
    ----------
    study, feeder : of one study
    section_of_bus : array, shape (n_bus,), section of each bus (for load control by section)
    series : WindowSeries, of the window; row ``k mod n_period`` in period ``k``
    service : sequence of ServicePeriod, one per period of the dispatch
    dispatch : Dispatch
    capacities : Capacities, existing and bought
    before : UnitState, before the first period
    start_period : int, the dispatch's first period in the window
    is_event : bool, outage event or normal service
    demand_kw : float or None, purchase may not pass it; None where it does not count

    Returns
    -------
    list of Violation, in the order of the periods
    """
    findings = Findings()
    for i, can_run in enumerate(service):
        findings.period = start_period + i
        row = findings.period % series.n_period
        load_kw, load_kvar = series.load_kw[row], series.load_kvar[row]
        shed_kw = dispatch.shed_kw[i]
        _audit_shedding(findings, study, feeder, section_of_bus, can_run, load_kw, shed_kw)
        _audit_sources(findings, study, feeder, series, can_run, dispatch, i)
        if demand_kw is not None:
            # The demand that is paid for is no less than any purchase of the first plan.
            findings.at_most(
                "purchase above the demand", "source", dispatch.import_kw[i], demand_kw
            )
        audit_generators(
            findings, study, series, can_run, dispatch, i, capacities, before, is_event
        )
        audit_storage(findings, study, can_run, dispatch, i, capacities, before)
        for island in can_run.islands:
            inside = np.isin(feeder.load_bus, island.buses)
            served_kw = float((load_kw - shed_kw)[inside].sum())
            audit_island(findings, study, feeder, dispatch, i, capacities, island, served_kw)
        injections = _injections(feeder, dispatch, i, load_kw, load_kvar)
        settings = study.settings
        band = (settings.vmin_event_pu, settings.vmax_event_pu)
        if not is_event:
            band = (settings.vmin_pu, settings.vmax_pu)
        _audit_network(findings, feeder, can_run, dispatch, i, injections, band)
        before = state_after(dispatch, i, can_run)
    return findings.violations


def _audit_shedding(
    findings: Findings,
    study: Study,
    feeder: Feeder,
    section_of_bus: IntArray,
    service: ServicePeriod,
    load_kw: FloatArray,
    shed_kw: FloatArray,
) -> None:
    """What is shed lies between nothing and the load; dead buses shed all; sections keep shares."""
    by_section: dict[int, list[int]] = {}
    for i_load, load in enumerate(study.loads):
        findings.at_least("shed below 0", load.load, shed_kw[i_load], 0.0)
        findings.at_most("shed above the load", load.load, shed_kw[i_load], load_kw[i_load])
        bus = int(feeder.load_bus[i_load])
        if not service.bus_live[bus]:
            findings.equal("dead load served", load.load, shed_kw[i_load], load_kw[i_load])
        else:
            by_section.setdefault(int(section_of_bus[bus]), []).append(i_load)
    if study.settings.load_control is LoadControl.BUS:
        return
    for members in by_section.values():
        # One share of every load in a section is switched off, besides what is disconnected
        # remotely: shed = share * (1 - remote) * load + r with 0 <= r <= remote * load. Each load
        # allows an interval of shares; all intervals must meet.
        lowest, highest, size = 0.0, 1.0, 0.0
        for i_load in members:
            remote = study.loads[i_load].remote_disconnect_frac
            switched_kw = (1.0 - remote) * float(load_kw[i_load])
            if switched_kw > 0.0:
                shed = float(shed_kw[i_load])
                lowest = max(lowest, (shed - remote * float(load_kw[i_load])) / switched_kw)
                highest = min(highest, shed / switched_kw)
                size = max(size, switched_kw)
        name = study.loads[members[0]].load
        findings.at_most("unequal shares in the section", name, lowest * size, highest * size)


def _audit_sources(
    findings: Findings,
    study: Study,
    feeder: Feeder,
    series: WindowSeries,
    service: ServicePeriod,
    dispatch: Dispatch,
    i: int,
) -> None:
    """Purchase, sale and neighbour supplies, capacitors and surplus within their limits."""
    row = findings.period % series.n_period
    bought, sold = float(dispatch.import_kw[i]), float(dispatch.export_kw[i])
    kvar = float(dispatch.source_kvar[i])
    findings.at_least("purchase below 0", "source", bought, 0.0)
    findings.at_least("sale below 0", "source", sold, 0.0)
    # The source's apparent power stays within the substation limit.
    findings.at_most(
        "kVA above the substation limit",
        "source",
        math.hypot(bought - sold, kvar),
        study.settings.substation_limit_kva,
    )
    if series.export_price_per_kwh is None:
        findings.equal("sale where none is allowed", "source", sold, 0.0)
    if not service.source_live:
        # A source that is out gives and takes nothing.
        for what, value in (("purchase", bought), ("sale", sold), ("kvar", kvar)):
            findings.equal(f"{what} of a dead source", "source", value, 0.0)
    for n, supply in enumerate(study.supplies):
        # A neighbour supply gives up to its spare power while closed, nothing while open.
        kw = float(dispatch.supply_kw[i, n])
        is_closed = bool(service.supply_closed[n])
        limit = float(series.supply_kw[row, n]) if is_closed else 0.0
        findings.at_least("supply below 0", supply.supply, kw, 0.0)
        findings.at_most("supply above its spare power", supply.supply, kw, limit)
        if not is_closed:
            findings.equal("kvar of an open supply", supply.supply, dispatch.supply_kvar[i, n], 0.0)
    for bus, name in enumerate(feeder.bus_ids):
        # Capacitors give between 0 and their kvar; a dead bus has neither capacitor nor surplus.
        live = bool(service.bus_live[bus])
        limit = float(feeder.capacitor_kvar[bus]) if live else 0.0
        findings.at_least("capacitor below 0", name, dispatch.capacitor_kvar[i, bus], 0.0)
        findings.at_most("capacitor above its kvar", name, dispatch.capacitor_kvar[i, bus], limit)
        findings.at_least("surplus below 0", name, dispatch.surplus_kw[i, bus], 0.0)
        if not live:
            findings.equal("surplus on a dead bus", name, dispatch.surplus_kw[i, bus], 0.0)


@dataclass(frozen=True)
class _Injections:
    """Net power into the network at each bus: (n_bus,) each."""

    kw: FloatArray
    kvar: FloatArray


def _injections(
    feeder: Feeder, dispatch: Dispatch, i: int, load_kw: FloatArray, load_kvar: FloatArray
) -> _Injections:
    """Sources and units less the served load and surplus; kvar is shed at the power factor."""
    kw, kvar = np.zeros(feeder.n_bus), np.zeros(feeder.n_bus)
    kvar_per_kw = np.divide(load_kvar, load_kw, out=np.zeros_like(load_kw), where=load_kw > 0)
    kw[feeder.source] += dispatch.import_kw[i] - dispatch.export_kw[i]
    kvar[feeder.source] += dispatch.source_kvar[i]
    np.add.at(kw, feeder.supply_bus, dispatch.supply_kw[i])
    np.add.at(kvar, feeder.supply_bus, dispatch.supply_kvar[i])
    np.add.at(kw, feeder.generator_bus, dispatch.generator_kw[i])
    np.add.at(kvar, feeder.generator_bus, dispatch.generator_kvar[i])
    np.add.at(kw, feeder.storage_bus, dispatch.storage_kw[i])
    np.add.at(kvar, feeder.storage_bus, dispatch.storage_kvar[i])
    served_kw = load_kw - dispatch.shed_kw[i]
    np.subtract.at(kw, feeder.load_bus, served_kw)
    np.subtract.at(kvar, feeder.load_bus, served_kw * kvar_per_kw)
    return _Injections(kw - dispatch.surplus_kw[i], kvar + dispatch.capacitor_kvar[i])


def _audit_network(
    findings: Findings,
    feeder: Feeder,
    service: ServicePeriod,
    dispatch: Dispatch,
    i: int,
    injections: _Injections,
    band_pu: tuple[float, float],
) -> None:
    """Balance of every connected part, ratings of its lines, voltages of its buses.

    The squared voltages of a part are ``scale * v_root + shift``: what they are with the root at 0
    is the shift, what a root at 1 adds is the scale.
    """
    live = service.line_live & service.bus_live[feeder.from_bus] & service.bus_live[feeder.to_bus]
    sources = [feeder.source] if service.source_live else []
    sources += [int(feeder.supply_bus[n]) for n in np.flatnonzero(service.supply_closed)]
    unseen = set(np.flatnonzero(service.bus_live).tolist())
    parts: list[list[int]] = []
    is_walked = np.zeros(feeder.n_line, dtype=bool)
    for bus in [*sources, *range(feeder.n_bus)]:
        if bus not in unseen:
            continue
        tree = radial_tree(feeder, live, [bus])
        unseen -= set(tree.order)
        where = f"part of {feeder.bus_ids[bus]}"
        # What goes in comes out: no losses within a part.
        members = list(tree.order)
        findings.equal("kW not balanced", where, injections.kw[members].sum(), 0.0)
        findings.equal("kvar not balanced", where, injections.kvar[members].sum(), 0.0)
        # The feeder stays radial; flows in a loop are not settled by the injections.
        findings.at_most("loop", where, float(tree.has_loop), 0.0)
        if not tree.has_loop:
            parts.append(members)
            is_walked[tree.parent_line[members[1:]]] = True
    drawn = (-injections.kw, -injections.kvar)
    shift = flows_and_voltages(feeder, live, {part[0]: 0.0 for part in parts}, *drawn)
    scale_and_shift = flows_and_voltages(feeder, live, {part[0]: 1.0 for part in parts}, *drawn)
    scale = scale_and_shift.v_sq_pu - shift.v_sq_pu
    for line, name in enumerate(feeder.line_ids):
        kw, kvar = float(shift.flow_kw[line]), float(shift.flow_kvar[line])
        if is_walked[line]:
            # Lines keep within the circle of their rating.
            size = math.hypot(kw, kvar)
            findings.at_most("kVA above the rating", name, size, feeder.rating_kva[line])
            findings.equal("kW reported", name, dispatch.line_kw[i, line], kw)
            findings.equal("kvar reported", name, dispatch.line_kvar[i, line], kvar)
        elif not live[line]:
            # A line that is open or dead carries nothing.
            findings.equal("kW of a dead line", name, dispatch.line_kw[i, line], 0.0)
            findings.equal("kvar of a dead line", name, dispatch.line_kvar[i, line], 0.0)
    for members in parts:
        held = [source for source in sources if source in members]
        reported = dispatch.v_sq_pu[i]
        _audit_voltages(findings, feeder, members, held, scale, shift.v_sq_pu, reported, band_pu)


def _audit_voltages(
    findings: Findings,
    feeder: Feeder,
    members: list[int],
    held: list[int],
    scale: FloatArray,
    shift: FloatArray,
    reported: FloatArray,
    band_pu: tuple[float, float],
) -> None:
    """Voltages of one part within the band, and reported as they follow from the injections.

    Sources hold theirs. An island's root is free: each bus allows an interval of root voltages, and
    all intervals must meet.
    """
    low, high = band_pu[0] ** 2, band_pu[1] ** 2
    root = feeder.source_v_sq_pu if held else float(reported[members[0]])
    for bus in members:
        name, v_sq = feeder.bus_ids[bus], float(scale[bus] * root + shift[bus])
        findings.equal("voltage reported", name, reported[bus], v_sq, TOLERANCE_V_SQ_PU)
        if held:
            findings.at_least("voltage below the band", name, v_sq, low, TOLERANCE_V_SQ_PU)
            findings.at_most("voltage above the band", name, v_sq, high, TOLERANCE_V_SQ_PU)
        if bus in held:
            findings.equal("voltage of a source", name, v_sq, root, TOLERANCE_V_SQ_PU)
    if not held:
        lowest = max((low - shift[bus]) / scale[bus] for bus in members)
        highest = min((high - shift[bus]) / scale[bus] for bus in members)
        where = "island of " + feeder.bus_ids[members[0]]
        findings.at_most(
            "voltages spread beyond the band", where, lowest, highest, TOLERANCE_V_SQ_PU
        )
