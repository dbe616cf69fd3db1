"""Voltages: what a nonlinear power flow says of the plans, beside the linear model.

Verdicts by alternative first, then the losses that the linear model leaves out, buses outside ANSI
C84.1 Range A, voltages of every bus, and loadings.
"""

from __future__ import annotations

import math

from xlplan.base.units import pct_from_frac
from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.ac_results import AcCheck, AssetLoading, BusVoltage
from xlplan.evaluate.results import PlanResult
from xlplan.report import charts
from xlplan.report.grid import Cell, Formula, Grid, set_widths
from xlplan.report.looks import BLUE, SKY, VERMILION
from xlplan.report.room import BODY_CHARS, LINE_POINTS, lines_needed
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.tables import (
    AC_LOADINGS,
    AC_LOSSES,
    AC_OUTSIDE,
    AC_PLANS,
    AC_VOLTAGES,
    VOLTAGES,
)

WIDTHS = (20, 14, 22, 9.5, 9.5, 11, 24, 11.5, 11, 22, 11, 11, 11, 11, 11)
CHART_ROWS = 19
NOTE_CHARS = round(1.15 * sum(WIDTHS))
MAX_BUSES_CHARTED = 200
NORMAL, EVENTS = "normal service", "outage events"
PASS, LOOK, UNSOLVED = "PASS", "LOOK", "LOOK: not solved"

MEANINGS = (
    "Plans are made with a linear power flow without losses. Here every period of each window's "
    "plan, and of the outage events on the Operation sheet, is solved again by a nonlinear AC "
    "power flow (balanced, constant power): units as planned, loads as served, without the loss "
    "allowance, since the losses are in the flow. The voltage is held by the source, by a closed "
    "neighbour supply, or in an island by its largest forming unit; an island's level is free and "
    "stands near nominal, within what the limits allow.",
    "LOOK: a limit of the study is broken, or a period has no AC solution and the feeder may not "
    "be able to carry its load. The margins say by how much the study's voltage limits would have "
    "had to be tighter, or its loss allowance larger, to cover it: change them in Settings and "
    "solve again. AC voltages are compared with the study's own limits, so a study whose limits "
    "were tightened on purpose may still say LOOK: read its lowest AC voltage against the true "
    "limits then.",
)


def operation_words(is_event: bool) -> str:
    """Which operation a row is about."""
    return EVENTS if is_event else NORMAL


def write(book: SafeBook, result: StudyResult) -> None:
    """Writes the sheet."""
    sheet = book.sheet(VOLTAGES)
    sheet.head(
        "Do voltages and loadings hold in an AC power flow?",
        "Lowest and highest voltage of every bus, linear model against AC power flow; losses left "
        "out by the linear model. A check of the plans, no replacement for a three-phase study.",
    )
    set_widths(sheet, WIDTHS, AC_PLANS, AC_LOSSES, AC_VOLTAGES)
    last_col = len(WIDTHS) - 1
    checked = [(plan, plan.ac) for plan in result.plans if plan.ac is not None]
    if not checked:
        sheet.text(3, 0, "LOOK: no plan was checked by an AC power flow.", "status")
        sheet.print_setup(3, last_col)
        return
    row = 3
    for meaning in MEANINGS:
        sheet.paragraph(row, 0, last_col, meaning, NOTE_CHARS)
        row += 1
    row = _verdicts(sheet, result, checked, row + 1)
    best = next((one for one in checked if one[0].name == result.recommended), checked[0])
    chart_row = row + 1
    n_bus = sum(not bus.is_event for bus in best[1].buses)
    has_chart = 1 < n_bus <= MAX_BUSES_CHARTED
    losses_row = chart_row + (CHART_ROWS if has_chart else 0)
    row = _losses(sheet, checked, losses_row)
    outside_row = row + 1
    loadings_row = _outside(sheet, checked, outside_row) + 1
    loadings, row = _loadings(sheet, checked, loadings_row)
    voltages_row = row + 1
    # The longest table comes last, so that its heading can stand on every page from there on.
    voltages, row = _voltages(sheet, best, checked, voltages_row)
    if has_chart:
        _chart(book, sheet, best, voltages, n_bus, chart_row)
    sheet.freeze(2, 1)
    breaks = [losses_row, outside_row, *loadings, voltages_row]
    sheet.print_setup(row, last_col, heading_row=voltages.top, breaks=breaks)


def _verdicts(
    sheet: SafeSheet, result: StudyResult, checked: list[tuple[PlanResult, AcCheck]], row: int
) -> int:
    """One row per alternative; next free row."""
    sheet.text(row, 0, "Verdict by alternative", "section")
    grid = Grid(VOLTAGES, row + 1, AC_PLANS, len(checked))
    marked = [i for i, (plan, _) in enumerate(checked) if plan.name == result.recommended]
    grid.write(sheet, [_verdict_row(plan, check) for plan, check in checked], marked)
    col = grid.col("verdict")
    sheet.status_fill(grid.row(0), grid.row(len(checked) - 1), col, col)
    return grid.below


