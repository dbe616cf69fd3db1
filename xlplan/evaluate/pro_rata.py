"""Equal shares where the optimum leaves open who is shed (model.md section 6).

Load groups of one class and power factor in one connected part cost the same to shed, so a solver
may pick any of them. Reported shares are pro rata: in each period the kW shed of such a pool are
spread in proportion to what can be shed. The whole event is left as the solver gave it where the
new shares would break a rating or a voltage limit, or cost more by the charge on the largest kW.

With section control a pool is made of sections that hold one class only, or of the parts that can
be disconnected remotely (in periods in which nothing of their sections is switched off).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.evaluate.metrics import WindowContext
from xlplan.model.dispatch import Dispatch
from xlplan.network.linear_flow import flows_and_voltages
from xlplan.outages.records import Scenario, ServicePeriod
from xlplan.study.study import LoadControl

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

TOLERANCE_KW = 1e-6
"""Shares that differ by less than this many kW are equal."""

LIMIT_TOLERANCE = 1e-6
"""Ratings (kVA) and squared voltages may pass their limits by this, as the solver's rows may."""


@dataclass(frozen=True)
class _Unit:
    """Loads that are shed together, and the kW of each that can be."""

    loads: tuple[int, ...]
    kw: FloatArray


def sheds_live_load(scenario: Scenario, dispatch: Dispatch, load_bus: IntArray) -> bool:
    """Whether any load on a live bus is shed: only then is there anything to spread."""
    live = np.array([service.bus_live[load_bus] for service in scenario.service])
    return bool((dispatch.shed_kw * live > TOLERANCE_KW).any())


def share_pro_rata(
    context: WindowContext,
    scenario: Scenario,
    failure_period: int,
    dispatch: Dispatch,
) -> Dispatch:
    """The event with equal shares, where the optimum leaves them open.

    Parameters
    ----------
    context : WindowContext
    scenario : Scenario
    failure_period : int, ``k``; the event's periods are ``k + 1 ..``
    dispatch : Dispatch, with flows and voltages

    Returns
    -------
    Dispatch; the same object where nothing is open or the network does not allow equal shares
    """
    shed = dispatch.shed_kw.copy()
    n_window = context.series.n_period
    changed = []
    for j, (service, part) in enumerate(zip(scenario.service, _parts(scenario), strict=True)):
        load = context.series.load_kw[(failure_period + 1 + j) % n_window]
        if _spread(context, service, part, load, shed[j]):
            changed.append(j)
    if not changed or _charge(context, shed) > _charge(context, dispatch.shed_kw) * (1.0 + 1e-9):
        return dispatch
    spread = replace(
        dispatch,
        shed_kw=shed,
        line_kw=dispatch.line_kw.copy(),
        line_kvar=dispatch.line_kvar.copy(),
        v_sq_pu=dispatch.v_sq_pu.copy(),
    )
    for j in changed:
        flow = _moved_flow(context, scenario.service[j], dispatch, shed[j], j)
        if flow is None:
            return dispatch
        spread.line_kw[j], spread.line_kvar[j], spread.v_sq_pu[j] = flow
    return spread


def _parts(scenario: Scenario) -> Iterator[IntArray]:
    """Connected part of each bus, period by period."""
    for stage in scenario.stages:
        for _ in range(stage.n_period):
            yield stage.part_of_bus


def _charge(context: WindowContext, shed_kw: FloatArray) -> float:
    """Charge on the largest kW unserved at once."""
    return float(shed_kw.max(axis=0) * context.keep @ context.first_moment)


def _spread(
    context: WindowContext,
    service: ServicePeriod,
    part_of_bus: IntArray,
    load_kw: FloatArray,
    shed_kw: FloatArray,
) -> bool:
    """Spreads one period's shedding in place; whether anything moved."""
    live = service.bus_live[context.feeder.load_bus]
    if shed_kw[live].max(initial=0.0) <= TOLERANCE_KW:
        return False  # equal shares of next to nothing
    moved = False
    for units in _pools(context, service, part_of_bus, load_kw, shed_kw):
        able = np.concatenate([unit.kw for unit in units])
        loads = np.concatenate([np.array(unit.loads, dtype=np.int64) for unit in units])
        total = float(able.sum())
        if total <= TOLERANCE_KW:
            continue
        even = able * (float(shed_kw[loads].sum()) / total)
        if np.abs(even - shed_kw[loads]).max() > TOLERANCE_KW:
            shed_kw[loads] = even
            moved = True
    return moved


