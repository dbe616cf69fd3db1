"""Operation checked by nonlinear power flow: voltages, loadings and losses that a plan would see.

Enters: stretches of operation (the plan of every window, and the outage events that are shown).
Leaves: an ``AcCheck``. Every period of every stretch is solved (``ac_stretch.py``), and its
extremes are set against the study's limits, the ratings, and ANSI C84.1 Range A.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xlplan.base.units import pct_from_frac
from xlplan.evaluate.ac_results import (
    AcCheck,
    AcStretch,
    AssetLoading,
    BusVoltage,
    MarginAdvice,
    VoltageRange,
)
from xlplan.evaluate.ac_stretch import SolvedStretch, solve_stretch
from xlplan.evaluate.operation import Operated
from xlplan.evaluate.results import CheckLine
from xlplan.evaluate.violations import capacities_in_service
from xlplan.model.dispatch import Purchases
from xlplan.network.feeder import Feeder
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]

VOLTAGE_TOLERANCE_PU = 5e-5
"""Half of the last digit shown: a limit that is missed by less reads as kept."""

LOADING_TOLERANCE = 5e-4
"""Half of a tenth of a percent, the last digit shown of a loading."""

RANGE_A = VoltageRange(0.95, 1.05, "service up to 600 V")
RANGE_A_ABOVE_600_V = VoltageRange(0.975, 1.05, "service above 600 V")
"""ANSI C84.1 Table 1, Range A (recalled; see validation/trade_tables). Most customers are served up
to 600 V, so that row decides; customers served at the feeder's own voltage are told apart."""


def check_ac(
    study: Study,
    feeder: Feeder,
    windows: Sequence[WindowModel],
    bought: Purchases,
    operated: Sequence[Operated],
) -> AcCheck:
    """Solves every period of the stretches and sets the results against limits and linear flow.

    Parameters
    ----------
    study, feeder, windows : of one study
    bought : Purchases, whose units run
    operated : stretches of operation, as the plan runs them

    Returns
    -------
    AcCheck
    """
    capacities = capacities_in_service(study, bought)
    solved = [solve_stretch(study, feeder, windows, capacities, item) for item in operated]
    buses: list[BusVoltage] = []
    loadings: list[AssetLoading] = []
    for is_event in (False, True):
        chosen = [s for s in solved if s.is_event == is_event]
        if chosen:
            buses += _bus_voltages(study, feeder, chosen, is_event)
            loadings += _loadings(chosen, is_event)
    return AcCheck(
        range_a=RANGE_A,
        range_a_above_600_v=RANGE_A_ABOVE_600_V,
        buses=tuple(buses),
        loadings=tuple(loadings),
        stretches=tuple(_stretch(study, s) for s in solved),
        advice=_advice(study, solved, loadings),
        allowance_frac=study.settings.loss_allowance_frac,
    )


def _stretch(study: Study, solved: SolvedStretch) -> AcStretch:
    """Energies of one occurrence."""
    ok = solved.converged
    allowance = study.settings.loss_allowance_frac
    served, loss = solved.served_kw[ok], solved.loss_kw[ok]
    share = np.divide(loss, served, out=np.zeros_like(loss), where=served > 0.0)
    beyond = (loss - allowance * served) * solved.price_per_kwh[ok]
    return AcStretch(
        title=("Outage event: " if solved.is_event else "Normal service: ") + solved.place,
        is_event=solved.is_event,
        occurrences_per_year=solved.occurrences_per_year,
        n_topology=solved.n_topology,
        n_period=len(ok),
        n_not_converged=int((~ok).sum()),
        served_kwh=float(served.sum()) * solved.period_h,
        loss_kwh=float(loss.sum()) * solved.period_h,
        allowance_kwh=allowance * float(served.sum()) * solved.period_h,
        highest_loss_frac=float(share.max(initial=0.0)),
        cost_beyond=float(beyond.sum()) * solved.period_h,
    )


def _bus_voltages(
    study: Study, feeder: Feeder, solved: Sequence[SolvedStretch], is_event: bool
) -> list[BusVoltage]:
    """Extremes of every bus over some stretches."""
    settings = study.settings
    low_limit, high_limit = settings.vmin_pu, settings.vmax_pu
    if is_event:
        low_limit, high_limit = settings.vmin_event_pu, settings.vmax_event_pu
    linear = np.concatenate([s.linear_pu for s in solved])
    ac = np.concatenate([s.ac_pu for s in solved])
    converged = np.concatenate([s.converged for s in solved])
    times = _times(solved)
    found = []
    for i, name in enumerate(feeder.bus_ids):
        known = ac[:, i] if not np.isnan(ac[:, i]).all() else linear[:, i]
        is_live = ~np.isnan(linear[:, i])
        low, high = _lowest(ac[:, i]), _highest(ac[:, i])
        found.append(
            BusVoltage(
                bus=name,
                is_event=is_event,
                low_linear_pu=_lowest(linear[:, i]),
                low_ac_pu=low,
                low_when=times[int(np.nanargmin(known))] if is_live.any() else "",
                high_linear_pu=_highest(linear[:, i]),
                high_ac_pu=high,
                high_when=times[int(np.nanargmax(known))] if is_live.any() else "",
                low_limit_pu=low_limit,
                high_limit_pu=high_limit,
                breaks_limits=_is_outside(low, high, low_limit, high_limit),
                is_outside_range_a=_is_outside(low, high, RANGE_A.low_pu, RANGE_A.high_pu),
                is_outside_range_a_above_600_v=_is_outside(
                    low, high, RANGE_A_ABOVE_600_V.low_pu, RANGE_A_ABOVE_600_V.high_pu
                ),
                n_period=int(is_live.sum()),
                n_not_converged=int((is_live & ~converged).sum()),
            )
        )
    return found


