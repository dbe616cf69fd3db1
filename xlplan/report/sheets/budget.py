"""Budget: yearly cost and unserved energy against the money spent, and where it bends."""

from __future__ import annotations

from xlplan.compare.pack_result import BudgetPoint
from xlplan.compare.study_result import StudyResult
from xlplan.report import charts, pack_wording
from xlplan.report.grid import Cell, Formula, Grid, set_widths
from xlplan.report.looks import BLUE, NAVY, ORANGE
from xlplan.report.safe_book import SafeBook
from xlplan.report.sheets.absent import say_absent
from xlplan.report.tables import BUDGET, BUDGET_POINTS

WIDTHS = (13, 13, 13, 13, 13, 11, 11, 13, 13, 13, 13, 36, 17)
CHART_ROWS = 18
CHART_TOP = 5
PER = 1000.0


def write(book: SafeBook, result: StudyResult) -> Grid | None:
    """Writes the sheet; the table for Checks, None where there is none."""
    sheet = book.sheet(BUDGET)
    sheet.head(
        "How much money is well spent",
        "The best plan found at each limit of capital after grants, from nothing to what would be "
        "spent without a limit.",
    )
    set_widths(sheet, WIDTHS, BUDGET_POINTS)
    points = result.pack.budget
    if not points:
        say_absent(sheet, result, "assets for sale")
        return None
    sheet.paragraph(3, 0, len(WIDTHS) - 1, pack_wording.knee(result), sum(WIDTHS), "text", "bold")
    grid = Grid(BUDGET, CHART_TOP + CHART_ROWS + 2, BUDGET_POINTS, len(points))
    sheet.text(grid.top - 1, 0, "Points of the curve", "section")
    rows = [_row(result, point, grid, i) for i, point in enumerate(points)]
    grid.write(sheet, rows, marked=[i for i in (result.pack.knee,) if i is not None])
    half = sheet.pixels(0, len(WIDTHS) - 1) // 2
    for left, keys, title, unit, values in (
        (
            0,
            (("total", NAVY, "solid"), ("utility", BLUE, "dash")),
            "Yearly cost against the money that may be spent",
            book.words("Yearly cost ({money}/year)"),
            [v for p in points for v in (p.plan.costs.total, p.plan.costs.utility)],
        ),
        (
            1,
            (("eens", ORANGE, "solid"),),
            "Energy not supplied against the money that may be spent",
            "Energy not supplied (kWh/year)",
            [p.plan.indices.eens_kwh for p in points],
        ),
    ):
        chart = charts.lines_over_numbers(
            book,
            title,
            grid.chart_values("budget"),
            [
                charts.Series(grid.chart_name(key), grid.chart_values(key), colour, dash=dash)
                for key, colour, dash in keys
            ],
            book.words("Capital that may be spent, after grants ({money})"),
            unit,
            charts.wide_range(values),
            x_max=points[-1].budget or None,
            has_markers=True,
        )
        alt = f"{title}, from nothing to what would be spent without a limit."
        height = CHART_ROWS * charts.PIXELS_PER_ROW - 10
        sheet.chart(CHART_TOP, left * half, chart, half - 10, height, alt)
    note = (
        "Intervals hold what sampling leaves open (95 %) and what the search leaves open. A plan "
        "found with less money is kept where a search with more found none better."
    )
    sheet.text(grid.below + 1, 0, note, "note")
    sheet.freeze(2, 0)
    sheet.print_setup(grid.below + 1, len(WIDTHS) - 1)
    return grid


def _row(result: StudyResult, point: BudgetPoint, grid: Grid, i: int) -> dict[str, Cell]:
    costs = point.plan.costs
    points = result.pack.budget
    step: Cell = ""
    if i > 0 and point.budget > points[i - 1].budget:
        value = (point.saving - points[i - 1].saving) / (point.budget - points[i - 1].budget)
        text = (
            f"=({grid.here(i, 'saving')}-{grid.here(i - 1, 'saving')})"
            f"/({grid.here(i, 'budget')}-{grid.here(i - 1, 'budget')})*1000"
        )
        step = Formula(text, value * PER)
    notes = []
    if result.pack.knee == i:
        notes.append("the curve bends here")
    if point.is_study_budget:
        notes.append("the budget of the study")
    if point.is_carried:
        notes.append("plan found with less money")
    first = grid.here(0, "total").replace("C", "C$")
    return {
        "budget": point.budget,
        "spent": point.plan.capital_cost,
        "total": Formula(f"={grid.here(i, 'utility')}+{grid.here(i, 'customers')}", costs.total),
        "utility": costs.utility,
        "customers": costs.customers,
        "eens": point.plan.indices.eens_kwh,
        "saidi": point.plan.indices.saidi_h,
        "saving": Formula(f"={first}-{grid.here(i, 'total')}", point.saving),
        "low": point.interval[0],
        "high": point.interval[1],
        "step": step,
        "bought": pack_wording.bought(point.plan),
        "note": "; ".join(notes),
    }
