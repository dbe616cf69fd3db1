"""Layout of the input sheets: title, one line of help, headings in row 5, values below.

Row 3 says above each heading whether it is needed and what a blank means, row 4 shows one filled
row as an example. Nothing that could be taken for a value stands below the headings of a blank
study.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from xlsxwriter.utility import xl_col_to_name

from xlplan.schema.fields import Field, Kind, Sheet
from xlplan.workbook import prompts
from xlplan.workbook.formats import (
    MISSING_CELLS,
    NEEDED_CELLS,
    OPTIONAL_CELLS,
    Role,
)
from xlplan.workbook.input_charts import CHART_SIZE, CHARTS, STANDARD_COLUMN_PIXELS
from xlplan.workbook.layout import (
    EXAMPLE_ROW,
    FIRST_ROW,
    HEADING_ROW,
    HINT_ROW,
    LAST_CHECKED_ROW,
    ROOM,
    SPARE_ROWS,
)
from xlplan.workbook.sheet_writer import SheetWriter

BLANK_PROFILE_COLUMNS = 6
"""Columns laid out for profiles where none is named yet."""

LAST_PROFILE_COLUMN = 60
"""Headings up to here are offered as profiles."""

PRINTED_BLANK_ROWS = 32
LINE_HEIGHT = 13
LONGEST_COLUMN = 40
SETTINGS_COLUMNS = (
    ("Setting", 34),
    ("Value", 25),
    ("Unit", 20),
    ("If blank", 16),
    ("Example", 20),
    ("Usually from", 38),
    ("Note", 78),
    ("Group", 11),
)

_BASE_WIDTH = {
    Kind.ID: 17,
    Kind.TEXT: 28,
    Kind.NUMBER: 12,
    Kind.INTEGER: 12,
    Kind.CHOICE: 14,
    Kind.YES_NO: 12,
    Kind.REFERENCE: 16,
    Kind.ID_LIST: 20,
    Kind.TIME: 17,
    Kind.PROFILE: 13,
}
_UNFORMATTED = (Kind.NUMBER, Kind.INTEGER, Kind.TIME)
"""Cells of these kinds stay General, so that dates and percentages typed there show as such."""


def write_settings_sheet(
    workbook: Any, writer: SheetWriter, sheet: Sheet, settings: Mapping[str, object]
) -> None:
    """Write Settings: one setting a row, its value in a cell with a name.

    Parameters
    ----------
    workbook : xlsxwriter Workbook
    writer : SheetWriter of the sheet
    sheet : the schema's Settings
    settings : key -> value as typed; keys that are missing stay blank
    """
    _demand_known(sheet, settings)
    writer.head(sheet.title, sheet.help)
    for column, (heading, width) in enumerate(SETTINGS_COLUMNS):
        writer.width(column, width)
        role = Role.HEADING_NEEDED if heading == "Value" else Role.HEADING_OPTIONAL
        writer.text(HEADING_ROW, column, heading, role)
    writer.height(HEADING_ROW, 20)
    writer.text(HINT_ROW, 0, "Type in the column Value; the others are for you to read.", Role.HINT)
    for i_field, field in enumerate(sheet.fields):
        row = FIRST_ROW + i_field
        roles = _setting_roles(field)
        note = prompts.setting_note(field)
        writer.text(row, 0, field.title, Role.LABEL)
        writer.value(row, 1, settings.get(field.key), *roles)
        writer.text(row, 2, field.unit, Role.UNIT)
        default = "" if field.default is None else prompts.plain(field.default)
        writer.text(row, 3, "needed" if field.is_required else default, Role.DEFAULT)
        writer.text(row, 4, prompts.plain(field.example), Role.DEFAULT)
        writer.text(row, 5, field.comes_from, Role.NOTE)
        writer.text(row, 6, note, Role.NOTE)
        writer.text(row, 7, field.group, Role.UNIT)
        writer.note(row, 0, prompts.note(field))
        n_line = max(
            math.ceil(len(text) * 0.9 / SETTINGS_COLUMNS[column][1])
            for column, text in ((2, field.unit), (5, field.comes_from), (6, note))
        )
        writer.height(row, LINE_HEIGHT * max(n_line, 1) + 2)
        writer.validation((row, 1, row, 1), prompts.validation(field, sheet, row, 1, row))
        name = f"set_{field.key}"
        _define_name(workbook, name, f"=Settings!$B${row + 1}")
    last_row = HEADING_ROW + len(sheet.fields)
    writer.worksheet.freeze_panes(FIRST_ROW, 1)
    writer.page(last_row, len(SETTINGS_COLUMNS) - 1, HEADING_ROW, sheet.help)


def write_table_sheet(
    workbook: Any, writer: SheetWriter, sheet: Sheet, rows: Sequence[Mapping[str, object]]
) -> None:
    """Write a sheet with one table.

    Parameters
    ----------
    workbook : xlsxwriter Workbook
    writer : SheetWriter of the sheet
    sheet : its schema
    rows : one mapping a row, key -> value as typed; on Profiles, keys of the user's own are the
        headings of further columns, in order of first appearance
    """
    own_headings = _own_headings(sheet, rows)
    fields = [*sheet.fields]
    n_column = len(fields) + len(own_headings)
    n_room = max(ROOM, len(rows) + SPARE_ROWS)
    last_row = HEADING_ROW + n_room
    writer.head(sheet.title, sheet.help)
    columns = []
    n_line = 1
    for column, field in enumerate(fields):
        width = _column_width(field, rows)
        writer.width(column, width, Role.NUMBER if field.kind in _UNFORMATTED else Role.TEXT)
        n_line = max(n_line, _heading_lines(field.heading, width))
        columns.append(_lay_out_column(writer, sheet, field, column, last_row))
    writer.height(HEADING_ROW, LINE_HEIGHT * n_line + 10)
    for column, heading in enumerate(own_headings, start=len(fields)):
        writer.width(column, max(11, len(heading) + 3), Role.NUMBER)
        writer.text(HINT_ROW, column, "profile", Role.HINT)
        writer.text(EXAMPLE_ROW, column, _profile_example(sheet), Role.EXAMPLE)
        columns.append(
            {"header": heading, "header_format": writer.formats.role(Role.HEADING_OPTIONAL)}
        )
    writer.table(
        (HEADING_ROW, 0, last_row, n_column - 1),
        {"name": f"table_{sheet.key}", "style": None, "columns": columns},
    )
    keys = [field.key for field in fields] + own_headings
    for i_row, row in enumerate(rows):
        for column, key in enumerate(keys):
            if row.get(key) is not None and row[key] != "":
                number = Role.NUMBER
                writer.value(FIRST_ROW + i_row, column, row[key], Role.TEXT, number)
    if sheet.other_columns is not None and not own_headings:
        n_column = _lay_out_blank_profiles(writer, sheet, n_column)
    _add_rules(writer, sheet, n_column, last_row)
    _name_ranges(workbook, sheet)
    writer.worksheet.freeze_panes(FIRST_ROW, 1)
    n_printed = max(PRINTED_BLANK_ROWS, len(rows) + 3)
    last_column = n_column - 1
    if sheet.name in CHARTS:
        chart, alt = CHARTS[sheet.name](workbook, sheet, n_column, len(rows) or ROOM)
        writer.width(n_column, 3)
        # Below the heading, which is repeated on every printed page with all that stands on it.
        writer.chart(FIRST_ROW + 1, n_column + 1, chart, CHART_SIZE, alt)
        last_column = n_column + 1 + math.ceil(CHART_SIZE[0] / STANDARD_COLUMN_PIXELS)
    writer.page(HEADING_ROW + n_printed, last_column, HEADING_ROW, sheet.help)


def _lay_out_column(
    writer: SheetWriter, sheet: Sheet, field: Field, column: int, last_row: int
) -> dict[str, Any]:
    """Hint, note and validation of one column; returns what the table needs of it."""
    heading_role = Role.HEADING_NEEDED if field.is_required else Role.HEADING_OPTIONAL
    writer.text(HINT_ROW, column, prompts.hint(field), Role.HINT)
    example = prompts.plain(field.example)
    writer.text(EXAMPLE_ROW, column, f"e.g. {example}" if column == 0 else example, Role.EXAMPLE)
    writer.note(HEADING_ROW, column, prompts.note(field))
    checked = max(last_row, LAST_CHECKED_ROW)
    writer.validation(
        (FIRST_ROW, column, checked, column),
        prompts.validation(field, sheet, FIRST_ROW, column, checked),
    )
    return {"header": field.heading, "header_format": writer.formats.role(heading_role)}


def _profile_example(sheet: Sheet) -> str:
    return prompts.plain(sheet.other_columns.example) if sheet.other_columns else ""


def _lay_out_blank_profiles(writer: SheetWriter, sheet: Sheet, n_column: int) -> int:
    """Invite profiles in the columns beside the time; returns how many columns there are now."""
    writer.text(
        HINT_ROW, n_column, "one profile a column, each under a heading of your own", Role.HINT
    )
    for column in range(n_column, n_column + BLANK_PROFILE_COLUMNS):
        writer.width(column, 13, Role.NUMBER)
        writer.text(EXAMPLE_ROW, column, _profile_example(sheet), Role.EXAMPLE)
        writer.blank(HEADING_ROW, column, Role.HEADING_OPTIONAL)
    return n_column + BLANK_PROFILE_COLUMNS


def _add_rules(writer: SheetWriter, sheet: Sheet, n_column: int, last_row: int) -> None:
    """Colour the cells by rule: empty rows then need no stored cells and stay quick to read."""
    last_name = xl_col_to_name(n_column - 1)
    top = FIRST_ROW + 1
    for column in range(n_column):
        field = sheet.fields[column] if column < len(sheet.fields) else None
        is_needed = field is not None and field.is_required
        area = (FIRST_ROW, column, last_row, column)
        name = xl_col_to_name(column)
        if is_needed:
            gap = f'=AND(${name}{top}="",COUNTA($A{top}:${last_name}{top})>0)'
            missing = writer.formats.rule(MISSING_CELLS)
            writer.rule(
                area, {"type": "formula", "criteria": gap, "format": missing, "stop_if_true": True}
            )
        if field is not None and field.key == sheet.id_field and sheet.has_unique_ids:
            writer.rule(area, {"type": "duplicate", "format": writer.formats.rule(MISSING_CELLS)})
        plain = writer.formats.rule(NEEDED_CELLS if is_needed else OPTIONAL_CELLS)
        writer.rule(area, {"type": "formula", "criteria": "=TRUE", "format": plain})


def _name_ranges(workbook: Any, sheet: Sheet) -> None:
    """Name the ids that other sheets refer to, and the headings of Profiles."""
    quoted = f"'{sheet.name}'"
    if sheet.id_field is not None:
        column = [field.key for field in sheet.fields].index(sheet.id_field)
        name = xl_col_to_name(column, col_abs=True)
        area = f"{quoted}!{name}${FIRST_ROW + 1}:{name}${LAST_CHECKED_ROW + 1}"
        first = f"{quoted}!{name}${FIRST_ROW + 1}"
        _define_name(
            workbook,
            prompts.id_list_name(sheet.name),
            f"={first}:INDEX({area},MAX(1,COUNTA({area})))",
        )
    if sheet.other_columns is not None:
        left = xl_col_to_name(len(sheet.fields), col_abs=True)
        right = xl_col_to_name(LAST_PROFILE_COLUMN, col_abs=True)
        row = f"${HEADING_ROW + 1}"
        area = f"{quoted}!{left}{row}:{right}{row}"
        first = f"{quoted}!{left}{row}"
        _define_name(
            workbook, prompts.PROFILE_LIST, f"={first}:INDEX({area},MAX(1,COUNTA({area})))"
        )


def _define_name(workbook: Any, name: str, formula: str) -> None:
    if workbook.define_name(name, formula) not in (0, None):
        raise ValueError(f"the name {name} is refused")


def _column_width(field: Field, rows: Sequence[Mapping[str, object]]) -> float:
    longest_word = max(len(word) for word in field.heading.split())
    texts = [row[field.key] for row in rows if isinstance(row.get(field.key), str)]
    longest_text = max((len(str(text)) for text in texts), default=0)
    return max(
        _BASE_WIDTH[field.kind],
        longest_word + 5,
        len(field.heading) / 3 + 6,
        len(prompts.hint(field)) * 0.8 + 3,
        min(longest_text, LONGEST_COLUMN) + 3,
        min(len(prompts.plain(field.example)), LONGEST_COLUMN) * 0.9 + 6,
    )


def _heading_lines(heading: str, width: float) -> int:
    """Lines that a bold heading takes when wrapped, with room for indent and filter button."""
    n_line, used = 1, 0.0
    for word in heading.split():
        if used and used + 1 + len(word) > width - 3:
            n_line, used = n_line + 1, 0.0
        used += len(word) + 1
    return n_line


def _setting_roles(field: Field) -> tuple[Role, Role]:
    if field.kind in _UNFORMATTED:
        role = Role.VALUE_NEEDED_NUMBER if field.is_required else Role.VALUE_NUMBER
        return role, role
    if field.is_required:
        return Role.VALUE_NEEDED_TEXT, Role.VALUE_NEEDED_NUMBER
    return Role.VALUE_TEXT, Role.VALUE_NUMBER


def _own_headings(sheet: Sheet, rows: Sequence[Mapping[str, object]]) -> list[str]:
    """Keys of the rows that are no field: headings of Profiles, an error elsewhere."""
    known = {field.key for field in sheet.fields}
    own = dict.fromkeys(key for row in rows for key in row if key not in known)
    if own and sheet.other_columns is None:
        raise ValueError(f"{sheet.name} has no column {next(iter(own))}")
    return list(own)


def _demand_known(sheet: Sheet, settings: Mapping[str, object]) -> None:
    known = {field.key for field in sheet.fields}
    for key in settings:
        if key not in known:
            raise ValueError(f"{sheet.name} has no setting {key}")
