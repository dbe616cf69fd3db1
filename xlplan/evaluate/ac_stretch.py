"""One stretch of operation solved by linear and by AC power flow, topology by topology.

Enters: what runs in each period. Leaves: a ``SolvedStretch``: voltages by both flows, losses,
loadings. Units and capacitors run as planned; loads are served as planned, with the loss allowance
taken off in the AC flow, since the losses themselves are in it. What the losses need beyond the
allowance comes from whoever holds the voltage: the source, a closed neighbour supply, or in an
island the largest forming unit.

The voltage that an island is held at is free in the model. Here its root is held at nominal
voltage, or as near to it as leaves a quarter of what the limits allow by the linear flow at either
end; the same for both flows, so that neither is at a disadvantage.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.evaluate.operation import Operated
from xlplan.evaluate.traces import time_label
from xlplan.evaluate.violations import Capacities
from xlplan.network.ac_flow import solve_ac_flow
from xlplan.network.feeder import Feeder
from xlplan.network.linear_flow import flows_and_voltages
from xlplan.network.tree import radial_tree
from xlplan.outages.records import Island, ServicePeriod
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class StretchLoading:
    """One asset's loading by period, as shares of its rating; nan where it does not count."""

    asset: str
    kind: str
    rating: float
    unit: str
    linear: FloatArray
    ac: FloatArray


@dataclass(frozen=True)
class SolvedStretch:
    """One stretch: (n_period, n_bus) voltages, (n_period,) the rest."""

    item: Operated
    place: str
    """The window, or the event and its window."""
    times: tuple[str, ...]
    occurrences_per_year: float
    period_h: float
    n_topology: int
    linear_pu: FloatArray
    ac_pu: FloatArray
    converged: BoolArray
    served_kw: FloatArray
    loss_kw: FloatArray
    price_per_kwh: FloatArray
    loadings: tuple[StretchLoading, ...]

    @property
    def is_event(self) -> bool:
        """True for an outage event."""
        return self.item.i_scenario is not None


def solve_stretch(
    study: Study,
    feeder: Feeder,
    windows: Sequence[WindowModel],
    capacities: Capacities,
    item: Operated,
) -> SolvedStretch:
    """All periods of one stretch, topology by topology.

    Parameters
    ----------
    study, feeder, windows : of one study
    capacities : Capacities, existing and bought
    item : Operated, the stretch as the plan runs it

    Returns
    -------
    SolvedStretch
    """
    window, record = windows[item.i_window], study.windows[item.i_window]
    series = window.series
    if item.i_scenario is None:
        service: Sequence[ServicePeriod] = [window.normal] * series.n_period
        first, place = 0, record.window
    else:
        scenario = window.scenarios[item.i_scenario]
        service, first = scenario.service, item.failure_period + 1
        place = f"{scenario.name} in {record.window}"
    n_period = len(item.dispatch.import_kw)
    rows = (first + np.arange(n_period)) % series.n_period
    share = 1.0 / (1.0 + study.settings.loss_allowance_frac)
    drawn = _drawn(feeder, series.load_kw[rows], series.load_kvar[rows], item, share)
    flows = _Flows.empty(feeder, n_period)
    n_topology = 0
    for topology, periods in _topologies(service[:n_period]):
        n_topology += 1
        _solve_topology(study, feeder, capacities, topology, periods, drawn, item, flows)
    served = (series.load_kw[rows] - item.dispatch.shed_kw).sum(axis=1)
    times = tuple(time_label(study.profiles.times[record.start_row + int(r)]) for r in rows)
    return SolvedStretch(
        item=item,
        place=place,
        times=times,
        occurrences_per_year=series.occurrences_per_year,
        period_h=series.period_h,
        n_topology=n_topology,
        linear_pu=flows.linear_pu,
        ac_pu=flows.ac_pu,
        converged=flows.converged,
        served_kw=served * share,
        loss_kw=flows.loss_kw,
        price_per_kwh=series.price_per_kwh[rows],
        loadings=_asset_loadings(study, feeder, capacities, series.supply_kw[rows], item, flows),
    )


