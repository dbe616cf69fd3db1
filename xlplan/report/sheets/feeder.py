"""Feeder: a one-line drawing as native charts, in normal service and in the outages shown.

Live, islanded and dead parts differ in colour, in the shape of their buses, in the line style and
by a word in the legend and in the table.
"""

from __future__ import annotations

from dataclasses import dataclass

from xlsxwriter.chart import Chart

from xlplan.compare.study_result import DrawnLine, FeederDrawing, StudyResult
from xlplan.report import charts
from xlplan.report.grid import Cell, Column, Grid
from xlplan.report.looks import BLUE, GREY, ORANGE, VERMILION
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.tables import DRAWN_BUSES, FEEDER

HEIGHT_SHARE = 0.57
"""Height of a drawing over its width: with its heading it then fits a landscape page."""

MOST_HALF_PAGE = 40
"""With more buses a drawing needs a page of its own."""

WIDTHS_HEAD = (24, 12, 12, 40)
STATE_WIDTH = 14
LEAST_LAST_COL = 8
MOST_LABELS = 80
"""With more buses names would cover the drawing; the table has them."""

MOST_STROKES = 100
"""A chart holds 255 series; some are needed for buses and other states."""

LINE_HEAD = (
    Column("line", "Line", "wrap"),
    Column("from", "From bus", "text"),
    Column("to", "To bus", "text"),
    Column("kind", "Kind", "wrap"),
)

PATHS = (
    Column("path", "Path that a chart draws", "wrap"),
    Column("x", "x (drawing units)", "hours"),
    Column("y", "y (drawing units)", "hours"),
)


@dataclass(frozen=True)
class _Look:
    word: str
    label: str
    colour: str
    marker: str
    dash: str
    width_pt: float
    short: str = ""
    """What is added to the name of a bus."""


LOOKS = (
    _Look("live", "live", BLUE, "circle", "solid", 2.25),
    _Look("island", "cut off: island", ORANGE, "diamond", "dash", 2.25, " (cut off)"),
    _Look("dead", "dead by the fault", VERMILION, "x", "round_dot", 1.5, " (dead)"),
    _Look("open", "open tie", GREY, "none", "long_dash", 1.0),
)
LABEL_SIDES = ("above", "below", "right", "left")
LEAST_RISE = 0.4
ROOM_FOR_NAMES = 0.18


