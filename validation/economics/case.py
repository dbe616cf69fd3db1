"""Capital recovery factors and present values."""

from __future__ import annotations

from functools import cache
from pathlib import Path

from validation.comparison import HALF_DIGIT, Comparison, Origin, half_digit, read_rows
from xlplan.base.units import frac_from_pct
from xlplan.study.economics import capital_recovery_factor, present_value_factor

HERE = Path(__file__).resolve().parent

TITLE = "Capital recovery factors"
SOURCE = "uniform-series tables of any engineering-economy handbook"
NOTES: tuple[str, ...] = ()


@cache
def compare() -> list[Comparison]:
    """Ten handbook entries, and the worst of a table of the closed form."""
    found = [
        Comparison(
            f"A given P, {row['rate_percent']} %, {row['years']} years",
            "per year",
            float(row["crf_handbook"]),
            capital_recovery_factor(frac_from_pct(float(row["rate_percent"])), float(row["years"])),
            half_digit(5),
            HALF_DIGIT,
            Origin.RECALLED,
            5,
        )
        for row in read_rows(HERE, "capital_recovery_handbook_values.csv")
    ]
    table = read_rows(HERE, "capital_recovery_factors.csv")
    for quantity, key, function in (
        ("A given P", "crf_a_given_p", capital_recovery_factor),
        ("P given A", "annuity_p_given_a", present_value_factor),
    ):
        pairs = [
            (
                float(row[key]),
                function(frac_from_pct(float(row["rate_percent"])), float(row["years"])),
            )
            for row in table
        ]
        expected, got = max(pairs, key=lambda pair: abs(pair[0] - pair[1]))
        found.append(
            Comparison(
                f"{quantity}: furthest off of {len(table)} rates and lives",
                "",
                expected,
                got,
                half_digit(6),
                HALF_DIGIT,
                Origin.CLOSED_FORM,
                6,
            )
        )
    return found
