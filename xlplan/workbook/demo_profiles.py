"""Profiles of the demo study: an ordinary day, a peak day and a storm on two days.

Smooth invented shapes: a level, and bumps at given hours. Load profiles are shares of the peak
and reach 1 on the peak day.
"""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime, timedelta
from math import exp, pi, sin
from typing import Any

PERIOD = timedelta(minutes=30)
PERIODS_A_DAY = 48

ORDINARY_START = datetime(2026, 1, 12)
PEAK_START = datetime(2026, 1, 13)
STORM_START = datetime(2026, 1, 14)
N_DAY = 4

_DIGITS = 3

Bump = tuple[float, float, float]
"""Height, hour of the day, width in hours."""

_HOMES: tuple[float, tuple[Bump, ...]] = (
    0.34,
    ((0.24, 7.5, 1.4), (0.14, 13.0, 3.5), (0.5, 19.0, 2.4)),
)
_TRADE: tuple[float, tuple[Bump, ...]] = (0.24, ((0.66, 10.0, 2.6), (0.62, 15.5, 2.4)))
_STEADY: tuple[float, tuple[Bump, ...]] = (0.72, ((0.12, 9.0, 3.0), (0.16, 18.5, 3.5)))
_PRICE: tuple[float, tuple[Bump, ...]] = (
    0.7,
    ((0.35, 8.5, 1.8), (0.25, 13.0, 3.0), (1.0, 19.0, 2.2)),
)

_DAY_LEVEL = {
    "homes": (0.8, 1.0, 0.88, 0.88),
    "trade": (0.86, 1.0, 0.8, 0.72),
    "steady": (0.94, 1.0, 0.97, 0.97),
    "price": (0.95, 1.15, 1.0, 1.0),
}
"""Each day's level against the peak day: ordinary, peak, first and second day of the storm."""

_SUN_LEVEL = (0.55, 0.62, 0.1, 0.3)
_SUNRISE, _SUNSET = 7.0, 18.0
_GUST_PEAK_HOUR, _GUST_WIDTH = 16.0, 8.0
"""Hours from the start of the storm."""


def profile_rows() -> list[dict[str, Any]]:
    """Rows of the sheet Profiles: ``time`` and one value for each profile."""
    n_period = N_DAY * PERIODS_A_DAY
    times = [ORDINARY_START + i_period * PERIOD for i_period in range(n_period)]
    columns = {
        "homes": _daily("homes", *_HOMES),
        "trade": _daily("trade", *_TRADE),
        "steady": _daily("steady", *_STEADY),
        "price": _daily("price", *_PRICE),
        "sun": _sun(),
        "gusts": _gusts(),
        "neighbour spare": _neighbour_spare(),
    }
    return [
        {"time": time, **{name: values[i_period] for name, values in columns.items()}}
        for i_period, time in enumerate(times)
    ]


def _hour(i_period: int) -> float:
    """Hour of the day in the middle of a period."""
    return (i_period % PERIODS_A_DAY + 0.5) * (PERIOD / timedelta(hours=1))


def _shape(level: float, bumps: Sequence[Bump]) -> list[float]:
    """One day: the level and bell-shaped bumps, scaled so that the highest value is 1."""
    day = []
    for i_period in range(PERIODS_A_DAY):
        hour = _hour(i_period)
        day.append(level + sum(h * exp(-(((hour - at) / wide) ** 2)) for h, at, wide in bumps))
    return [value / max(day) for value in day]


def _daily(name: str, level: float, bumps: Sequence[Bump]) -> list[float]:
    """The same shape every day, at each day's level; the price keeps its level at night."""
    day = _shape(level, bumps)
    if name == "price":
        mean = sum(day) / len(day)
        day = [value / mean for value in day]
    return [round(factor * value, _DIGITS) for factor in _DAY_LEVEL[name] for value in day]


def _sun() -> list[float]:
    day = []
    for i_period in range(PERIODS_A_DAY):
        share = (_hour(i_period) - _SUNRISE) / (_SUNSET - _SUNRISE)
        day.append(sin(pi * share) if 0.0 < share < 1.0 else 0.0)
    return [round(factor * value, _DIGITS) for factor in _SUN_LEVEL for value in day]


def _gusts() -> list[float]:
    """When the storm does its damage: most in the second half of its first day."""
    before = [1.0] * (2 * PERIODS_A_DAY)
    hours = [(i + 0.5) * (PERIOD / timedelta(hours=1)) for i in range(2 * PERIODS_A_DAY)]
    storm = [0.25 + 2.0 * exp(-(((hour - _GUST_PEAK_HOUR) / _GUST_WIDTH) ** 2)) for hour in hours]
    return before + [round(value, _DIGITS) for value in storm]


def _neighbour_spare() -> list[float]:
    """The neighbour has least to spare when its own homes draw most."""
    homes = _daily("homes", *_HOMES)
    return [round(1.0 - 0.6 * value, _DIGITS) for value in homes]