def _is_outside(low: float, high: float, low_limit: float, high_limit: float) -> bool:
    """False where nothing is known; what is not known is reported apart."""
    return low < low_limit - VOLTAGE_TOLERANCE_PU or high > high_limit + VOLTAGE_TOLERANCE_PU


def _times(solved: Sequence[SolvedStretch]) -> list[str]:
    """When each period is, in words; an event is named."""
    return [f"{s.place}: {time}" for s in solved for time in s.times]


def _lowest(values: FloatArray) -> float:
    """Lowest known value; nan if there is none."""
    return float(np.nanmin(values)) if not np.isnan(values).all() else math.nan


def _highest(values: FloatArray) -> float:
    return -_lowest(-values)


def _loadings(solved: Sequence[SolvedStretch], is_event: bool) -> list[AssetLoading]:
    """Highest loading of every asset over some stretches."""
    best: dict[tuple[str, str], AssetLoading] = {}
    for one in solved:
        times = _times([one])
        for loading in one.loadings:
            known = loading.ac if not np.isnan(loading.ac).all() else loading.linear
            ac = _highest(loading.ac)
            row = AssetLoading(
                asset=loading.asset,
                kind=loading.kind,
                is_event=is_event,
                rating=loading.rating,
                unit=loading.unit,
                linear_frac=_highest(loading.linear),
                ac_frac=ac,
                when=times[int(np.nanargmax(known))],
                breaks_limits=ac > 1.0 + LOADING_TOLERANCE,
            )
            key = (loading.kind, loading.asset)
            before = best.get(key)
            if before is None or not ac <= before.ac_frac:
                best[key] = row
    return list(best.values())


def _advice(
    study: Study, solved: Sequence[SolvedStretch], loadings: Sequence[AssetLoading]
) -> MarginAdvice:
    """Margins by which linear voltages and loads would have had to be stricter."""
    settings = study.settings
    margins = {}
    for is_event, low, high in (
        (False, settings.vmin_pu, settings.vmax_pu),
        (True, settings.vmin_event_pu, settings.vmax_event_pu),
    ):
        below = above = 0.0
        for one in (s for s in solved if s.is_event == is_event):
            error = one.linear_pu - one.ac_pu
            with np.errstate(invalid="ignore"):
                is_low = one.ac_pu < low - VOLTAGE_TOLERANCE_PU
                is_high = one.ac_pu > high + VOLTAGE_TOLERANCE_PU
            below = max(below, float(error[is_low].max(initial=0.0)))
            above = max(above, float(-error[is_high].min(initial=0.0)))
        margins[is_event] = (below, above)
    allowance = settings.loss_allowance_frac
    needed = [
        (1.0 + allowance) * one.ac_frac / one.linear_frac - 1.0
        for one in loadings
        if one.breaks_limits and one.linear_frac > 0.0
    ]
    return MarginAdvice(*margins[False], *margins[True], max(needed, default=0.0))


def check_lines(check: AcCheck) -> tuple[CheckLine, ...]:
    """The check as lines of the Checks sheet: numbers of what is broken, against none."""
    advice = check.advice
    lines = [
        CheckLine(
            "AC power flow converged",
            f"Periods of {check.n_period} without an AC solution. Where there is none the feeder "
            "may not be able to carry the load at all: voltages, losses and loadings of those "
            "periods are not known",
            float(check.n_not_converged),
            0.0,
            0.5,
            is_warning=True,
        )
    ]
    for is_event, word, low, high in (
        (False, "normal service", advice.low_normal_pu, advice.high_normal_pu),
        (True, "outage events", advice.low_event_pu, advice.high_event_pu),
    ):
        broken = check.broken_buses(is_event)
        what = f"Buses whose AC voltage leaves the study's limits for {word}"
        if broken:
            worst = max(
                broken,
                key=lambda b: max(b.low_limit_pu - b.low_ac_pu, b.high_ac_pu - b.high_limit_pu),
            )
            what += (
                f"; worst: {worst.bus}, {worst.low_ac_pu:.4f} to {worst.high_ac_pu:.4f} p.u. "
                f"against {worst.low_limit_pu:g} to {worst.high_limit_pu:g}. Limits tighter by "
                f"{low:.4f} p.u. below and {high:.4f} p.u. above would have covered it"
            )
        lines.append(
            CheckLine(f"AC voltages in {word}", what, float(len(broken)), 0.0, 0.5, is_warning=True)
        )
    loaded = check.broken_loadings()
    what = "Lines, sources and forming units loaded beyond their rating in the AC flow"
    if loaded:
        most = max(loaded, key=lambda one: one.ac_frac)
        what += (
            f"; worst: {most.kind} {most.asset}, {pct_from_frac(most.ac_frac):.1f} % of its rating "
            f"(linear {pct_from_frac(most.linear_frac):.1f} %). A loss allowance of "
            f"{pct_from_frac(advice.allowance_frac):.1f} % of load would have covered it "
            f"(study: {pct_from_frac(check.allowance_frac):.1f} %)"
        )
    lines.append(CheckLine("AC loadings", what, float(len(loaded)), 0.0, 0.5, is_warning=True))
    return tuple(lines)
