"""Findings as lines: grouped by sheet, ranges down a column, wrapped, bounded."""

from __future__ import annotations

import pytest

from xlplan.base.errors import Finding, Level
from xlplan.base.listing import cell_ranges, group_findings, listed


def finding(
    cell: str,
    message: str = "-3 is below 0.",
    sheet: str = "Lines",
    level: Level = Level.FAULT,
    key: str = "length",
) -> Finding:
    return Finding(level, "out of bounds", sheet, cell, key, "-3", message, "Give it in km.")


@pytest.mark.parametrize(
    ("cells", "text"),
    [
        ([], ""),
        (["D5"], "D5"),
        (["D5", "D6"], "D5:D6"),
        (["D7", "D5", "D6", "D9"], "D5:D7, D9"),
        (["AA2", "B3", "B2", "B2"], "B2:B3, AA2"),
        (["", "D1"], "D1"),
    ],
)
def test_cells_as_ranges(cells: list[str], text: str) -> None:
    assert cell_ranges(cells) == text


def test_equal_findings_down_a_column_are_one_line_with_their_range() -> None:
    lines = listed([finding(f"D{row}") for row in (5, 6, 7, 9)])
    assert lines == [
        "Lines (4 faults)",
        "  fault    Lines!D5:D7, D9 length: -3 is below 0. Give it in km.",
    ]


def test_of_different_ones_of_a_kind_the_first_are_shown_and_the_others_counted() -> None:
    findings = [finding(f"D{row}", f"-{row} is below 0.") for row in range(5, 15)]
    groups = group_findings(findings)
    assert [group.cells for group in groups[:3]] == [("D5",), ("D6",), ("D7",)]
    [rest] = groups[3:]
    assert rest.cells == tuple(f"D{row}" for row in range(8, 15))
    assert "Lines!D8:D14 length: 7 more of this kind" in rest.text()
    # Four are shown one by one: "1 more" would be no shorter than the line itself.
    assert len(group_findings(findings[:4])) == 4


def test_sheets_stand_in_order_with_their_faults_first() -> None:
    lines = listed(
        [
            finding("A6", sheet="Loads", level=Level.NOTE),
            finding("D9", sheet="Loads"),
            finding("D6", sheet="Lines", level=Level.WARNING),
        ]
    )
    assert [line.split()[0] for line in lines] == ["Loads", "fault", "note", "Lines", "warning"]
    assert lines[0] == "Loads (1 fault, 1 note)"


def test_lines_fit_their_width_and_lose_nothing() -> None:
    long = finding("D5", "a message of many words " * 12)
    lines = listed([long], width=80)
    assert max(map(len, lines)) <= 80
    assert len(lines) > 4
    assert " ".join(" ".join(lines[1:]).split()) == f"fault {' '.join(long.text().split())}"


def test_a_very_long_list_ends_with_how_many_are_left_out() -> None:
    findings = [finding(f"D{row}", sheet=f"Sheet {row}") for row in range(500)]
    lines = listed(findings, most=20)
    assert len(lines) == 41
    assert lines[-1] == "480 more findings are not listed here."


def test_no_text_of_a_cell_breaks_a_line() -> None:
    lines = listed([finding("D5", "typed: \x1b[2J\nand \u2028 more", sheet="S\x85")])
    assert all(len(line.splitlines()) == 1 and "\x1b" not in line for line in lines)
