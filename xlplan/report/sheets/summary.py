"""Summary: the page for the board, on one landscape sheet.

The finding is a sentence made from the run's numbers by rule; the figures are references to the
sheets that hold them, so that nothing is calculated twice.
"""

from __future__ import annotations

import math

from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import PlanResult, Purchase
from xlplan.report import charts, pack_wording, wording
from xlplan.report.grid import Cell, Formula, Grid, set_widths
from xlplan.report.looks import (
    BLACK,
    BLUE,
    LIGHT_BLUE,
    LIGHT_VERMILION,
    NAVY,
    ORANGE,
    VERMILION,
)
from xlplan.report.money import baseline, money_words
from xlplan.report.room import BODY_CHARS
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.sheets.alternatives import AlternativesCells
from xlplan.report.sheets.cautions import CAUTION_TEXTS
from xlplan.report.sheets.checks import ChecksCells
from xlplan.report.sheets.reliability import ReliabilityCells
from xlplan.report.tables import CAUTIONS, PLAN, SUMMARY, SUMMARY_PLANS, SUMMARY_WORTH

NAME_WIDTH, LEAST_WIDTH = 26.0, 14.0
UNIT_CHARS = 8.5
"""Room that a heading's ``(.../year)`` takes beside the currency."""

LAST_COL = len(SUMMARY_PLANS) - 1
ROW_POINTS, ROW_PIXELS, SECTION_POINTS = 12.75, 17, 17.0
"""Rows just high enough for a line, since all has to stand on one page."""

LEAST_CHART_PX, CHART_HEAD_PX, PX_PER_BAR = 235, 145, 23
CHART_GAP_PX = 10
LEFT_CHART_SHARE = 0.54
MAX_BOUGHT = 8
LEAST_CAPITAL = 0.5
"""What costs less is rounding of a size, not a purchase to speak of."""

LEFT_LAST_COL = 4
RIGHT_COL = 6
SEGMENTS = (
    ("upkeep", NAVY, "#FFFFFF"),
    ("supply", BLUE, "#FFFFFF"),
    ("other", LIGHT_BLUE, BLACK),
    ("customers", ORANGE, BLACK),
)


def write(
    book: SafeBook,
    result: StudyResult,
    alternatives: AlternativesCells,
    reliability: ReliabilityCells,
    checks: ChecksCells,
) -> None:
    """Writes the sheet."""
    sheet = book.sheet(SUMMARY)
    sheet.default_height(ROW_POINTS)
    width = max(LEAST_WIDTH, len(result.currency) + UNIT_CHARS)
    set_widths(sheet, [NAME_WIDTH] + [width] * LAST_COL, SUMMARY_PLANS)
    chars = NAME_WIDTH + width * LAST_COL
    # The space before a percent sign must not end a line.
    headline = wording.headline(result).replace(" %", "\u00a0%")
    sheet.paragraph(0, 0, LAST_COL, headline, round(0.58 * chars), "title")
    sheet.paragraph(
        1, 0, LAST_COL, wording.consequence(result), round(1.15 * chars), "text", "bold"
    )
    sheet.paragraph(2, 0, LAST_COL, wording.basis(result), round(BODY_CHARS * chars), "subtitle")
    grid = Grid(SUMMARY, 4, SUMMARY_PLANS, len(result.plans))
    rows = [
        _row(plan, baseline(result), i, grid, alternatives, reliability)
        for i, plan in enumerate(result.plans)
    ]
    marked = [i for i, plan in enumerate(result.plans) if plan.name == result.recommended]
    grid.write(sheet, rows, marked=marked)
    worth = Grid(SUMMARY, grid.below + 1, SUMMARY_WORTH, len(result.plans))
    worth.write(
        sheet,
        [_worth_row(plan, i, alternatives) for i, plan in enumerate(result.plans)],
        marked=marked,
    )
    row = _charts(book, sheet, result, grid, worth.below + 1)
    matters, found = pack_wording.three_things(result), pack_wording.findings(result)
    left = _purchases(sheet, result, row)
    right = _sentences(sheet, "Three things that matter most", matters, row, RIGHT_COL)
    about = "What the comparisons found"
    if result.pack.plan_name not in ("", result.recommended):
        about += f" ({result.pack.plan_name})"
    left = _sentences(sheet, about, found, left, 0)
    right = _sentences(sheet, "What is uncertain", wording.uncertainties(result), right, RIGHT_COL)
    row = max(left, right) + 1
    sheet.text(row, 0, "Do the numbers agree?", "status")
    sheet.formula(row, 1, f"={checks.overall}", checks.words, "status")
    sheet.status_fill(row, row, 1, 4)
    cautions = f"{len(CAUTION_TEXTS)} cautions apply: read the Cautions sheet before using this"
    sheet.link(row, RIGHT_COL, CAUTIONS, cautions)
    note = (
        "The sentences state what the run found; the tables follow the other sheets when figures "
        "there are changed. Costs are real and before tax."
    )
    sheet.text(row + 1, 0, note, "note")
    sheet.print_setup(row + 1, LAST_COL, is_one_page=True)


