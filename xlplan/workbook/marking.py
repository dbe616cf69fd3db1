"""The findings of a check as a new workbook: a list, and copies of the sheets they are about.

Enters: a ``RawStudy`` and its findings. Leaves: a workbook with the sheet Findings, where every
line leads to its cell in a copy of the affected sheet's values; there the cell is filled and has a
note. Cells stand at the addresses they have in the study. The study itself is not saved again:
that would lose parts of it.
"""

from __future__ import annotations

import datetime as dt
import math
import re
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from xlplan.base.errors import Finding, Level
from xlplan.base.listing import counted
from xlplan.schema.fields import Field, Kind, load_sheets
from xlplan.workbook import prompts
from xlplan.workbook.folding import fold
from xlplan.workbook.formats import (
    ALERT_FILL,
    ALERT_INK,
    INK,
    MIST,
    RULE,
    STRAW,
    Role,
)
from xlplan.workbook.sheet_writer import LONGEST_TEXT, SheetWriter, new_workbook
from xlplan.workbook.tables import Cell, RawStudy

LIST_SHEET = "Findings"

MOST_ROWS_COPIED = 5000
"""A longer sheet is copied around its findings only; a year of periods would take minutes."""
ROWS_AROUND = 5
MOST_COLUMNS_MEASURED = 200
WIDEST = 42

_HEADINGS = (
    ("Level", 11),
    ("Sheet", 22),
    ("Cell", 9),
    ("Column or setting", 28),
    ("Found", 28),
    ("What is wrong", 64),
    ("Allowed", 34),
    ("What to do", 64),
)
_FIRST_ROW = 4
_FILLS: Mapping[Level, dict[str, Any]] = {
    Level.FAULT: {"bg_color": ALERT_FILL, "font_color": ALERT_INK, "bold": True},
    Level.WARNING: {"bg_color": STRAW, "font_color": INK, "bold": True},
    Level.NOTE: {"bg_color": MIST, "font_color": INK},
}
_ADDRESS = re.compile(r"([A-Z]{1,3})([0-9]{1,7})")
_REFUSED_IN_SHEET_NAMES = re.compile(r"[\[\]:*?/\\]")
LONGEST_SHEET_NAME = 31


def write_marked(path: Path, raw: RawStudy, findings: Sequence[Finding]) -> None:
    """Writes the list of findings and the marked copies.

    Parameters
    ----------
    path : where the workbook will stand; a file already there is replaced
    raw : RawStudy that was checked
    findings : in workbook order

    Raises PathError or ResultFileError if it cannot be written there.
    """
    with new_workbook(path, f"Findings in {raw.file_name}"[:200]) as (book, formats):
        listing = SheetWriter(book, LIST_SHEET, formats)
        names = _copy_names(raw, findings)
        by_sheet: dict[str, list[Finding]] = {}
        for finding in findings:
            by_sheet.setdefault(_title_of(raw, finding.sheet), []).append(finding)
        _write_list(listing, raw, findings, names)
        for title, name in names.items():
            _write_copy(SheetWriter(book, name, formats), raw, title, by_sheet[title])


def _title_of(raw: RawStudy, sheet: str) -> str:
    """The workbook's title of a sheet that a finding names, "" where the workbook has none."""
    if sheet in raw.rows_of:
        return sheet
    return next((title for title in raw.rows_of if fold(title) == fold(sheet)), "")


def _copy_names(raw: RawStudy, findings: Iterable[Finding]) -> dict[str, str]:
    """Name of the copy of each sheet with findings, by the title it has in the study."""
    affected = {_title_of(raw, finding.sheet) for finding in findings}
    names: dict[str, str] = {}
    taken = {fold(LIST_SHEET)}
    for title, rows in raw.rows_of.items():
        if title not in affected or not rows:
            continue
        is_usable = (
            0 < len(title) <= LONGEST_SHEET_NAME
            and not _REFUSED_IN_SHEET_NAMES.search(title)
            and title == title.strip("'")
            and fold(title) not in taken
        )
        name = title if is_usable else f"Copy {len(names) + 1}"
        taken.add(fold(name))
        names[title] = name
    return names


