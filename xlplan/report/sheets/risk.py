"""Risk: how a year and a single outage may turn out, and the worst that is possible."""

from __future__ import annotations

from xlsxwriter.chart import Chart

from xlplan.base.units import pct_from_frac
from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import EventSpread, PlanResult, WorstEvent
from xlplan.report import charts
from xlplan.report.grid import Cell, Grid, set_widths
from xlplan.report.looks import BLUE, ORANGE, VERMILION
from xlplan.report.money import baseline
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.tables import (
    EVENT_COST_STEPS,
    EVENT_EENS_STEPS,
    RISK,
    SPREAD,
    WORST_EVENTS,
    YEAR_COST_STEPS,
    YEAR_EENS_STEPS,
)

WIDTHS = (32, 13, 14, 15, 14, 14, 14, 14, 14, 14, 40)
N_WORST = 10
CHART_ROWS = 15
ROWS_OF_CHARTS = 2
YEARS, EVENTS = "Share of years (1 = all)", "Events (per year)"
RIGHT_TABLE_COL = 5
"""Where the right one of two tables side by side begins."""


def write(book: SafeBook, result: StudyResult) -> None:
    """Writes the sheet."""
    sheet = book.sheet(RISK)
    base, best = baseline(result), result.plan(result.recommended)
    sheet.head(
        "How bad can it get",
        f"Existing feeder and plan ({best.name}): simulated years, single outage events, and the "
        f"worst scenarios. {_aim(best)}",
    )
    set_widths(sheet, WIDTHS, SPREAD, WORST_EVENTS)
    rows = _figures(base, best)
    grid = Grid(RISK, 4 + ROWS_OF_CHARTS * CHART_ROWS, SPREAD, len(rows))
    sheet.text(grid.top - 1, 0, "Percentiles of a year and of one event", "section")
    grid.write(sheet, rows)
    shown = best.worst_events[:N_WORST]
    worst = Grid(RISK, grid.below + 2, WORST_EVENTS, len(shown))
    sheet.text(worst.top - 1, 0, f"Worst scenarios: {best.name}", "section")
    worst.write(sheet, [_worst_row(one, i, base) for i, one in enumerate(shown)])
    row = worst.below
    for note in _notes(best):
        sheet.text(row, 0, note, "note")
        row += 1
    steps_row = row + 1
    steps = _steps(sheet, best, steps_row)
    _charts(book, sheet, result, grid, steps)
    sheet.freeze(2, 0)
    last_row = max(one.below for one in steps)
    sheet.print_setup(last_row, len(WIDTHS) - 1, breaks=[worst.top - 1, steps_row])


def _steps(sheet: SafeSheet, best: PlanResult, row: int) -> list[Grid]:
    """Four distributions in equal steps, two side by side: a year's above, one event's below."""
    risk = best.risk
    cost, eens = risk.event_cost, risk.event_eens
    # What, bins, columns.
    tables = (
        ("Year's cost of the plan ({money})", risk.cost_bins, YEAR_COST_STEPS),
        ("Year's unserved energy with the plan (kWh)", risk.eens_bins, YEAR_EENS_STEPS),
        ("Cost of one event ({money})", cost.bins if cost else (), EVENT_COST_STEPS),
        ("Unserved energy of one event (kWh)", eens.bins if eens else (), EVENT_EENS_STEPS),
    )
    grids: list[Grid] = []
    for i, (title, bins, columns) in enumerate(tables):
        left = RIGHT_TABLE_COL if i % 2 else 0
        top = row if i < 2 else max(one.below for one in grids[:2]) + 1
        sheet.text(top, left, sheet.book.words(title), "section")
        one = Grid(RISK, top + 1, columns, len(bins), left)
        one.write(sheet, [{"low": a, "high": b, "weight": weight} for a, b, weight in bins])
        grids.append(one)
    return grids


def _aim(best: PlanResult) -> str:
    """What the plan was chosen by."""
    if best.aim is None:
        return "The plan minimises the expected cost, not the risk."
    weight, tail = pct_from_frac(best.aim.weight_frac), pct_from_frac(best.aim.tail_frac)
    return (
        f"The plan minimises {100.0 - weight:g} % of the expected cost and {weight:g} % of the "
        f"mean of the worst {tail:g} % of outcomes of each window (not of the years below)."
    )


