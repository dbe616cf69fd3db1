"""Operation: the plan through a normal day and through chosen outage events.

For each trace: three charts, then (below all charts) its numbers by period. Sources may be below
0 where a store charges or energy is sold.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import Trace
from xlplan.report import charts
from xlplan.report.grid import Cell, Column, Formula, Grid
from xlplan.report.looks import AREA_COLOURS, BLACK, LINE_COLOURS, VERMILION
from xlplan.report.room import BODY_CHARS
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.tables import OPERATION, TRACE_HEAD

MAX_CHARTED = 6
"""Series a chart holds; smaller sources share one column "Other sources"."""

LEAST_LAST_COL = 15
FULL = 1.02
"""End of the axis of states of charge: lines at its very edge would be cut."""

CHART_ROWS = 18
LONG_TABLE = 0.85
"""Share of a page's height beyond which rows of a table do not fit on it with their heading."""

MAX_CHART_PX = 1600
TIME_WIDTH, HOUR_WIDTH, COLUMN_WIDTH = 17, 9, 11.5
DASHES = ("solid", "dash", "round_dot", "long_dash", "dash_dot", "square_dot")
OTHER = "Other sources (kW)"


@dataclass(frozen=True)
class _Placed:
    """One trace with its table, and what its charts show."""

    trace: Trace
    grid: Grid
    sources: tuple[str, ...]
    """Names of the sources charted, in the order and colours of all traces."""
    rest: tuple[str, ...]
    capacity: dict[str, float]

    def uses(self, names: Sequence[str]) -> bool:
        """True if this trace has something from any of these sources."""
        known = self.trace.sources
        return any(name in known and _is_used(known[name]) for name in names)


def write(book: SafeBook, result: StudyResult) -> None:
    """Writes the sheet."""
    sheet = book.sheet(OPERATION)
    best = result.plan(result.recommended)
    sheet.head(
        "How the plan runs",
        f"{best.name}: load, sources, stored energy and unserved load by period; a normal day, "
        "then the worst, the most frequent and the longest outage. The numbers follow below.",
    )
    if not best.traces:
        sheet.text(3, 0, "The run kept no trace of operation.", "note")
        sheet.print_setup(3, 12)
        return
    order = _order(best.traces)
    stores = _capacities(best.traces)
    tops, row = [], 3
    for trace in best.traces:
        tops.append(row)
        row += 1 + len(_notes(trace)) + CHART_ROWS + 1
    first_numbers, placed = row, []
    for trace in best.traces:
        one = _place(trace, order, stores, row + 1 + (1 if stores else 0))
        placed.append(one)
        row = one.grid.below + 1
    last_col = max(LEAST_LAST_COL, *(len(one.grid.columns) - 1 for one in placed))
    sheet.widths([TIME_WIDTH, HOUR_WIDTH] + [COLUMN_WIDTH] * (last_col - 1))
    chars = round(BODY_CHARS * sum(sheet.width(col) for col in range(last_col + 1)))
    for top, one in zip(tops, placed, strict=True):
        sheet.text(top, 0, one.trace.title, "section")
        for i, note in enumerate(_notes(one.trace)):
            sheet.paragraph(top + 1 + i, 0, last_col, note, chars)
        _write_numbers(sheet, one)
        _write_charts(book, sheet, one, order, top + 1 + len(_notes(one.trace)))
    sheet.freeze(2, 0)
    # Charts of one stretch stay together on a page; tables begin on one of their own.
    breaks = _breaks([*tops, first_numbers], sheet.page_pixels(last_col))
    breaks += [one.grid.top - (2 if stores else 1) for one in placed]
    # All tables have the same columns, so one heading serves where a table fills several pages.
    longest = max(one.grid.n_row for one in placed) * charts.PIXELS_PER_ROW
    is_long = longest > LONG_TABLE * sheet.page_pixels(last_col)
    heading = placed[0].grid.top if is_long else None
    sheet.print_setup(row, last_col, heading_row=heading, breaks=breaks)


def _breaks(tops: Sequence[int], page_pixels: int) -> list[int]:
    """Rows at which a page ends before charts that would not fit on it any more."""
    breaks, start = [], 0
    for top, below in pairwise(tops):
        if (below - start) * charts.PIXELS_PER_ROW > page_pixels:
            breaks.append(top)
            start = top
    return breaks


def _notes(trace: Trace) -> list[str]:
    return [note for note in (trace.description, *trace.closings) if note]


def _is_used(values: NDArray[np.float64]) -> bool:
    """True if a series differs from 0 by more than rounding."""
    rounding_kw = 1e-6
    return bool(values.size) and bool(np.abs(values).max() > rounding_kw)


def _order(traces: Sequence[Trace]) -> list[str]:
    """Sources that give or take anything, the largest first, so that a colour keeps its meaning."""
    size: dict[str, float] = {}
    for trace in traces:
        for name, values in trace.sources.items():
            if _is_used(values):
                size[name] = size.get(name, 0.0) + float(np.abs(values).sum())
    return sorted(size, key=lambda name: -size[name])


def _capacities(traces: Sequence[Trace]) -> dict[str, float]:
    """Energy capacity of the stores that have any; the same in all traces."""
    return {
        name: kwh
        for trace in traces
        for name, kwh in trace.energy_capacity_kwh.items()
        if kwh > 0.0 and name in trace.energy_kwh
    }


