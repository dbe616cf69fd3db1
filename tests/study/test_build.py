"""Percent, minutes and blanks of the workbook as the study's values, worked out by hand."""

from __future__ import annotations

import math

import pytest

from tests.workbook.study_tables import DAY, raw_study, with_cell
from xlplan.study.build import check_and_build
from xlplan.study.records import round_trip_curve
from xlplan.study.study import Device, RateBasis, Study, Technology
from xlplan.study.windows import build_window_series


@pytest.fixture(scope="module")
def study() -> Study:
    built, _ = check_and_build(raw_study())
    assert built is not None
    return built


def changed(*changes: tuple[str, object]) -> Study:
    raw = raw_study()
    for place, value in changes:
        raw = with_cell(raw, place, value)
    built, findings = check_and_build(raw)
    assert built is not None, [finding.text() for finding in findings]
    return built


def test_settings(study: Study) -> None:
    settings = study.settings
    assert settings.study_name == "Trial"
    assert settings.source_bus == "S"
    assert settings.period_h == 1.0
    assert settings.real_discount_rate_frac == pytest.approx(0.04)
    assert settings.loss_allowance_frac == pytest.approx(0.03)
    assert settings.capital_budget == 500000
    assert settings.stored_energy_price_per_kwh is None
    assert settings.export_price_per_kwh == 0.02
    assert settings.history_saidi_h is None
    assert settings.price_year is None
    # Defaults of the schema: half an hour of search, 1 % gap, fair-weather rates.
    assert settings.time_limit_h == 0.5
    assert settings.gap_target_frac == pytest.approx(0.01)
    assert settings.rate_basis is RateBasis.FAIR_WEATHER
    assert settings.origin_of["base_kv"].cell("base_kv") == "B4"
    assert settings.origin_of["base_kv"].sheet == "Settings"


def test_blank_settings_mean_no_limit_and_no_sale() -> None:
    study = changed(("Settings!B14", None), ("Settings!B16", None))
    assert study.settings.capital_budget is None
    assert study.settings.export_price_per_kwh is None


def test_impedance_from_conductor_per_length_and_totals(study: Study) -> None:
    by_conductor, by_length, by_total = study.lines
    # 2 km of 0.2 + j0.35 ohm/km; 1.5 km of 0.3 + j0.4 ohm/km; totals as typed.
    assert (by_conductor.r_ohm, by_conductor.x_ohm) == pytest.approx((0.4, 0.7))
    assert (by_length.r_ohm, by_length.x_ohm) == pytest.approx((0.45, 0.6))
    assert (by_total.r_ohm, by_total.x_ohm, by_total.length) == (0.5, 0.6, 0.0)


def test_ratings_typed_from_ampacity_and_none(study: Study) -> None:
    # sqrt(3) x 12.47 kV x 400 A = 8639.5 kVA
    assert study.lines[0].rating_kva == pytest.approx(8639.5, abs=0.1)
    assert math.isinf(study.lines[1].rating_kva)
    assert study.lines[2].rating_kva == 900
    assert changed(("Lines!J2", 700)).lines[0].rating_kva == 700


def test_devices_boost_and_ties(study: Study) -> None:
    first, _, tie = study.lines
    assert (first.from_device, first.to_device) == (Device.BREAKER, Device.NONE)
    assert tie.normally_open
    assert tie.boost_frac == pytest.approx(0.015)
    assert tie.outage_class is None
    assert first.origin.cell("length") == "D2"


def test_generators(study: Study) -> None:
    diesel, roof = study.generators
    # 1 % a minute is 60 % in a period of an hour; 5 minutes are a twelfth of an hour.
    assert diesel.ramp_frac_per_period == pytest.approx(0.6)
    assert diesel.start_delay_h == pytest.approx(1 / 12)
    assert (diesel.tank_h, diesel.refill_frac_per_h) == (24, pytest.approx(0.1))
    assert diesel.is_grid_forming
    assert roof.technology is Technology.SOLAR
    assert roof.profile == "sun"
    assert roof.ramp_frac_per_period is None
    assert roof.tank_h is None
    assert roof.running_cost_per_kwh == 0
    assert roof.outage_class is None


@pytest.mark.parametrize(("pct_per_minute", "frac"), [(1.6, 0.96), (2, None), (100 / 60, None)])
def test_a_ramp_that_covers_the_rating_in_one_period_is_no_limit(
    pct_per_minute: float, frac: float | None
) -> None:
    ramp = changed(("Generators!J2", pct_per_minute)).generators[0].ramp_frac_per_period
    assert ramp == (None if frac is None else pytest.approx(frac))