# -- the list ----------------------------------------------------------------------------------


def _write_list(
    writer: SheetWriter, raw: RawStudy, findings: Sequence[Finding], names: Mapping[str, str]
) -> None:
    fields = _fields()
    line = f"In '{raw.file_name}': {counted(findings) or 'nothing was found'}."
    writer.head(LIST_SHEET, line)
    hint = (
        "A click on an address leads to the cell in a copy of its sheet. Mend the study itself, "
        "not the copy. Only faults keep a study from being solved."
    )
    writer.text(2, 0, hint, Role.SUBTITLE)
    for column, (heading, width) in enumerate(_HEADINGS):
        writer.width(column, width)
        writer.text(_FIRST_ROW - 1, column, heading, Role.HEADING_OPTIONAL)
    writer.height(_FIRST_ROW - 1, 20)
    wrapped = {"text_wrap": True, "valign": "top", "border": 1, "border_color": RULE}
    for row, finding in enumerate(findings, start=_FIRST_ROW):
        field = fields.get((fold(finding.sheet), finding.key))
        title = field.title if field else finding.key
        texts = (
            str(finding.level),
            finding.sheet,
            finding.cell,
            title,
            finding.value,
            finding.message,
            allowed(field) if field else "",
            finding.hint,
        )
        n_line = 1
        for column, text in enumerate(texts):
            look = {**wrapped, **(_FILLS[finding.level] if column == 0 else {})}
            writer.put(row, column, text[:1000], look)
            n_line = max(n_line, math.ceil(len(text[:1000]) / (_HEADINGS[column][1] * 0.95)))
        writer.height(row, min(13.5 * n_line + 3, 400))
        name = names.get(_title_of(raw, finding.sheet))
        if name is not None:
            target = finding.cell if _ADDRESS.fullmatch(finding.cell) else "A1"
            writer.cell_link(row, 2, name, target, finding.cell or "sheet")
    last_row = max(_FIRST_ROW + len(findings) - 1, _FIRST_ROW)
    writer.worksheet.freeze_panes(_FIRST_ROW, 0)
    writer.worksheet.autofilter(_FIRST_ROW - 1, 0, last_row, len(_HEADINGS) - 1)
    writer.page(last_row, len(_HEADINGS) - 1, _FIRST_ROW - 1, line)


def _fields() -> dict[tuple[str, str], Field]:
    return {
        (fold(sheet.name), field.key): field for sheet in load_sheets() for field in sheet.fields
    }


def allowed(field: Field) -> str:
    """What may stand under a field, in a few words.

    >>> from xlplan.schema.fields import sheet
    >>> allowed(sheet("Loads").field("peak_kw"))
    'a number, 0 or more, in kW'
    """
    if field.choices:
        return ", ".join(field.choices)
    where = " or ".join(field.refers_to)
    words = {
        Kind.ID: "a name that stands once",
        Kind.TEXT: "any text",
        Kind.NUMBER: "a number",
        Kind.INTEGER: "a whole number",
        Kind.REFERENCE: f"a name from {where}",
        Kind.ID_LIST: f"names from {where}, with commas between",
        Kind.TIME: "a date and time, or a number",
        Kind.PROFILE: "a heading of Profiles",
    }.get(field.kind, "")
    limits = prompts.limits(field)
    parts = [words, *([limits] if limits else []), *([f"in {field.unit}"] if field.unit else [])]
    if not field.is_required:
        parts.append("or blank")
    return ", ".join(part for part in parts if part).replace("in per ", "per ")


# -- the copies --------------------------------------------------------------------------------


