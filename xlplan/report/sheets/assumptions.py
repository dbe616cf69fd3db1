"""Assumptions: about the run, what was noticed in the study, every input used."""

from __future__ import annotations

import datetime as dt
import math
import numbers

from xlplan.base.units import pct_from_frac
from xlplan.compare.study_result import InputEcho, StudyResult
from xlplan.report.grid import Cell, Grid
from xlplan.report.safe_book import SafeBook
from xlplan.report.tables import ASSUMPTIONS, FINDINGS, INPUTS, RUN_FACTS

WIDTHS = (28, 24, 36, 24, 44, 14, 34)


def write(book: SafeBook, result: StudyResult) -> None:
    """Writes the sheet."""
    sheet = book.sheet(ASSUMPTIONS)
    sheet.head(
        "What the results rest on",
        "About the run, what was noticed in the study workbook, and every input used, defaults "
        "included. Copies of values: changing them here changes nothing.",
    )
    sheet.widths(WIDTHS)
    facts = run_facts(result)
    sheet.text(3, 0, "Run", "section")
    grid = Grid(ASSUMPTIONS, 4, RUN_FACTS, len(facts))
    sheet.text(grid.top, 0, RUN_FACTS[0].title, "heading")
    sheet.paragraph(grid.top, 1, 6, RUN_FACTS[1].title, 100, "heading")
    for i, (title, value) in enumerate(facts):
        sheet.text(grid.row(i), 0, title)
        sheet.paragraph(grid.row(i), 1, 6, value, 180)
    findings = Grid(ASSUMPTIONS, grid.below + 2, FINDINGS, len(result.findings))
    sheet.text(findings.top - 1, 0, "Noticed in the study workbook", "section")
    findings.write(
        sheet,
        [
            {
                "level": finding.level.value,
                "place": f"{finding.sheet}!{finding.cell}" if finding.cell else finding.sheet,
                "key": finding.key,
                "value": finding.value,
                "message": f"{finding.message} {finding.hint}".strip(),
            }
            for finding in result.findings
        ],
    )
    inputs = Grid(ASSUMPTIONS, findings.below + 2, INPUTS, len(result.inputs))
    sheet.text(inputs.top - 1, 0, "Every input used", "section")
    inputs.write(sheet, [_input_row(echo) for echo in result.inputs])
    sheet.freeze(2, 0)
    sheet.print_setup(inputs.below - 1, len(INPUTS) - 1, heading_row=inputs.top)


def run_facts(result: StudyResult) -> list[tuple[str, str]]:
    """Title and text of every fact about the run."""
    budget = "no limit" if result.capital_budget is None else f"{result.capital_budget:,.0f}"
    seconds = (result.read_seconds, result.solve_seconds)
    return [
        ("Study", result.study_name),
        ("Prepared by", result.prepared_by or "not given"),
        ("Study file", result.study_file),
        ("Fingerprint of the study file", result.fingerprint),
        ("Started", result.started_at),
        ("Status", result.status),
        ("Method", f"{result.method}: {result.method_reason}"),
        ("Gap target", f"{pct_from_frac(result.gap_target_frac):.2f} %"),
        ("Random seed", str(result.seed)),
        ("Outage scenarios (all windows)", f"{result.scenarios:,}"),
        ("Reading, solving (s)", f"{seconds[0]:,.1f}, {seconds[1]:,.1f}"),
        ("Budget for capital after grants", f"{budget} {result.currency}"),
        *[(f"Version of {name}", version) for name, version in result.versions],
    ]


def _input_row(echo: InputEcho) -> dict[str, Cell]:
    return {
        "sheet": echo.sheet,
        "row": echo.row,
        "title": echo.title,
        "value": _echo_value(echo.value),
        "unit": echo.unit,
        "origin": "default" if echo.is_default else "typed",
        "source": echo.source,
    }


def _echo_value(value: object) -> Cell:
    """An input as a cell: numbers as numbers, anything else as text."""
    if value is None or value == "":
        return "(blank)"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, numbers.Real):
        number = float(value)
        return number if math.isfinite(number) else "no limit"
    if isinstance(value, dt.datetime | dt.date | dt.time):
        return value.isoformat()
    if isinstance(value, list | tuple):
        return ", ".join(str(item) for item in value)
    return str(value)
