"""The template and the demo study, read back with openpyxl."""

from __future__ import annotations

import json
import re
import zipfile
from datetime import datetime, timedelta
from itertools import pairwise
from pathlib import Path
from typing import Any

import pytest
from jsonschema import Draft202012Validator
from openpyxl import load_workbook
from openpyxl.utils import get_column_letter, range_boundaries
from openpyxl.workbook import Workbook

from xlplan.base.errors import PathError
from xlplan.schema.fields import TEMPLATE_VERSION, Kind, load_sheets, schema_text, sheet
from xlplan.workbook import prompts
from xlplan.workbook.demo import demo_settings, demo_tables
from xlplan.workbook.sheet_writer import WorkbookWriteError, demand_written
from xlplan.workbook.template import write_study_workbook, write_template

TEMPLATES = Path(__file__).resolve().parents[2] / "templates"
HEADING_ROW = 5
EXAMPLE_ROW = 4
HINT_ROW = 3
TABLE_SHEETS = [entry for entry in load_sheets() if not entry.is_settings]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("templates")


@pytest.fixture(scope="module")
def blank(folder: Path) -> Workbook:
    write_template(folder / "blank.xlsx")
    return load_workbook(folder / "blank.xlsx")


@pytest.fixture(scope="module")
def demo(folder: Path) -> Workbook:
    write_template(folder / "demo.xlsx", with_demo=True)
    return load_workbook(folder / "demo.xlsx")


def dump(book: Workbook) -> list[tuple[Any, ...]]:
    """Every cell with its value and format, every check on cells, every name."""
    found: list[tuple[Any, ...]] = []
    for page in book:
        for row in page.iter_rows():
            for cell in row:
                note = cell.comment.text if cell.comment else None
                if cell.value is not None or note:
                    found.append(
                        (page.title, cell.coordinate, cell.value, cell.number_format, note)
                    )
        for check in page.data_validations.dataValidation:
            found.append((page.title, str(check.sqref), check.type, check.formula1, check.prompt))
    found += [(name, target.attr_text) for name, target in book.defined_names.items()]
    return found


def test_sheets_stand_in_order_between_start_and_lists(blank: Workbook) -> None:
    assert blank.sheetnames == ["Start", *(entry.name for entry in load_sheets()), "Lists"]
    assert all(page.sheet_state == "visible" for page in blank)


@pytest.mark.parametrize("which", ["blank", "demo"])
def test_no_input_is_a_formula_and_nothing_is_an_error(
    which: str, request: pytest.FixtureRequest
) -> None:
    """A formula among the inputs would be read by its stored value, a guess of its writer."""
    book = request.getfixturevalue(which)
    for page in book:
        types = {cell.data_type for row in page.iter_rows() for cell in row}
        is_input = page.title not in ("Start", "Lists")
        assert types <= ({"n", "s", "d", "b"} if is_input else {"n", "s", "f"})


def test_a_blank_study_holds_no_values(blank: Workbook) -> None:
    for entry in TABLE_SHEETS:
        rows = blank[entry.name].iter_rows(min_row=HEADING_ROW + 1)
        assert [cell.value for row in rows for cell in row if cell.value is not None] == []
    settings = blank["Settings"]
    assert [row[1].value for row in settings.iter_rows(min_row=HEADING_ROW + 1)] == [None] * len(
        sheet("Settings").fields
    )


@pytest.mark.parametrize("entry", TABLE_SHEETS, ids=lambda entry: entry.key)
def test_headings_hints_and_notes_come_from_the_schema(blank: Workbook, entry: Any) -> None:
    page = blank[entry.name]
    assert page["A1"].value == entry.title
    assert page["A2"].value == entry.help
    for column, field in enumerate(entry.fields, start=1):
        heading = page.cell(HEADING_ROW, column)
        assert heading.value == field.heading
        assert field.help in heading.comment.text
        if field.default is not None:
            assert f"Blank means {field.default}" in heading.comment.text
        if field.source:
            assert field.source in heading.comment.text
        hint = page.cell(HINT_ROW, column).value
        assert (hint == "needed") == field.is_required
        example = page.cell(EXAMPLE_ROW, column)
        assert prompts.plain(field.example) in example.value
        assert example.font.italic
        assert field.comes_from in heading.comment.text


