"""Feeder: a one-line drawing as native charts, in normal service and in the outages shown.

Live, islanded and dead parts differ in colour, in the shape of their buses, in the line style and
by a word in the legend and in the table.
"""

from __future__ import annotations

from dataclasses import dataclass

from xlplan.compare.study_result import FeederDrawing, StudyResult
from xlplan.report import charts
from xlplan.report.grid import Cell, Column, Grid
from xlplan.report.looks import BLUE, GREY, ORANGE, VERMILION
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.tables import DRAWN_BUSES, FEEDER

CHART_ROWS = 32
WIDTHS_HEAD = (26, 14, 14, 60)
MOST_PX = 1300
MOST_LABELS = 80
"""With more buses names would cover the drawing; the table has them."""

LINE_HEAD = (
    Column("line", "Line", "wrap"),
    Column("end", "End", "text"),
    Column("x", "x (drawing units)", "hours"),
    Column("kind", "Kind", "wrap"),
)


@dataclass(frozen=True)
class _Look:
    word: str
    label: str
    colour: str
    marker: str
    dash: str
    width_pt: float


LOOKS = (
    _Look("live", "live", BLUE, "circle", "solid", 2.25),
    _Look("island", "cut off: island", ORANGE, "diamond", "dash", 2.25),
    _Look("dead", "dead by the fault", VERMILION, "x", "round_dot", 1.5),
    _Look("open", "open tie", GREY, "none", "long_dash", 1.0),
)


def write(book: SafeBook, result: StudyResult) -> None:
    """Writes the sheet."""
    sheet = book.sheet(FEEDER)
    drawing = result.feeder
    sheet.head(
        "The feeder, and what the outages shown do to it",
        "Round and solid: live. Diamond and dashed: cut off from every supply, an island if "
        "something can form it. Cross and dotted: dead by the fault. Grey: open tie.",
    )
    if drawing is None or not drawing.buses:
        sheet.text(3, 0, "The run kept no drawing.", "note")
        sheet.print_setup(3, 8)
        return
    n_stage = len(drawing.stages)
    n_look = n_stage * len(LOOKS)
    sheet.widths([*WIDTHS_HEAD, *([16] * n_stage), *([13] * n_look)])
    last_col = len(WIDTHS_HEAD) + n_stage - 1
    tops, row = [], 3
    for note in drawing.stage_notes:
        tops.append(row)
        row += CHART_ROWS + (3 if note else 2)
    numbers_top = row
    buses = Grid(FEEDER, row + 1, _bus_columns(drawing), len(drawing.buses))
    lines = Grid(FEEDER, buses.below + 2, _line_columns(drawing), 3 * len(drawing.lines))
    sheet.text(row, 0, "Buses: place, and state in each drawing", "section")
    _write_buses(sheet, drawing, buses)
    sheet.text(lines.top - 1, 0, "Lines: both ends, under the state they are in", "section")
    _write_lines(sheet, drawing, lines)
    for i, (top, title) in enumerate(zip(tops, drawing.stages, strict=True)):
        sheet.text(top, 0, title, "section")
        sheet.text(top + 1, 0, drawing.stage_notes[i])
        chart = _chart(book, drawing, buses, lines, i, title)
        states = [bus.states[i] for bus in drawing.buses]
        counts = ", ".join(
            f"{states.count(look.word)} {look.label}" for look in LOOKS[:3] if look.word in states
        )
        alt = f"Drawing of the feeder, {title}. Buses: {counts}."[:250]
        height = (CHART_ROWS - 1) * charts.PIXELS_PER_ROW
        width = min(MOST_PX, sheet.pixels(0, last_col)) - 10
        sheet.chart(top + 2, 0, chart, width, height, alt)
    how = (
        "Places are computed: the study gives no x and y for every bus. Distances have no scale."
        if drawing.is_computed
        else "Places are those of the study's Buses sheet."
    )
    sheet.text(lines.below + 1, 0, how, "note")
    sheet.page_breaks([*tops[1:], numbers_top])
    sheet.freeze(2, 0)
    # The columns that only feed the charts stay off the printed page.
    sheet.print_setup(lines.below + 1, last_col)


