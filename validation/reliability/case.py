"""The textbook's six cases through the whole program."""

from __future__ import annotations

import json
import tempfile
from functools import cache
from pathlib import Path

from validation.comparison import Comparison, Origin, half_digit
from validation.reliability.build_study import (
    CASES,
    SWITCHED,
    Case,
    read_rows,
    study_settings,
    study_tables,
)
from xlplan.cli import main
from xlplan.workbook.template import write_study_workbook

TITLE = "Textbook radial feeder: reliability indices"
SOURCE = (
    "R. Billinton, R. N. Allan, Reliability Evaluation of Power Systems, 2nd ed., 1996, chapter 7"
)
NOTES = (
    "Cases 4 and 6 (fuses that fail, back-feed with a probability) are weighted means of two "
    "studies: the model has neither.",
)

ONE_AT_A_TIME = 0.0015
"""Failures during an outage, and second ones in a period, do not happen (source.md)."""

WINDOW_H = 3
"""The window is short, so that each study solves in a second; it covers every hour of the year."""

INDICES = ("SAIFI", "SAIDI", "CAIDI", "ASAI", "ENS", "AENS")
PRINTED_DIGITS = {"SAIFI": 2, "SAIDI": 2, "CAIDI": 2, "ASAI": 6, "ENS": 1, "AENS": 1}
UNITS = {
    "SAIFI": "per customer and year",
    "SAIDI": "h per customer and year",
    "CAIDI": "h",
    "ASAI": "",
    "ENS": "MWh/year",
    "AENS": "kWh per customer and year",
}


@cache
def run_program(case: Case) -> dict[str, float]:
    """What adds up over events: SAIFI, SAIDI, ENS of the existing feeder."""
    with tempfile.TemporaryDirectory() as folder:
        study, twin = Path(folder) / "study.xlsx", Path(folder) / "results.json"
        write_study_workbook(study, study_tables(case, WINDOW_H), study_settings(case))
        arguments = ["solve", str(study), "--json", str(twin), "--method", "decomposed"]
        status = main([*arguments, "--plan-only", "--quiet", "--workers", "1"])
        if status != 0:
            raise RuntimeError(f"the study was not solved: exit status {status}")
        plans = json.loads(twin.read_text("utf-8"))["alternatives"]
    existing = next(plan for plan in plans if plan["name"] == "Existing feeder")["reliability"]
    return {
        "SAIFI": existing["saifi"],
        "SAIDI": existing["saidi_h"],
        "ENS": existing["eens_kwh_per_year"] / 1000.0,
    }


def mixed(parts: tuple[tuple[float, Case], ...]) -> dict[str, float]:
    """All indices of studies weighted with probabilities."""
    customers = sum(float(row["customers"]) for row in read_rows("billinton_allan_load_points.csv"))
    runs = [(share, run_program(case)) for share, case in parts]
    found = {key: sum(share * run[key] for share, run in runs) for key in ("SAIFI", "SAIDI", "ENS")}
    found["CAIDI"] = found["SAIDI"] / found["SAIFI"]
    found["ASAI"] = 1.0 - found["SAIDI"] / 8760.0
    found["AENS"] = found["ENS"] * 1000.0 / customers
    return found


@cache
def compare() -> list[Comparison]:
    """Six indices of six cases."""
    by_number = {case.number: case for case in CASES}
    third, fifth = by_number[3], by_number[5]
    cases: dict[int, tuple[tuple[float, Case], ...]] = {
        number: ((1.0, case),) for number, case in by_number.items()
    }
    cases[4] = ((0.9, third), (0.1, SWITCHED))
    cases[6] = ((0.6, fifth), (0.4, third))
    rows = read_rows("billinton_allan_results.csv")
    found = []
    for number in sorted(cases):
        got = mixed(cases[number])
        printed = {
            row["index"]: float(row["published_value"])
            for row in rows
            if row["case"].startswith(f"{number} ")
        }
        for index in INDICES:
            digits = PRINTED_DIGITS[index]
            size = 1.0 - printed[index] if index == "ASAI" else printed[index]
            found.append(
                Comparison(
                    f"Case {number}: {index}",
                    UNITS[index],
                    printed[index],
                    got[index],
                    half_digit(digits) + ONE_AT_A_TIME * size,
                    "half of the last digit printed; one failure at a time (0.15 %)",
                    Origin.RECALLED,
                    digits if index == "ASAI" else digits + 1,
                )
            )
    return found
