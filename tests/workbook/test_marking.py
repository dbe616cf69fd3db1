"""The marked copy: every finding a line that leads to its cell, filled and with a note."""

from __future__ import annotations

import datetime as dt
import os
from pathlib import Path
from typing import Any

import openpyxl
import pytest

from tests.workbook.demo_sheets import Book
from xlplan.base.errors import Finding, Level
from xlplan.base.listing import listed as listed_lines
from xlplan.cli import main
from xlplan.workbook.marking import MOST_ROWS_COPIED, write_marked
from xlplan.workbook.tables import Cell
from xlplan.workbook.template import write_template

HEADINGS = [
    *("Level", "Sheet", "Cell", "Column or setting", "Found", "What is wrong", "Allowed"),
    "What to do",
]


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The demo with slips, texts like formulas among them, and remarks of the user's own."""
    path = tmp_path_factory.mktemp("study") / "study.xlsx"
    write_template(path, with_demo=True)
    book = openpyxl.load_workbook(path)
    loads = book["Loads"]
    for address, value in (
        ("D6", "1,200 kW"),
        ("B7", "B99"),
        ("A8", dt.datetime(2026, 2, 1)),
        ("E9", 96),
        ("D10", "=SUM(A1)"),
        ("L5", "Remarks"),
        ("L6", "'=1+1"),
        ("L7", "+41 555"),
    ):
        loads[address] = value
    loads["L6"].value = "=1+1"
    loads["L6"].data_type = "s"
    book["Lines"]["D6"] = -3
    book["Lines"]["D7"] = None
    book.save(path)
    return path


@pytest.fixture(scope="module")
def marked(study: Path) -> Any:
    out = study.with_name("marked.xlsx")
    before = study.read_bytes()
    assert main(["check", str(study), "--mark", str(out)]) == 2
    assert study.read_bytes() == before
    return openpyxl.load_workbook(out)


def listed(book: Any) -> list[dict[str, Any]]:
    page = book["Findings"]
    assert [cell.value for cell in page[4]] == HEADINGS
    return [
        dict(zip(HEADINGS, row, strict=True)) for row in page.iter_rows(min_row=5) if row[0].value
    ]


def test_every_fault_has_a_line_with_what_is_allowed_and_what_to_do(marked: Any) -> None:
    lines = listed(marked)
    places = {(line["Sheet"].value, line["Cell"].value) for line in lines}
    assert {("Loads", a) for a in ("D6", "B7", "A8", "E9", "D10")} <= places
    assert {("Lines", "D6"), ("Lines", "D7")} <= places
    by_place = {(line["Sheet"].value, line["Cell"].value): line for line in lines}
    share = by_place["Loads", "E9"]
    assert share["Level"].value == "fault"
    assert share["Found"].value == "96"
    assert share["Column or setting"].value == "Power factor"
    assert share["Allowed"].value == "a number, above 0, up to 1, or blank"
    assert "0.96" in share["What to do"].value


def test_every_line_leads_to_its_cell_which_is_filled_and_has_a_note(marked: Any) -> None:
    for line in listed(marked):
        sheet, address = line["Sheet"].value, line["Cell"].value
        if sheet not in marked.sheetnames or not address or address == "sheet":
            continue
        assert line["Cell"].hyperlink.location == f"'{sheet}'!{address}"
        cell = marked[sheet][address]
        assert cell.fill.fgColor.rgb not in (None, "00000000")
        assert line["What is wrong"].value in cell.comment.text
        assert cell.comment.text.lower().startswith(("fault", "warning", "note"))
    assert not marked["Loads"]["D8"].comment


def test_copies_hold_the_values_at_their_addresses(study: Path, marked: Any) -> None:
    for name in ("Loads", "Lines"):
        original = openpyxl.load_workbook(study)[name]
        copy = marked[name]
        for row in original.iter_rows():
            for cell in row:
                other = copy[cell.coordinate].value
                if cell.data_type == "f":
                    assert other == "(a formula, never calculated)"
                else:
                    assert other == cell.value, cell.coordinate


def test_nothing_in_it_is_a_formula(marked: Any) -> None:
    types = {cell.data_type for page in marked for row in page.iter_rows() for cell in row}
    assert "f" not in types
    assert marked["Loads"]["L6"].value == "=1+1"
    assert marked["Loads"]["L7"].value == "+41 555"


