"""Line hardening: what each measure is worth alone and beside the plan's purchases, ranked."""

from __future__ import annotations

from dataclasses import dataclass

from xlplan.compare.pack_result import HardeningValue, Worth
from xlplan.compare.study_result import StudyResult
from xlplan.report import charts
from xlplan.report.grid import Cell, Formula, Grid, set_widths
from xlplan.report.looks import BLUE, ORANGE
from xlplan.report.money import NO_PAYBACK, UNDECIDED
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.sheets.absent import say_absent
from xlplan.report.sheets.plan import PlanCells
from xlplan.report.tables import HARDENING, WORTH

WIDTHS = (7, 25, 14, 9, 8, 12, 12.5, 13, 12.5, 12.5, 12.5, 12.5, 12.5, 11, 11, 13)
NOT_RANKED = "-"
WORTH_IT, NOT_WORTH_IT = "worth it", "not worth it"
ROWS_PER_BAR = 2
CHART_ROWS = 10


@dataclass(frozen=True)
class HardeningCells:
    """The two tables: beside the plan's purchases, and alone. Rows in the order of the pack."""

    in_plan: Grid
    alone: Grid


def worth_verdict(worth: Worth, yearly_cost: float) -> str:
    """Worth it or not where the whole interval says so, else undecided."""
    low, high = worth.interval
    if low > yearly_cost:
        return WORTH_IT
    return NOT_WORTH_IT if high < yearly_cost else UNDECIDED


def payback(value: float, fixed_om: float, capital: float) -> float | str:
    """Years until what the measure saves a year has returned its capital, without interest."""
    return NO_PAYBACK if value - fixed_om <= 0.0 else capital / (value - fixed_om)


def write(book: SafeBook, result: StudyResult, plan_cells: PlanCells) -> HardeningCells | None:
    """Writes the sheet; None where there is nothing to show."""
    sheet = book.sheet(HARDENING)
    rows = result.pack.hardening
    sheet.head(
        "What each line measure is worth",
        "Worth: yearly cost with the measure less than without it, before the measure's own cost. "
        "Same windows and random numbers with and without.",
    )
    set_widths(sheet, WIDTHS, WORTH)
    if not rows:
        say_absent(sheet, result, "measures on the Hardening sheet")
        return None
    chart_top = 3
    n_row = CHART_ROWS + ROWS_PER_BAR * len(rows)
    in_plan = Grid(HARDENING, chart_top + n_row + 2, WORTH, len(rows))
    alone = Grid(HARDENING, in_plan.below + 3, WORTH, len(rows))
    _table(sheet, result, plan_cells, in_plan, f"Beside what the {_plan(result)} buys", True)
    _table(sheet, result, plan_cells, alone, "Alone, on the existing feeder", False)
    labels = tuple(rows)
    chart = charts.bars(
        book,
        "Net value of each measure: beside the plan's purchases, and alone",
        in_plan.chart_values("name"),
        [
            charts.Series(_title(sheet, in_plan), in_plan.chart_values("net"), BLUE),
            charts.Series(_title(sheet, alone), alone.chart_values("net"), ORANGE),
        ],
        "Measure",
        book.words("Net value ({money}/year)"),
    )
    alt = "Bars: net value of each hardening measure beside the plan's purchases and alone."
    sheet.chart(chart_top, 0, chart, 1000, n_row * charts.PIXELS_PER_ROW - 10, alt)
    row = alone.below + 1
    for note in _notes(labels):
        sheet.text(row, 0, note, "note")
        row += 1
    sheet.freeze(2, 0)
    sheet.print_setup(row, len(WORTH) - 1)
    return HardeningCells(in_plan, alone)


def _plan(result: StudyResult) -> str:
    name = result.pack.plan_name
    return f"{name[:1].lower()}{name[1:]}"


def _title(sheet: SafeSheet, grid: Grid) -> list[str | int]:
    """The cell above a table, which names it."""
    return [sheet.name, grid.top - 1, 0]


