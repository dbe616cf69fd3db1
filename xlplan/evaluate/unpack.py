"""Solutions of plan and event programs back to named arrays: inverts ``model.subproblem``."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xlplan.model.columns import take
from xlplan.model.dispatch import Dispatch
from xlplan.model.network_block import V_SCALE
from xlplan.model.period import FeederModel
from xlplan.model.subproblem import EventFamily, PlanFamily

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def dispatch_of(
    model: FeederModel,
    columns: dict[str, IntArray],
    y: FloatArray,
    rows: NDArray[np.int64],
    with_network: bool = True,
) -> Dispatch:
    """Operation of consecutive periods.

    Parameters
    ----------
    model : FeederModel
    columns : positions by name, (n_period, n_asset), see ``columns.stack``
    y : array, solution of the program
    rows : array, shape (n_period,), window row of each period
    with_network : bool, False leaves flows and voltages out (0): counting needs none

    Returns
    -------
    Dispatch; a load on a dead bus is shed wholly
    """
    group = take(y, columns["group_kw"])
    remote = take(y, columns["remote_kw"])
    shed = model.loads.shed_kw(group, remote)
    load = model.series.load_kw[rows]
    live = columns["load_live"].astype(bool)
    shed = np.where(live, np.clip(shed, 0.0, load), load)
    n_period = len(rows)
    flat = np.zeros((n_period, 0))
    fuel = columns["fuel_kwh"]
    v_sq = columns["v_sq"]
    return Dispatch(
        import_kw=take(y, columns["import_kw"]),
        export_kw=take(y, columns["export_kw"]),
        source_kvar=take(y, columns["import_kvar"]),
        supply_kw=take(y, columns["supply_kw"]),
        supply_kvar=take(y, columns["supply_kvar"]),
        generator_kw=take(y, columns["generator_kw"]),
        generator_kvar=take(y, columns["generator_kvar"]),
        storage_kw=take(y, columns["storage_kw"]),
        storage_draw_kw=take(y, columns["draw_kw"]),
        storage_kvar=take(y, columns["storage_kvar"]),
        energy_kwh=take(y, columns["energy_kwh"]),
        fuel_kwh=np.where(fuel >= 0, take(y, fuel), np.nan),
        trip_kw=take(y, columns["trip_kw"]),
        shed_kw=shed,
        surplus_kw=take(y, columns["surplus_kw"]),
        capacitor_kvar=take(y, columns["capacitor_kvar"]),
        line_kw=take(y, columns["flow_kw"]) if with_network else flat,
        line_kvar=take(y, columns["flow_kvar"]) if with_network else flat,
        v_sq_pu=np.where(v_sq >= 0, take(y, v_sq) / V_SCALE, np.nan) if with_network else flat,
    )


def plan_dispatch(
    model: FeederModel, family: PlanFamily, start: int, y: FloatArray, with_network: bool = True
) -> Dispatch:
    """Operation of a plan from period ``start`` on."""
    columns = {name: positions[start:] for name, positions in family.columns.items()}
    return dispatch_of(model, columns, y, np.arange(start, family.n_period), with_network)


def event_dispatch(
    model: FeederModel, family: EventFamily, k: int, y: FloatArray, with_network: bool = True
) -> Dispatch:
    """Operation of the event whose failure strikes in period ``k``."""
    rows = (k + 1 + np.arange(family.n_event_period)) % model.series.n_period
    return dispatch_of(model, family.columns, y, rows, with_network)
