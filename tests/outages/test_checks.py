"""Warnings about rounded times and islands that nothing forms."""

from __future__ import annotations

from tests.builders import (
    make_generator,
    make_outage_class,
    make_profiles,
    make_storage,
    make_window,
    small_study,
)
from tests.outages.hand_feeders import scenarios_of, town
from xlplan.base.codes import Code
from xlplan.base.errors import Level, Origin
from xlplan.network.feeder import build_feeder
from xlplan.outages.checks import check_failure_counts, check_islands, check_rounded_times
from xlplan.outages.window_model import build_window_models
from xlplan.study.study import RateBasis

CLASSES = Origin("Outage assumptions", 7, {"repair_hours": "D", "switching_minutes": "E"})
UNITS = Origin("Generators", 9, {"start_delay_minutes": "M", "grid_forming": "Q"})


def cells(findings) -> list[str]:
    """Cells of the findings, all of them warnings."""
    assert all(finding.level is Level.WARNING for finding in findings)
    return [finding.cell for finding in findings]


def rounded(period_h: float = 0.5, **changes: object) -> list[str]:
    """Cells of what rounding moves for one outage class."""
    outage_class = make_outage_class("overhead", 1.0, origin=CLASSES, **changes)
    return cells(check_rounded_times(town(outage_classes=(outage_class,), period_h=period_h)))


def test_times_moved_by_more_than_five_per_cent():
    assert rounded(repair_h=4.0, switching_h=0.5) == []
    assert rounded(repair_h=4.1) == ["D7"]  # 4.5 h: up by 10 %
    assert rounded(repair_h=9.9) == []  # 10 h: up by 1 %
    assert rounded(repair_h=4.0, switching_h=0.6) == ["E7"]
    assert rounded(repair_h=4.1, is_included=False) == []


def test_five_per_cent_exactly_is_no_warning():
    assert rounded(period_h=1.0, repair_h=20.0 / 1.05 + 1e-9) == []
    assert rounded(period_h=1.0, repair_h=20.0 / 1.051) == ["D7"]


def test_a_repair_shorter_than_its_isolation_is_moved():
    assert rounded(repair_h=0.5, switching_h=1.5) == ["D7"]


def test_repair_times_in_a_storm():
    outage_class = make_outage_class(
        "overhead", 1.0, repair_h=4.0, is_weather_exposed=True, origin=CLASSES
    )
    windows = (make_window("calm"), make_window("gale", repair_multiplier=1.1))
    findings = check_rounded_times(town(outage_classes=(outage_class,), windows=windows))
    assert cells(findings) == ["D7"]  # 4.4 h in hourly periods: 5 h
    assert "gale" in findings[0].message
    assert findings[0].code == Code.TIME_ROUNDED
    assert findings[0].value == "4"


def test_start_delays():
    unit = make_generator("G", "A", start_delay_h=0.75, origin=UNITS)
    (finding,) = check_rounded_times(town(generators=(unit,)))
    assert (finding.cell, finding.key, finding.value) == ("M9", "start_delay_minutes", "45")


def test_units_in_islands_that_nothing_forms():
    follower = make_generator("G", "C", is_grid_forming=False, origin=UNITS)

    def findings(**changes: object):
        study = town(generators=(follower,), **changes)
        return check_islands(study, build_feeder(study), {"day": scenarios_of(study)})

    (finding,) = findings()
    assert (finding.cell, finding.code) == ("Q9", Code.ISLAND_NOT_FORMED)
    assert "bus C" in finding.message
    assert findings(storage=(make_storage("E", "C"),)) == []
    # Storage at B forms the island of B and C after a fault on M1: the unit can be of use.
    assert findings(storage=(make_storage("E", "B"),)) == []


WINDOWS = Origin("Windows", 8, {"failure_multiplier": "G"})


def counted(rate_per_year: float, n_period: int = 40, **settings: object) -> list:
    """Findings for two lines that fail so often, in one window of hours, once a year."""
    study = small_study(
        outage_classes=(make_outage_class("overhead", rate_per_year),),
        windows=(make_window(n_period=n_period, occurrences_per_year=1.0, origin=WINDOWS),),
        profiles=make_profiles(n_period),
        **settings,
    )
    return check_failure_counts(study, build_window_models(study, build_feeder(study)))


def test_more_failures_in_a_window_than_can_be_planned_for():
    # 2 lines, 40 of 8760 hours: 2 * 32,000 * 40 / 8760 = 292.2 failures, and 301.4 with 33,000.
    assert counted(32_000.0) == []
    (finding,) = counted(33_000.0)
    assert (finding.level, finding.code) == (Level.FAULT, Code.FAILURES_TOO_MANY)
    assert (finding.sheet, finding.cell) == ("Windows", "G8")
    assert "301.4 failures in one occurrence" in finding.message
    # All failures of the two lines' year in these hours: 2 * 160 = 320.
    (finding,) = counted(160.0, rate_basis=RateBasis.ALL_YEAR)
    assert "320 failures" in finding.message
    assert "fair weather" in finding.hint
    assert counted(140.0, rate_basis=RateBasis.ALL_YEAR) == []


def test_more_failures_in_a_period_than_can_be_planned_for():
    # An hour: 2 * 87,000 / 8760 = 19.9 failures, and 20.1 with 88,000.
    assert counted(87_000.0, n_period=4) == []
    (finding,) = counted(88_000.0, n_period=4)
    assert finding.code == Code.FAILURES_TOO_MANY
    assert "20.09 failures in one period" in finding.message
