"""Places of tables, and the room that wrapped text takes."""

from __future__ import annotations

import pytest

from xlplan.report.grid import Column, Grid
from xlplan.report.room import lines_needed

GRID = Grid("Plan", 4, (Column("a", "A"), Column("b", "B (kW)", "power")), 3, left=2)


def test_addresses() -> None:
    # Heading in row 5, so the first row is 6; column b is the fourth, D.
    assert GRID.here(0, "b") == "D6"
    assert GRID.fixed(2, "a") == "$C$8"
    assert GRID.away(1, "b") == "'Plan'!$D$7"
    assert GRID.span("b") == "$D$6:$D$8"
    assert GRID.span("b", 1, 2) == "$D$7:$D$8"
    assert GRID.chart_values("b") == ["Plan", 5, 3, 7, 3]
    assert GRID.below == 8


def test_empty_table_still_takes_a_row() -> None:
    assert Grid("Plan", 0, GRID.columns, 0).below == 2


@pytest.mark.parametrize(
    ("text", "room", "lines"),
    [("", 5, 1), ("abc", 5, 1), ("abc de", 5, 2), ("abcdefghijkl", 5, 3), ("a b c d e f", 5, 2)],
)
def test_lines_needed(text: str, room: float, lines: int) -> None:
    assert lines_needed(text, room) == lines