def _pools(
    context: WindowContext,
    service: ServicePeriod,
    part_of_bus: IntArray,
    load_kw: FloatArray,
    shed_kw: FloatArray,
) -> list[list[_Unit]]:
    """Pools of at least two units that cost the same to shed in one connected part."""
    study, load_bus = context.study, context.feeder.load_bus
    section_of_load = context.section_of_load
    live = service.bus_live[load_bus]
    remote = np.array([load.remote_disconnect_frac for load in study.loads])
    pools: dict[tuple[object, ...], list[_Unit]] = {}

    def add(kind: str, loads: list[int], kw: FloatArray) -> None:
        first = study.loads[loads[0]]
        part = int(part_of_bus[load_bus[loads[0]]])
        key = (kind, part, first.customer_class, first.power_factor)
        pools.setdefault(key, []).append(_Unit(tuple(loads), kw))

    if study.settings.load_control is LoadControl.BUS:
        for i in np.flatnonzero(live).tolist():
            add("load", [i], load_kw[[i]])
    else:
        for section in np.unique(section_of_load[live]):
            loads = [int(i) for i in np.flatnonzero(live & (section_of_load == section))]
            kinds = {(study.loads[i].customer_class, study.loads[i].power_factor) for i in loads}
            is_switched = (shed_kw[loads] > remote[loads] * load_kw[loads] + TOLERANCE_KW).any()
            if not remote[loads].any():
                if len(kinds) == 1:
                    add("section", loads, load_kw[loads])
            elif not is_switched:
                for i in loads:
                    if remote[i] > 0.0:
                        add("remote", [i], load_kw[[i]] * remote[i])
    return [units for units in pools.values() if len(units) > 1]


def _moved_flow(
    context: WindowContext,
    service: ServicePeriod,
    dispatch: Dispatch,
    shed_kw: FloatArray,
    j: int,
) -> tuple[FloatArray, FloatArray, FloatArray] | None:
    """Flows and voltages after shedding has moved; None where a limit would be broken.

    Everything is linear, so what has moved is added to what was there.
    """
    feeder, study = context.feeder, context.study
    kvar_per_kw = np.array([np.tan(np.arccos(load.power_factor)) for load in study.loads])
    less = shed_kw - dispatch.shed_kw[j]
    drawn_kw, drawn_kvar = np.zeros(feeder.n_bus), np.zeros(feeder.n_bus)
    np.add.at(drawn_kw, feeder.load_bus, -less)
    np.add.at(drawn_kvar, feeder.load_bus, -less * kvar_per_kw)
    roots = {int(island.buses[0]): 0.0 for island in service.islands}
    if service.source_live:
        roots[feeder.source] = 0.0
    roots.update({int(feeder.supply_bus[i]): 0.0 for i in np.flatnonzero(service.supply_closed)})
    moved = flows_and_voltages(feeder, service.line_live, roots, drawn_kw, drawn_kvar)
    kw = dispatch.line_kw[j] + moved.flow_kw
    kvar = dispatch.line_kvar[j] + moved.flow_kvar
    v_sq = dispatch.v_sq_pu[j] + moved.v_sq_pu
    settings = study.settings
    known = v_sq[np.isfinite(v_sq)]
    too_low = (known < settings.vmin_event_pu**2 - LIMIT_TOLERANCE).any()
    too_high = (known > settings.vmax_event_pu**2 + LIMIT_TOLERANCE).any()
    if too_low or too_high or (np.hypot(kw, kvar) > feeder.rating_kva + LIMIT_TOLERANCE).any():
        return None
    return kw, kvar, v_sq