def _bus_columns(drawing: FeederDrawing) -> tuple[Column, ...]:
    columns = list(DRAWN_BUSES)
    for i, stage in enumerate(drawing.stages):
        columns.append(Column(f"state {i}", f"State: {stage}", "text"))
    for i in range(len(drawing.stages)):
        columns += [
            Column(f"y {i} {look.word}", f"y if {look.label} ({i + 1})", "hours")
            for look in LOOKS[:3]
        ]
    return tuple(columns)


def _line_columns(drawing: FeederDrawing) -> tuple[Column, ...]:
    columns = list(LINE_HEAD)
    for i, stage in enumerate(drawing.stages):
        columns.append(Column(f"state {i}", f"State: {stage}", "text"))
    for i in range(len(drawing.stages)):
        columns += [
            Column(f"y {i} {look.word}", f"y if {look.label} ({i + 1})", "hours") for look in LOOKS
        ]
    return tuple(columns)


def _write_buses(sheet: SafeSheet, drawing: FeederDrawing, grid: Grid) -> None:
    rows: list[dict[str, Cell]] = []
    for bus in drawing.buses:
        row: dict[str, Cell] = {"bus": bus.bus, "x": bus.x, "y": bus.y, "note": bus.note}
        for i, state in enumerate(bus.states):
            row[f"state {i}"] = state
            for look in LOOKS[:3]:
                row[f"y {i} {look.word}"] = bus.y if state == look.word else ""
        rows.append(row)
    grid.write(sheet, rows)


def _write_lines(sheet: SafeSheet, drawing: FeederDrawing, grid: Grid) -> None:
    """Two rows a line and a blank one, where the charts lift the pen."""
    place = {bus.bus: (bus.x, bus.y) for bus in drawing.buses}
    rows: list[dict[str, Cell]] = []
    for line in drawing.lines:
        for end in (line.from_bus, line.to_bus, None):
            row: dict[str, Cell] = {column.key: "" for column in grid.columns}
            if end is not None:
                x, y = place[end]
                kind = "normally open tie" if line.is_open else "closed in normal service"
                row.update({"line": line.line, "end": end, "x": x, "kind": kind})
                for i, state in enumerate(line.states):
                    row[f"state {i}"] = state
                    row[f"y {i} {state}"] = y
            rows.append(row)
    grid.write(sheet, rows)


def _label(bus: str, address: str) -> str:
    """The name itself, which every program shows; by address if it could pass for a formula."""
    return f"={address}" if bus.startswith("=") else bus


def _chart(
    book: SafeBook, drawing: FeederDrawing, buses: Grid, lines: Grid, i: int, title: str
) -> charts.Chart:
    """Lines by state, buses by state over them; names where there is room."""
    used_lines = {line.states[i] for line in drawing.lines}
    used_buses = {bus.states[i] for bus in drawing.buses}
    has_names = len(drawing.buses) <= MOST_LABELS
    strokes, dots = [], []
    for look in LOOKS:
        key = f"y {i} {look.word}"
        if look.word in used_lines:
            strokes.append(
                charts.Stroke(
                    f"line {look.label}" if look.word != "open" else look.label,
                    lines.chart_values("x"),
                    lines.chart_values(key),
                    look.colour,
                    look.dash,
                    look.width_pt,
                )
            )
        if look.word in used_buses:
            labels = tuple(
                _label(bus.bus, buses.away(n, "bus")) if bus.states[i] == look.word else ""
                for n, bus in enumerate(drawing.buses)
            )
            dots.append(
                charts.Dots(
                    f"bus {look.label}",
                    buses.chart_values("x"),
                    buses.chart_values(key),
                    look.colour,
                    look.marker,
                    labels if has_names else (),
                )
            )
    xs, ys = [bus.x for bus in drawing.buses], [bus.y for bus in drawing.buses]
    return charts.drawing(book, title, strokes, dots, charts.padded(xs), charts.padded(ys))
