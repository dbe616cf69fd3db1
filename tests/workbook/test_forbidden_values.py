"""Whatever the schema forbids in a cell is found at that very cell; no input at all is a traceback.

The oracle is an independent validator of the same schemas. Values that the schema forbids and the
program reads all the same, with a note (a number stored as text, say), are not drawn.
"""

from __future__ import annotations

import datetime as dt
import io
import json
import random
import zipfile
from pathlib import Path

import jsonschema
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from openpyxl.utils import get_column_letter

from tests.workbook.demo_sheets import HEADING_ROW, Book
from xlplan.base.errors import Level
from xlplan.cli import main
from xlplan.schema.fields import Field, Kind, load_sheets, schema_text
from xlplan.workbook.demo import demo_tables
from xlplan.workbook.template import write_template

SCHEMAS = {sheet.name: json.loads(schema_text(sheet.key)) for sheet in load_sheets()}
PROPERTIES = {name: schema["properties"] for name, schema in SCHEMAS.items()}
PROPERTIES["Profiles"][""] = SCHEMAS["Profiles"]["additionalProperties"]


def cells() -> list[tuple[str, str, Field]]:
    """Sheet, address and field of every filled row of the demo, of Profiles a few."""
    found = []
    tables = demo_tables()
    for sheet in load_sheets():
        if sheet.is_settings:
            found += [
                (sheet.name, f"B{HEADING_ROW + 1 + i}", field)
                for i, field in enumerate(sheet.fields)
            ]
            continue
        for i_row in range(min(len(tables[sheet.name]), 20)):
            for column, field in enumerate(sheet.fields, start=1):
                address = f"{get_column_letter(column)}{HEADING_ROW + 1 + i_row}"
                found.append((sheet.name, address, field))
            if sheet.other_columns is not None:
                address = f"{get_column_letter(2 + i_row % 7)}{HEADING_ROW + 1 + i_row}"
                found.append((sheet.name, address, sheet.other_columns))
    return found


CELLS = cells()
NUMBERS = (Kind.NUMBER, Kind.INTEGER)
WORDS = st.sampled_from(
    ["abc", "12 kV", "3-4", "~5", "inf", "nan", "1_000", "zwölf", "?!", "x" * 40]
)
DATES = st.datetimes(dt.datetime(1950, 1, 1), dt.datetime(2100, 1, 1))


def forbidden_for(field: Field) -> st.SearchStrategy[object]:
    """Values that may not stand under a field."""
    options: list[st.SearchStrategy[object]] = []
    if field.is_required:
        options.append(st.sampled_from([None, "", " ", "\u00a0"]))
    if field.kind in NUMBERS:
        options += [WORDS, st.booleans(), DATES, st.sampled_from(["#N/A", "#REF!"])]
        options.append(st.floats(-1e9, 1e9, allow_nan=False))
        options.append(st.integers(-(10**6), 10**9))
    elif field.kind in (Kind.CHOICE, Kind.YES_NO):
        options += [WORDS, DATES, st.sampled_from([2, -1, 0.5, "#NAME?"])]
    elif field.kind in (Kind.REFERENCE, Kind.PROFILE, Kind.ID_LIST):
        options += [st.sampled_from(["nowhere", "N99", "#N/A"]), st.booleans()]
        if field.kind is not Kind.ID_LIST:
            options.append(DATES)
    elif field.kind is Kind.ID:
        options += [st.booleans(), DATES, st.just("#N/A")]
    elif field.kind is Kind.TIME:
        options += [st.booleans(), st.sampled_from(["noon", "12/01/2026", "#VALUE!"])]
    else:
        options.append(st.just("#N/A"))
    return st.one_of(options)


def is_allowed(sheet: str, field: Field, value: object) -> bool:
    """What the independent validator says of a number."""
    if field.kind not in NUMBERS or isinstance(value, (str, bool, dt.datetime)) or value is None:
        return False
    return jsonschema.Draft202012Validator(PROPERTIES[sheet][field.key]).is_valid(value)


