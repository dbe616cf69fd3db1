"""Windows and profiles as arrays: what each period of a window asks for and offers.

Period ``k`` of a window reads profile row ``start_row + (k mod n_period)``; the arrays hold rows
0 to ``n_period - 1``, a reader beyond the end wraps around.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.study.study import Study, Technology, Window

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class WindowSeries:
    """The numbers of one window, by period.

    load_kw, load_kvar : (n_period, n_load), with multiplier and loss allowance
    price_per_kwh : (n_period,), purchase; ``export_price_per_kwh`` one number or None (no sale)
    availability : (n_period, n_generator), share of kW a unit can give (1 for dispatchable)
    supply_kw : (n_period, n_supply), spare power of each neighbour supply
    failure_shape : (n_period,), mean 1, for weather-exposed classes
    start_soc_frac : (n_storage,); ``stored_energy_price_per_kwh`` : (n_storage,), price of energy
    missing at the end of the window against its start
    """

    window: str
    n_period: int
    period_h: float
    occurrences_per_year: float
    counts_for_demand: bool
    is_storm: bool
    load_kw: FloatArray
    load_kvar: FloatArray
    price_per_kwh: FloatArray
    export_price_per_kwh: float | None
    availability: FloatArray
    supply_kw: FloatArray
    failure_shape: FloatArray
    failure_multiplier: float
    repair_multiplier: float
    start_soc_frac: FloatArray
    stored_energy_price_per_kwh: FloatArray


def build_window_series(study: Study, window: Window) -> WindowSeries:
    """Arrays of one window.

    Parameters
    ----------
    study : Study
    window : Window, one of the study's

    Returns
    -------
    WindowSeries
    """
    rows = slice(window.start_row, window.start_row + window.n_period)
    flat = np.ones(window.n_period)

    def profile(name: str | None) -> FloatArray:
        return flat if name is None else study.profiles.values[name][rows]

    def columns(series: list[FloatArray]) -> FloatArray:
        return np.column_stack(series) if series else np.zeros((window.n_period, 0))

    settings = study.settings
    scale = window.load_multiplier * (1.0 + settings.loss_allowance_frac)
    load_kw = columns([profile(load.load_profile) * load.peak_kw * scale for load in study.loads])
    kvar_per_kw = np.array([np.tan(np.arccos(load.power_factor)) for load in study.loads])
    price = settings.energy_price_per_kwh * profile(window.price_profile)
    shape = profile(window.failure_profile)
    soc = [
        unit.start_soc_frac if window.start_soc_frac is None else window.start_soc_frac
        for unit in study.storage
    ]
    if settings.stored_energy_price_per_kwh is not None:
        end_price = [settings.stored_energy_price_per_kwh for _ in study.storage]
    else:
        end_price = [price.max() / unit.charging_efficiency for unit in study.storage]
    return WindowSeries(
        window=window.window,
        n_period=window.n_period,
        period_h=settings.period_h,
        occurrences_per_year=window.occurrences_per_year,
        counts_for_demand=window.counts_for_demand,
        is_storm=window.is_storm,
        load_kw=load_kw,
        load_kvar=load_kw * kvar_per_kw,
        price_per_kwh=price,
        export_price_per_kwh=settings.export_price_per_kwh,
        availability=columns(
            [
                flat if unit.technology is Technology.DISPATCHABLE else profile(unit.profile)
                for unit in study.generators
            ]
        ),
        supply_kw=columns([profile(s.spare_profile) * s.spare_kw for s in study.supplies]),
        failure_shape=shape / shape.mean(),
        failure_multiplier=window.failure_multiplier,
        repair_multiplier=window.repair_multiplier,
        start_soc_frac=np.array(soc, dtype=float),
        stored_energy_price_per_kwh=np.array(end_price, dtype=float),
    )
