"""Seeded, invented studies of a known size for the benchmarks; no workbook takes part.

``feeder_study`` grows a radial feeder of any number of buses; sections come from the devices that
are placed. Everything is drawn from one seed. Names are letters and numbers only.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from tests.study_records import (
    make_bus,
    make_customer_class,
    make_generator,
    make_line,
    make_load,
    make_measure,
    make_outage_class,
    make_profiles,
    make_settings,
    make_storage,
    make_window,
)
from xlplan.network.feeder import Feeder, build_feeder
from xlplan.outages.clock import Clock
from xlplan.outages.window_model import WindowModel, build_window_models
from xlplan.study.study import Device, Study, Technology

PERIOD_H = 0.25
ROWS_PER_DAY = 96

# Shapes of one day at 15 minutes: invented, with the usual morning and evening peaks.
_HOUR = np.arange(ROWS_PER_DAY) / 4.0
HOMES = (
    0.45
    + 0.25 * np.exp(-(((_HOUR - 8.0) / 1.8) ** 2))
    + 0.55 * np.exp(-(((_HOUR - 19.5) / 2.4) ** 2))
)
SHOPS = 0.25 + 0.75 / (1.0 + np.exp(-(_HOUR - 8.0) * 1.5)) / (1.0 + np.exp((_HOUR - 18.5) * 1.5))
SUN = np.clip(np.sin((_HOUR - 6.0) / 12.0 * np.pi), 0.0, 1.0) ** 1.3
PRICE = np.where((_HOUR >= 7.0) & (_HOUR < 10.0) | (_HOUR >= 17.0) & (_HOUR < 21.0), 0.24, 0.11)


def feeder_study(
    seed: int = 1,
    n_bus: int = 13,
    n_section: int | None = None,
    windows: tuple[tuple[str, int, float, float], ...] = (("storm", 96, 12.0, 1.0),),
    n_storage: int = 2,
    n_generator: int = 2,
    n_measure: int = 3,
    repair_h: float = 4.0,
    gap_target_frac: float = 0.01,
) -> Study:
    """A radial feeder with candidates.

    Parameters
    ----------
    seed : int
    n_bus : int, buses with the source
    n_section : int or None, line sections with devices of their own; None: every line
    windows : (name, periods, occurrences a year, expected failures per occurrence without the
        one-at-a-time rule)
    n_storage, n_generator, n_measure : int, candidates; every generator has a ramp limit
    repair_h : float
    gap_target_frac : float

    Returns
    -------
    Study
    """
    rng = np.random.default_rng(seed)
    n_line = n_bus - 1
    buses = [make_bus("S")] + [make_bus(f"B{i}") for i in range(1, n_bus)]
    # More buses are a finer picture of a feeder of the same size, not a larger utility.
    span, share_of_load = min(1.0, 13.0 / n_bus), min(1.0, 25.0 / n_bus)
    # A trunk with laterals: each new bus hangs on one of the last few.
    above = [int(rng.integers(max(0, i - 4), i)) if i > 1 else 0 for i in range(1, n_bus)]
    own = set(range(n_line)) if n_section is None else {0}
    if n_section is not None:
        others = rng.permutation(np.arange(1, n_line))[: n_section - 1]
        own |= {int(i) for i in others}
    lines = []
    for i in range(n_line):
        device = Device.NONE
        if i in own:
            device = (
                Device.BREAKER if i == 0 else Device(rng.choice(["recloser", "switch", "fuse"]))
            )
        length = float(rng.uniform(0.4, 2.0)) * span
        lines.append(
            make_line(
                f"L{i + 1}",
                buses[above[i]].bus,
                buses[i + 1].bus,
                length=length,
                r_ohm=0.3 * length,
                x_ohm=0.35 * length,
                rating_kva=9000.0,
                from_device=device,
                outage_class=f"line {i + 1}",
            )
        )
    kinds = rng.choice(["homes", "shops", "critical"], size=n_line, p=[0.6, 0.3, 0.1])
    loads = [
        make_load(
            f"D{i + 1}",
            buses[i + 1].bus,
            float(rng.uniform(60.0, 260.0)) * share_of_load,
            customer_class=str(kinds[i]),
            load_profile="homes" if kinds[i] == "homes" else "shops",
            power_factor=0.95,
            customers=float(rng.integers(5, 80)),
        )
        for i in range(n_line)
    ]
    places = rng.permutation(np.arange(1, n_bus))
    storage = [
        make_storage(
            f"battery {i + 1}",
            buses[int(places[i])].bus,
            max_new_kw=600.0,
            max_new_kwh=2400.0,
            capital_cost_per_kw=180.0,
            capital_cost_per_kwh=230.0,
            longest_h=4.0,
            start_soc_frac=0.6,
        )
        for i in range(n_storage)
    ]
    generators = [
        make_generator(
            f"unit {i + 1}",
            buses[int(places[n_storage + i])].bus,
            max_new_kw=500.0,
            capital_cost_per_kw=420.0,
            running_cost_per_kwh=0.32,
            ramp_frac_per_period=0.25,
        )
        for i in range(n_generator)
    ]
    for i in range(3):
        generators.append(
            make_generator(
                f"solar {i + 1}",
                buses[int(places[(n_storage + n_generator + i) % len(places)])].bus,
                technology=Technology.SOLAR,
                profile="sun",
                existing_kw=120.0,
                max_new_kw=0.0,
                is_grid_forming=False,
                running_cost_per_kwh=0.0,
            )
        )
    # Per year as if it were fair weather all the time; the windows' multipliers do the rest.
    share = rng.uniform(0.5, 1.5, n_line)
    share /= share.sum()
    classes = [
        make_outage_class(
            f"line {i + 1}", float(10.0 * share[i]), repair_h=repair_h, is_weather_exposed=True,
            switching_h=0.5, repair_cost_per_failure=1500.0,
        )
        for i in range(n_line)
    ]  # fmt: skip
    hardened = np.argsort(-share)[:n_measure]
    measures = [
        make_measure(
            f"cover L{int(i) + 1}",
            (f"L{int(i) + 1}",),
            capital_cost=float(rng.uniform(4e4, 1.5e5)),
            failures_avoided_frac=0.6,
        )
        for i in hardened
    ]
    records = tuple(
        make_window(
            name,
            n_period,
            occurrences_per_year=occurrences,
            # Failures per year of exposed lines add up to 10 at multiplier 1.
            failure_multiplier=expected / (10.0 * n_period * PERIOD_H / 8760.0),
            is_storm=True,
        )
        for name, n_period, occurrences, expected in windows
    )
    rows = max(max(n for _, n, *_ in windows), ROWS_PER_DAY)
    repeat = -(-rows // ROWS_PER_DAY)
    wobble = 1.0 + 0.06 * rng.standard_normal((repeat, 1))
    profiles = make_profiles(
        repeat * ROWS_PER_DAY,
        homes=np.clip((HOMES * wobble).ravel(), 0.0, 1.2),
        shops=np.clip((SHOPS * wobble).ravel(), 0.0, 1.2),
        sun=np.clip((SUN * (2.0 * rng.random((repeat, 1)) * 0.5 + 0.4)).ravel(), 0.0, 1.0),
        price=np.tile(PRICE, repeat),
    )
    study = Study(
        settings=make_settings(
            period_h=PERIOD_H,
            vmin_pu=0.95,
            vmax_pu=1.05,
            vmin_event_pu=0.9,
            vmax_event_pu=1.06,
            source_voltage_pu=1.03,
            base_kv=12.0,
            energy_price_per_kwh=1.0,  # times the profile, which holds the price itself
            demand_charge_per_kw_year=0.0,
            export_price_per_kwh=0.05,
            gap_target_frac=gap_target_frac,
            island_headroom_frac=0.05,
        ),
        buses=tuple(buses),
        loads=tuple(loads),
        lines=tuple(lines),
        supplies=(),
        generators=tuple(generators),
        storage=tuple(storage),
        outage_classes=tuple(classes),
        measures=tuple(measures),
        customer_classes=(
            make_customer_class("homes", cost_0h_per_kw=0.5, cost_1h_per_kw=3.0,
                                cost_4h_per_kw=11.0, cost_8h_per_kw=22.0,
                                cost_after_8h_per_kwh=3.0),
            make_customer_class("shops", cost_0h_per_kw=5.0, cost_1h_per_kw=30.0,
                                cost_4h_per_kw=110.0, cost_8h_per_kw=200.0,
                                cost_after_8h_per_kwh=20.0),
            make_customer_class("critical", is_critical=True, cost_0h_per_kw=10.0,
                                cost_1h_per_kw=60.0, cost_4h_per_kw=230.0, cost_8h_per_kw=450.0,
                                cost_after_8h_per_kwh=50.0),
        ),
        profiles=profiles,
        windows=tuple(
            replace(record, price_profile="price") for record in records
        ),
    )  # fmt: skip
    assert study.settings.export_price_per_kwh is not None
    assert study.settings.export_price_per_kwh < study.settings.energy_price_per_kwh * PRICE.min()
    return study


def with_repair_classes(
    study: Study, repair_h: tuple[float, ...]
) -> tuple[Feeder, tuple[WindowModel, ...]]:
    """Window models with every fault split evenly into classes of other repair times.

    The rates add up to those of the study, whose own repair times are replaced.
    """
    feeder = build_feeder(study)
    by_class = [
        build_window_models(
            replace(
                study,
                outage_classes=tuple(replace(c, repair_h=h) for c in study.outage_classes),
            ),
            feeder,
        )
        for h in repair_h
    ]
    merged = []
    for models in zip(*by_class, strict=True):
        scenarios = tuple(
            replace(s, name=f"{s.name}, {h:g} h", rate_per_year=s.rate_per_year / len(repair_h))
            for h, model in zip(repair_h, models, strict=True)
            for s in model.scenarios
        )
        series = models[0].series
        merged.append(WindowModel(series, scenarios, Clock.of(scenarios, series), models[0].normal))
    return feeder, tuple(merged)