def test_settings_have_one_row_each_with_a_name(blank: Workbook) -> None:
    page = blank["Settings"]
    titles = [cell.value for cell in page[HEADING_ROW]]
    assert titles[:4] == ["Setting", "Value", "Unit", "If blank"]
    assert titles[4:] == ["Example", "Usually from", "Note", "Group"]
    for row, field in enumerate(sheet("Settings").fields, start=HEADING_ROW + 1):
        assert page.cell(row, 1).value == field.title
        assert (page.cell(row, 3).value or "") == field.unit
        assert field.help in page.cell(row, 7).value
        assert page.cell(row, 5).value == prompts.plain(field.example)
        if field.default is not None:
            assert page.cell(row, 4).value == prompts.plain(field.default)
        assert blank.defined_names[f"set_{field.key}"].attr_text == f"Settings!$B${row}"


def test_template_version_stands_in_a_named_cell(blank: Workbook) -> None:
    sheet_name, address = blank.defined_names["template_version"].attr_text.split("!")
    assert blank[sheet_name][address.replace("$", "")].value == TEMPLATE_VERSION


def check_at(page: Any, address: str) -> Any:
    column, row, *_ = range_boundaries(address)
    for check in page.data_validations.dataValidation:
        for area in check.sqref.ranges:
            if area.min_col <= column <= area.max_col and area.min_row <= row <= area.max_row:
                return check
    return None


@pytest.mark.parametrize("entry", load_sheets(), ids=lambda entry: entry.key)
def test_every_cell_to_fill_has_an_input_message_and_its_check(blank: Workbook, entry: Any) -> None:
    lists = prompts.choice_lists()
    page = blank[entry.name]
    for number, field in enumerate(entry.fields):
        if entry.is_settings:
            address = f"B{HEADING_ROW + 1 + number}"
        else:
            address = f"{get_column_letter(number + 1)}{HEADING_ROW + 1}"
        check = check_at(page, address)
        assert check is not None, address
        assert 0 < len(check.promptTitle) <= 32
        assert 0 < len(check.prompt) <= 255
        if field.choices:
            assert check.type == "list"
            assert check.errorStyle in (None, "stop")
            assert lists[check.formula1][1] == field.choices
        elif field.kind is Kind.REFERENCE and len(field.refers_to) == 1:
            assert check.formula1 == prompts.id_list_name(field.refers_to[0])
            assert check.formula1 in blank.defined_names
        elif field.kind is Kind.REFERENCE:
            assert check.formula1 == "assets"
            assert check.formula1 in blank.defined_names
        elif field.kind is Kind.TIME and field.refers_to:
            assert check.formula1 == prompts.id_list_name(field.refers_to[0])
        elif field.kind is Kind.PROFILE:
            assert check.formula1 == "profile_names"
            assert check.formula1 in blank.defined_names
        elif field.kind in (Kind.NUMBER, Kind.INTEGER):
            assert check.formula1.startswith(("AND(ISNUMBER", "ISNUMBER"))
        elif field.kind is Kind.ID and entry.has_unique_ids:
            assert "COUNTIF" in check.formula1


def test_dropdown_lists_stand_visibly_on_lists(blank: Workbook) -> None:
    for name, (heading, choices) in prompts.choice_lists().items():
        sheet_name, area = blank.defined_names[name].attr_text.split("!")
        assert sheet_name == "Lists"
        column, first, _, last = range_boundaries(area.replace("$", ""))
        page = blank["Lists"]
        values = [page.cell(row, column).value for row in range(first, last + 1)]
        assert values == list(choices)
        assert page.cell(first - 1, column).value == heading


