"""The random studies are valid, tiny, the same each time, and together use every feature."""

from __future__ import annotations

import numpy as np
import pytest

from tests.builders import (
    ALWAYS_DRAWN,
    FEATURES,
    feature_names,
    random_study,
    small_study,
    tree_periods,
)
from xlplan.base.errors import Level
from xlplan.network.feeder import build_feeder
from xlplan.network.no_load_voltage import check_no_load_voltage
from xlplan.network.topology import check_radial
from xlplan.outages.window_model import build_window_models
from xlplan.study.study import Study
from xlplan.study.windows import build_window_series

SEEDS = range(30)


def _no_load_voltages(study: Study) -> list[float]:
    """Voltage of every bus with no load on, from the source and the boosts of closed lines."""
    voltage = {study.settings.source_bus: study.settings.source_voltage_pu}
    closed = [line for line in study.lines if not line.normally_open]
    while len(voltage) < len(study.buses):
        known = len(voltage)
        for line in closed:
            if line.from_bus in voltage:
                voltage[line.to_bus] = voltage[line.from_bus] * (1 + line.boost_frac)
            elif line.to_bus in voltage:
                voltage[line.from_bus] = voltage[line.to_bus] / (1 + line.boost_frac)
        assert len(voltage) > known, "not connected"
    return list(voltage.values())


@pytest.mark.parametrize("seed", SEEDS)
def test_random_study_is_valid(seed: int) -> None:
    study = random_study(seed)
    settings = study.settings
    assert 2 <= len(study.buses) <= 5
    assert sum(not line.normally_open for line in study.lines) == len(study.buses) - 1
    for voltage in _no_load_voltages(study):
        assert max(settings.vmin_pu, settings.vmin_event_pu) <= voltage
        assert voltage <= min(settings.vmax_pu, settings.vmax_event_pu)
    floors = [unit.min_soc_frac for unit in study.storage]
    for window in study.windows:
        series = build_window_series(study, window)
        assert series.load_kw.shape == (window.n_period, len(study.loads))
        assert np.all(series.start_soc_frac >= floors)
        assert np.all(series.start_soc_frac <= 1)
        if series.export_price_per_kwh is not None:
            assert series.export_price_per_kwh < series.price_per_kwh.min()
        assert window.start_row + window.n_period <= len(study.profiles.times)
    for unit in study.storage:
        slopes = [slope for slope, _ in unit.edges]
        assert slopes == sorted(slopes, reverse=True)
        assert (0.0, 0.0) in unit.curve
    for c in study.customer_classes:
        assert 0 <= c.cost_0h_per_kw <= c.cost_1h_per_kw <= c.cost_4h_per_kw <= c.cost_8h_per_kw
    by_line: dict[str, float] = {}
    for measure in study.measures:
        assert 0 < measure.failures_avoided_frac <= 1
        for line in measure.lines:
            by_line[line] = max(by_line.get(line, 0.0), measure.failures_avoided_frac)
    names = {line.line for line in study.lines}
    assert set(by_line) <= names
    classes = {c.outage_class for c in study.outage_classes}
    assert {line.outage_class for line in study.lines} - {None} <= classes


@pytest.mark.parametrize("seed", SEEDS)
def test_checks_of_the_feeder_find_no_fault(seed: int) -> None:
    """Radial, and no-load voltages inside both bands in every stage of every scenario."""
    study = random_study(seed)
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    scenarios = {
        record.window: window.scenarios
        for record, window in zip(study.windows, windows, strict=True)
    }
    assert all(window.scenarios for window in windows)
    found = check_radial(study) + check_no_load_voltage(study, feeder, scenarios)
    assert not [finding for finding in found if finding.level is Level.FAULT]


def test_seeds_use_every_feature_together() -> None:
    used: set[str] = set()
    for seed in SEEDS:
        used |= feature_names(random_study(seed))
    assert used == set(FEATURES)


@pytest.mark.parametrize("feature", FEATURES)
def test_a_feature_asked_for_is_used(feature: str) -> None:
    asked = {feature, "forming storage"} if feature in ("following unit",) else {feature}
    if feature in ("island headroom", "following unit"):
        asked |= {"forming storage", "generator"}
    if feature in ("budget", "grant"):
        asked.add("hardening")
    if feature == "default stored-energy price":
        asked.add("storage")
    if feature in ("failure profile", "failure multiplier", "repair multiplier"):
        asked.add("weather exposure")
    assert any(feature in feature_names(random_study(seed, features=asked)) for seed in range(6))


def test_features_restrict() -> None:
    for seed in SEEDS:
        used = feature_names(random_study(seed, features=set()))
        assert used <= ALWAYS_DRAWN | {"bare line end"}


def test_same_seed_same_study() -> None:
    first, second = random_study(7), random_study(7)
    assert first.lines == second.lines
    assert first.settings == second.settings
    assert first != random_study(8)


def test_unknown_feature_is_refused() -> None:
    with pytest.raises(ValueError, match="teleport"):
        random_study(1, features={"teleport"})


def test_tree_periods_by_hand() -> None:
    # T = 3, two scenarios of one period. N(3) = 0, N(2) = 1 + 2*1 = 3,
    # N(1) = 2 + 2*(1 + N(3) + 1) = 6, N(0) = 3 + 2*((1 + N(2)) + (1 + N(3)) + 1) = 15.
    assert tree_periods(3, 2, [1]) == 15


def test_small_study_changes_settings_and_fields() -> None:
    study = small_study(measures=(), period_h=0.5)
    assert study.settings.period_h == 0.5
    assert [bus.bus for bus in study.buses] == ["S", "A", "B"]
