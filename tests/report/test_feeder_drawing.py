"""The drawing of the feeder: every line in one stroke of its state, blanks where nothing is."""

from __future__ import annotations

from collections import Counter
from itertools import pairwise
from pathlib import Path

import openpyxl

from xlplan.compare.study_result import DrawnBus, DrawnLine, FeederDrawing
from xlplan.report.sheets.feeder import stage_walks

from .made_up import made_up_drawing


def test_strokes_go_along_lines_of_one_state_and_miss_none():
    drawing = made_up_drawing()
    ends = {frozenset((line.from_bus, line.to_bus)): line for line in drawing.lines}
    for i_stage in range(2):
        seen: Counter[str] = Counter()
        for walk in stage_walks(drawing, i_stage):
            for step in pairwise(walk.buses):
                line = ends[frozenset(step)]
                assert line.states[i_stage] == walk.state
                seen[line.line] += 1
        assert set(seen) == {line.line for line in drawing.lines}


def test_parts_apart_are_strokes_apart():
    """Normal service: three live lines in a fork, and the open tie; then all but the tie dead."""
    drawing = made_up_drawing()
    assert [walk.state for walk in stage_walks(drawing, 0)] == ["live", "open"]
    fork = stage_walks(drawing, 0)[0]
    assert fork.buses[0] == fork.buses[-1] == "=S"
    # A dotted fork is two strokes, so that none fills the gaps of another.
    assert [walk.state for walk in stage_walks(drawing, 1)] == ["live", "dead", "dead"]


def test_a_dotted_line_is_drawn_once():
    drawing = made_up_drawing()
    steps = Counter(
        frozenset(step)
        for walk in stage_walks(drawing, 1)
        if walk.state == "dead"
        for step in pairwise(walk.buses)
    )
    assert set(steps.values()) == {1}


def test_a_chart_never_holds_more_strokes_than_it_can():
    """A star of 300 dead lines: one stroke there and back instead of 150."""
    buses = tuple(DrawnBus(f"B{i}", float(i), 0.0, ("dead",), "") for i in range(301))
    lines = tuple(DrawnLine(f"L{i}", "B0", f"B{i}", False, ("dead",)) for i in range(1, 301))
    star = FeederDrawing(buses, lines, ("x",), ("",), True)
    (walk,) = stage_walks(star, 0)
    assert len(walk.buses) == 601


def test_a_bus_is_drawn_under_its_state_alone(workbook_path: Path):
    sheet = openpyxl.load_workbook(workbook_path, data_only=True)["Feeder"]
    rows = list(sheet.iter_rows(values_only=True))
    head = next(i for i, row in enumerate(rows) if row[0] == "Bus")
    at = {title: col for col, title in enumerate(rows[head]) if title}
    by_bus = {row[0]: row for row in rows[head + 1 : head + 5]}
    island = by_bus["B02"]
    assert island[at["State: Worst: L1, repair"]] == "island"
    assert island[at["y if cut off: island (2)"]] == 0.0
    # Empty, not an empty text: a chart would draw that at 0.
    assert island[at["y if live (2)"]] is None
    assert island[at["y if dead by the fault (2)"]] is None