def _row(
    plan: PlanResult,
    base: PlanResult,
    i: int,
    grid: Grid,
    alternatives: AlternativesCells,
    reliability: ReliabilityCells,
) -> dict[str, Cell]:
    costs = plan.costs

    def from_statement(value: float, *keys: str) -> Formula:
        return Formula("=" + "+".join(alternatives.away(key, i) for key in keys), value)

    def from_indices(value: float, key: str, offset: int = 0) -> Formula:
        return Formula(f"={reliability.indices.away(2 * i + offset, key)}", value)

    supply = costs.energy + costs.fuel + costs.demand
    other = costs.repair + costs.surplus + costs.end_of_window
    parts = [grid.here(i, key) for key in ("upkeep", "supply", "other")]
    low, high = plan.difference_interval
    return {
        "name": plan.name,
        "capital": from_statement(plan.capital_cost, "net"),
        "upkeep": from_statement(costs.investment + costs.fixed_om, "investment", "fixed_om"),
        "supply": from_statement(supply, "energy", "fuel", "demand"),
        "other": from_statement(other, "repair", "surplus", "end_of_window"),
        "utility": Formula(f"={'+'.join(parts)}", costs.utility),
        "customers": from_statement(costs.customers, "customers"),
        "total": Formula(f"={grid.here(i, 'utility')}+{grid.here(i, 'customers')}", costs.total),
        "difference": from_statement(costs.total - base.costs.total, "difference"),
        "low": from_statement(low, "difference_low"),
        "high": from_statement(high, "difference_high"),
        "outage_h": from_indices(plan.indices.saidi_h, "saidi"),
        "outage_fair_h": from_indices(plan.indices_fair.saidi_h, "saidi", 1),
        "eens": from_indices(plan.indices.eens_kwh, "eens"),
    }


def _charts(book: SafeBook, sheet: SafeSheet, result: StudyResult, grid: Grid, row: int) -> int:
    """Yearly cost in stacked segments, and outage hours; next free row."""
    largest = max(abs(plan.costs.total) for plan in result.plans)
    values = {
        "upkeep": [p.costs.investment + p.costs.fixed_om for p in result.plans],
        "supply": [p.costs.energy + p.costs.fuel + p.costs.demand for p in result.plans],
        "other": [p.costs.repair + p.costs.surplus + p.costs.end_of_window for p in result.plans],
        "customers": [p.costs.customers for p in result.plans],
    }
    cost = charts.bars(
        book,
        "Yearly cost: the utility's own parts (blue), then what customers bear (orange)",
        grid.chart_values("name"),
        [
            charts.Series(
                grid.chart_name(key),
                grid.chart_values(key),
                colour,
                labels=tuple(values[key]),
                label_colour=label_colour,
            )
            for key, colour, label_colour in SEGMENTS
        ],
        "Alternative",
        book.words("Yearly cost ({money}/year)"),
        is_stacked=True,
        label_above=0.09 * largest,
    )
    total = sheet.pixels(0, LAST_COL)
    left = round(LEFT_CHART_SHARE * total)
    height = max(LEAST_CHART_PX, CHART_HEAD_PX + PX_PER_BAR * len(result.plans))
    n_row = math.ceil((height + CHART_GAP_PX) / ROW_PIXELS)
    alt = (
        "Stacked bars: yearly cost of each alternative, in investment and upkeep; energy, fuel "
        "and demand; repairs and other; and customers' outage cost."
    )
    sheet.chart(row, 0, cost, left, height, alt)
    hours = charts.bars(
        book,
        "Outage hours per customer in a year",
        grid.chart_values("name"),
        [
            charts.Series(grid.chart_name("outage_h"), grid.chart_values("outage_h"), VERMILION),
            charts.Series(
                grid.chart_name("outage_fair_h"),
                grid.chart_values("outage_fair_h"),
                LIGHT_VERMILION,
                has_labels=False,
            ),
        ],
        "Alternative",
        "Outage hours per customer (h/year)",
        label_format="0.00",
    )
    alt = (
        "Bars: outage hours per customer and year of each alternative, all outages, and without "
        "storms and loss of bulk supply."
    )
    sheet.chart(row, left + 12, hours, total - left - 18, height, alt)
    return row + n_row