def test_id_lists_start_at_the_first_row_of_their_sheet(blank: Workbook) -> None:
    for entry in TABLE_SHEETS:
        if entry.id_field is not None:
            target = blank.defined_names[prompts.id_list_name(entry.name)].attr_text
            assert f"{entry.name}" in target
            first = re.search(r"!\$([A-Z]+)\$(\d+)", target)
            assert first is not None
            heading = blank[entry.name][f"{first[1]}{HEADING_ROW}"].value
            assert heading == entry.field(entry.id_field).heading
            assert int(first[2]) == HEADING_ROW + 1


def test_every_sheet_is_set_up_for_printing(demo: Workbook) -> None:
    for page in demo:
        assert page["A1"].value
        assert page["A2"].value
        assert page.page_setup.orientation == "landscape"
        # Left out of the file: 1. The widest tables have two pages, each with the first column.
        is_wide = page.title in ("Generators", "Storage")
        assert page.page_setup.fitToWidth in ((2,) if is_wide else (None, 1)), page.title
        assert bool(page.print_title_cols) == is_wide
        assert page.sheet_properties.pageSetUpPr.fitToPage
        assert page.print_area


def test_tables_offer_200_rows_and_grow_with_the_data(blank: Workbook, demo: Workbook) -> None:
    for entry in TABLE_SHEETS:
        (table,) = blank[entry.name].tables.values()
        _, first, _, last = range_boundaries(table.ref)
        assert (first, last - first) == (HEADING_ROW, 200)
        assert blank[entry.name].freeze_panes == f"B{HEADING_ROW + 1}"
    (table,) = demo["Profiles"].tables.values()
    assert range_boundaries(table.ref)[3] - HEADING_ROW >= len(demo_tables()["Profiles"])


def test_demo_is_read_back_as_typed(demo: Workbook) -> None:
    for name, rows in demo_tables().items():
        page = demo[name]
        headings = [cell.value for cell in page[HEADING_ROW]]
        known = {field.key: field.heading for field in sheet(name).fields}
        for number, row in enumerate(rows, start=HEADING_ROW + 1):
            found = {
                heading: page.cell(number, column).value
                for column, heading in enumerate(headings, start=1)
                if page.cell(number, column).value is not None
            }
            assert found == {known.get(key, key): value for key, value in row.items()}
    settings = {row[0].value: row[1].value for row in demo["Settings"].iter_rows(min_row=6)}
    for key, value in demo_settings().items():
        assert settings[sheet("Settings").field(key).title] == value


@pytest.mark.parametrize("entry", load_sheets(), ids=lambda entry: entry.key)
def test_demo_satisfies_the_schemas(entry: Any) -> None:
    validator = Draft202012Validator(json.loads(schema_text(entry.key)))
    rows = [demo_settings()] if entry.is_settings else demo_tables()[entry.name]
    assert rows
    for row in rows:
        plain = {k: v.isoformat() if isinstance(v, datetime) else v for k, v in row.items()}
        validator.validate(plain)


def test_demo_refers_only_to_what_it_has() -> None:
    tables = demo_tables()
    profiles = set(tables["Profiles"][0]) - {"time"}
    settings = [demo_settings()]
    for entry in load_sheets():
        for row in settings if entry.is_settings else tables[entry.name]:
            for field in entry.fields:
                value = row.get(field.key)
                if value is None:
                    continue
                if field.kind is Kind.PROFILE:
                    assert value in profiles
                elif field.refers_to:
                    names = value.split(", ") if field.kind is Kind.ID_LIST else [value]
                    targets = [(name, sheet(name).id_field) for name in field.refers_to]
                    ids = {line[key] for name, key in targets for line in tables[name]}
                    assert set(names) <= ids, (entry.name, field.key, value)


def test_demo_ids_are_unique() -> None:
    for entry in TABLE_SHEETS:
        if entry.id_field is not None and entry.has_unique_ids:
            ids = [str(row[entry.id_field]).casefold() for row in demo_tables()[entry.name]]
            assert len(set(ids)) == len(ids)


