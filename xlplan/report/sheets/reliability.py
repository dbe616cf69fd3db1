"""Reliability: indices by alternative, then window, class, bus, section and cause.

The detail sets the existing feeder beside the recommended plan; "plan" in a heading is that one.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import CauseResult, Indices, PlanResult
from xlplan.report import charts
from xlplan.report.grid import Cell, Formula, Grid, set_widths
from xlplan.report.looks import BLUE, ORANGE
from xlplan.report.money import baseline
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.tables import (
    BUSES,
    CAUSES,
    CLASSES,
    HISTORY,
    INDICES,
    RELIABILITY,
    SECTIONS,
    WINDOWS,
)

ALL_OUTAGES = "all outages"
FAIR_OUTAGES = "without storms and loss of bulk supply"
STOP = "STOP: too far from the records"
CLOSE = "PASS: near the records"
NO_SECTION = "(nothing dead)"
MAX_CAUSES = 400
"""Causes listed one by one for each plan; the rest, the least harmful, share one row."""

CHART_ROWS = 16
MAX_BUSES_CHARTED = 60

WIDTHS = (24, 36, 14.5, 15, 15, 15, 15, 15, 15, 15, 15)


@dataclass(frozen=True)
class ReliabilityCells:
    """Where indices, windows, classes, buses and sections stand, for Summary and Checks."""

    indices: Grid
    windows: Grid
    classes: Grid
    buses: Grid
    sections: Grid


def write(book: SafeBook, result: StudyResult) -> ReliabilityCells:
    """Writes the sheet."""
    sheet = book.sheet(RELIABILITY)
    base, best = baseline(result), result.plan(result.recommended)
    sheet.head(
        "How often and how long customers are out",
        "Expected values per year by IEEE 1366 (customer interruptions count the largest share of "
        f"load shed at once). Tables further down: existing feeder and plan ({best.name}).",
    )
    set_widths(sheet, WIDTHS, INDICES, WINDOWS, CLASSES, BUSES, SECTIONS, CAUSES)
    indices = _indices(sheet, result, 3 + CHART_ROWS)
    row = _history(sheet, result, indices.below)
    windows = _windows(sheet, [base, best], row + 2)
    classes = _classes(sheet, base, best, windows.below + 2)
    buses = _buses(sheet, base, best, classes.below + 2)
    _charts(book, sheet, classes, buses)
    sections, causes = _causes(sheet, base, best, buses.below + 2)
    sheet.freeze(2, 1)
    breaks = [windows.top - 1, sections.top - 1]
    sheet.print_setup(causes.below, len(CLASSES) - 1, heading_row=causes.top, breaks=breaks)
    return ReliabilityCells(indices, windows, classes, buses, sections)


def _indices(sheet: SafeSheet, result: StudyResult, top: int) -> Grid:
    """Two rows for each alternative: everything, and without storms and loss of bulk supply."""
    grid = Grid(RELIABILITY, top + 1, INDICES, 2 * len(result.plans))
    sheet.text(top, 0, "Indices by alternative", "section")

    def row(name: str, counted: str, indices: Indices) -> dict[str, Cell]:
        return {
            "name": name,
            "counted": counted,
            "eens": indices.eens_kwh,
            "saifi": indices.saifi,
            "maifi": indices.maifi,
            "saidi": indices.saidi_h,
            "caidi": indices.caidi_h,
            "asai": indices.asai,
        }

    rows = []
    for plan in result.plans:
        rows.append(row(plan.name, ALL_OUTAGES, plan.indices))
        rows.append(row(plan.name, FAIR_OUTAGES, plan.indices_fair))
    marked = [i for i, line in enumerate(rows) if line["name"] == result.recommended]
    grid.write(sheet, rows, marked=marked)
    return grid


def _history(sheet: SafeSheet, result: StudyResult, below: int) -> int:
    """The existing feeder against its own records, where the study gives any; next free row."""
    lines = [line for line in result.checks if line.is_warning]
    if not lines:
        return below
    grid = Grid(RELIABILITY, below + 2, HISTORY, len(lines))
    sheet.text(below + 1, 0, "Existing feeder against its records", "section")
    rows: list[dict[str, Cell]] = []
    for i, line in enumerate(lines):
        left, right, allowed = (grid.here(i, key) for key in ("study", "record", "tolerance"))
        ratio: Cell = None
        is_known = math.isfinite(line.left) and math.isfinite(line.right)
        if is_known and line.right != 0.0:
            ratio = Formula(f"={left}/{right}", line.left / line.right)
        verdict = f'=IF(ABS({left}-{right})<={allowed},"{CLOSE}","{STOP}")'
        rows.append(
            {
                "name": line.name,
                "what": line.what,
                "study": line.left,
                "record": line.right,
                "tolerance": line.tolerance,
                "ratio": ratio,
                "verdict": (Formula(verdict, CLOSE if line.passes else STOP) if is_known else STOP),
            }
        )
    grid.write(sheet, rows)
    col = grid.col("verdict")
    sheet.status_fill(grid.row(0), grid.row(len(lines) - 1), col, col + 1)
    return grid.below


def _windows(sheet: SafeSheet, plans: Sequence[PlanResult], top: int) -> Grid:
    """Windows of the existing feeder, then those of the plan."""
    pairs = [(plan, window) for plan in _once(plans) for window in plan.windows]
    grid = Grid(RELIABILITY, top + 1, WINDOWS, len(pairs))
    sheet.text(top, 0, "By window", "section")
    rows: list[dict[str, Cell]] = []
    for i, (plan, window) in enumerate(pairs):
        yearly = f"={grid.here(i, 'occurrences')}*{grid.here(i, 'eens')}"
        rows.append(
            {
                "name": plan.name,
                "window": window.window,
                "occurrences": window.occurrences_per_year,
                "events": window.expected_events,
                "poisson": window.poisson_events,
                "cost": window.expected_cost,
                "eens": window.eens_kwh,
                "eens_year": Formula(yearly, window.occurrences_per_year * window.eens_kwh),
                "interruptions": window.customer_interruptions,
                "customer_h": window.customer_hours,
            }
        )
    grid.write(sheet, rows)
    return grid


def _once(plans: Sequence[PlanResult]) -> list[PlanResult]:
    """The plans without repeats (the existing feeder may itself be the recommended one)."""
    return list({plan.name: plan for plan in plans}.values())


def _classes(sheet: SafeSheet, base: PlanResult, best: PlanResult, top: int) -> Grid:
    """Customer classes, existing feeder beside plan."""
    grid = Grid(RELIABILITY, top + 1, CLASSES, len(base.classes))
    sheet.text(top, 0, "By customer class", "section")
    rows: list[dict[str, Cell]] = [
        {
            "name": one.customer_class,
            "is_critical": "yes" if one.is_critical else "no",
            "customers": one.customers,
            "eens_base": one.eens_kwh,
            "eens_plan": other.eens_kwh,
            "cost_base": one.interruption_cost,
            "cost_plan": other.interruption_cost,
            "saifi_base": one.saifi,
            "saifi_plan": other.saifi,
            "saidi_base": one.saidi_h,
            "saidi_plan": other.saidi_h,
        }
        for one, other in zip(base.classes, best.classes, strict=True)
    ]
    grid.write(sheet, rows)
    return grid


def _charts(book: SafeBook, sheet: SafeSheet, classes: Grid, buses: Grid) -> None:
    """Energy not supplied by class, outage time by bus: existing feeder beside plan."""

    def pair(grid: Grid, key: str) -> list[charts.Series]:
        sides = ((f"{key}_base", ORANGE), (f"{key}_plan", BLUE))
        return [
            charts.Series(grid.chart_name(one), grid.chart_values(one), colour)
            for one, colour in sides
        ]

    total = sheet.pixels(0, len(WIDTHS) - 1)
    height, half = (CHART_ROWS - 1) * charts.PIXELS_PER_ROW, total // 2 - 10
    if classes.n_row:
        chart = charts.bars(
            book,
            "Energy not supplied by customer class",
            classes.chart_values("name"),
            pair(classes, "eens"),
            "Customer class",
            "Energy not supplied (kWh/year)",
        )
        alt = "Bars: energy not supplied a year by customer class, existing feeder and plan."
        sheet.chart(3, 0, chart, half, height, alt)
    if 0 < buses.n_row <= MAX_BUSES_CHARTED:
        chart = charts.columns(
            book,
            "Outage time by bus",
            buses.chart_values("name"),
            pair(buses, "outage"),
            "Bus",
            "Outage time (h/year)",
        )
        alt = "Columns: outage hours a year at each bus, existing feeder and plan."
        sheet.chart(3, half + 15, chart, half, height, alt)


def _buses(sheet: SafeSheet, base: PlanResult, best: PlanResult, top: int) -> Grid:
    """Buses in the order of the study, existing feeder beside plan."""
    grid = Grid(RELIABILITY, top + 1, BUSES, len(base.buses))
    sheet.text(top, 0, "By bus", "section")
    rows: list[dict[str, Cell]] = [
        {
            "name": one.bus,
            "customers": one.customers,
            "peak": one.peak_kw,
            "eens_base": one.eens_kwh,
            "eens_plan": other.eens_kwh,
            "often_base": one.interruptions,
            "often_plan": other.interruptions,
            "outage_base": one.outage_h,
            "outage_plan": other.outage_h,
        }
        for one, other in zip(base.buses, best.buses, strict=True)
    ]
    grid.write(sheet, rows)
    return grid


def _causes(sheet: SafeSheet, base: PlanResult, best: PlanResult, top: int) -> tuple[Grid, Grid]:
    """Sections summed by formula over the list of causes under them; both tables."""
    plans = _once([base, best])
    listed = {plan.name: _cause_rows(plan) for plan in plans}
    names = sorted({str(row["section"]) for rows in listed.values() for row in rows})
    sections = Grid(RELIABILITY, top + 1, SECTIONS, len(names))
    causes = Grid(RELIABILITY, sections.below + 3, CAUSES, sum(map(len, listed.values())))
    first = {base.name: 0, best.name: len(listed[base.name]) if best.name != base.name else 0}
    sheet.text(
        top,
        0,
        "By dead section: sums over the causes below, each event as if it were the first",
        "section",
    )
    rows: list[dict[str, Cell]] = []
    for i, name in enumerate(names):
        row: dict[str, Cell] = {"name": name, "label": _section_words(name)}
        for plan, side in ((base, "base"), (best, "plan")):
            block = listed[plan.name]
            for key in ("events", "eens", "cost"):
                chosen = [float(r[key]) for r in block if r["section"] == name]  # type: ignore[arg-type]
                row[f"{key}_{side}"] = _sum_where(
                    causes, key, first[plan.name], len(block), sections.here(i, "name"), sum(chosen)
                )
        rows.append(row)
    sections.write(sheet, rows)
    sheet.text(causes.top - 1, 0, "By cause, the most harmful first", "section")
    causes.write(sheet, [row for plan in plans for row in listed[plan.name]])
    return sections, causes


def _sum_where(
    causes: Grid, key: str, first: int, n: int, wanted: str, value: float
) -> Formula | float:
    """Sum of a column where the section is the wanted one.

    SUMPRODUCT compares whole texts; SUMIFS would take ``*`` or ``>`` in a name as a pattern.
    """
    if n == 0:
        return 0.0
    sections, numbers = causes.span("section", first, n), causes.span(key, first, n)
    return Formula(f"=SUMPRODUCT(({sections}={wanted})*{numbers})", value)


def _section_words(name: str) -> str:
    return "a failed unit or loss of bulk supply" if name == NO_SECTION else "part that stays dead"


def _cause_rows(plan: PlanResult) -> list[dict[str, Cell]]:
    """Causes by energy not supplied; beyond ``MAX_CAUSES`` they share a row for each section."""
    ordered = sorted(plan.causes, key=lambda cause: (-cause.eens_kwh, -cause.cost))
    rows = [_cause_row(plan.name, cause) for cause in ordered[:MAX_CAUSES]]
    rest: dict[str, dict[str, Cell]] = {}
    for cause in ordered[MAX_CAUSES:]:
        row = _cause_row(plan.name, cause)
        key = str(row["section"])
        if key not in rest:
            rest[key] = {**row, "causes": "all others", "window": "several", "repair_h": None}
            rest[key]["kind"] = "several"
            continue
        for number in ("events", "eens", "customer_h", "cost"):
            rest[key][number] = rest[key][number] + row[number]  # type: ignore[operator]
    return rows + list(rest.values())


def _cause_row(name: str, cause: CauseResult) -> dict[str, Cell]:
    kinds = [
        word
        for word, holds in (
            ("storm", cause.is_storm),
            ("bulk supply", cause.is_bulk_supply),
        )
        if holds
    ]
    return {
        "name": name,
        "causes": cause.causes,
        "section": cause.section or NO_SECTION,
        "window": cause.window,
        "kind": ", ".join(kinds) or "ordinary",
        "repair_h": cause.repair_h,
        "events": cause.events_per_year,
        "eens": cause.eens_kwh,
        "customer_h": cause.customer_hours,
        "cost": cause.cost,
    }