def _purchases(sheet: SafeSheet, result: StudyResult, row: int) -> int:
    """What to buy, dearest first; next free row."""
    best = result.plan(result.recommended)
    shown = (a for a in best.purchases if a.is_bought and a.capital_gross >= LEAST_CAPITAL)
    bought = sorted(shown, key=lambda a: -a.capital_net)
    sheet.text(row, 0, f"What to buy: {best.name}", "section")
    sheet.height(row, SECTION_POINTS)
    row += 1
    if not bought:
        sheet.text(row, 0, "Nothing.", "text")
        return row + 1
    for asset in bought[:MAX_BOUGHT]:
        row = sheet.block(row, 0, LEFT_LAST_COL, _asset_words(asset, result.currency))
    if len(bought) > MAX_BOUGHT:
        sheet.text(row, 0, f"and {len(bought) - MAX_BOUGHT} more on the Plan sheet")
        row += 1
    sheet.link(row, 0, PLAN, "Sizes, costs and formulas: Plan sheet")
    return row + 1


def _asset_words(asset: Purchase, currency: str) -> str:
    """One purchase in words, with its size and capital."""
    capital = f"capital {money_words(asset.capital_net, currency)} after grants"
    if asset.kind == "hardening":
        return f"•  {asset.asset}: hardening of {asset.place}; {capital}"
    if asset.kind == "device":
        return f"•  {asset.asset}; {capital}"
    size = f"{asset.kw:,.1f} kW"
    if asset.kind == "storage":
        size += f", {asset.kwh:,.1f} kWh"
    return f"•  {asset.asset}: {asset.kind} at {asset.place}, {size}; {capital}"


def _sentences(sheet: SafeSheet, title: str, sentences: list[str], row: int, col: int) -> int:
    """Sentences under a heading on one side; next free row. None: no heading either."""
    if not sentences:
        return row
    sheet.text(row, col, title, "section")
    sheet.height(row, SECTION_POINTS)
    row += 1
    for sentence in sentences:
        last_col = LAST_COL if col == RIGHT_COL else LEFT_LAST_COL
        row = sheet.block(row, col, last_col, f"•  {sentence}")
    return row


def _worth_row(plan: PlanResult, i: int, alternatives: AlternativesCells) -> dict[str, Cell]:
    """Verdicts, payback, ratios and present value, all from Alternatives."""

    def here(key: str) -> Cell:
        found = alternatives.content[i][key]
        value = found.value if isinstance(found, Formula) else found
        assert value is not None
        return Formula(f"={alternatives.away(key, i)}", value)

    keys = ("payback", "own_payback", "ratio", "ratio_gross", "gross", "minutes", "per_minute")
    return {
        "name": plan.name,
        "verdict": here("verdict"),
        "to_best": here("to_best_verdict"),
        "present": here("present_difference"),
        **{key: here(key) for key in keys},
    }
