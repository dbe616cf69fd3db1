"""Stretches of operation as named series for charts."""

from __future__ import annotations

import datetime

import numpy as np
from numpy.typing import NDArray

from xlplan.evaluate.results import Trace
from xlplan.model.dispatch import Dispatch
from xlplan.network.feeder import Feeder
from xlplan.outages.records import Scenario
from xlplan.study.study import Study, Window
from xlplan.study.windows import WindowSeries

FloatArray = NDArray[np.float64]

GRID = "Grid purchase"
SALE = "Grid sale"


def trace_of(
    study: Study,
    window: Window,
    series: WindowSeries,
    first_period: int,
    dispatch: Dispatch,
    storage_kwh: FloatArray,
    title: str,
    description: str,
    closings: tuple[str, ...] = (),
    scenario: str = "",
) -> Trace:
    """Series of one stretch.

    Parameters
    ----------
    study, window, series : the window's records
    first_period : int, window period of the dispatch's first
    dispatch : Dispatch
    storage_kwh : array, shape (n_storage,), in service
    title, description, closings, scenario : words for the sheet

    Returns
    -------
    Trace; devices that never run are left out
    """
    n_period = len(dispatch.import_kw)
    rows = (first_period + np.arange(n_period)) % series.n_period
    load = series.load_kw[rows].sum(axis=1)
    unserved = dispatch.shed_kw.sum(axis=1)
    sources: dict[str, FloatArray] = {GRID: dispatch.import_kw}
    if np.any(dispatch.export_kw > 0.0):
        sources[SALE] = -dispatch.export_kw
    for names, values in (
        ([s.supply for s in study.supplies], dispatch.supply_kw),
        ([g.generator for g in study.generators], dispatch.generator_kw),
        ([s.storage for s in study.storage], dispatch.storage_kw),
    ):
        for i, name in enumerate(names):
            if np.any(np.abs(values[:, i]) > 1e-6):
                sources[name] = values[:, i]
    has_store = [i for i in range(len(study.storage)) if storage_kwh[i] > 0.0]
    return Trace(
        title=title,
        description=description,
        times=tuple(time_label(study.profiles.times[window.start_row + int(r)]) for r in rows),
        hours=np.arange(n_period, dtype=float) * series.period_h,
        load_kw=load,
        served_kw=load - unserved,
        unserved_kw=unserved,
        sources=sources,
        energy_kwh={study.storage[i].storage: dispatch.energy_kwh[:, i] for i in has_store},
        energy_capacity_kwh={study.storage[i].storage: float(storage_kwh[i]) for i in has_store},
        closings=closings,
        window=window.window,
        scenario=scenario,
    )


def time_label(time: object) -> str:
    """How a profile's time is shown."""
    if isinstance(time, datetime.datetime):
        return time.strftime("%d %b %H:%M")
    if isinstance(time, datetime.time):
        return time.strftime("%H:%M")
    if isinstance(time, float):
        return f"{time:g}"
    return str(time)


def describe_stages(study: Study, feeder: Feeder, scenario: Scenario) -> tuple[str, ...]:
    """What is dead, closed and islanded in each stage, in words."""
    lines = []
    for stage in scenario.stages:
        parts = []
        dead = [feeder.bus_ids[i] for i in np.flatnonzero(~stage.bus_live)]
        if dead:
            parts.append("without supply by the fault: " + ", ".join(dead))
        ties = [feeder.line_ids[i] for i in stage.closed_ties]
        ties += [feeder.supply_ids[i] for i in stage.closed_supplies]
        if ties:
            parts.append("closed: " + ", ".join(ties))
        for island in stage.islands:
            parts.append(
                "cut off from every supply: " + ", ".join(feeder.bus_ids[i] for i in island)
            )
        if not parts:
            parts.append("everything is supplied")
        periods = f"{stage.n_period} period{'' if stage.n_period == 1 else 's'}"
        lines.append(f"{stage.name} ({periods}): " + "; ".join(parts))
    return tuple(lines)
