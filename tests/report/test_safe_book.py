"""What xlsxwriter would let pass is an error here."""

from __future__ import annotations

import warnings
from pathlib import Path

import openpyxl
import pytest

from xlplan.report.safe_book import SafeBook, WorkbookFault


def new_book(path: Path) -> SafeBook:
    return SafeBook(path, "crowns", 1e6)


def test_text_stays_text(tmp_path: Path) -> None:
    path = tmp_path / "book.xlsx"
    texts = ["=1+1", "{=1+1}", "http://x", "mailto:a", "+1", "@SUM(A1)", "12", "internal:Sheet!A1"]
    with new_book(path) as book:
        sheet = book.add_sheet("S")
        for row, text in enumerate(texts):
            sheet.text(row, 0, text)
        sheet.paragraph(20, 0, 2, "=2+2", 50)
    cells = openpyxl.load_workbook(path)["S"]
    read = [cells.cell(row + 1, 1) for row in range(len(texts))] + [cells.cell(21, 1)]
    assert [cell.value for cell in read] == [*texts, "=2+2"]
    assert {cell.data_type for cell in read} == {"s"}
    assert all(cell.hyperlink is None for cell in read)


def test_return_codes_are_raised(tmp_path: Path) -> None:
    book = new_book(tmp_path / "book.xlsx")
    sheet = book.add_sheet("S")
    for write in (
        lambda: sheet.text(2_000_000, 0, "x"),
        lambda: sheet.number(0, 20_000, 1.0),
        lambda: sheet.number(0, 0, float("nan")),
        lambda: sheet.formula(0, 0, "=1", float("inf")),
        lambda: sheet.formula(0, 0, "=1", ""),
        lambda: sheet.formula(2_000_000, 0, "=1", 1.0),
    ):
        with pytest.raises(WorkbookFault):
            write()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for write in (
            lambda: book.new_chart("no such kind"),
            lambda: book.define_name("2 bad name", "S", "$A$1"),
            lambda: sheet.chart(2_000_000, 0, book.new_chart("bar"), 10, 10, "x"),
        ):
            with pytest.raises(WorkbookFault):
                write()


def test_formula_keeps_its_value(tmp_path: Path) -> None:
    path = tmp_path / "book.xlsx"
    with new_book(path) as book:
        sheet = book.add_sheet("S")
        sheet.formula(0, 0, "=1+1", 2.0)
        sheet.formula(1, 0, '="a"&"b"', "ab")
    cells = openpyxl.load_workbook(path, data_only=True)["S"]
    assert cells["A1"].value == 2
    assert cells["A2"].value == "ab"


def test_long_text_is_cut_in_sight(tmp_path: Path) -> None:
    path = tmp_path / "book.xlsx"
    with new_book(path) as book:
        book.add_sheet("S").text(0, 0, "x" * 40_000)
    text = openpyxl.load_workbook(path)["S"]["A1"].value
    assert len(text) <= 32_767
    assert text.endswith("…")


def test_no_file_after_an_exception(tmp_path: Path) -> None:
    path = tmp_path / "book.xlsx"
    with pytest.raises(ZeroDivisionError), new_book(path) as book:
        book.add_sheet("S").number(0, 0, 1 / 0)
    assert not path.exists()


def test_footer_escapes_and_fits(tmp_path: Path) -> None:
    path = tmp_path / "book.xlsx"
    with SafeBook(path, "crowns", 1.0, footer_note="a & b" + "&" * 300) as book:
        sheet = book.add_sheet("S")
        sheet.text(0, 0, "x")
        sheet.print_setup(0, 0)
    footer = openpyxl.load_workbook(path)["S"].oddFooter
    assert footer is not None
    assert footer.left.text.startswith("a && b&&")
