"""The clock, renewals and unserved energy against closed forms."""

from __future__ import annotations

import math
from functools import cache
from pathlib import Path

import numpy as np
from scipy.stats import gamma

from validation.closed_forms.studies import (
    BACK_UP_H,
    FAILURES_PER_YEAR,
    LOAD_KW,
    PRICE_UNSERVED,
    REPAIR_H,
    STORE_COST_PER_KWH_YEAR,
    run_program,
)
from validation.comparison import Comparison, Origin, read_rows
from xlplan.base.units import HOURS_PER_YEAR
from xlplan.outages.clock import Clock

HERE = Path(__file__).resolve().parent

TITLE = "Closed forms of failure, renewal and unserved energy"
SOURCE = "textbook probability; formulas in source.md"
NOTES = (
    "Exponential repair times are not compared: repair is fixed, or spread over three points.",
)

SPREAD = ((0.5, 0.4), (1.0, 0.4), (2.0, 0.2))
"""Multiples of the repair time and their chances (model definition of the spread)."""


def tabled(name: str) -> float:
    """The number of a row of closed_forms.csv."""
    for row in read_rows(HERE, "closed_forms.csv"):
        if row["name"] == name:
            return float(row["value"])
    raise KeyError(name)


def chance_rate(chance: float) -> float:
    """Yearly rate that strikes in an hour with this chance."""
    return -math.log1p(-chance) * HOURS_PER_YEAR


def renewals(rate_per_h: float, repair_h: float, window_h: float) -> float:
    """Expected failures with fixed repair, one at a time: the n-th needs n lives, n - 1 repairs."""
    total, n = 0.0, 1
    while (left := window_h - (n - 1) * repair_h) > 0.0:
        total += float(gamma.cdf(left, n, scale=1.0 / rate_per_h))
        n += 1
    return total


def storage_hours() -> float:
    """Hours of storage worth their cost, by the critical ratio."""
    hours = 0.0
    for multiple, _ in SPREAD:
        longer = sum(chance for m, chance in SPREAD if m >= multiple)
        if FAILURES_PER_YEAR * PRICE_UNSERVED * longer > STORE_COST_PER_KWH_YEAR:
            hours = multiple * REPAIR_H
    return hours


@cache
def compare() -> list[Comparison]:
    """Clock by clock, then programs."""
    found: list[Comparison] = []

    def exact(
        quantity: str, expected: float, got: float, digits: int, tolerance: float = 1e-12
    ) -> None:
        reason = "exact in discrete time; digits of the table"
        found.append(
            Comparison(quantity, "", expected, got, tolerance, reason, Origin.CLOSED_FORM, digits)
        )

    year = Clock.of_rates(np.full((8760, 1), 0.3), 1.0, [1])
    exact(
        "First failure within a year at 0.3 a year",
        tabled("first failure within T (exponential)"),
        1.0 - float(year.survival[-1]),
        10,
        1e-10,
    )
    week = Clock.of_rates(np.full((672, 1), 0.3), 0.25, [1])
    exact(
        "The same within a week of quarter-hours",
        tabled("same within one week of quarter-hours"),
        1.0 - float(week.survival[-1]),
        12,
    )
    dozen = Clock.of_rates(np.full((12, 1), chance_rate(0.02)), 1.0, [1])
    exact(
        "First failure in step 12, 2 % a step",
        tabled("first failure exactly at step k (geometric)"),
        float(dozen.first_failure_from(0)[11]),
        12,
    )
    exact(
        "No failure in 12 steps",
        tabled("no failure in n steps"),
        float(dozen.survival[12]),
        12,
    )
    exact(
        "Expected steps survived of 12",
        tabled("expected min(first failure step, n) in steps survived"),
        float(dozen.survival[:-1].sum()),
        10,
        1e-10,
    )
    three = Clock.of_rates([[0.1, 0.2, 0.05]], HOURS_PER_YEAR, [1, 1, 1])
    exact("Which fails first, 0.2 of 0.35", 4.0 / 7.0, float(three.scenario_chance[0, 1]), 12)
    exact(
        "Any of three fails within a year",
        tabled("any of several components fails within T"),
        float(three.failure_chance[0]),
        10,
        1e-10,
    )
    period_h, n_period = 1.0 / 12.0, 12 * 48
    for rate, repair_h in ((500.0, 4.0), (2000.0, 2.0)):
        clock = Clock.of_rates(np.full((n_period, 1), rate), period_h, [round(repair_h / period_h)])
        expected = renewals(rate / HOURS_PER_YEAR, repair_h, n_period * period_h)
        cycle_h = HOURS_PER_YEAR / rate + repair_h
        found.append(
            Comparison(
                f"Failures in 48 hours at {rate:g} a year, repair {repair_h:g} h",
                "",
                expected,
                clock.expected_events(),
                expected * period_h / cycle_h,
                "five-minute periods: a cycle is longer by half a period",
                Origin.CLOSED_FORM,
                4,
            )
        )
    q, tau = 0.01, 50
    long = Clock.of_rates(np.full((6000, 1), chance_rate(q)), 1.0, [tau])
    exact(
        "Long-run failures per step, 1 % a step, repair of 50 steps",
        1.0 / (1.0 / q + tau),
        float(long.occupancy()[1][3000:].mean()),
        10,
        1e-10,
    )
    reason = "one failure at a time, at most one failure in an hour: 0.2 %"

    def program(quantity: str, unit: str, expected: float, got: float, digits: int) -> None:
        found.append(
            Comparison(
                quantity,
                unit,
                expected,
                got,
                0.002 * expected,
                reason,
                Origin.CLOSED_FORM,
                digits,
            )
        )

    radial = run_program(0.0, 0.0, "none")["Existing feeder"]
    program(
        "Whole program: unserved energy of a radial load",
        "kWh/year",
        tabled("expected unserved energy of a radial load"),
        radial["reliability"]["eens_kwh_per_year"],
        1,
    )
    backed = run_program(BACK_UP_H * LOAD_KW, 0.0, "none")["Existing feeder"]
    program(
        "Whole program: the same with a store of 2 hours",
        "kWh/year",
        tabled("unserved energy with back-up of h hours, fixed repair r"),
        backed["reliability"]["eens_kwh_per_year"],
        1,
    )
    best = run_program(0.0, 2000.0, "three point")["Least-cost plan"]
    hours = storage_hours()
    left_h = sum(chance * max(0.0, m * REPAIR_H - hours) for m, chance in SPREAD)
    bought = sum(p["kwh"] for p in best["purchases"])
    program("Whole program: storage worth its cost", "kWh", hours * LOAD_KW, bought, 1)
    cost = best["annual_cost"]
    program(
        "Whole program: its yearly cost",
        "EUR/year",
        hours * LOAD_KW * STORE_COST_PER_KWH_YEAR,
        cost["investment"],
        0,
    )
    program(
        "Whole program: interruption cost that is left",
        "EUR/year",
        FAILURES_PER_YEAR * PRICE_UNSERVED * LOAD_KW * left_h,
        cost["interruption"],
        0,
    )
    return found
