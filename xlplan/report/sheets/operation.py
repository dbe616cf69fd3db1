"""Operation: the plan through a normal day and through its worst outage event.

For each trace: three charts, then (below all charts) its numbers by period. Sources may be below
0 where a store charges or energy is sold.
"""

from __future__ import annotations

import numpy as np

from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import Trace
from xlplan.report import charts
from xlplan.report.grid import Cell, Column, Formula, Grid
from xlplan.report.looks import BLACK, SERIES_COLOURS, VERMILION
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.tables import OPERATION, TRACE_HEAD

MAX_CHARTED = 6
"""Series a chart holds; smaller sources share one column "Other sources"."""

CHART_ROWS = 19
CHART_WIDTH, NARROW_WIDTH = 620, 400
DASHES = ("solid", "dash", "round_dot", "long_dash", "dash_dot", "square_dot")
OTHER = "Other sources (kW)"


def write(book: SafeBook, result: StudyResult) -> None:
    """Writes the sheet."""
    sheet = book.sheet(OPERATION)
    best = result.plan(result.recommended)
    sheet.head(
        "How the plan runs",
        f"{best.name}: load, sources, stored energy and unserved load by period; a normal day, "
        "then the worst outage event. The numbers behind the charts follow below them.",
    )
    if not best.traces:
        sheet.text(3, 0, "The run kept no trace of operation.", "note")
        sheet.print_setup(3, 12)
        return
    layouts = []
    row = 3
    for trace in best.traces:
        notes = [trace.description, *trace.closings]
        layouts.append((row, notes))
        row += 1 + len(notes) + CHART_ROWS + 1
    last_col = 0
    for (top, notes), trace in zip(layouts, best.traces, strict=True):
        sheet.text(top, 0, trace.title, "section")
        for i, note in enumerate(notes):
            sheet.text(top + 1 + i, 0, note)
        sheet.text(row, 0, f"Numbers: {trace.title}", "section")
        grid, sources, stores, row = _write_numbers(sheet, trace, row + 1)
        last_col = max(last_col, grid.left + len(grid.columns) - 1)
        _write_charts(book, sheet, trace, grid, top + 1 + len(notes), sources, stores)
        row += 1
    sheet.widths([17, 11] + [13] * max(last_col - 1, 12))
    sheet.freeze(2, 0)
    sheet.print_setup(row, max(last_col, 12))


def _is_used(values: np.ndarray) -> bool:
    """True if a series differs from 0 by more than rounding."""
    rounding_kw = 1e-6
    return bool(values.size) and bool(np.abs(values).max() > rounding_kw)


def _write_numbers(
    sheet: SafeSheet, trace: Trace, top: int
) -> tuple[Grid, list[str], list[str], int]:
    """Table of one trace; keys of the columns that the charts show, and the next free row."""
    ordered = sorted(trace.sources, key=lambda name: -float(np.abs(trace.sources[name]).sum()))
    used = [name for name in ordered if _is_used(trace.sources[name])]
    charted = used if len(used) <= MAX_CHARTED else used[: MAX_CHARTED - 1]
    rest = [name for name in ordered if name not in charted]
    has_other = len(used) > MAX_CHARTED
    columns = list(TRACE_HEAD)
    columns += [Column(f"source {name}", f"{name} (kW)", "power") for name in charted]
    if has_other:
        columns.append(Column("other", OTHER, "power"))
    columns += [Column(f"source {name}", f"{name} (kW)", "power") for name in rest]
    capacity = {
        name: trace.energy_capacity_kwh.get(name, 0.0)
        for name in trace.energy_kwh
        if trace.energy_capacity_kwh.get(name, 0.0) > 0.0
    }
    columns += [Column(f"energy {name}", f"{name}, stored (kWh)", "energy") for name in capacity]
    columns += [Column(f"soc {name}", f"{name}, state of charge", "percent") for name in capacity]
    n_row = len(trace.times)
    if capacity:
        sheet.text(top, 0, "Energy capacity (kWh)", "text")
        top += 1
    grid = Grid(OPERATION, top, tuple(columns), n_row)
    for name, kwh in capacity.items():
        sheet.number(top - 1, grid.col(f"energy {name}"), kwh, "energy", "input")

    def row(i: int) -> dict[str, Cell]:
        cells: dict[str, Cell] = {
            "time": trace.times[i],
            "hour": float(trace.hours[i]),
            "load": float(trace.load_kw[i]),
            "served": float(trace.served_kw[i]),
            "unserved": float(trace.unserved_kw[i]),
        }
        for name in ordered:
            cells[f"source {name}"] = float(trace.sources[name][i])
        if has_other:
            first, last = grid.here(i, f"source {rest[0]}"), grid.here(i, f"source {rest[-1]}")
            value = float(sum(trace.sources[name][i] for name in rest))
            cells["other"] = Formula(f"=SUM({first}:{last})", value)
        for name, kwh in capacity.items():
            stored = float(trace.energy_kwh[name][i])
            cells[f"energy {name}"] = stored
            column = grid.fixed(-2, f"energy {name}")
            share = f"={grid.here(i, f'energy {name}')}/{column}"
            cells[f"soc {name}"] = Formula(share, stored / kwh)
        return cells

    grid.write(sheet, [row(i) for i in range(n_row)], heading_lines=3)
    sources = [f"source {name}" for name in charted] + (["other"] if has_other else [])
    stores = sorted(capacity, key=lambda name: -capacity[name])[:MAX_CHARTED]
    return grid, sources, [f"soc {name}" for name in stores], grid.below


def _write_charts(
    book: SafeBook,
    sheet: SafeSheet,
    trace: Trace,
    grid: Grid,
    row: int,
    sources: list[str],
    stores: list[str],
) -> None:
    """Supply by source with the load; unserved load; state of charge."""
    times, n_point = grid.chart_values("time"), grid.n_row
    height = (CHART_ROWS - 1) * charts.PIXELS_PER_ROW

    def series(key: str, colour: str, dash: str = "solid", width_pt: float = 2.0) -> charts.Series:
        name, values = grid.chart_name(key), grid.chart_values(key)
        return charts.Series(name, values, colour, dash=dash, width_pt=width_pt)

    supply = charts.stacked_columns_and_line(
        book,
        "Load and where it is served from",
        times,
        [series(key, SERIES_COLOURS[i]) for i, key in enumerate(sources)],
        series("load", BLACK, width_pt=1.5),
        "Power (kW)",
        n_point,
    )
    alt = f"{trace.title}: columns of power by source stacked by period, a line for the load."
    sheet.chart(row, 0, supply, CHART_WIDTH, height, alt)
    unserved = charts.columns_over_time(
        book,
        "Load left unserved",
        times,
        series("unserved", VERMILION),
        "Unserved (kW)",
        n_point,
    )
    alt = f"{trace.title}: columns of unserved load by period."
    sheet.chart(row, 7, unserved, NARROW_WIDTH, height, alt)
    if stores:
        charge = charts.lines_over_time(
            book,
            "State of charge of each store",
            times,
            [series(key, SERIES_COLOURS[i], DASHES[i]) for i, key in enumerate(stores)],
            "State of charge (%)",
            n_point,
            axis_max=1.0,
            number_format="0%",
        )
        alt = f"{trace.title}: lines of the state of charge of each store by period."
        sheet.chart(row, 11, charge, NARROW_WIDTH, height, alt)