def test_demo_feeder_is_a_tree_over_all_buses_with_its_tie_open() -> None:
    tables = demo_tables()
    closed = [line for line in tables["Lines"] if line.get("normally_open") != "yes"]
    buses = {row["bus"] for row in tables["Buses"]}
    reached = {demo_settings()["source_bus"]}
    for _ in closed:
        reached |= {line["to_bus"] for line in closed if line["from_bus"] in reached}
    assert len(buses) == 14
    assert reached == buses
    assert len(closed) == len(buses) - 1
    assert len(tables["Lines"]) - len(closed) == 1


def test_demo_windows_make_up_a_year_on_consecutive_steps() -> None:
    tables = demo_tables()
    times = [row["time"] for row in tables["Profiles"]]
    step = timedelta(minutes=demo_settings()["period_minutes"])
    assert {later - earlier for earlier, later in pairwise(times)} == {step}
    windows = tables["Windows"]
    hours = sum(row["hours"] * row["occurrences_per_year"] for row in windows)
    assert hours == 8760  # 365 days of 24 hours
    for row in windows:
        last = row["starts_at"] + timedelta(hours=row["hours"]) - step
        assert row["starts_at"] in times
        assert last in times


def test_demo_shows_what_it_is_there_to_show() -> None:
    tables = demo_tables()
    devices = [line.get(end) for line in tables["Lines"] for end in ("from_device", "to_device")]
    assert {"breaker", "recloser", "fuse", "switch"} <= set(devices)
    assert len(tables["Storage"]) == 3
    assert sum("curve" in unit for unit in tables["Storage"]) == 1
    assert len(tables["Hardening"]) == 4
    lines = [name for row in tables["Hardening"] for name in row["lines"].split(", ")]
    assert len(lines) > len(set(lines))
    assert [row["critical"] for row in tables["Customer classes"]].count("yes") == 1
    assert len(tables["Customer classes"]) == 3
    assert [row["storm"] for row in tables["Windows"]] == ["no", "no", "yes"]
    assert len(tables["Neighbour supplies"]) == 1
    assert demo_settings()["demand_charge_per_kw_year"] > 0
    peak_kw = sum(load["peak_kw"] for load in tables["Loads"])
    assert 3000 <= peak_kw <= 4000


def test_demo_profiles_reach_1_and_the_sale_price_stays_below_every_purchase_price() -> None:
    rows = demo_tables()["Profiles"]
    for name in ("homes", "trade", "steady"):
        assert max(row[name] for row in rows) == 1.0
        assert min(row[name] for row in rows) > 0
    assert max(row["sun"] for row in rows) <= 1
    settings = demo_settings()
    lowest = settings["energy_price_per_kwh"] * min(row["price"] for row in rows)
    assert settings["export_price_per_kwh"] < lowest


def test_text_stays_text_whatever_it_begins_with(tmp_path: Path) -> None:
    texts = ["=1+1", "+5", "-BUS", "@SUM(A1)", "{=1+1}", "http://x.example", "internal:Lists!A1"]
    path = tmp_path / "study.xlsx"
    buses = [{"bus": f"B{number}", "name": text} for number, text in enumerate(texts)]
    write_study_workbook(path, {"Buses": buses}, {"prepared_by": texts[0]})
    book = load_workbook(path)
    cells = [book["Buses"].cell(6 + number, 2) for number in range(len(texts))]
    for cell, text in zip([*cells, book["Settings"]["B7"]], [*texts, texts[0]], strict=True):
        assert (cell.value, cell.data_type, cell.hyperlink) == (text, "s", None)