def _place(trace: Trace, order: list[str], stores: dict[str, float], top: int) -> _Placed:
    """Place of one trace's table, whose columns are those of all traces."""
    charted = order if len(order) <= MAX_CHARTED else order[: MAX_CHARTED - 1]
    sources = tuple(charted)
    rest = tuple(order[len(charted) :])
    columns = list(TRACE_HEAD)
    columns += [Column(f"source {name}", f"{name} (kW)", "power") for name in sources]
    if rest:
        columns.append(Column("other", OTHER, "power"))
    columns += [Column(f"source {name}", f"{name} (kW)", "power") for name in rest]
    columns += [Column(f"energy {name}", f"{name}, stored (kWh)", "energy") for name in stores]
    columns += [Column(f"soc {name}", f"{name}, state of charge", "percent") for name in stores]
    grid = Grid(OPERATION, top, tuple(columns), len(trace.times))
    return _Placed(trace, grid, sources, rest, stores)


def _write_numbers(sheet: SafeSheet, one: _Placed) -> None:
    """Table of one trace; states of charge and the other sources' sum are formulas."""
    trace, grid = one.trace, one.grid
    above = grid.top - 1
    if one.capacity:
        sheet.text(above, 0, "Energy capacity (kWh)")
        for name, kwh in one.capacity.items():
            sheet.number(above, grid.col(f"energy {name}"), kwh, "energy", "input")
        above -= 1
    sheet.text(above, 0, f"Numbers: {trace.title}", "section")

    def row(i: int) -> dict[str, Cell]:
        cells: dict[str, Cell] = {
            "time": trace.times[i],
            "hour": float(trace.hours[i]),
            "load": float(trace.load_kw[i]),
            "served": float(trace.served_kw[i]),
            "unserved": float(trace.unserved_kw[i]),
        }
        power = {
            name: float(trace.sources[name][i]) if name in trace.sources else 0.0
            for name in (*one.sources, *one.rest)
        }
        cells.update({f"source {name}": kw for name, kw in power.items()})
        if one.rest:
            first, last = (grid.here(i, f"source {one.rest[k]}") for k in (0, -1))
            value = sum(power[name] for name in one.rest)
            cells["other"] = Formula(f"=SUM({first}:{last})", value)
        for name, kwh in one.capacity.items():
            if name not in trace.energy_kwh:
                cells.update({f"energy {name}": "", f"soc {name}": ""})
                continue
            stored = float(trace.energy_kwh[name][i])
            cells[f"energy {name}"] = stored
            share = f"={grid.here(i, f'energy {name}')}/{grid.fixed(-2, f'energy {name}')}"
            cells[f"soc {name}"] = Formula(share, stored / kwh)
        return cells

    grid.write(sheet, [row(i) for i in range(grid.n_row)])


def _write_charts(
    book: SafeBook, sheet: SafeSheet, one: _Placed, order: list[str], row: int
) -> None:
    """Supply by source with the load; unserved load, if any; state of charge, if any."""
    trace, grid = one.trace, one.grid
    times, n_point = grid.chart_values("time"), grid.n_row
    height = (CHART_ROWS - 1) * charts.PIXELS_PER_ROW

    def series(key: str, colour: str, dash: str = "solid", width_pt: float = 2.0) -> charts.Series:
        name, values = grid.chart_name(key), grid.chart_values(key)
        return charts.Series(name, values, colour, dash=dash, width_pt=width_pt)

    columns = [
        series(f"source {n}", AREA_COLOURS[order.index(n)]) for n in one.sources if one.uses([n])
    ]
    if one.uses(one.rest):
        columns.append(series("other", AREA_COLOURS[-1]))
    load = series("load", BLACK, width_pt=1.5)
    drawn = []
    if columns:
        title = "Load, and where it is served from"
        drawn.append(
            (
                charts.stacked_columns_and_line(
                    book, title, times, columns, load, "Power (kW)", n_point
                ),
                "columns of power by source stacked by period, and a line for the load.",
            )
        )
    if _is_used(trace.unserved_kw):
        title, bad = "Load left unserved", series("unserved", VERMILION)
        drawn.append(
            (
                charts.columns_over_time(book, title, times, bad, "Unserved (kW)", n_point),
                "columns of unserved load by period.",
            )
        )
    largest = sorted(one.capacity, key=lambda name: -one.capacity[name])[:MAX_CHARTED]
    if largest:
        lines = [
            series(f"soc {name}", LINE_COLOURS[i], DASHES[i]) for i, name in enumerate(largest)
        ]
        drawn.append(
            (
                charts.lines_over_time(
                    book,
                    "State of charge, end of period",
                    times,
                    lines,
                    "State of charge (%)",
                    n_point,
                    axis_max=FULL,
                    number_format="0%",
                ),
                "lines of the state of charge of each store by period.",
            )
        )
    total = min(MAX_CHART_PX, sheet.pixels(0, max(LEAST_LAST_COL, len(grid.columns) - 1)))
    width = total // max(2, len(drawn))
    for i, (chart, words) in enumerate(drawn):
        sheet.chart(row, i * width, chart, width - 10, height, f"{trace.title}: {words}"[:250])