def _verdict_row(plan: PlanResult, check: AcCheck) -> dict[str, Cell]:
    advice = check.advice
    normal = [bus for bus in check.buses if not bus.is_event]
    return {
        "name": plan.name,
        "verdict": PASS if check.holds else LOOK,
        "about": "limits kept, every period solved" if check.holds else _trouble(check),
        "periods": float(check.n_period),
        "unsolved": float(check.n_not_converged),
        "broken": float(len(check.broken_buses(False))),
        "broken_event": _event_words(check),
        "loaded": float(len(check.broken_loadings())),
        "outside": float(len({bus.bus for bus in check.outside_range_a() if not bus.is_event})),
        "lowest": _lowest_words(normal),
        "margin_low": advice.low_normal_pu,
        "margin_high": advice.high_normal_pu,
        "margin_low_event": advice.low_event_pu,
        "margin_high_event": advice.high_event_pu,
        "allowance": advice.allowance_frac,
    }


def _trouble(check: AcCheck) -> str:
    """What is broken, in a few words."""
    words = []
    if check.n_not_converged:
        words.append("periods without AC solution")
    if check.broken_buses(False):
        words.append("voltages in normal service")
    if check.broken_buses(True):
        words.append("voltages in outage events")
    if check.broken_loadings():
        words.append("loadings")
    return ", ".join(words)


def _event_words(check: AcCheck) -> Cell:
    """Number of buses, or a word where no event was checked."""
    if not any(stretch.is_event for stretch in check.stretches):
        return "no event"
    return float(len(check.broken_buses(True)))


def _lowest_words(buses: list[BusVoltage]) -> str:
    known = [bus for bus in buses if math.isfinite(bus.low_ac_pu)]
    if not known:
        return "not solved"
    low = min(known, key=lambda bus: bus.low_ac_pu)
    return f"{low.low_ac_pu:.4f} p.u. at {low.bus}, {low.low_when}"


def _losses(sheet: SafeSheet, checked: list[tuple[PlanResult, AcCheck]], row: int) -> int:
    """Losses of every stretch, and of a year of normal service; next free row."""
    sheet.text(row, 0, "Losses that the linear model leaves out", "section")
    n_row = sum(len(check.stretches) + 1 for _, check in checked)
    grid = Grid(VOLTAGES, row + 1, AC_LOSSES, n_row)
    rows: list[dict[str, Cell]] = []
    marked = []
    for plan, check in checked:
        plans = []
        for stretch in check.stretches:
            i = len(rows)
            if not stretch.is_event:
                plans.append(i)
            rows.append(
                {
                    "name": plan.name,
                    "operation": operation_words(stretch.is_event),
                    "title": stretch.title,
                    "occurrences": None if stretch.is_event else stretch.occurrences_per_year,
                    "periods": float(stretch.n_period),
                    "unsolved": float(stretch.n_not_converged),
                    "note": f"{stretch.n_topology} topologies" if stretch.n_topology > 1 else "",
                    "served": stretch.served_kwh,
                    "loss": stretch.loss_kwh,
                    "share_note": _share_words(stretch.loss_kwh, stretch.served_kwh, check),
                    "allowance": stretch.allowance_kwh,
                    "share": _ratio(grid, i, stretch.loss_kwh, stretch.served_kwh),
                    "allowed": check.allowance_frac,
                    "highest": stretch.highest_loss_frac,
                    "cost": stretch.cost_beyond,
                }
            )
            if stretch.is_event:
                rows[-1]["occurrences"] = ""
        loss, allowance, served, cost = check.losses_per_year()
        i = len(rows)
        marked.append(i)

        def year(key: str, value: float, at: list[int] = plans) -> Formula:
            terms = (f"{grid.here(j, 'occurrences')}*{grid.here(j, key)}" for j in at)
            return Formula("=" + "+".join(terms), value)

        rows.append(
            {
                "name": plan.name,
                "operation": NORMAL,
                "title": "A year, as if nothing failed",
                "occurrences": "",
                "periods": "",
                "unsolved": float(
                    sum(s.n_not_converged for s in check.stretches if not s.is_event)
                ),
                "note": "",
                "served": year("served", served),
                "loss": year("loss", loss),
                "share_note": _share_words(loss, served, check),
                "allowance": year("allowance", allowance),
                "share": _ratio(grid, i, loss, served),
                "allowed": check.allowance_frac,
                "highest": "",
                "cost": year("cost", cost),
            }
        )
    grid.write(sheet, rows, marked)
    note = (
        "Losses are those of the periods that were solved; a period without AC solution has none "
        "here. Cost beyond the allowance: what losses cost more at the purchase price than the "
        "allowance has put into the plan; below 0 the allowance was ample."
    )
    sheet.paragraph(grid.below, 0, len(WIDTHS) - 1, note, NOTE_CHARS, "note")
    return grid.below + 1