def _figures(base: PlanResult, best: PlanResult) -> list[dict[str, Cell]]:
    """Mean, percentiles and CVaR, side by side."""
    risks = {"base": base.risk, "plan": best.risk}

    def spread_of(side: str, key: str) -> EventSpread | None:
        return risks[side].event_cost if key == "event_cost" else risks[side].event_eens

    percents = [p for p, _ in best.risk.cost_percentiles]
    rows: list[dict[str, Cell]] = []

    def add(figure: str, percent: float | None, pick: str) -> None:
        row: dict[str, Cell] = {"figure": figure, "percent": "" if percent is None else percent}
        for side, risk in risks.items():
            years = {
                "mean": (risk.mean, risk.eens_mean),
                "cvar": (risk.cvar95, risk.eens_cvar95),
            }
            at = {
                "cost": dict(risk.cost_percentiles),
                "eens": dict(risk.eens_percentiles),
            }
            for i, key in enumerate(("cost", "eens")):
                value = at[key].get(percent) if percent is not None else years[pick][i]
                row[f"{key}_{side}"] = value
            for key in ("event_cost", "event_eens"):
                spread = spread_of(side, key)
                found: float | None = None
                if spread is not None and percent is not None:
                    found = dict(spread.percentiles).get(percent)
                elif spread is not None:
                    found = spread.mean if pick == "mean" else spread.cvar95
                row[f"{key}_{side}"] = found
        rows.append(row)

    add("Mean", None, "mean")
    for percent in percents:
        add(f"{percent:g} of 100 are at or below", percent, "")
    add("CVaR at 95 %: mean of the worst 5 %", None, "cvar")
    return rows


def _worst_row(one: WorstEvent, i: int, base: PlanResult) -> dict[str, Cell]:
    before = {(e.window, e.scenario): e.eens_kwh for e in base.worst_events}
    return {
        "rank": float(i + 1),
        "causes": one.causes,
        "window": one.window,
        "begins": one.begins,
        "hours": one.hours,
        "per_year": one.per_year,
        "eens": one.eens_kwh,
        "eens_base": before.get((one.window, one.scenario)),
        "customers": one.customers,
        "cost": one.cost,
        "lost": one.lost,
    }


def _charts(
    book: SafeBook, sheet: SafeSheet, result: StudyResult, grid: Grid, steps: list[Grid]
) -> None:
    n = grid.n_row - 2
    width = sheet.pixels(0, len(WIDTHS) - 1) // 3
    height = CHART_ROWS * charts.PIXELS_PER_ROW - 10
    plans = (baseline(result), result.plan(result.recommended))

    def place(chart: Chart, i_row: int, i_col: int, alt: str) -> None:
        sheet.chart(3 + i_row * CHART_ROWS, i_col * width, chart, width - 10, height, alt)

    for i_row, (key, what, unit) in enumerate(
        (("cost", "Cost", book.words("{money}")), ("eens", "Unserved energy", "kWh"))
    ):
        if n < 2:
            continue
        points = [plan.risk.eens_percentiles for plan in plans]
        if key == "cost":
            points = [plan.risk.cost_percentiles for plan in plans]
        sides = ((f"{key}_base", VERMILION, "solid"), (f"{key}_plan", BLUE, "dash"))
        chart = charts.lines_over_numbers(
            book,
            f"{what} of a year, by percentile",
            _middle(grid, "percent", n),
            [
                charts.Series(grid.chart_name(side), _middle(grid, side, n), colour, dash=dash)
                for side, colour, dash in sides
            ],
            "Percentile of years (%)",
            f"{what} of a year ({unit})",
            charts.wide_range([value for one in points for _, value in one]),
            x_max=100.0,
        )
        alt = f"Two lines: {what.lower()} of a year by percentile, existing feeder and plan."
        place(chart, i_row, 0, alt)
    money = book.words("{money}")
    words = (
        ("Years by cost: the plan", f"Year's cost, from ({money})", YEARS),
        ("Years by unserved energy: the plan", "Year's unserved energy, from (kWh)", YEARS),
        ("Events by cost: the plan", f"Cost of one event, from ({money})", EVENTS),
        ("Events by unserved energy: the plan", "Unserved in one event, from (kWh)", EVENTS),
    )
    for i, (one, (title, category, axis)) in enumerate(zip(steps, words, strict=True)):
        if one.n_row < 1:
            continue
        colour = ORANGE if i % 2 else BLUE
        chart = charts.columns(
            book,
            title,
            one.chart_values("low"),
            [charts.Series(one.chart_name("weight"), one.chart_values("weight"), colour)],
            category,
            axis,
            number_format="0.00",
            has_legend=False,
        )
        alt = f"Columns: {title[0].lower()}{title[1:]}, in equal steps."
        place(chart, i // 2, 1 + i % 2, alt)


def _middle(grid: Grid, key: str, n: int) -> list[str | int]:
    """Range of the percentile rows, between the mean and the CVaR."""
    col = grid.col(key)
    return [grid.sheet, grid.row(1), col, grid.row(n), col]


def _notes(best: PlanResult) -> tuple[str, ...]:
    return (
        f"Years: {best.risk.n_year:,} simulated ones; a statistical figure. Second events in one "
        "occurrence of a window take the figures of first ones.",
        "Events: every possible first outage event, weighted by how often it is expected; cost is "
        "that of repair and interruption.",
        "Worst scenarios: each at the time at which it does most harm, by unserved energy. Great "
        "storms with many failures at once are worse; see Cautions.",
    )