@dataclass(frozen=True)
class _Drawn:
    """(n_period, n_bus) each: what buses draw less what units and capacitors give."""

    linear_kw: FloatArray
    linear_kvar: FloatArray
    ac_kw: FloatArray
    ac_kvar: FloatArray


def _drawn(
    feeder: Feeder, load_kw: FloatArray, load_kvar: FloatArray, item: Operated, share: float
) -> _Drawn:
    """Served load with the loss allowance (linear) and without (AC), less injections."""
    run = item.dispatch
    n_period = len(load_kw)
    served_kw = load_kw - run.shed_kw
    kvar_per_kw = np.divide(load_kvar, load_kw, out=np.zeros_like(load_kw), where=load_kw > 0.0)
    load = np.zeros((2, n_period, feeder.n_bus))
    np.add.at(load[0].T, feeder.load_bus, served_kw.T)
    np.add.at(load[1].T, feeder.load_bus, (served_kw * kvar_per_kw).T)
    other = np.zeros((2, n_period, feeder.n_bus))
    other[0] += run.surplus_kw
    other[1] -= run.capacitor_kvar
    for bus, kw, kvar in (
        (feeder.generator_bus, run.generator_kw, run.generator_kvar),
        (feeder.storage_bus, run.storage_kw, run.storage_kvar),
    ):
        np.subtract.at(other[0].T, bus, kw.T)
        np.subtract.at(other[1].T, bus, kvar.T)
    linear, ac = load + other, share * load + other
    return _Drawn(linear[0], linear[1], ac[0], ac[1])


def _topologies(service: Sequence[ServicePeriod]) -> Iterator[tuple[ServicePeriod, IntArray]]:
    """Periods in which the same is live, with one of their records."""
    groups: dict[tuple[object, ...], list[int]] = {}
    for i, period in enumerate(service):
        key = (
            period.line_live.tobytes(),
            period.bus_live.tobytes(),
            period.supply_closed.tobytes(),
            period.source_live,
            period.islands,
        )
        groups.setdefault(key, []).append(i)
    for periods in groups.values():
        yield service[periods[0]], np.array(periods, dtype=np.int64)


@dataclass(frozen=True)
class _Flows:
    """Results of all periods, filled topology by topology; nan where nothing is known.

    ``source``, ``supply``, ``unit``: (n_period, n) kVA or kW given, linear and AC.
    """

    linear_pu: FloatArray
    ac_pu: FloatArray
    converged: BoolArray
    loss_kw: FloatArray
    line_linear_kva: FloatArray
    line_ac_kva: FloatArray
    source_ac_kva: FloatArray
    supply_ac_kw: FloatArray
    generator_ac_kva: FloatArray
    storage_ac_kva: FloatArray

    @classmethod
    def empty(cls, feeder: Feeder, n_period: int) -> _Flows:
        def unknown(*shape: int) -> FloatArray:
            return np.full((n_period, *shape), np.nan)

        return cls(
            linear_pu=unknown(feeder.n_bus),
            ac_pu=unknown(feeder.n_bus),
            converged=np.ones(n_period, dtype=bool),
            loss_kw=np.zeros(n_period),
            line_linear_kva=unknown(feeder.n_line),
            line_ac_kva=unknown(feeder.n_line),
            source_ac_kva=unknown(),
            supply_ac_kw=unknown(len(feeder.supply_ids)),
            generator_ac_kva=unknown(len(feeder.generator_bus)),
            storage_ac_kva=unknown(len(feeder.storage_bus)),
        )