def test_only_sheets_with_findings_are_copied(marked: Any) -> None:
    assert marked.sheetnames == ["Findings", "Loads", "Lines", "Hardening"]


def test_a_name_that_is_taken_is_kept_and_the_next_one_said(
    study: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    out = tmp_path / "mine.xlsx"
    out.write_text("mine")
    assert main(["check", str(study), "--mark", str(out)]) == 2
    assert out.read_text() == "mine"
    assert (tmp_path / "mine-2.xlsx").exists()
    assert "mine-2.xlsx" in capsys.readouterr().out
    assert sorted(path.name for path in tmp_path.iterdir()) == ["mine-2.xlsx", "mine.xlsx"]


@pytest.mark.parametrize("how", ["same", "link", "hard link", "folder", "nowhere", "ending"])
def test_places_that_are_refused(
    study: Path, tmp_path: Path, how: str, capsys: pytest.CaptureFixture[str]
) -> None:
    before = study.read_bytes()
    out = {
        "same": study,
        "link": tmp_path / "link.xlsx",
        "hard link": tmp_path / "hard.xlsx",
        "folder": tmp_path / "folder.xlsx",
        "nowhere": tmp_path / "none" / "out.xlsx",
        "ending": tmp_path / "out.csv",
    }[how]
    if how == "link":
        out.symlink_to(study)
    elif how == "hard link":
        os.link(study, out)
    elif how == "folder":
        out.mkdir()
    assert main(["check", str(study), "--mark", str(out)]) == 1
    assert len(capsys.readouterr().err.splitlines()) == 1
    assert study.read_bytes() == before


def test_a_study_without_findings_gives_a_list_that_says_so(tmp_path: Path) -> None:
    raw = Book().check().raw
    write_marked(tmp_path / "out.xlsx", raw, [])
    book = openpyxl.load_workbook(tmp_path / "out.xlsx")
    assert book.sheetnames == ["Findings"]
    assert "nothing was found" in book["Findings"]["A2"].value


def test_of_a_long_sheet_the_rows_around_the_findings_are_copied(tmp_path: Path) -> None:
    book = Book()
    n_row = MOST_ROWS_COPIED + 500
    for row in range(200, 200 + n_row):
        book.rows("Profiles")[row] = dict(book.rows("Profiles")[197])
    raw = book.check().raw
    finding = Finding(Level.FAULT, "blank", "Profiles", "B4000", "homes", "", "is blank.")
    write_marked(tmp_path / "out.xlsx", raw, [finding])
    page = openpyxl.load_workbook(tmp_path / "out.xlsx")["Profiles"]
    filled = [row[0].row for row in page.iter_rows() if row[0].value is not None]
    assert {3995, 4000, 4005} <= set(filled)
    assert len(filled) < 40
    assert page["B4000"].comment is not None


@pytest.mark.parametrize(
    "value", [1e300, -1e308, float("inf"), dt.datetime(1899, 1, 1), "x" * 40_000]
)
def test_values_that_a_cell_cannot_hold_become_text(tmp_path: Path, value: object) -> None:
    book = Book()
    book.set("Loads!D6", value)
    checked = book.check()
    write_marked(tmp_path / "out.xlsx", checked.raw, checked.findings)
    assert openpyxl.load_workbook(tmp_path / "out.xlsx")["Loads"]["D6"].value is not None


def test_ten_thousand_findings_are_a_bounded_list(tmp_path: Path) -> None:
    book = Book()
    for row in range(6, 1300):
        for column in "ABCDEFGH":
            book.rows("Profiles").setdefault(row, {})
            number = ord(column) - ord("A") + 1
            book.rows("Profiles")[row][number] = Cell("Profiles", f"{column}{row}", f"~{row}")
    checked = book.check()
    faults = [f for f in checked.findings if f.level is Level.FAULT]
    assert 8 * 50 <= len(faults) <= 1000  # of each kind in each column no more than fifty
    assert any("1244 other cells" in finding.message for finding in faults)
    assert len(listed_lines(checked.findings)) < 300
    write_marked(tmp_path / "out.xlsx", checked.raw, checked.findings)
    page = openpyxl.load_workbook(tmp_path / "out.xlsx")["Findings"]
    assert page.max_row == 4 + len(checked.findings)