def _ratio(grid: Grid, i: int, loss: float, served: float) -> Cell:
    if served <= 0.0:
        return ""
    return Formula(f"={grid.here(i, 'loss')}/{grid.here(i, 'served')}", loss / served)


def _share_words(loss: float, served: float, check: AcCheck) -> str:
    if served <= 0.0:
        return "nothing served"
    if loss <= check.allowance_frac * served:
        return "covered by the allowance"
    return f"{pct_from_frac(loss / served - check.allowance_frac):.2f} % of load not covered"


def _outside(sheet: SafeSheet, checked: list[tuple[PlanResult, AcCheck]], row: int) -> int:
    """Every bus outside Range A; next free row."""
    limits, narrow = checked[0][1].range_a, checked[0][1].range_a_above_600_v
    sheet.text(
        row,
        0,
        f"Buses outside ANSI C84.1 Range A for {limits.what}, {limits.low_pu:g} to "
        f"{limits.high_pu:g} p.u. (AC power flow)",
        "section",
    )
    found = [(plan, bus) for plan, check in checked for bus in check.outside_range_a()]
    grid = Grid(VOLTAGES, row + 1, AC_OUTSIDE, len(found))
    grid.write(
        sheet,
        [
            {
                "name": plan.name,
                "operation": operation_words(bus.is_event),
                "bus": bus.bus,
                "low": bus.low_ac_pu,
                "below": max(0.0, limits.low_pu - bus.low_ac_pu),
                "range": f"{limits.low_pu:g} to {limits.high_pu:g}",
                "low_when": bus.low_when,
                "high": bus.high_ac_pu,
                "above": max(0.0, bus.high_ac_pu - limits.high_pu),
                "high_when": bus.high_when,
            }
            for plan, bus in found
        ],
    )
    note = (
        "Range A is meant for normal operation; outage events are listed for information. The drop "
        "of customers' transformers and service lines comes on top of what is shown. Customers "
        f"served above 600 V: {narrow.low_pu:g} to {narrow.high_pu:g} p.u.; buses outside of that "
        "are marked in the last table."
    )
    sheet.paragraph(grid.below, 0, len(WIDTHS) - 1, note, NOTE_CHARS, "note")
    return grid.below + 1


def _voltages(
    sheet: SafeSheet,
    best: tuple[PlanResult, AcCheck],
    checked: list[tuple[PlanResult, AcCheck]],
    row: int,
) -> tuple[Grid, int]:
    """Every bus of every alternative, the recommended one first; its table and the next row."""
    sheet.text(row, 0, "Lowest and highest voltage of every bus", "section")
    ordered = [best, *(one for one in checked if one is not best)]
    found = [(plan, bus) for plan, check in ordered for bus in check.buses]
    grid = Grid(VOLTAGES, row + 1, AC_VOLTAGES, len(found))
    rows = [_voltage_row(grid, i, plan, bus) for i, (plan, bus) in enumerate(found)]
    grid.write(sheet, rows)
    col = grid.col("verdict")
    sheet.status_fill(grid.row(0), grid.row(max(1, len(rows)) - 1), col, col)
    return grid, grid.below


def _voltage_row(grid: Grid, i: int, plan: PlanResult, bus: BusVoltage) -> dict[str, Cell]:
    row: dict[str, Cell] = {
        "name": plan.name,
        "operation": operation_words(bus.is_event),
        "bus": bus.bus,
        "low_limit": bus.low_limit_pu,
        "high_limit": bus.high_limit_pu,
    }
    keys = ("low_linear", "low_ac", "error", "high_linear", "high_ac")
    if bus.n_period == 0:
        # Dead throughout: there is no voltage to speak of.
        nothing: dict[str, Cell] = dict.fromkeys(keys, "")
        when = {"low_when": "without supply throughout", "high_when": ""}
        return {**row, **nothing, **when, "verdict": "", "range_a": "", "unsolved": ""}
    verdict = LOOK if bus.breaks_limits else PASS
    if bus.n_not_converged:
        verdict = UNSOLVED
    error = Formula(
        f"={grid.here(i, 'low_ac')}-{grid.here(i, 'low_linear')}",
        bus.low_ac_pu - bus.low_linear_pu,
    )
    return {
        **row,
        "low_linear": bus.low_linear_pu,
        "low_ac": bus.low_ac_pu,
        "error": error,
        "low_when": bus.low_when,
        "high_linear": bus.high_linear_pu,
        "high_ac": bus.high_ac_pu,
        "high_when": bus.high_when,
        "verdict": verdict,
        "range_a": _range_words(bus),
        "unsolved": float(bus.n_not_converged),
    }


