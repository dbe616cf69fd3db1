"""Risk: how a year and a single outage may turn out, and the worst that is possible."""

from __future__ import annotations

from xlplan.base.units import pct_from_frac
from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import EventSpread, PlanResult, WorstEvent
from xlplan.report import charts
from xlplan.report.grid import Cell, Column, Grid
from xlplan.report.looks import BLUE, ORANGE, VERMILION
from xlplan.report.money import baseline
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.tables import RISK, SPREAD, SPREAD_STEPS, WORST_EVENTS

WIDTHS = (32, 12, 16, 16, 15, 15, 15, 16, 15, 16, 60)
N_WORST = 10
CHART_ROWS = 18


def write(book: SafeBook, result: StudyResult) -> None:
    """Writes the sheet."""
    sheet = book.sheet(RISK)
    base, best = baseline(result), result.plan(result.recommended)
    sheet.head(
        "How bad can it get",
        f"Existing feeder and plan ({best.name}): simulated years, single outage events, and the "
        f"worst scenarios. {_aim(best)}",
    )
    sheet.widths(WIDTHS)
    rows = _figures(base, best)
    grid = Grid(RISK, 4 + CHART_ROWS + 2, SPREAD, len(rows))
    sheet.text(grid.top - 1, 0, "Percentiles of a year and of one event", "section")
    grid.write(sheet, rows)
    shown = best.worst_events[:N_WORST]
    worst = Grid(RISK, grid.below + 3, WORST_EVENTS, len(shown))
    sheet.text(worst.top - 1, 0, f"Worst scenarios: {best.name}", "section")
    worst.write(sheet, [_worst_row(one, i, base) for i, one in enumerate(shown)])
    row = worst.below + 2
    steps = []
    risk = best.risk
    for title, bins in (
        (book.words("Year's cost of the plan ({money}): share of years"), risk.cost_bins),
        ("Year's unserved energy with the plan (kWh): share of years", risk.eens_bins),
        (
            book.words("Cost of one event ({money}): events per year"),
            risk.event_cost.bins if risk.event_cost is not None else (),
        ),
        (
            "Unserved energy of one event (kWh): events per year",
            risk.event_eens.bins if risk.event_eens is not None else (),
        ),
    ):
        sheet.text(row, 0, title, "section")
        one = Grid(RISK, row + 1, _step_columns(title), len(bins))
        one.write(sheet, [_step_row(*step) for step in bins])
        steps.append(one)
        row = one.below + 1
    _charts(book, sheet, result, grid, steps)
    for i, note in enumerate(_notes(best)):
        sheet.text(row + i, 0, note, "note")
    sheet.freeze(2, 0)
    sheet.print_setup(row + 3, len(WIDTHS) - 1)


def _aim(best: PlanResult) -> str:
    """What the plan was chosen by."""
    if best.aim is None:
        return "The plan minimises the expected cost, not the risk."
    weight, tail = pct_from_frac(best.aim.weight_frac), pct_from_frac(best.aim.tail_frac)
    return (
        f"The plan minimises {100.0 - weight:g} % of the expected cost and {weight:g} % of the "
        f"mean of the worst {tail:g} % of outcomes of each window (not of the years below)."
    )


def _step_columns(title: str) -> tuple[Column, ...]:
    """Columns of a distribution; the last is named after what it holds."""
    head = [*SPREAD_STEPS]
    return (*head[:-1], Column("weight", title, "small"))


def _step_row(low: float, high: float, weight: float) -> dict[str, Cell]:
    return {"step": f"{low:,.0f} - {high:,.0f}", "low": low, "high": high, "weight": weight}


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
    width = sheet.pixels(0, len(WIDTHS) - 1) // 3 - 10
    height = CHART_ROWS * charts.PIXELS_PER_ROW - 10
    if n > 1:
        columns = {key: _middle(grid, key, n) for key in ("percent", "cost_base", "cost_plan")}
        plans = (baseline(result), result.plan(result.recommended))
        values = [v for plan in plans for _, v in plan.risk.cost_percentiles]
        chart = charts.lines_over_numbers(
            book,
            "Cost of a year, by percentile",
            columns["percent"],
            [
                charts.Series(grid.chart_name("cost_base"), columns["cost_base"], VERMILION),
                charts.Series(
                    grid.chart_name("cost_plan"), columns["cost_plan"], BLUE, dash="dash"
                ),
            ],
            "Percentile of years (%)",
            book.words("Year's cost ({money})"),
            charts.wide_range(values),
            x_max=100.0,
        )
        alt = "Two lines: cost of a year by percentile, existing feeder and plan."
        sheet.chart(3, 0, chart, width, height, alt)
    for i, (one, title, axis, colour) in enumerate(
        (
            (steps[0], "Years by cost: the plan", "Share of years", BLUE),
            (steps[3], "Events by unserved energy: the plan", "Events per year", ORANGE),
        )
    ):
        if one.n_row < 1:
            continue
        chart = charts.columns(
            book,
            title,
            one.chart_values("step"),
            [charts.Series(one.chart_name("weight"), one.chart_values("weight"), colour)],
            (book.words("Year's cost ({money})"), "Unserved in one event (kWh)")[i],
            axis,
            number_format="0.00",
            has_legend=False,
        )
        alt = f"Columns: {title[0].lower()}{title[1:]}, in equal steps."
        sheet.chart(3, (i + 1) * (width + 10), chart, width, height, alt)


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
