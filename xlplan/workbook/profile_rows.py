"""Profiles as columns of numbers, and the row at which a window starts.

Enters: a ``CheckedStudy``. Leaves: ``ProfileRows``: what both the checks of windows and
``study.build`` need, so that they cannot differ.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

from xlplan.workbook.checked_study import CheckedStudy
from xlplan.workbook.field_checks import CheckedRow

_DAY_ONE = dt.datetime(1900, 1, 1)
_ONE_DAY = dt.timedelta(days=1)
_ONE_HOUR = dt.timedelta(hours=1)

TIME_TOLERANCE_H = dt.timedelta(seconds=1) / _ONE_HOUR
"""Spreadsheets keep times as fractions of a day; computed ones are a little off."""


@dataclass(frozen=True)
class ProfileRows:
    """``times`` as read (None: faulty); ``values`` by profile, None where faulty."""

    rows: tuple[CheckedRow, ...]
    times: tuple[object, ...]
    values: Mapping[str, tuple[float | None, ...]]

    @cached_property
    def hours(self) -> tuple[tuple[str, float] | None, ...]:
        """Kind and hours of each time; numbers stay numbers."""
        return tuple(comparable(time) for time in self.times)

    def row_at(self, starts_at: object) -> int | None:
        """0-based row of a time, None where there is none; the first row for a blank."""
        if starts_at is None:
            return 0 if self.rows else None
        sought = comparable(starts_at)
        if sought is None:
            return None
        for i, found in enumerate(self.hours):
            if found is None or found[0] != sought[0]:
                continue
            if abs(found[1] - sought[1]) <= _tolerance(found[0], found[1]):
                return i
        return None


def _tolerance(kind: str, value: float) -> float:
    return 1e-9 * max(1.0, abs(value)) if kind == "number" else TIME_TOLERANCE_H


def profile_rows(study: CheckedStudy) -> ProfileRows:
    """The Profiles sheet as columns."""
    rows = study.rows("Profiles")
    names = []
    if "Profiles" in study.tables:
        names = [key for key in study.tables["Profiles"].table.column_of if key != "time"]
    return ProfileRows(
        rows=rows,
        times=tuple(row.values.get("time") for row in rows),
        values={name: tuple(row.number(name) for row in rows) for name in names},
    )


def comparable(time: object) -> tuple[str, float] | None:
    """Kind of a time and its hours; a plain number keeps its value.

    24:00, which a spreadsheet keeps as the first day of 1900, is the end of a day of clock times.
    """
    if isinstance(time, bool) or time is None:
        return None
    if isinstance(time, (int, float)):
        return "number", float(time)
    if isinstance(time, dt.datetime):
        since = time.replace(tzinfo=None) - _DAY_ONE
        if time.year == _DAY_ONE.year:
            return "clock", (since + _ONE_DAY) / _ONE_HOUR
        return "date", since / _ONE_HOUR
    if isinstance(time, dt.time):
        time = dt.timedelta(hours=time.hour, minutes=time.minute, seconds=time.second)
    return ("clock", time / _ONE_HOUR) if isinstance(time, dt.timedelta) else None


def hours_between(before: tuple[str, float], after: tuple[str, float]) -> float:
    """Hours from one time to a later one; clock times may pass midnight."""
    hours = after[1] - before[1]
    if before[0] == "clock" and hours < 0:
        hours += _ONE_DAY / _ONE_HOUR
    return hours
