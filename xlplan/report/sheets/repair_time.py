"""Repair time: cost and unserved energy against the speed of repair, plan kept and made anew."""

from __future__ import annotations

from xlplan.compare.pack_result import RepairPoint
from xlplan.compare.study_result import StudyResult
from xlplan.report import charts, pack_wording
from xlplan.report.grid import Cell, Formula, Grid, set_widths
from xlplan.report.looks import BLUE, ORANGE
from xlplan.report.money import UNDECIDED
from xlplan.report.safe_book import SafeBook
from xlplan.report.sheets.absent import say_absent
from xlplan.report.tables import REPAIR_POINTS, REPAIR_TIME

WIDTHS = (9.5, 10.5, 9, 13, 13, 13, 11.5, 11.5, 13, 13, 13, 12, 11.5, 12, 12, 12, 9)
CHART_ROWS = 18
CHART_TOP = 5
PAYS, HOLDS = "yes", "no"


def write(book: SafeBook, result: StudyResult) -> Grid | None:
    """Writes the sheet; the table for Checks, None where there is none."""
    sheet = book.sheet(REPAIR_TIME)
    sheet.head(
        "What faster repair is worth",
        "All repair times multiplied by one factor. Plan kept: the purchases of the "
        f"{result.pack.plan_name or 'plan'}; plan made anew: the best purchases for that speed.",
    )
    set_widths(sheet, WIDTHS, REPAIR_POINTS)
    points = result.pack.repair_time
    if not points:
        say_absent(sheet, result, "outages")
        return None
    text = pack_wording.hour_faster(result)
    sheet.paragraph(3, 0, len(WIDTHS) - 1, text, sum(map(int, WIDTHS)), "text", "bold")
    grid = Grid(REPAIR_TIME, CHART_TOP + CHART_ROWS + 2, REPAIR_POINTS, len(points))
    sheet.text(grid.top - 1, 0, "Repair times from half to double", "section")
    rows = [_row(point, grid, i) for i, point in enumerate(points)]
    grid.write(sheet, rows, marked=[i for i, p in enumerate(points) if p.factor == 1.0])
    hours = [point.mean_event_h for point in points]
    half = sheet.pixels(0, len(WIDTHS) - 1) // 2
    for left, keys, title, unit, values in (
        (
            0,
            ("kept", "anew"),
            "Yearly cost against the mean length of an outage",
            book.words("Yearly cost ({money}/year)"),
            [v for p in points for v in (p.kept.costs.total, p.anew.costs.total)],
        ),
        (
            1,
            ("kept_eens", "anew_eens"),
            "Energy not supplied against the mean length of an outage",
            "Energy not supplied (kWh/year)",
            [v for p in points for v in (p.kept.indices.eens_kwh, p.anew.indices.eens_kwh)],
        ),
    ):
        chart = charts.lines_over_numbers(
            book,
            title,
            grid.chart_values("hours"),
            [
                charts.Series(grid.chart_name(keys[0]), grid.chart_values(keys[0]), BLUE),
                charts.Series(
                    grid.chart_name(keys[1]), grid.chart_values(keys[1]), ORANGE, dash="dash"
                ),
            ],
            "Mean length of an outage event (h)",
            unit,
            charts.wide_range(values),
            # Beyond the last point, whose marker would be cut at the edge.
            x_max=charts.wide_range([0.0, *hours])[1],
            x_format="0.0",
            has_markers=True,
        )
        alt = f"Two lines: {title[0].lower()}{title[1:]}; the plan kept and the plan made anew."
        height = CHART_ROWS * charts.PIXELS_PER_ROW - 10
        sheet.chart(CHART_TOP, left * half, chart, half - 10, height, alt)
    notes = (
        "Repairs last whole periods: factors that round to the same number of periods give the "
        "same figures.",
        "Intervals hold what sampling leaves open (95 %) and what the search leaves open (distance "
        "to the lower bound).",
    )
    for i, note in enumerate(notes):
        sheet.text(grid.below + 1 + i, 0, note, "note")
    sheet.freeze(2, 0)
    sheet.print_setup(grid.below + 2, len(WIDTHS) - 1)
    return grid


def _row(point: RepairPoint, grid: Grid, i: int) -> dict[str, Cell]:
    low, high = point.loss_interval
    word = PAYS if low > 0.0 else HOLDS if high <= 0.0 else UNDECIDED
    if point.kept == point.anew:
        word = HOLDS
    kept, anew = grid.here(i, "kept"), grid.here(i, "anew")
    return {
        "factor": point.factor,
        "hours": point.mean_event_h,
        "events": point.events_per_year,
        "kept": Formula(
            f"={grid.here(i, 'kept_utility')}+{grid.here(i, 'kept_customers')}",
            point.kept.costs.total,
        ),
        "kept_utility": point.kept.costs.utility,
        "kept_customers": point.kept.costs.customers,
        "kept_eens": point.kept.indices.eens_kwh,
        "kept_saidi": point.kept.indices.saidi_h,
        "anew": Formula(
            f"={grid.here(i, 'anew_utility')}+{grid.here(i, 'anew_customers')}",
            point.anew.costs.total,
        ),
        "anew_utility": point.anew.costs.utility,
        "anew_customers": point.anew.costs.customers,
        "anew_capital": point.anew.capital_cost,
        "anew_eens": point.anew.indices.eens_kwh,
        "loss": Formula(f"={kept}-{anew}", point.loss),
        "low": low,
        "high": high,
        "verdict": word,
    }