def write(book: SafeBook, result: StudyResult) -> None:
    """Writes the sheet."""
    sheet = book.sheet(FEEDER)
    drawing = result.feeder
    sheet.head(
        "The feeder, and what the outages shown do to it",
        "Round, solid: live. Diamond, dashed: cut off from every supply, an island if something "
        "can form it. Cross, dotted: dead by the fault. Grey: open tie.",
    )
    if drawing is None or not drawing.buses:
        sheet.text(3, 0, "The run kept no drawing.", "note")
        sheet.print_setup(3, 8)
        return
    n_stage = len(drawing.stages)
    sheet.widths([*WIDTHS_HEAD, *([STATE_WIDTH] * n_stage), *([13] * 3 * n_stage)])
    last_col = max(LEAST_LAST_COL, len(WIDTHS_HEAD) + n_stage - 1)
    width = sheet.pixels(0, last_col) - 10
    page_rows = sheet.page_pixels(last_col) // charts.PIXELS_PER_ROW
    per_page = 2 if len(drawing.buses) <= MOST_HALF_PAGE else 1
    # Each drawing has a title, a line of words and a blank row; the first page has the head, too.
    n_row = min(page_rows // per_page - 5, int(HEIGHT_SHARE * width / charts.PIXELS_PER_ROW))
    tops, row = [], 3
    for note in drawing.stage_notes:
        tops.append(row)
        row += n_row + (3 if note else 2)
    numbers_top = row
    buses = Grid(FEEDER, row + 2, _bus_columns(drawing), len(drawing.buses))
    lines = Grid(FEEDER, buses.below + 2, _line_columns(drawing), len(drawing.lines))
    sheet.text(row, 0, "Buses: place, and state in each drawing", "section")
    _write_buses(sheet, drawing, buses)
    sheet.text(lines.top - 1, 0, "Lines: state in each drawing", "section")
    _write_lines(sheet, drawing, lines)
    walks = [walk for i in range(n_stage) for walk in stage_walks(drawing, i)]
    paths = Grid(FEEDER, lines.below + 3, PATHS, sum(len(walk.buses) for walk in walks))
    sheet.text(paths.top - 1, 0, "Paths: how the charts draw the lines", "section")
    first_row = _write_paths(sheet, drawing, paths, walks)
    for i, (top, title) in enumerate(zip(tops, drawing.stages, strict=True)):
        sheet.text(top, 0, title, "section")
        sheet.text(top + 1, 0, drawing.stage_notes[i])
        chart = _chart(book, drawing, buses, paths, walks, first_row, i, title)
        states = [bus.states[i] for bus in drawing.buses]
        counts = ", ".join(
            f"{states.count(look.word)} {look.label}" for look in LOOKS[:3] if look.word in states
        )
        alt = f"Drawing of the feeder, {title}. Buses: {counts}."[:250]
        height = (n_row - 1) * charts.PIXELS_PER_ROW
        sheet.chart(top + 2, 0, chart, width, height, alt)
    how = (
        "Places are computed: the study gives no x and y for every bus. Distances have no scale."
        if drawing.is_computed
        else "Places are those of the study's Buses sheet."
    )
    sheet.text(numbers_top + 1, 0, how, "note")
    sheet.freeze(2, 0)
    breaks = [*tops[per_page::per_page], numbers_top]
    # What only feeds the charts stays off the printed page.
    sheet.print_setup(lines.below - 1, last_col, breaks=breaks)


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
    rows: list[dict[str, Cell]] = []
    for line in drawing.lines:
        row: dict[str, Cell] = {
            "line": line.line,
            "from": line.from_bus,
            "to": line.to_bus,
            "kind": "normally open tie" if line.is_open else "closed in normal service",
        }
        row.update({f"state {i}": state for i, state in enumerate(line.states)})
        rows.append(row)
    grid.write(sheet, rows)


def _write_paths(
    sheet: SafeSheet, drawing: FeederDrawing, grid: Grid, walks: list[Walk]
) -> list[int]:
    """The points of all walks under one another; the table row at which each begins."""
    place = {bus.bus: (bus.x, bus.y) for bus in drawing.buses}
    rows: list[dict[str, Cell]] = []
    first_row = []
    for n, walk in enumerate(walks):
        first_row.append(len(rows))
        label = next(look.label for look in LOOKS if look.word == walk.state)
        for bus in walk.buses:
            x, y = place[bus]
            name = f"{n + 1}: drawing {walk.i_stage + 1}, {label}"
            rows.append({"path": name, "x": x, "y": y})
    grid.write(sheet, rows)
    return first_row


@dataclass(frozen=True)
class Walk:
    """Buses along which one stroke of a drawing goes.

    Strokes in place of blank cells between lines, which not every program draws alike.
    """

    i_stage: int
    state: str
    buses: tuple[str, ...]


def stage_walks(drawing: FeederDrawing, i_stage: int) -> list[Walk]:
    """Strokes that draw every line of one stage, each of lines in one state.

    A solid stroke goes there and back where lines branch, so that one serves a whole part. A broken
    one would fill its own gaps on the way back: it ends where it is stuck, unless that makes more
    strokes than a chart can hold.
    """
    walks = []
    for look in LOOKS:
        lines = [line for line in drawing.lines if line.states[i_stage] == look.word]
        ways = _ways(lines, goes_back=look.dash == "solid")
        if len(ways) > MOST_STROKES:
            ways = _ways(lines, goes_back=True)
        walks += [Walk(i_stage, look.word, way) for way in ways]
    return walks


def _ways(lines: list[DrawnLine], goes_back: bool) -> list[tuple[str, ...]]:
    """Ways along all lines; without going back each line is on one way, once."""
    at: dict[str, list[tuple[int, str]]] = {}
    for n, line in enumerate(lines):
        at.setdefault(line.from_bus, []).append((n, line.to_bus))
        at.setdefault(line.to_bus, []).append((n, line.from_bus))
    drawn: set[int] = set()
    ways = []
    # Ends first: a way that begins at an end leaves fewer pieces behind.
    for start in sorted(at, key=lambda bus: len(at[bus]) != 1):
        while any(n not in drawn for n, _ in at[start]):
            way, stack = [start], [start]
            while stack:
                further = next(((n, to) for n, to in at[stack[-1]] if n not in drawn), None)
                if further is not None:
                    drawn.add(further[0])
                    stack.append(further[1])
                    way.append(further[1])
                elif goes_back:
                    stack.pop()
                    way += stack[-1:]
                else:
                    break
            ways.append(tuple(way))
    return ways


def _label(bus: str, state: str) -> str:
    """The name and, in words, what befell it; a space before what could pass for a formula."""
    word = next(look.short for look in LOOKS if look.word == state)
    return f"{' ' if bus.startswith('=') else ''}{bus}{word}"


def label_places(drawing: FeederDrawing) -> dict[str, str]:
    """Side of each bus on which its name is clear of lines, as far as there is one."""
    place = {bus.bus: (bus.x, bus.y) for bus in drawing.buses}
    across = max(x for x, _ in place.values()) - min(x for x, _ in place.values())
    upward = max(y for _, y in place.values()) - min(y for _, y in place.values())
    taken: dict[str, set[str]] = {bus: set() for bus in place}
    for line in drawing.lines:
        for here, there in ((line.from_bus, line.to_bus), (line.to_bus, line.from_bus)):
            dx = (place[there][0] - place[here][0]) / (across or 1.0)
            dy = (place[there][1] - place[here][1]) / (upward or 1.0) * HEIGHT_SHARE
            # A name is wide and low: lines that rise gently do not meet one above them.
            if abs(dy) > LEAST_RISE * abs(dx):
                taken[here].add("above" if dy > 0.0 else "below")
            else:
                taken[here].add("right" if dx > 0.0 else "left")
    return {
        bus: next((side for side in LABEL_SIDES if side not in sides), LABEL_SIDES[0])
        for bus, sides in taken.items()
    }


def _chart(
    book: SafeBook,
    drawing: FeederDrawing,
    buses: Grid,
    paths: Grid,
    walks: list[Walk],
    first_row: list[int],
    i: int,
    title: str,
) -> Chart:
    """Lines by state, buses by state over them; names where there is room."""
    used_buses = {bus.states[i] for bus in drawing.buses}
    has_names = len(drawing.buses) <= MOST_LABELS
    sides = label_places(drawing)
    strokes, dots = [], []
    for look in LOOKS:
        key = f"y {i} {look.word}"
        for n, walk in enumerate(walks):
            if (walk.i_stage, walk.state) == (i, look.word):
                strokes.append(
                    charts.Stroke(
                        f"line {look.label}" if look.word != "open" else look.label,
                        paths.chart_rows("x", first_row[n], len(walk.buses)),
                        paths.chart_rows("y", first_row[n], len(walk.buses)),
                        look.colour,
                        look.dash,
                        look.width_pt,
                    )
                )
        if look.word in used_buses:
            labels = tuple(
                _label(bus.bus, look.word) if bus.states[i] == look.word else ""
                for bus in drawing.buses
            )
            dots.append(
                charts.Dots(
                    f"bus {look.label}",
                    buses.chart_values("x"),
                    buses.chart_values(key),
                    look.colour,
                    look.marker,
                    labels if has_names else (),
                    tuple(sides[bus.bus] for bus in drawing.buses),
                )
            )
    xs, ys = [bus.x for bus in drawing.buses], [bus.y for bus in drawing.buses]
    return charts.drawing(
        book, title, strokes, dots, charts.padded(xs), charts.padded(ys, ROOM_FOR_NAMES)
    )