def test_storage_with_a_curve(study: Study) -> None:
    battery = study.storage[0]
    assert battery.grant_frac == 0.25
    assert (battery.start_soc_frac, battery.min_soc_frac) == (0.5, 0.1)
    assert battery.longest_h == 6
    points = [(-0.92, -1.0), (0.0, 0.0), (0.5, 0.47), (1.0, 0.9)]
    assert [pytest.approx(point) for point in battery.curve] == points


def test_a_curve_that_is_not_concave_is_replaced_by_its_hull() -> None:
    # (0.5, 0.40) lies below the line from (0, 0) to (1, 0.9), which passes 0.45 there.
    curve = changed(("Storage curves!C3", 40)).storage[0].curve
    assert [pytest.approx(point) for point in curve] == [(-0.92, -1.0), (0.0, 0.0), (1.0, 0.9)]


def test_storage_without_a_curve_loses_the_square_root_each_way(study: Study) -> None:
    # 81 %: 0.9 each way, so that 0.9 is stored of 1 taken in, and 1/0.9 is drawn to give 1.
    second = study.storage[1]
    points = [(-0.9, -1.0), (0.0, 0.0), (1 / 0.9, 1.0)]
    assert [pytest.approx(point) for point in second.curve] == points
    assert second.charging_efficiency == pytest.approx(0.9)
    assert round_trip_curve(1.0) == ((-1.0, -1.0), (0.0, 0.0), (1.0, 1.0))


def test_a_full_cycle_gives_back_the_round_trip_efficiency() -> None:
    for round_trip in (0.5, 0.85, 0.97):
        (z_in, b_in), _, (z_out, b_out) = round_trip_curve(round_trip)
        # Energy returned per energy taken in: (b_out / z_out) x (z_in / b_in).
        assert b_out / z_out * z_in / b_in == pytest.approx(round_trip)


def test_outage_classes_measures_and_customers(study: Study) -> None:
    main, unit, _ = study.outage_classes
    assert (main.switching_h, main.repair_h, main.is_weather_exposed) == (1.0, 4.0, True)
    assert unit.failures_per_year == 1
    [trees] = study.measures
    assert trees.lines == ("L1", "L2")
    assert trees.failures_avoided_frac == 0.5
    assert [c.is_critical for c in study.customer_classes] == [False, True]
    assert [load.remote_disconnect_frac for load in study.loads] == [0.0, 0.2]


def test_a_class_left_out_is_kept_and_marked() -> None:
    study = changed(("Outage assumptions!H3", "no"))
    assert [c.is_included for c in study.outage_classes] == [True, False, True]


def test_windows_and_profiles(study: Study) -> None:
    day, storm = study.windows
    assert (day.start_row, day.n_period) == (0, 24)
    assert (storm.start_row, storm.n_period) == (24, 24)
    assert (day.start_soc_frac, storm.start_soc_frac) == (None, 0.9)
    assert storm.is_storm
    assert not storm.counts_for_demand
    assert study.profiles.times[0] == DAY
    series = build_window_series(study, day)
    # 200 kW x 0.8 x 1.03 in every hour; the dearest hour is 18, at 0.15.
    assert series.load_kw[:, 0] == pytest.approx(164.8)
    assert series.price_per_kwh.argmax() == 18
    assert series.price_per_kwh.max() == pytest.approx(0.15)


def test_shorter_periods() -> None:
    """With numbers as times a window of 12 hours has 24 periods of half an hour."""
    changes: list[tuple[str, object]] = [("Settings!B8", 30), ("Windows!C3", 24)]
    changes += [("Windows!C2", 0), ("Windows!D2", 12), ("Windows!D3", 12)]
    changes += [(f"Profiles!A{row}", row - 2) for row in range(2, 50)]
    study = changed(*changes)
    assert study.settings.period_h == 0.5
    assert [(w.start_row, w.n_period) for w in study.windows] == [(0, 24), (24, 24)]


def test_references_take_the_spelling_of_what_they_refer_to() -> None:
    study = changed(("Loads!B2", " b1"), ("Hardening!B2", "l2 , L1"), ("Settings!B3", "s"))
    assert study.loads[0].bus == "B1"
    assert study.measures[0].lines == ("L2", "L1")
    assert study.settings.source_bus == "S"


def test_alternatives_purchases_and_changes(study: Study) -> None:
    half, ours = study.alternatives
    assert (half.kind, half.capital_budget) == ("optimise", 250000)
    assert ours.kind == "fixed"
    battery, trees = study.fixed_purchases
    assert (battery.kw, battery.kwh, battery.is_bought) == (100, 400, True)
    assert (trees.asset, trees.kw, trees.is_bought) == ("Trees", 0, True)
    [change] = study.device_changes
    assert (change.from_device, change.to_device) == (Device.RECLOSER, None)
    assert change.switching_h == pytest.approx(1 / 12)
    [sensitivity] = study.sensitivities
    assert (sensitivity.low, sensitivity.high) == (0.5, 2)
    assert study.fingerprint.startswith("sha256:")