def _notes(rows: tuple[HardeningValue, ...]) -> list[str]:
    notes = [
        "Intervals hold what sampling leaves open (95 %) and what the search leaves open (distance "
        "to the lower bound). Undecided: the measure's own cost lies in the interval.",
        "A measure in the plan is taken out for the first table, any other is added. Worth is not "
        "additive: measures and storage save the same outages in part.",
    ]
    notes += [
        f"{row.measure}: {', '.join(row.without)} of the plan was left out with it, since both "
        "treat a line."
        for row in rows
        if row.without
    ]
    return notes


def _table(
    sheet: SafeSheet,
    result: StudyResult,
    plan_cells: PlanCells,
    grid: Grid,
    title: str,
    is_in_plan: bool,
) -> None:
    rows = result.pack.hardening
    sheet.text(grid.top - 1, 0, title, "section")
    nets = [_worth(row, is_in_plan).value - row.yearly_cost for row in rows]
    cells = []
    is_clear = [worth_verdict(_worth(r, is_in_plan), r.yearly_cost) != UNDECIDED for r in rows]
    for i, row in enumerate(rows):
        # What cannot be told from nothing is not ranked.
        rank = 1 + sum(net > nets[i] for net, clear in zip(nets, is_clear, strict=True) if clear)
        shown: float | str = float(rank) if is_clear[i] else NOT_RANKED
        cells.append(_row(row, grid, i, plan_cells, is_in_plan, shown))
    marked = [i for i, row in enumerate(rows) if row.is_in_plan]
    grid.write(sheet, cells, marked=marked)
    col = grid.col("verdict")
    sheet.status_fill(grid.row(0), grid.row(len(rows) - 1), col, col)


def _worth(row: HardeningValue, is_in_plan: bool) -> Worth:
    return row.in_plan if is_in_plan else row.alone


def _row(
    row: HardeningValue,
    grid: Grid,
    i: int,
    plan_cells: PlanCells,
    is_in_plan: bool,
    rank: float | str,
) -> dict[str, Cell]:
    worth = _worth(row, is_in_plan)
    here = {key: grid.here(i, key) for key in ("capital", "yearly", "value", "low", "high", "net")}

    def price(key: str) -> str:
        return plan_cells.price(row.measure, key)

    capital = f"={price('site')}*(1-{price('grant')})"
    yearly = f"={here['capital']}*{price('crf')}+{price('om_rate')}"
    saved = f"({here['value']}-{price('om_rate')})"
    back = payback(worth.value, row.fixed_om, row.capital_net)
    verdict = (
        f'=IF({here["low"]}>{here["yearly"]},"{WORTH_IT}",'
        f'IF({here["high"]}<{here["yearly"]},"{NOT_WORTH_IT}","{UNDECIDED}"))'
    )
    return {
        "rank": Formula(
            f'=IF({grid.here(i, "verdict")}="{UNDECIDED}","{NOT_RANKED}",1+COUNTIFS('
            f'{grid.span("net")},">"&{here["net"]},{grid.span("verdict")},"<>{UNDECIDED}"))',
            rank,
        ),
        "name": row.measure,
        "lines": ", ".join(row.lines),
        "avoided": row.failures_avoided_frac,
        "is_bought": "yes" if row.is_in_plan else "no",
        "capital": Formula(capital, row.capital_net),
        "yearly": Formula(yearly, row.yearly_cost),
        "utility": worth.utility,
        "customers": worth.customers,
        "value": Formula(f"={grid.here(i, 'utility')}+{grid.here(i, 'customers')}", worth.value),
        "low": worth.interval[0],
        "high": worth.interval[1],
        "net": Formula(f"={here['value']}-{here['yearly']}", worth.value - row.yearly_cost),
        "payback": Formula(f'=IF({saved}<=0,"{NO_PAYBACK}",{here["capital"]}/{saved})', back),
        "eens": worth.eens_saved_kwh,
        "verdict": Formula(verdict, worth_verdict(worth, row.yearly_cost)),
    }
