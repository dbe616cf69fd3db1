"""A small valid study as plain rows, a writer for it, and ways to change one cell of it.

The layout is this file's own (keys as headings in row 1, values from row 2), so that the addresses
in the tests can be counted here and owe nothing to the template.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable, Mapping
from dataclasses import replace
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

from openpyxl import Workbook

from xlplan.base.errors import Finding, Level
from xlplan.study.build import check_and_build
from xlplan.study.study import Study
from xlplan.workbook.reader import read_workbook
from xlplan.workbook.tables import RawStudy

SETTINGS: tuple[tuple[str, object], ...] = (
    ("study_name", "Trial"),  # B2
    ("source_bus", "S"),
    ("base_kv", 12.47),
    ("source_voltage_pu", 1.0),  # B5
    ("substation_limit_kva", 2000),
    ("length_unit", "km"),
    ("period_minutes", 60),
    ("vmin_pu", 0.95),  # B9
    ("vmax_pu", 1.05),
    ("vmin_event_pu", 0.92),
    ("vmax_event_pu", 1.06),
    ("real_discount_rate_pct", 4),  # B13
    ("budget", 500000),
    ("energy_price_per_kwh", 0.1),  # B15
    ("export_price_per_kwh", 0.02),
    ("demand_charge_per_kw_year", 50),
    ("stored_energy_price_per_kwh", None),  # B18
    ("bulk_supply_outage_class", "Bulk"),
    ("loss_allowance_pct", 3),  # B20
    ("risk_weight_pct", 0),
    ("samples", 100),
    ("repair_spread", "none"),  # B23
)

DAY = dt.datetime(2030, 1, 7)
STORM = dt.datetime(2030, 7, 1)


def _profile_rows() -> tuple[tuple[object, ...], ...]:
    """24 hours of an ordinary day (rows 2 to 25), then 24 of a storm (rows 26 to 49)."""
    rows: list[tuple[object, ...]] = []
    for start in (DAY, STORM):
        for hour in range(24):
            sun = 0.5 if 8 <= hour < 18 else 0.0
            price = 1.5 if hour == 18 else 1.0
            rows.append((start + dt.timedelta(hours=hour), 0.8, sun, price, 1.0))
    return tuple(rows)


TABLES: Mapping[str, tuple[tuple[str, ...], tuple[tuple[object, ...], ...]]] = {
    "Buses": (
        ("bus", "name", "capacitor_kvar"),
        (("S", "Substation", None), ("B1", "Mill lane", 100), ("B2", "Quarry", None)),
    ),
    "Loads": (
        (
            *("load", "bus", "customer_class", "peak_kw", "power_factor", "customers"),
            *("load_profile", "remote_disconnect_pct"),
        ),
        (
            ("Homes 1", "B1", "Homes", 200, 0.95, 80, "day", 0),
            ("Mill", "B2", "Works", 300, 0.9, 1, "day", 20),
        ),
    ),
    "Lines": (
        (
            *("line", "from_bus", "to_bus", "length", "conductor"),  # A to E
            *("r_ohm_per_length", "x_ohm_per_length", "r_ohm", "x_ohm", "rating_kva"),  # F to J
            *("boost_pct", "from_device", "to_device", "normally_open", "outage_class"),  # K to O
        ),
        (
            ("L1", "S", "B1", 2, "Wire", *[None] * 6, "breaker", "none", "no", "Main"),
            ("L2", "B1", "B2", 1.5, None, 0.3, 0.4, *[None] * 4, "switch", "none", "no", "Main"),
            ("L3", "S", "B2", *[None] * 4, 0.5, 0.6, 900, 1.5, "switch", "switch", "yes", None),
        ),
    ),
    "Neighbour supplies": (
        ("supply", "bus", "spare_kw", "spare_profile", "shares_bulk_supply"),
        (("East", "B2", 100, None, "no"),),
    ),
    "Conductors": (
        ("conductor", "r_ohm_per_length", "x_ohm_per_length", "ampacity_a"),
        (("Wire", 0.2, 0.35, 400),),
    ),
    "Generators": (
        (
            *("generator", "bus", "technology", "profile", "existing_kw"),  # A to E
            *("max_new_kw", "step_kw", "capital_cost_per_kw", "running_cost_per_kwh"),  # F to I
            *("ramp_pct_per_minute", "tank_hours", "refill_pct_per_hour", "grid_forming"),  # J-M
            *("outage_class", "start_delay_minutes"),  # N, O
        ),
        (
            (
                "Diesel",
                "B2",
                "dispatchable",
                None,
                100,
                200,
                100,
                800,
                0.3,
                1,
                24,
                10,
                "yes",
                "Unit",
                5,
            ),
            ("Roof", "B1", "solar", "sun", 50, *[None] * 7, "no", None, None),
        ),
    ),
    "Storage": (
        (
            *("storage", "bus", "existing_kw", "existing_kwh", "max_new_kw", "max_new_kwh"),  # A-F
            *("step_kw", "longest_hours", "capital_cost_per_kw", "capital_cost_per_kwh"),  # G to J
            *("grant_pct", "curve", "round_trip_efficiency_pct", "start_soc_pct"),  # K to N
            *("min_soc_pct", "grid_forming"),  # O, P
        ),
        (
            ("Battery", "B1", 0, 0, 200, 800, None, 6, 300, 250, 25, "Cells", None, 50, 10, "yes"),
            ("Second", "B2", 100, 200, 0, 0, *[None] * 6, 81, 60, 20, None),
        ),
    ),
    "Storage curves": (
        ("curve", "store_power_pct", "terminal_power_pct"),
        (("Cells", -92, -100), ("Cells", 50, 47), ("Cells", 100, 90)),
    ),
    "Outage assumptions": (
        (
            *("outage_class", "failures_per_year", "failures_per_length_year", "repair_hours"),
            *("switching_minutes", "weather_exposed", "repair_cost_per_failure", "included"),
        ),
        (
            ("Main", 0, 0.1, 4, 60, "yes", 1000, "yes"),
            ("Unit", 1, 0, 24, 0, "no", 0, "yes"),
            ("Bulk", 0.5, 0, 2, 0, "no", 0, "yes"),
        ),
    ),
    "Hardening": (
        ("measure", "lines", "capital_cost", "grant_pct", "life_years", "failures_avoided_pct"),
        (("Trees", "L1, L2", 20000, 0, 10, 50),),
    ),
    "Customer classes": (
        (
            *("customer_class", "critical", "cost_0h_per_kw", "cost_1h_per_kw"),
            *("cost_4h_per_kw", "cost_8h_per_kw", "cost_after_8h_per_kwh"),
        ),
        (("Homes", "no", 0.5, 3, 10, 20, 2.5), ("Works", "yes", 5, 20, 60, 110, 12)),
    ),
    "Profiles": (("time", "day", "sun", "price", "gusts"), _profile_rows()),
    "Windows": (
        (
            *("window", "occurrences_per_year", "starts_at", "hours", "load_multiplier"),  # A to E
            *("price_profile", "failure_multiplier", "repair_multiplier"),  # F to H
            *("failure_profile", "start_soc_pct", "counts_for_demand", "storm"),  # I to L
        ),
        (
            ("Day", 340, DAY, 24, 1, "price", 1, 1, None, None, "yes", "no"),
            ("Storm", 25, STORM, 24, 1.1, None, 10, 1.5, "gusts", 90, "no", "yes"),
        ),
    ),
    "Alternatives": (
        ("alternative", "description", "kind", "budget", "ignores_outages"),
        (
            ("Half", "half the money", "optimise", 250000, "no"),
            ("Ours", None, "fixed", 300000, "no"),
        ),
    ),
    "Fixed purchases": (
        ("alternative", "asset", "kw", "kwh", "buy"),
        (("Ours", "Battery", 100, 400, "yes"), ("Ours", "Trees", None, None, "yes")),
    ),
    "Device changes": (
        ("alternative", "line", "from_device", "to_device", "switching_minutes", "capital_cost"),
        (("Half", "L2", "recloser", None, 5, 30000),),
    ),
    "Sensitivities": (("parameter", "low", "high"), (("failure rates", 0.5, 2),)),
}


def study_workbook() -> Workbook:
    """The study as an openpyxl workbook, to be changed and saved by a test."""
    book = Workbook()
    sheet = book.active
    sheet.title = "Settings"
    sheet.append(("Setting", "Value"))
    for row in SETTINGS:
        sheet.append(row)
    for name, (keys, rows) in TABLES.items():
        sheet = book.create_sheet(name)
        sheet.append(keys)
        for row in rows:
            sheet.append(row)
    return book


def check_file(
    folder: Path, change: Callable[[Workbook], object] | None = None
) -> tuple[Study | None, list[Finding]]:
    """Writes the study with one change made by ``change``, reads and checks it."""
    book = study_workbook()
    if change is not None:
        change(book)
    path = folder / "study.xlsx"
    book.save(path)
    return check_and_build(read_workbook(path))


@cache
def raw_study() -> RawStudy:
    """The study as read, once."""
    with TemporaryDirectory() as folder:
        path = Path(folder) / "study.xlsx"
        study_workbook().save(path)
        return read_workbook(path)


def with_cell(raw: RawStudy, place: str, value: object, **changes: object) -> RawStudy:
    """The study with another value in one cell, such as ``Lines!D2``."""
    name, address = place.split("!")
    table = raw.tables[name]
    rows = []
    for row in table.rows:
        cells = {
            key: replace(cell, value=value, **changes) if cell.address == address else cell
            for key, cell in row.cells.items()
        }
        rows.append(replace(row, cells=cells))
    assert tuple(rows) != table.rows, f"{place} holds {value!r} already, or is no cell"
    return replace(raw, tables={**raw.tables, name: replace(table, rows=tuple(rows))})


def without_row(raw: RawStudy, name: str, number: int) -> RawStudy:
    """The study without one row of a sheet."""
    table = raw.tables[name]
    rows = tuple(row for row in table.rows if row.number != number)
    assert len(rows) == len(table.rows) - 1
    return replace(raw, tables={**raw.tables, name: replace(table, rows=rows)})


def with_copied_row(raw: RawStudy, name: str, number: int, **values: object) -> RawStudy:
    """The study with a copy of one row below a sheet's last, some of its values changed."""
    table = raw.tables[name]
    [row] = [row for row in table.rows if row.number == number]
    new = max(row.number for row in table.rows) + 1
    cells = {
        key: replace(
            cell,
            address=f"{row.column_of[key]}{new}",
            value=values.get(key, cell.value),
        )
        for key, cell in row.cells.items()
    }
    rows = (*table.rows, replace(row, number=new, cells=cells))
    return replace(raw, tables={**raw.tables, name: replace(table, rows=rows)})


def places(findings: list[Finding], level: Level | None = None) -> set[tuple[str, str]]:
    """(code, ``Sheet!Cell``) of the findings, or of those of one level."""
    return {
        (str(finding.code), f"{finding.sheet}!{finding.cell}")
        for finding in findings
        if level is None or finding.level is level
    }