@settings(max_examples=100)
@given(st.sampled_from(CELLS), st.data())
def test_a_forbidden_value_is_a_fault_at_its_cell(
    where: tuple[str, str, Field], data: st.DataObject
) -> None:
    sheet, address, field = where
    value = data.draw(forbidden_for(field))
    assume(not is_allowed(sheet, field, value))
    book = Book()
    book.set(f"{sheet}!{address}", value)
    checked = book.check()
    assert not checked.is_usable
    faults = {(f.sheet, f.cell) for f in checked.findings if f.level is Level.FAULT}
    assert (sheet, address) in faults


ANYTHING = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(-(10**12), 10**12),
    st.floats(allow_nan=True, allow_infinity=True),
    st.text(max_size=8),
    st.sampled_from(["#N/A", "B1", "L03, L03", "Loads", "time", "Value", "total", "24:00", "-"]),
    DATES,
    st.times(),
    st.timedeltas(dt.timedelta(days=-3), dt.timedelta(days=3)),
)
SHEETS = st.sampled_from([sheet.name for sheet in load_sheets()])
DEEDS = st.one_of(
    st.tuples(st.just("set"), SHEETS, st.integers(1, 12), st.integers(1, 10), ANYTHING),
    st.tuples(st.just("rows"), SHEETS, st.integers(1, 9), st.integers(1, 3), st.none()),
    st.tuples(st.just("column"), SHEETS, st.integers(1, 6), st.just(1), st.none()),
    st.tuples(st.just("delete"), SHEETS, st.integers(1, 9), st.just(1), st.none()),
    st.tuples(st.just("remove"), SHEETS, st.just(1), st.just(1), st.none()),
    st.tuples(st.just("rename"), SHEETS, st.just(1), st.just(1), st.text(min_size=1, max_size=9)),
)


@settings(max_examples=40)
@given(st.lists(DEEDS, min_size=1, max_size=6))
def test_no_change_of_sheets_rows_and_cells_breaks_the_check(
    deeds: list[tuple[str, str, int, int, object]],
) -> None:
    book = Book()
    for deed, sheet, number, n, value in deeds:
        if sheet not in book.sheets.grids:
            continue
        if deed == "set":
            book.set(f"{sheet}!{get_column_letter(n)}{number}", value)
        elif deed == "rows":
            book.insert_rows(sheet, number, n)
        elif deed == "column":
            book.insert_column(sheet, number)
        elif deed == "delete":
            book.delete_row(sheet, number)
        elif deed == "remove":
            book.remove(sheet)
        elif str(value) not in book.sheets.grids:
            book.rename(sheet, str(value))
    checked = book.check()
    for finding in checked.findings:
        assert finding.sheet
        assert finding.message
        assert len(finding.text().splitlines()) == 1


# -- files --------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def demo_bytes(tmp_path_factory: pytest.TempPathFactory) -> bytes:
    path = tmp_path_factory.mktemp("demo") / "demo.xlsx"
    write_template(path, with_demo=True)
    return path.read_bytes()


def check_bytes(content: bytes, folder: Path, capsys: pytest.CaptureFixture[str]) -> int:
    """Exit status of the check of a file with this content; never "inside the program"."""
    path = folder / "study.xlsx"
    path.write_bytes(content)
    status = main(["check", str(path)])
    out, err = capsys.readouterr()
    assert "inside the program" not in err
    assert "Traceback" not in out + err
    assert len(err.splitlines()) <= 1
    assert status in (0, 2)
    return status