def _solve_topology(
    study: Study,
    feeder: Feeder,
    capacities: Capacities,
    service: ServicePeriod,
    periods: IntArray,
    drawn: _Drawn,
    item: Operated,
    flows: _Flows,
) -> None:
    """Fills in the periods of one topology."""
    live = service.line_live & service.bus_live[feeder.from_bus] & service.bus_live[feeder.to_bus]
    linear = (drawn.linear_kw[periods], drawn.linear_kvar[periods])
    source_pu = math.sqrt(feeder.source_v_sq_pu)
    root_pu: dict[int, float | FloatArray] = {}
    if service.source_live and service.bus_live[feeder.source]:
        root_pu[feeder.source] = source_pu
    fed = [n for n in np.flatnonzero(service.supply_closed) if _is_fed(feeder, service, int(n))]
    for n in fed:
        root_pu[int(feeder.supply_bus[n])] = source_pu
    band = (study.settings.vmin_pu, study.settings.vmax_pu)
    if item.i_scenario is not None:
        band = (study.settings.vmin_event_pu, study.settings.vmax_event_pu)
    forming: dict[int, tuple[str, int]] = {}
    for island in service.islands:
        unit = _largest_forming(capacities, island)
        if unit is not None:
            bus = int(
                feeder.generator_bus[unit[1]]
                if unit[0] == "generator"
                else feeder.storage_bus[unit[1]]
            )
            forming[bus] = unit
            root_pu[bus] = _island_voltage(feeder, live, bus, linear, band)
    if not root_pu:
        return
    flat = flows_and_voltages(
        feeder, live, {bus: np.square(v_pu) for bus, v_pu in root_pu.items()}, *linear
    )
    ac = solve_ac_flow(feeder, live, root_pu, drawn.ac_kw[periods], drawn.ac_kvar[periods])
    walked = np.zeros(feeder.n_line, dtype=bool)
    tree = radial_tree(feeder, live, root_pu)
    walked[tree.parent_line[tree.parent_line >= 0]] = True
    flows.linear_pu[periods] = np.sqrt(np.maximum(flat.v_sq_pu, 0.0))
    flows.ac_pu[periods] = np.abs(ac.v_pu)
    flows.converged[periods] = ac.converged
    flows.loss_kw[periods] = ac.loss_kw.sum(axis=1)
    on_path = np.ix_(periods, np.flatnonzero(walked))
    flows.line_linear_kva[on_path] = np.hypot(flat.flow_kw, flat.flow_kvar)[:, walked]
    flows.line_ac_kva[on_path] = ac.current_kva[:, walked]
    # What a root gives beyond what is planned at its bus.
    extra_kw = ac.root_kw + drawn.ac_kw[periods]
    extra_kvar = ac.root_kvar + drawn.ac_kvar[periods]
    if feeder.source in root_pu and service.source_live:
        flows.source_ac_kva[periods] = np.hypot(
            extra_kw[:, feeder.source], extra_kvar[:, feeder.source]
        )
    for n in fed:
        flows.supply_ac_kw[periods, n] = extra_kw[:, feeder.supply_bus[n]]
    run = item.dispatch
    for bus, (kind, i) in forming.items():
        planned, target = (run.generator_kw, run.generator_kvar), flows.generator_ac_kva
        if kind == "storage":
            planned, target = (run.storage_kw, run.storage_kvar), flows.storage_ac_kva
        target[periods, i] = np.hypot(
            planned[0][periods, i] + extra_kw[:, bus], planned[1][periods, i] + extra_kvar[:, bus]
        )


def _is_fed(feeder: Feeder, service: ServicePeriod, n: int) -> bool:
    """True if a neighbour supply stands at a live bus."""
    return bool(service.bus_live[feeder.supply_bus[n]])


def _largest_forming(capacities: Capacities, island: Island) -> tuple[str, int] | None:
    """The forming unit with the largest rating in service; None if the plan has none there."""
    units = [("generator", i, float(capacities.generator_kw[i])) for i in island.forming_generators]
    units += [("storage", i, float(capacities.storage_kw[i])) for i in island.forming_storage]
    units = [unit for unit in units if unit[2] > 0.0]
    if not units:
        return None
    kind, i, _ = max(units, key=lambda unit: unit[2])
    return kind, i