def test_values_keep_the_type_in_which_they_were_typed(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    rows = [{"load": "12", "peak_kw": "1,250.5", "customers": 7, "power_factor": True}]
    write_study_workbook(path, {"Loads": rows}, {"budget": 1e6})
    page = load_workbook(path)["Loads"]
    assert [page["A6"].value, page["D6"].value, page["F6"].value] == ["12", "1,250.5", 7]
    assert page["E6"].value is True


def test_cells_for_ids_keep_what_looks_like_a_date_or_a_number(blank: Workbook) -> None:
    """A column that is formatted as text keeps ``1/2`` and ``0012`` as they are typed."""
    assert blank["Buses"].column_dimensions["A"].number_format == "@"
    assert blank["Loads"].column_dimensions["D"].number_format == "General"
    assert blank["Profiles"].column_dimensions["A"].number_format == "General"


def test_unknown_sheets_and_keys_are_refused_and_nothing_is_left(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    with pytest.raises(ValueError, match="Pylons"):
        write_study_workbook(path, {"Pylons": []}, {})
    with pytest.raises(ValueError, match="colour"):
        write_study_workbook(path, {"Lines": [{"line": "L1", "colour": "red"}]}, {})
    with pytest.raises(ValueError, match="motto"):
        write_study_workbook(path, {}, {"motto": "steady"})
    with pytest.raises(WorkbookWriteError, match="Loads!D6"):
        write_study_workbook(path, {"Loads": [{"load": "A", "peak_kw": float("nan")}]}, {})
    assert list(tmp_path.iterdir()) == []


def test_a_missing_folder_is_said_in_one_line(tmp_path: Path) -> None:
    with pytest.raises(PathError, match="no folder"):
        write_template(tmp_path / "nowhere" / "study.xlsx")


def test_a_file_already_there_is_replaced_whole(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    path.write_text("something else")
    write_template(path)
    assert load_workbook(path).sheetnames[0] == "Start"
    assert list(tmp_path.iterdir()) == [path]


def test_return_codes_of_the_library_are_not_passed_over() -> None:
    demand_written(0, "a cell")
    demand_written(None, "a cell")
    with pytest.raises(WorkbookWriteError, match="a cell"):
        demand_written(-2, "a cell")


@pytest.mark.parametrize(
    ("name", "which"), [("study-template.xlsx", "blank"), ("demo-study.xlsx", "demo")]
)
def test_templates_in_the_repository_are_what_the_program_writes(
    name: str, which: str, request: pytest.FixtureRequest
) -> None:
    fresh = dump(request.getfixturevalue(which))
    assert dump(load_workbook(TEMPLATES / name)) == fresh


def test_what_is_typed_is_blue_and_what_is_calculated_is_black(demo: Workbook) -> None:
    """The custom of financial models; the colour key says so in words as well."""
    typed = [demo["Loads"]["A6"], demo["Loads"]["D6"], demo["Settings"]["B6"]]
    assert {cell.font.color.rgb for cell in typed} == {"FF0000FF"}
    calculated = [c for row in demo["Start"].iter_rows() for c in row if c.data_type == "f"]
    assert {cell.font.color.rgb for cell in calculated} == {"FF000000"}
    assert all(cell.border.left.style == "thick" for cell in calculated)
    words = [cell.value for row in demo["Start"].iter_rows() for cell in row if cell.value]
    assert any("Calculated" in str(word) for word in words)


def test_start_names_every_sheet_with_the_source_of_its_figures(blank: Workbook) -> None:
    words = {str(cell.value) for row in blank["Start"].iter_rows() for cell in row}
    for entry in load_sheets():
        assert entry.comes_from
        assert {entry.name, entry.help, entry.comes_from} <= words


@pytest.mark.parametrize("name", ["Profiles", "Storage curves"])
def test_charts_show_what_was_typed_beside_the_table(
    blank: Workbook, demo: Workbook, name: str, folder: Path
) -> None:
    for book, stem in ((blank, "blank"), (demo, "demo")):
        (chart,) = book[name]._charts
        (table,) = book[name].tables.values()
        assert chart.anchor._from.col > range_boundaries(table.ref)[2] - 1  # counted from 0
        with zipfile.ZipFile(folder / f"{stem}.xlsx") as archive:
            drawings = [
                archive.read(part).decode()
                for part in archive.namelist()
                if "drawings/draw" in part
            ]
        assert all('descr="' in drawing for drawing in drawings)
    (chart,) = demo["Profiles"]._charts
    rows = demo_tables()["Profiles"]
    assert len(chart.series) == len(rows[0]) - 1
    for series in chart.series:
        area = series.val.numRef.f.split("!")[1].replace("$", "")
        first, last = range_boundaries(area)[1], range_boundaries(area)[3]
        assert (first, last) == (HEADING_ROW + 1, HEADING_ROW + len(rows))
