"""Sheets, headings and rows as people really leave them; formulas, merges, hidden things."""

from __future__ import annotations

import datetime as dt
import hashlib
import shutil
import subprocess
import zipfile
from pathlib import Path

import pytest
import xlsxwriter
from openpyxl import Workbook
from openpyxl.utils import get_column_letter

from tests.workbook.study_tables import DAY, SETTINGS, TABLES, check_file, places, study_workbook
from xlplan.base.errors import Level
from xlplan.schema.fields import load_sheets
from xlplan.study.build import check_and_build
from xlplan.workbook.reader import read_workbook
from xlplan.workbook.sheet_facts import SheetFacts, sheet_facts
from xlplan.workbook.template import write_study_workbook, write_template

FAULT, WARNING, NOTE = Level.FAULT, Level.WARNING, Level.NOTE


def test_every_value_keeps_its_cell(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    study_workbook().save(path)
    raw = read_workbook(path)
    for name, (keys, rows) in TABLES.items():
        table = raw.tables[name]
        assert [row.number for row in table.rows] == list(range(2, len(rows) + 2))
        for row, typed in zip(table.rows, rows, strict=True):
            for column, (key, value) in enumerate(zip(keys, typed, strict=True), start=1):
                cell = row.cell(key)
                assert cell.value == value
                assert cell.address == f"{get_column_letter(column)}{row.number}"
    [settings] = raw.tables["Settings"].rows
    for number, (key, value) in enumerate(SETTINGS, start=2):
        assert (settings.cell(key).value, settings.cell(key).address) == (value, f"B{number}")


def test_the_fingerprint_is_that_of_the_file(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    study_workbook().save(path)
    expected = hashlib.sha256(path.read_bytes()).hexdigest()
    assert read_workbook(path).fingerprint == f"sha256:{expected}"


def test_the_file_is_not_written_to_nor_kept_open(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    study_workbook().save(path)
    before = (path.read_bytes(), path.stat().st_mtime_ns)
    read_workbook(path)
    assert (path.read_bytes(), path.stat().st_mtime_ns) == before
    path.unlink()


# Cosmetic changes give the same study


def _titles_for_keys(book: Workbook) -> None:
    """Headings as people write them: other case, spaces, line breaks, without units."""
    for schema in load_sheets():
        sheet = book[schema.name]
        if schema.is_settings:
            for row in range(2, sheet.max_row + 1):
                key = sheet.cell(row, 1).value
                sheet.cell(row, 1).value = schema.field(key).title.upper()
            continue
        for cell in sheet[1]:
            if cell.value in [field.key for field in schema.fields]:
                title = schema.field(cell.value).title
                cell.value = f" {title.lower().replace(' ', chr(10), 1)}  "


def _notes_beside(book: Workbook) -> None:
    sheet = book["Loads"]
    sheet["J1"] = "Remarks of mine"
    sheet["J2"] = "metered in March"
    sheet["L9"] = "see the other file"
    book.create_sheet("My workings")["A1"] = 3


def _moved_down_and_right(book: Workbook) -> None:
    book["Lines"].insert_rows(1, 3)
    book["Lines"].insert_cols(1, 2)
    book["Lines"]["A1"] = "Lines of the feeder"


def _columns_reversed(book: Workbook) -> None:
    for name, (keys, rows) in TABLES.items():
        sheet = book[name]
        for i_row, row in enumerate((keys, *rows), start=1):
            for column, value in enumerate(reversed(row), start=1):
                cell = sheet.cell(i_row, column)
                cell.number_format = "General"  # a date's format must not stay behind
                cell.value = value


def _sheets_renamed(book: Workbook) -> None:
    book["Lines"].title = "LINES "
    book["Storage curves"].title = "storage  Curves"
    book.move_sheet("Settings", 5)


@pytest.mark.parametrize(
    "change",
    [_titles_for_keys, _notes_beside, _moved_down_and_right, _columns_reversed, _sheets_renamed],
)
def test_a_cosmetic_change_gives_the_same_study(tmp_path: Path, change: object) -> None:
    (tmp_path / "plain").mkdir()
    plain, _ = check_file(tmp_path / "plain")
    changed, findings = check_file(tmp_path, change)  # type: ignore[arg-type]
    assert plain is not None
    assert changed is not None, [finding.text() for finding in findings]
    assert places(findings, WARNING) == set()
    for name in ("buses", "loads", "lines", "generators", "storage", "windows", "measures"):
        for mine, other in zip(getattr(plain, name), getattr(changed, name), strict=True):
            without_origin = {k: v for k, v in vars(mine).items() if k != "origin"}
            assert without_origin == {k: v for k, v in vars(other).items() if k != "origin"}
    assert set(changed.profiles.values) == {"day", "sun", "price", "gusts"}
    for name, values in plain.profiles.values.items():
        assert changed.profiles.values[name].tolist() == values.tolist()


# Shapes that are faults, or are said


def _set(sheet: str, **cells: object):
    def change(book: Workbook) -> None:
        for address, value in cells.items():
            book[sheet][address] = value

    return change


def _merge(sheet: str, area: str):
    return lambda book: book[sheet].merge_cells(area)


def _hide_row(book: Workbook) -> None:
    book["Loads"].row_dimensions[3].hidden = True


def _hide_setting(book: Workbook) -> None:
    book["Settings"].row_dimensions[4].hidden = True


def _hide_column(book: Workbook) -> None:
    book["Loads"].column_dimensions["D"].hidden = True


def _hide_sheet(book: Workbook) -> None:
    book["Loads"].sheet_state = "veryHidden"


def _gap(book: Workbook) -> None:
    book["Loads"].insert_rows(3, 2)


def _rename(old: str, new: str):
    def change(book: Workbook) -> None:
        book[old].title = new

    return change


def _remove(name: str):
    return lambda book: book.remove(book[name])


def _two_sheets(book: Workbook) -> None:
    book.create_sheet("Lines ")


SHAPES = [
    (_set("Lines", P1="length"), FAULT, "heading twice", "Lines!P1"),
    (_set("Lines", D1="Lenght"), FAULT, "heading near miss", "Lines!D1"),
    (_set("Lines", B1="Whence"), FAULT, "column missing", "Lines!A1"),
    (_set("Loads", D1="Peak load (MW)"), WARNING, "heading unit", "Loads!D1"),
    (_set("Lines", D1="Length (ft)"), WARNING, "heading unit", "Lines!D1"),
    (_set("Loads", J1="Remarks"), NOTE, "column ignored", "Loads!J1"),
    (_set("Loads", D4=500), FAULT, "row without id", "Loads!A4"),
    (_set("Loads", A4="Total", D4=500), FAULT, "totals row", "Loads!A4"),
    (_set("Settings", A24="base_kv", B24=11), FAULT, "heading twice", "Settings!B24"),
    (_set("Settings", A8="period_minuets"), FAULT, "heading near miss", "Settings!A8"),
    (_set("Settings", A4="voltage of ours"), FAULT, "blank", "Settings!"),
    (_set("Settings", B4=None), FAULT, "blank", "Settings!B4"),
    (_set("Settings", C1="Unit", C6="MVA"), WARNING, "heading unit", "Settings!C6"),
    (_merge("Loads", "B2:B3"), FAULT, "merged cells", "Loads!B2"),
    (_merge("Loads", "A1:B1"), FAULT, "merged cells", "Loads!A1"),
    (_hide_row, NOTE, "hidden rows", "Loads!A3"),
    (_hide_setting, NOTE, "hidden rows", "Settings!A4"),
    (_hide_column, NOTE, "hidden column", "Loads!D3"),
    (_hide_sheet, NOTE, "hidden sheet", "Loads!"),
    (_gap, NOTE, "blank rows", "Loads!A2"),
    (_rename("Loads", "Demand"), FAULT, "sheet missing", "Loads!"),
    (_rename("Generators", "Generator"), FAULT, "sheet missing", "Generators!"),
    (_remove("Windows"), FAULT, "sheet missing", "Windows!"),
    (_remove("Settings"), FAULT, "sheet missing", "Settings!"),
    (_two_sheets, FAULT, "sheet twice", "Lines!"),
    (_set("Profiles", F1="day"), NOTE, "column ignored", "Profiles!F1"),
    (_set("Profiles", F1="Day", F2=1), FAULT, "heading twice", "Profiles!F1"),
    (_set("Profiles", F5=1), FAULT, "profile without name", "Profiles!F1"),
    (_set("Profiles", G1="sums", G5=1), NOTE, "column ignored", "Profiles!G1"),
    (_set("Profiles", F1="=A1", F5=1), FAULT, "formula not calculated", "Profiles!F1"),
    (_set("Lines", D1="#REF!"), FAULT, "excel error", "Lines!D1"),
    (_set("Loads", C2="Homes\nof us"), FAULT, "unknown name", "Loads!C2"),
    (_set("Profiles", F1="half", F2=1), FAULT, "blank", "Profiles!F3"),
    (_set("Lines", D2="#N/A"), FAULT, "excel error", "Lines!D2"),
    (_set("Lines", D2="2.0"), NOTE, "text number", "Lines!D2"),
    (_set("Lines", D2="=1+1"), FAULT, "formula not calculated", "Lines!D2"),
    (_set("Lines", K2="=1+1"), FAULT, "formula not calculated", "Lines!K2"),
    (_set("Loads", A4="=B4"), FAULT, "formula not calculated", "Loads!A4"),
    (_set("Profiles", B9="=B8"), FAULT, "formula not calculated", "Profiles!B9"),
    (_set("Lines", O4="Main\u200b"), NOTE, "name tidied", "Lines!O4"),
    (_set("Buses", A5=dt.datetime(2030, 1, 2)), FAULT, "date for name", "Buses!A5"),
    (_set("Buses", A5="12", A6="0012"), WARNING, "names alike", "Buses!A6"),
    (_set("Buses", A5=12), NOTE, "number as name", "Buses!A5"),
]


@pytest.mark.parametrize(
    ("change", "level", "code", "cell"),
    SHAPES,
    ids=[f"{i} {code} {cell}" for i, (_, _, code, cell) in enumerate(SHAPES)],
)
def test_shapes(tmp_path: Path, change: object, level: Level, code: str, cell: str) -> None:
    study, findings = check_file(tmp_path, change)  # type: ignore[arg-type]
    assert (code, cell) in places(findings, level)
    assert (study is None) == bool(places(findings, FAULT))
    assert all(f.sheet and f.message and "\n" not in f.text() for f in findings)


def test_merged_cells_beside_or_above_the_table_are_left_alone(tmp_path: Path) -> None:
    def change(book: Workbook) -> None:
        book["Loads"].insert_rows(1, 2)
        book["Loads"].merge_cells("A1:F1")
        book["Loads"].merge_cells("K3:K6")

    assert check_file(tmp_path, change)[1] == []


def _replace_in_parts(path: Path, old: bytes, new: bytes) -> None:
    """Replaces bytes in every part of a workbook file; they must occur."""
    with zipfile.ZipFile(path) as archive:
        parts = {name: archive.read(name) for name in archive.namelist()}
    assert any(old in part for part in parts.values())
    with zipfile.ZipFile(path, "w") as archive:
        for name, part in parts.items():
            archive.writestr(name, part.replace(old, new))


def test_a_formula_with_a_stored_value_is_used_and_counted(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    with xlsxwriter.Workbook(path) as book:
        sheet = book.add_worksheet("Buses")
        for column, text in enumerate(("Bus", "Capacitor (kvar)")):
            sheet.write_string(0, column, text)
        sheet.write_string(1, 0, "S")
        sheet.write_formula(1, 1, "=100+50", None, 150)
        sheet.write_string(2, 0, "B1")
        sheet.write_formula(2, 1, '=IF(1>0,"","x")', None, "")
    # A spreadsheet program marks a calculated empty text so; xlsxwriter leaves the mark out.
    _replace_in_parts(path, b'<c r="B3">', b'<c r="B3" t="str">')
    raw = read_workbook(path)
    first, second = raw.tables["Buses"].rows
    assert first.cell("capacitor_kvar").value == 150
    assert not second.cell("capacitor_kvar").is_uncalculated  # a calculated empty text is blank
    assert raw.n_formula == 2


def test_a_percent_cell_is_read_as_percent(tmp_path: Path) -> None:
    def change(book: Workbook) -> None:
        cell = book["Storage"]["K2"]
        cell.value, cell.number_format = 0.3, "0%"

    study, findings = check_file(tmp_path, change)
    assert study is not None
    assert findings == []
    assert study.storage[0].grant_frac == pytest.approx(0.3, abs=1e-15)


def test_one_note_stands_for_a_column_of_numbers_used_as_names(tmp_path: Path) -> None:
    def change(book: Workbook) -> None:
        for row in range(5, 12):
            book["Buses"].cell(row, 1).value = row

    _, findings = check_file(tmp_path, change)
    notes = [finding for finding in findings if finding.code == "number as name"]
    assert [note.cell for note in notes] == ["A5"]
    assert "6 other cells" in notes[0].message


def test_formatting_down_to_the_last_row_does_not_hold_up_reading(tmp_path: Path) -> None:
    def change(book: Workbook) -> None:
        book["Loads"]["XFD1048576"].number_format = "0.0"

    study, findings = check_file(tmp_path, change)
    assert study is not None
    assert {code for code, _ in places(findings)} == {"reading stopped"}


def test_a_wrong_stated_size_cuts_nothing_off(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    study_workbook().save(path)
    _replace_in_parts(path, b'<dimension ref="A1:H3"', b'<dimension ref="A1"')
    study, findings = check_and_build(read_workbook(path))
    assert findings == []
    assert study is not None
    assert len(study.loads) == 2


def test_a_study_written_from_the_template_reads_back(tmp_path: Path) -> None:
    """The template's own layout: titles with units as headings, notes, tables, dropdowns."""
    path = tmp_path / "study.xlsx"
    tables = {
        name: [dict(zip(keys, row, strict=True)) for row in rows]
        for name, (keys, rows) in TABLES.items()
    }
    write_study_workbook(path, tables, dict(SETTINGS))
    (tmp_path / "plain").mkdir()
    plain, _ = check_file(tmp_path / "plain")
    study, findings = check_and_build(read_workbook(path))
    assert [finding.text() for finding in findings] == []
    assert study is not None
    assert plain is not None
    assert [line.r_ohm for line in study.lines] == [line.r_ohm for line in plain.lines]
    assert [w.start_row for w in study.windows] == [0, 24]
    assert study.profiles.times[0] == DAY


def test_the_demo_has_no_faults_and_the_blank_template_no_traceback(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    write_template(path, with_demo=True)
    study, findings = check_and_build(read_workbook(path))
    assert study is not None, [finding.text() for finding in findings]
    write_template(path)
    study, findings = check_and_build(read_workbook(path))
    assert study is None
    assert {"blank", "sheet empty"} == {code for code, _ in places(findings, FAULT)}


# Files of other programs


@pytest.mark.skipif(shutil.which("soffice") is None, reason="LibreOffice is not installed")
def test_a_study_saved_by_libreoffice_is_the_same(
    tmp_path: Path,
) -> None:
    path = tmp_path / "study.xlsx"
    write_template(path, with_demo=True)
    command = ["soffice", f"-env:UserInstallation={(tmp_path / 'office').as_uri()}", "--headless"]
    words = ["--convert-to", "xlsx", "--outdir", str(tmp_path / "xlsx"), str(path)]
    subprocess.run([*command, *words], check=True, capture_output=True, timeout=120)
    plain, _ = check_and_build(read_workbook(path))
    saved, findings = check_and_build(read_workbook(tmp_path / "xlsx" / "study.xlsx"))
    assert places(findings) == {("measures share line", "Hardening!B7")}
    assert plain is not None
    assert saved is not None
    for name in ("loads", "lines", "generators", "storage", "windows", "customer_classes"):
        for mine, other in zip(getattr(plain, name), getattr(saved, name), strict=True):
            without_origin = {k: v for k, v in vars(mine).items() if k != "origin"}
            assert without_origin == {k: v for k, v in vars(other).items() if k != "origin"}
    for name, values in plain.profiles.values.items():
        assert saved.profiles.values[name].tolist() == values.tolist()


def _facts_both_ways(xml: bytes) -> tuple[SheetFacts, SheetFacts]:
    """The facts by searching, and by parsing after a remark was put in."""
    parsed = xml.replace(b"<sheetData>", b"<!-- a remark --><sheetData>")
    assert parsed != xml
    return sheet_facts(xml), sheet_facts(parsed)


def test_searching_a_sheet_finds_what_parsing_finds() -> None:
    xml = b"""<worksheet xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main">
    <cols><col min="2" max="3" hidden="1" width="9"/><col min="5" max="5"/></cols><sheetData>
    <row r="1"><c r="A1" s="1" t="s"><v>0</v></c><c r="B1"><f>1+1</f></c></row>
    <row r="2" hidden="1"><c r="A2"><f>A1</f><v>2</v></c><c r="B2" t="str"><f>""</f><v></v></c>
    <c r="C2"><f t="shared" ref="C2:C4" si="0">[1]Sheet1!A1</f><v>4</v></c></row>
    <row r="3" hidden="true"><c r="C3"><f t="shared" si="0"/><v>5</v></c></row>
    <row r="4" hidden="0"><c r="C4"><f t="shared" si="0"/></c><c r="D4"/><c r="E4"><f/></c></row>
    </sheetData><mergeCells count="1"><mergeCell ref="A6:B7"/></mergeCells></worksheet>"""
    found, parsed = _facts_both_ways(xml)
    assert found == parsed
    assert found.hidden_rows == {2, 3}
    assert found.hidden_columns == {2, 3}
    assert found.merged_ranges == ["A6:B7"]
    assert found.uncalculated == {"B1", "C4", "E4"}
    assert found.external == ["C2"]
    assert found.n_formula == 7


@pytest.mark.parametrize("name", ["template-1-demo.xlsx"])
def test_searching_and_parsing_agree_on_real_sheets(name: str) -> None:
    n_sheet = 0
    with zipfile.ZipFile(Path(__file__).parent / "data" / name) as archive:
        for part in archive.namelist():
            if part.startswith("xl/worksheets/sheet"):
                found, parsed = _facts_both_ways(archive.read(part))
                assert found == parsed
                n_sheet += 1
    assert n_sheet == 20