def test_the_command_ends_with_2_and_names_the_cell(
    tmp_path: Path, demo_bytes: bytes, capsys: pytest.CaptureFixture[str]
) -> None:
    """What the tests in memory show, through the file and the command, for one cell a sheet."""
    with zipfile.ZipFile(io.BytesIO(demo_bytes)) as archive:
        parts = {name: archive.read(name) for name in archive.namelist()}
    names = ["Start", *(sheet.name for sheet in load_sheets())]
    expected = {"Loads": "D6", "Lines": "D6", "Storage": "I6", "Windows": "D6"}
    for sheet, address in expected.items():
        part = f"xl/worksheets/sheet{names.index(sheet) + 1}.xml"
        text = parts[part].decode("utf-8")
        start = text.index(f'<c r="{address}"')
        end = text.index("</c>", start)
        bad = f'<c r="{address}" t="inlineStr"><is><t>=1 kW</t></is>'
        parts[part] = (text[:start] + bad + text[end:]).encode("utf-8")
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w") as archive:
        for name, part_bytes in parts.items():
            archive.writestr(name, part_bytes)
    path = tmp_path / "study.xlsx"
    path.write_bytes(buffer.getvalue())
    assert main(["check", str(path)]) == 2
    out = capsys.readouterr().out
    for sheet, address in expected.items():
        assert f"{sheet}!{address} " in out


def test_damaged_files_never_break_the_command(
    tmp_path: Path, demo_bytes: bytes, capsys: pytest.CaptureFixture[str]
) -> None:
    """Truncated, with flipped bytes, or with noise in place of a stretch."""
    draw = random.Random(5)
    for _ in range(40):
        content = bytearray(demo_bytes)
        kind = draw.choice(["cut", "flip", "noise"])
        at = draw.randrange(len(content))
        if kind == "cut":
            del content[at:]
        elif kind == "flip":
            content[at] ^= 1 << draw.randrange(8)
        else:
            content[at : at + 50] = draw.randbytes(50)
        check_bytes(bytes(content), tmp_path, capsys)
    for size in (1, 30, 3000):
        assert check_bytes(draw.randbytes(size), tmp_path, capsys) == 2
        assert check_bytes(b"PK\x03\x04" + draw.randbytes(size), tmp_path, capsys) == 2


XML_SLIPS = (
    ('t="s"', 't="n"'),
    ('t="s"', ""),
    ("<v>1</v>", "<v>99999</v>"),
    ("<v>1</v>", "<v>abc</v>"),
    ("<v>1</v>", "<v>1e999</v>"),
    (' s="', ' s="99'),
    ('r="A6"', 'r="XFE6"'),
    ('r="A6"', 'r="A0"'),
    ('r="A6"', ""),
    ('r="B6"', 'r="A6"'),
    ('<row r="6"', '<row r="-6"'),
    ('<row r="6"', '<row r="6" hidden="true"'),
    ('<row r="6"', "<row"),
    ("<sheetData>", "<sheetData><row r='1048577'/>"),
    ("</sheetData>", "</sheetData><mergeCells><mergeCell ref='A:B'/></mergeCells>"),
    ("</sheetData>", "</sheetData><mergeCells><mergeCell ref='A1:'/></mergeCells>"),
    ("</worksheet>", ""),
    ("<cols>", "<cols><col min='x' max='1' hidden='1'/>"),
    ("<sheetData>", "<!-- a remark --><sheetData>"),
)


@pytest.mark.parametrize(("old", "new"), XML_SLIPS, ids=[f"{o} {n}" for o, n in XML_SLIPS])
def test_strange_parts_never_break_the_command(
    old: str, new: str, tmp_path: Path, demo_bytes: bytes, capsys: pytest.CaptureFixture[str]
) -> None:
    """What other programs, or hands, write into the sheet Loads."""
    names = ["Start", *(sheet.name for sheet in load_sheets())]
    part = f"xl/worksheets/sheet{names.index('Loads') + 1}.xml"
    buffer = io.BytesIO()
    with (
        zipfile.ZipFile(io.BytesIO(demo_bytes)) as archive,
        zipfile.ZipFile(buffer, "w") as changed,
    ):
        for name in archive.namelist():
            content = archive.read(name)
            if name == part:
                assert old.encode() in content
                content = content.replace(old.encode(), new.encode())
            changed.writestr(name, content)
    check_bytes(buffer.getvalue(), tmp_path, capsys)