ROOM = 0.25
"""Share of the interval of allowed island voltages that is kept free at each end."""


def _island_voltage(
    feeder: Feeder,
    live: BoolArray,
    bus: int,
    drawn: tuple[FloatArray, FloatArray],
    band_pu: tuple[float, float],
) -> FloatArray:
    """Voltage of an island's root near 1 that keeps all its buses in the band, by period.

    Squared voltages are ``scale * root + shift``, so each bus allows an interval of roots.
    """
    shift = flows_and_voltages(feeder, live, {bus: 0.0}, *drawn).v_sq_pu
    scale = flows_and_voltages(feeder, live, {bus: 1.0}, *drawn).v_sq_pu - shift
    inside = ~np.isnan(shift[0])
    low = ((band_pu[0] ** 2 - shift) / scale)[:, inside].max(axis=1)
    high = ((band_pu[1] ** 2 - shift) / scale)[:, inside].min(axis=1)
    room = ROOM * (high - low)
    root_sq = np.clip(1.0, low + room, high - room)
    root: FloatArray = np.sqrt(np.maximum(root_sq, 0.0))
    return root


def _asset_loadings(
    study: Study,
    feeder: Feeder,
    capacities: Capacities,
    spare_kw: FloatArray,
    item: Operated,
    flows: _Flows,
) -> tuple[StretchLoading, ...]:
    """Loadings of everything that has a rating and carries something in the stretch."""
    run = item.dispatch
    found = []
    for i, name in enumerate(feeder.line_ids):
        rating = float(feeder.rating_kva[i])
        if math.isfinite(rating) and rating > 0.0:
            linear, ac = flows.line_linear_kva[:, i], flows.line_ac_kva[:, i]
            found.append(StretchLoading(name, "line", rating, "kVA", linear / rating, ac / rating))
    limit = study.settings.substation_limit_kva
    source_kva = np.hypot(run.import_kw - run.export_kw, run.source_kvar)
    source_kva = np.where(np.isnan(flows.source_ac_kva) & flows.converged, np.nan, source_kva)
    found.append(
        StretchLoading(
            feeder.bus_ids[feeder.source],
            "substation",
            limit,
            "kVA",
            source_kva / limit,
            flows.source_ac_kva / limit,
        )
    )
    for n, name in enumerate(feeder.supply_ids):
        # Spare power follows a profile; where it is 0 nothing can be said of a share of it.
        spare = np.where(spare_kw[:, n] > 0.0, spare_kw[:, n], np.nan)
        is_used = ~np.isnan(flows.supply_ac_kw[:, n])
        linear = np.where(is_used, run.supply_kw[:, n], np.nan)
        found.append(
            StretchLoading(
                name,
                "neighbour supply",
                float(spare_kw[:, n].max()),
                "kW",
                linear / spare,
                flows.supply_ac_kw[:, n] / spare,
            )
        )
    for names, rating_kw, kw, kvar, ac_kva in (
        (
            [g.generator for g in study.generators],
            capacities.generator_kw,
            run.generator_kw,
            run.generator_kvar,
            flows.generator_ac_kva,
        ),
        (
            [s.storage for s in study.storage],
            capacities.storage_kw,
            run.storage_kw,
            run.storage_kvar,
            flows.storage_ac_kva,
        ),
    ):
        for i, name in enumerate(names):
            rating = float(rating_kw[i])
            if rating > 0.0:
                is_used = ~np.isnan(ac_kva[:, i])
                linear = np.where(is_used, np.hypot(kw[:, i], kvar[:, i]), np.nan) / rating
                ac = ac_kva[:, i] / rating
                found.append(StretchLoading(name, "forming unit", rating, "kVA", linear, ac))
    return tuple(one for one in found if not np.isnan(one.linear).all())