def _range_words(bus: BusVoltage) -> str:
    """Inside or outside; customers served above 600 V have a narrower range."""
    if bus.is_outside_range_a:
        return "outside"
    return "inside; outside above 600 V" if bus.is_outside_range_a_above_600_v else "inside"


def _loadings(
    sheet: SafeSheet, checked: list[tuple[PlanResult, AcCheck]], row: int
) -> tuple[list[int], int]:
    """Highest loading of everything with a rating; tops of the tables and the next free row.

    A table for each alternative: each begins a page, so that its heading stands there.
    """
    tops = []
    for plan, check in checked:
        tops.append(row)
        sheet.text(row, 0, f"Highest loadings: {plan.name}", "section")
        grid = Grid(VOLTAGES, row + 1, AC_LOADINGS, len(check.loadings))
        grid.write(sheet, [_loading_row(plan, one) for one in check.loadings])
        for i, one in enumerate(check.loadings):
            _spread(sheet, grid.row(i), grid.col("when"), one.when, one.kind)
        col = grid.col("verdict")
        sheet.status_fill(grid.row(0), grid.row(max(1, grid.n_row) - 1), col, col)
        row = grid.below + 1
    note = (
        "Lines: AC current times the nominal voltage, since heating follows the current. Neighbour "
        "supplies: share of the spare power of the same period. Forming units: what holding the "
        "voltage asks of them beyond their planned output is included; it is not taken from their "
        "stored energy or fuel."
    )
    sheet.paragraph(row - 1, 0, len(WIDTHS) - 1, note, NOTE_CHARS, "note")
    return tops, row


def _spread(sheet: SafeSheet, row: int, col: int, when: str, kind: str) -> None:
    """Writes when it was over all columns that are left, beside a kind that may take two lines."""
    last_col = len(WIDTHS) - 1
    room = BODY_CHARS * sum(sheet.width(one) for one in range(col, last_col + 1))
    kind_room = BODY_CHARS * sheet.width([one.key for one in AC_LOADINGS].index("kind"))
    sheet.paragraph(row, col, last_col, when, int(room))
    lines = max(lines_needed(when, room), lines_needed(kind, kind_room))
    sheet.height(row, LINE_POINTS * lines + 3)


def _loading_row(plan: PlanResult, one: AssetLoading) -> dict[str, Cell]:
    verdict = LOOK if one.breaks_limits else PASS if math.isfinite(one.ac_frac) else UNSOLVED
    return {
        "name": plan.name,
        "operation": operation_words(one.is_event),
        "asset": one.asset,
        "rating": one.rating,
        "unit": one.unit,
        "kind": one.kind,
        "when": one.when,
        "linear": one.linear_frac,
        "ac": one.ac_frac,
        "verdict": verdict,
    }


def _chart(
    book: SafeBook,
    sheet: SafeSheet,
    best: tuple[PlanResult, AcCheck],
    voltages: Grid,
    n_bus: int,
    row: int,
) -> None:
    """Lowest linear and AC voltage of normal service by bus, with the study's limit."""
    # The recommended plan's normal service is the first block of the table.
    block = Grid(VOLTAGES, voltages.top, voltages.columns, n_bus)

    def series(key: str, colour: str, dash: str, width_pt: float) -> charts.Series:
        name, values = block.chart_name(key), block.chart_values(key)
        return charts.Series(name, values, colour, dash=dash, width_pt=width_pt)

    chart = charts.lines_over_names(
        book,
        f"Lowest voltage in normal service by bus: {best[0].name}",
        block.chart_values("bus"),
        [
            series("low_limit", VERMILION, "dash", 1.5),
            series("low_linear", SKY, "solid", 3.0),
            series("low_ac", BLUE, "solid", 1.5),
        ],
        "Bus",
        "Voltage (p.u.), axis not from 0",
        n_bus,
        _axis_range([bus for bus in best[1].buses if not bus.is_event]),
    )
    alt = (
        "Lines over the buses: lowest voltage by the linear model and by AC power flow; the limit."
    )
    sheet.chart(row, 0, chart, 1150, (CHART_ROWS - 1) * charts.PIXELS_PER_ROW, alt)


def _axis_range(buses: list[BusVoltage]) -> tuple[float, float]:
    """Ends of the axis, in steps of 0.02 p.u., that hold all lines."""
    step = 0.02
    values = [v for b in buses for v in (b.low_limit_pu, b.low_linear_pu, b.low_ac_pu)]
    known = [value for value in values if math.isfinite(value)]
    low, high = math.floor(min(known) / step) * step, math.ceil(max(known) / step) * step
    return round(low, 2), round(max(high, low + step), 2)
