"""Builds the textbook feeder as study workbooks; see source.md for how and why.

Run as a script to look at them: ``python validation/reliability/build_study.py FOLDER``.
"""

from __future__ import annotations

import csv
import sys
from dataclasses import dataclass
from pathlib import Path

HERE = Path(__file__).resolve().parent

Rows = list[dict[str, object]]


@dataclass(frozen=True)
class Case:
    """One case of the textbook; ``name`` is that of the results table."""

    number: int
    name: str
    has_fuses: bool
    has_disconnects: bool
    has_back_feed: bool
    has_lateral_switches: bool = False


CASES = (
    Case(1, "1 solid laterals, no disconnects, no back-feed", False, False, False),
    Case(2, "2 perfectly fused laterals, no disconnects", True, False, False),
    Case(3, "3 fused laterals + disconnects in main (0.5 h)", True, True, False),
    Case(5, "5 as 3 + unrestricted back-feed (0.5 h)", True, True, True),
)

SWITCHED = Case(0, "as 3 but switches in place of the fuses", False, True, False, True)
"""One tenth of case 4: what happens where a fuse does not clear."""

HOURS_OF_ALL_WINDOWS = 8760
"""The windows of a year cover every hour of it."""

PERIOD_MINUTES = 30


def read_rows(name: str) -> list[dict[str, str]]:
    """Rows of one of the tables beside this file."""
    with (HERE / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def study_settings(case: Case) -> dict[str, object]:
    """Settings: one source, wide limits, a price that no result depends on."""
    return {
        "study_name": f"Textbook radial feeder, case {case.number}",
        "currency": "EUR",
        "source_bus": "S",
        "base_kv": 33,
        "source_voltage_pu": 1,
        "substation_limit_kva": 100_000,
        "length_unit": "km",
        "period_minutes": PERIOD_MINUTES,
        "vmin_pu": 0.9,
        "vmax_pu": 1.1,
        "vmin_event_pu": 0.9,
        "vmax_event_pu": 1.1,
        "energy_price_per_kwh": 0.1,
        "rate_basis": "fair weather",
        "random_seed": 1,
    }


def study_tables(case: Case, window_h: int = 24) -> dict[str, Rows]:
    """Sheets by name, rows by key, as a person would type them.

    ``window_h``: hours of the one window; it occurs so often that a year is covered.
    """
    sections = read_rows("billinton_allan_sections.csv")
    points = read_rows("billinton_allan_load_points.csv")
    mains = [row for row in sections if row["kind"] == "main"]
    laterals = [row for row in sections if row["kind"] == "lateral"]
    tap_of = {row["load_point_fed"]: f"M{i}" for i, row in enumerate(mains, start=1)}
    buses: Rows = [{"bus": "S"}]
    buses += [{"bus": tap} for tap in tap_of.values()]
    buses += [{"bus": row["load_point"]} for row in points]
    lines: Rows = []
    previous = "S"
    for row in mains:
        tap = tap_of[row["load_point_fed"]]
        device = "switch" if case.has_disconnects else "none"
        device = "breaker" if previous == "S" else device
        lines.append(_line(f"Main {row['section']}", previous, tap, row, device))
        previous = tap
    for row in laterals:
        point = row["load_point_fed"]
        device = "fuse" if case.has_fuses else "none"
        device = "switch" if case.has_lateral_switches else device
        lines.append(_line(f"Lateral {row['section']}", tap_of[point], point, row, device))
    supplies: Rows = []
    if case.has_back_feed:
        supplies.append(
            {
                "supply": "Back-feed",
                "bus": previous,
                "spare_kw": 50_000,
                "shares_bulk_supply": "no",
            }
        )
    return {
        "Buses": buses,
        "Loads": [
            {
                "load": f"Load {row['load_point']}",
                "bus": row["load_point"],
                "customer_class": "Customers",
                "peak_kw": float(row["average_load_kw"]),
                "power_factor": 1,
                "customers": float(row["customers"]),
            }
            for row in points
        ],
        "Lines": lines,
        "Neighbour supplies": supplies,
        "Outage assumptions": [_outage_class(mains[0]), _outage_class(laterals[0])],
        "Customer classes": [
            {
                "customer_class": "Customers",
                "cost_0h_per_kw": 0,
                "cost_1h_per_kw": 5,
                "cost_4h_per_kw": 20,
                "cost_8h_per_kw": 40,
                "cost_after_8h_per_kwh": 5,
            }
        ],
        "Profiles": [{"time": k, "flat": 1} for k in range(window_h * 60 // PERIOD_MINUTES)],
        "Windows": [
            {
                "window": "Every hour of the year",
                "occurrences_per_year": HOURS_OF_ALL_WINDOWS / window_h,
                "starts_at": 0,
                "hours": window_h,
            }
        ],
    }


def _line(
    name: str, from_bus: str, to_bus: str, row: dict[str, str], device: str
) -> dict[str, object]:
    """One line; the device stands at its start, its end belongs to the section of its bus."""
    return {
        "line": name,
        "from_bus": from_bus,
        "to_bus": to_bus,
        "length": float(row["length_km"]),
        "r_ohm": 0.001,
        "x_ohm": 0.001,
        "from_device": device,
        "to_device": "none",
        "outage_class": row["kind"].capitalize(),
    }


def _outage_class(row: dict[str, str]) -> dict[str, object]:
    """Main or lateral; all sections of a kind share their figures."""
    return {
        "outage_class": row["kind"].capitalize(),
        "failures_per_length_year": float(row["failure_rate_per_km_yr"]),
        "repair_hours": float(row["repair_time_h"]),
        "switching_minutes": 30,
        "figure_from": "textbook, see source.md",
    }


def write_studies(folder: Path, window_h: int = 24) -> list[Path]:
    """Writes one workbook per case into a folder; their paths."""
    from xlplan.workbook.template import write_study_workbook

    paths = []
    for case in CASES:
        path = folder / f"case-{case.number}.xlsx"
        write_study_workbook(path, study_tables(case, window_h), study_settings(case))
        paths.append(path)
    return paths


if __name__ == "__main__":
    for written in write_studies(Path(sys.argv[1])):
        print(written)