def _write_copy(
    writer: SheetWriter, raw: RawStudy, title: str, findings: Sequence[Finding]
) -> None:
    rows = raw.rows_of[title]
    table = next((table for table in raw.tables.values() if table.sheet == title), None)
    header_row = table.header_row if table else 0
    marks: dict[tuple[int, int], list[Finding]] = {}
    for finding in findings:
        match = _ADDRESS.fullmatch(finding.cell)
        if match:
            marks.setdefault((int(match[2]), _column_number(match[1])), []).append(finding)
    shown = _rows_to_copy(rows, header_row, marks)
    widths: dict[int, int] = {}
    last_row, last_column = 1, 1
    for number in shown:
        for column, cell in rows[number].items():
            properties: dict[str, Any] = {"valign": "top"}
            if number == header_row:
                properties = {"bold": True, "text_wrap": True, "bg_color": MIST, "valign": "top"}
            found = marks.get((number, column), ())
            writer.put(number - 1, column - 1, value_of(cell), _look(cell, properties, found))
            last_row, last_column = max(last_row, number), max(last_column, column)
            if column <= MOST_COLUMNS_MEASURED and (header_row == 0 or number >= header_row):
                length = len(cell.typed) if cell.number_format == "General" else 12
                widths[column] = max(widths.get(column, 9), min(length + 3, WIDEST))
    for column, width in widths.items():
        writer.width(column - 1, width)
    for (number, column), found in marks.items():
        if column not in rows.get(number, {}):
            writer.put(number - 1, column - 1, None, _look(None, {}, found))
        writer.note(number - 1, column - 1, _note_of(found))
        last_row, last_column = max(last_row, number), max(last_column, column)
    if len(shown) < len(rows):
        message = (
            f"Only the rows around the findings are copied: {len(shown)} of {len(rows)}. "
            f"Addresses are those of the study."
        )
        writer.note(0, last_column, message)
        writer.put(0, last_column, message, {"italic": True})
    if header_row:
        writer.worksheet.freeze_panes(header_row, 0)
    writer.page(last_row - 1, min(last_column, 60) - 1, None, "")


def _rows_to_copy(
    rows: Mapping[int, Mapping[int, Cell]],
    header_row: int,
    marks: Iterable[tuple[int, int]],
) -> list[int]:
    """All rows of a sheet, or of a long one those around its findings."""
    if len(rows) <= MOST_ROWS_COPIED:
        return list(rows)
    near = {number + step for number, _ in marks for step in range(-ROWS_AROUND, ROWS_AROUND + 1)}
    return [number for number in rows if number <= header_row + ROWS_AROUND or number in near]


def _column_number(letters: str) -> int:
    number = 0
    for letter in letters:
        number = number * 26 + ord(letter) - ord("A") + 1
    return number


def value_of(cell: Cell) -> object:
    """A cell's value for its copy: formulas and errors as text, nothing that calculates.

    Dates before 1900, infinities and durations that a cell cannot hold become text as well; text
    longer than a cell holds is cut, and ends in dots.
    """
    if cell.is_uncalculated:
        return "(a formula, never calculated)"
    value = cell.value
    if cell.is_error or value is None:
        return cell.typed
    if isinstance(value, str):
        return value if len(value) <= LONGEST_TEXT else f"{value[: LONGEST_TEXT - 4]} ..."
    if isinstance(value, bool):
        return value
    if isinstance(value, (int, float)):
        return value if math.isfinite(value) and abs(value) < 1e300 else cell.typed
    if isinstance(value, dt.datetime):
        return value if value.year >= 1900 else cell.typed
    if isinstance(value, dt.timedelta):
        return value if value >= dt.timedelta(0) else cell.typed
    return value if isinstance(value, dt.time) else cell.typed


def _look(
    cell: Cell | None, properties: Mapping[str, Any], findings: Sequence[Finding]
) -> dict[str, Any]:
    """Number format of the study's cell, and the fill of the gravest of its findings."""
    look = dict(properties)
    if cell is not None and cell.number_format != "General" and not isinstance(cell.value, str):
        look["num_format"] = cell.number_format
    if findings:
        gravest = min((finding.level for finding in findings), key=list(Level).index)
        look |= {**_FILLS[gravest], "border": 2, "border_color": ALERT_INK}
    return look


def _note_of(findings: Sequence[Finding]) -> str:
    """Every finding of a cell, each beginning with its level."""
    lines = [
        f"{str(finding.level).capitalize()}: {finding.message}"
        + (f" {finding.hint}" if finding.hint else "")
        for finding in findings
    ]
    return "\n".join(lines)[: LONGEST_TEXT - 1]
