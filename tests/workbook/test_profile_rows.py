"""Times of every kind on one scale, and the row where a window starts."""

from __future__ import annotations

import datetime as dt

import pytest

from xlplan.workbook.profile_rows import ProfileRows, comparable, hours_between


@pytest.mark.parametrize(
    ("earlier", "later", "hours"),
    [
        (dt.datetime(2030, 1, 1), dt.datetime(2030, 1, 1, 0, 15), 0.25),
        (dt.datetime(2030, 1, 31, 23), dt.datetime(2030, 2, 1), 1.0),
        (dt.time(9), dt.time(9, 30), 0.5),
        (dt.time(23, 30), dt.time(0), 0.5),  # past midnight
        (dt.time(23), dt.datetime(1900, 1, 1), 1.0),  # 24:00 as a spreadsheet keeps it
        (dt.timedelta(hours=23), dt.timedelta(hours=24, minutes=30), 1.5),
        (3, 4.5, 1.5),
    ],
)
def test_hours_between_times(earlier: object, later: object, hours: float) -> None:
    before, after = comparable(earlier), comparable(later)
    assert before is not None
    assert after is not None
    assert before[0] == after[0]
    assert hours_between(before, after) == pytest.approx(hours)


@pytest.mark.parametrize("what", [None, True, "noon", b""])
def test_what_is_no_time_cannot_be_compared(what: object) -> None:
    assert comparable(what) is None


def test_a_start_is_found_within_a_second_and_by_kind() -> None:
    rows = (None, None, None)
    dates = tuple(dt.datetime(2030, 1, 1, hour) for hour in range(3))
    profiles = ProfileRows(rows=rows, times=dates, values={})  # type: ignore[arg-type]
    assert profiles.row_at(None) == 0
    assert profiles.row_at(dt.datetime(2030, 1, 1, 2)) == 2
    # 2:00 computed in a spreadsheet: a third of a microday off.
    assert profiles.row_at(dt.datetime(2030, 1, 1, 1, 59, 59, 999_000)) == 2
    assert profiles.row_at(dt.datetime(2030, 1, 1, 1, 58)) is None
    assert profiles.row_at(dt.time(2)) is None
    assert profiles.row_at(2.0) is None
    numbers = ProfileRows(rows=rows, times=(0.0, 0.1, 0.30000000000000004), values={})  # type: ignore[arg-type]
    assert numbers.row_at(0.3) == 2
