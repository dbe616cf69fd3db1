"""A study workbook to tables in which each value remembers its cell.

Enters: a path. Leaves: a ``RawStudy``, with everything found about sheets, headings and rows.
Values stay as typed: ``values`` and ``field_checks`` turn them into numbers and names. The only
reader of openpyxl besides ``marking``. The file is read into memory once, so that no handle stays
open on it, and never written to.
"""

from __future__ import annotations

import contextlib
import gc
import hashlib
import io
import logging
import re
import warnings
import zipfile
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from openpyxl import load_workbook
from openpyxl.utils import column_index_from_string

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level, StudyFileError
from xlplan.base.listing import cell_ranges
from xlplan.schema.fields import Sheet, load_sheets
from xlplan.workbook.folding import alike, fold
from xlplan.workbook.grid import Grid
from xlplan.workbook.settings_reader import read_settings
from xlplan.workbook.sheet_facts import SheetFacts, sheet_facts
from xlplan.workbook.sheet_reader import read_sheet
from xlplan.workbook.tables import Cell, RawStudy, Table
from xlplan.workbook.triage import triage
from xlplan.workbook.values import EXCEL_ERRORS
from xlplan.workbook.versions import VERSION_NAME, check_version

_LOG = logging.getLogger(__name__)

MAX_COLUMNS = 500
"""Columns beyond this are not read: more than a study has profiles."""
MAX_VALUES = 1_500_000
"""A year of 5-minute rows for a dozen profiles stays below this; more would fill the memory."""
MAX_BLANK_ROWS = 5000
"""Reading stops after so many blank rows: formatting often runs on to the last row of a sheet."""
SHEETS_OF_OUR_OWN = frozenset({"start", "lists", "field guide", "findings"})
"""Sheets of the template that hold no input, folded."""


def read_workbook(path: Path) -> RawStudy:
    """Everything a study workbook holds, as typed.

    Parameters
    ----------
    path : Path of an .xlsx or .xlsm file

    Returns
    -------
    RawStudy: a table for every sheet of the schema (empty ones where the workbook has none)

    Raises PathError or StudyFileError, with one plain line, for what is no readable workbook, or a
    study made for a newer version of the program.
    """
    file = triage(path)
    try:
        with warnings.catch_warnings(record=True) as caught, _without_collector():
            warnings.simplefilter("always")
            sheets = read_sheets(file.content)
    except StudyFileError as error:
        raise StudyFileError(f"'{path}' {error}") from None
    except Exception as error:  # openpyxl raises whatever the broken part led it to
        _LOG.debug("openpyxl could not read %s", path, exc_info=True)
        raise StudyFileError(
            f"'{path}' cannot be read as a workbook ({type(error).__name__}). Open it in a "
            f"spreadsheet program and save it again as Excel Workbook (.xlsx)."
        ) from None
    if not sheets.grids:
        raise StudyFileError(
            f"'{path}' holds no sheets that can be read. Open it in a spreadsheet program and "
            f"save it again as Excel Workbook (.xlsx)."
        )
    for warning in caught:
        _LOG.info("openpyxl on %s: %s", path.name, warning.message)
    findings = [*file.findings, *check_version(path, sheets.version, sheets.version_place)]
    return tables_of(path.name, sheets, findings, hashlib.sha256(file.content).hexdigest())


@contextlib.contextmanager
def _without_collector() -> Iterator[None]:
    """No search for reference cycles while cells are made.

    A year of profiles makes hundreds of thousands of objects, none of them in a cycle; walking them
    again and again would take a third of the time.
    """
    was_on = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if was_on:
            gc.enable()


@dataclass
class Sheets:
    """The sheets of a workbook, each under its title, before anything has a meaning.

    ``states``: visible, hidden or veryHidden. ``stopped``: sheets whose reading ended early, with
    the row. ``version``: what stands in the template's named cell, ``version_place`` where.
    """

    grids: dict[str, Grid] = field(default_factory=dict)
    facts: dict[str, SheetFacts] = field(default_factory=dict)
    states: dict[str, str] = field(default_factory=dict)
    stopped: dict[str, int] = field(default_factory=dict)
    version: object = None
    version_place: tuple[str, str] = ("", "")


def tables_of(
    file_name: str, sheets: Sheets, findings: list[Finding], fingerprint: str = ""
) -> RawStudy:
    """Tables from the cells of the sheets.

    Parameters
    ----------
    file_name : name of the workbook
    sheets : Sheets
    findings : about the file as a whole
    fingerprint : hexadecimal SHA-256 of its bytes

    Returns
    -------
    RawStudy
    """
    findings = list(findings)
    for stopped, number in sheets.stopped.items():
        message = f"reading stopped here, after {MAX_BLANK_ROWS} blank rows."
        findings.append(
            Finding(Level.NOTE, Code.READING_STOPPED, stopped, f"A{number}", "", "", message)
        )
    tables: dict[str, Table] = {}
    for schema, title in _match_sheets(list(sheets.grids), findings).items():
        if title is None:
            tables[schema.name] = Table(schema.name, schema.name)
        else:
            read = read_settings if schema.is_settings else read_sheet
            facts = sheets.facts[title]
            tables[schema.name], found = read(schema, sheets.grids[title], facts)
            findings += found
            findings += _about_external(title, facts)
    findings += _about_hidden_sheets(tables, sheets.states)
    return RawStudy(
        file_name=file_name,
        tables=tables,
        findings=tuple(findings),
        fingerprint="sha256:" + fingerprint,
        n_formula=sum(
            sheets.facts[t.sheet].n_formula for t in tables.values() if t.sheet in sheets.facts
        ),
        rows_of={title: grid.rows for title, grid in sheets.grids.items()},
    )


def read_sheets(content: bytes) -> Sheets:
    """Non-blank cells, facts and visibility of every sheet that may hold input."""
    book = load_workbook(io.BytesIO(content), read_only=True, data_only=True, keep_links=False)
    wanted = _wanted_titles([sheet.title for sheet in book.worksheets])
    sheets = Sheets()
    n_left = MAX_VALUES
    with zipfile.ZipFile(io.BytesIO(content)) as archive:
        for sheet in book.worksheets:
            title = sheet.title
            sheets.states[title] = sheet.sheet_state
            sheets.grids[title], sheets.facts[title] = Grid(title), SheetFacts()
            if title not in wanted:
                continue
            # The path of the part is known to openpyxl only under this name.
            xml = archive.read(sheet._worksheet_path)
            if (
                xml.count(b"v>") // 2 > n_left
            ):  # seen at once what the count below takes long to see
                raise StudyFileError(_too_many())
            facts = sheet_facts(xml)
            del xml
            grid, stopped_at, n_left = _read_grid(sheet, facts, n_left)
            sheets.facts[title], sheets.grids[title] = facts, grid
            if stopped_at:
                sheets.stopped[title] = stopped_at
    sheets.version, sheets.version_place = _template_version(book)
    book.close()
    return sheets


def _too_many() -> str:
    return (
        f"holds more than {MAX_VALUES:,} values, which no study needs. Remove what is no part of "
        f"it."
    )


def _template_version(book: Any) -> tuple[object, tuple[str, str]]:
    """What stands in the cell named as the template's version, and its sheet and address."""
    name = book.defined_names.get(VERSION_NAME)
    match = re.fullmatch(r"'?(.+?)'?!\$([A-Z]{1,3})\$([0-9]{1,7})", name.attr_text if name else "")
    by_title = {sheet.title: sheet for sheet in book.worksheets}
    if match is None or match[1] not in by_title:
        return None, ("", "")
    sheet = by_title[match[1]]
    sheet.reset_dimensions()
    row, column = int(match[3]), column_index_from_string(match[2])
    cells = next(sheet.iter_rows(row, row, column, column), ((None),))
    value = getattr(cells[0], "value", None) if cells else None
    return value, (match[1], f"{match[2]}{match[3]}")


def _wanted_titles(titles: list[str]) -> set[str]:
    """Sheets worth reading: those whose folded name is a sheet of the schema."""
    names = {fold(schema.name) for schema in load_sheets()}
    return {title for title in titles if fold(title) in names}


def _read_grid(sheet: Any, facts: SheetFacts, n_left: int) -> tuple[Grid, int, int]:
    """The non-blank cells of one sheet, the row where reading stopped (0: at the end), and how
    many more values the study may hold."""
    grid = Grid(sheet.title)
    sheet.reset_dimensions()  # the stated size may be wrong, and would then cut rows off
    n_blank = stopped_at = 0
    # Without a last column, rows are as long as their last cell: much quicker where none is far.
    last_column = MAX_COLUMNS if facts.is_wide else None
    for number, row in enumerate(sheet.iter_rows(max_col=last_column), start=1):
        cells = {}
        for cell in row:
            value = cell.value
            if value is None:
                continue
            is_error = cell.data_type == "e" or (isinstance(value, str) and value in EXCEL_ERRORS)
            cells[cell.column] = Cell(
                sheet.title, cell.coordinate, value, cell.number_format or "General", is_error
            )
        if cells:
            grid.rows[number] = cells
            n_blank = 0
            n_left -= len(cells)
            if n_left < 0:
                raise StudyFileError(_too_many())
            continue
        n_blank += 1
        if n_blank > MAX_BLANK_ROWS:
            stopped_at = number
            break
    grid.add_uncalculated(facts.uncalculated)
    return grid, stopped_at, n_left


def _about_external(title: str, facts: SheetFacts) -> list[Finding]:
    """A note about cells whose values come from another workbook as it was when last read."""
    if not facts.external:
        return []
    cells = cell_ranges(facts.external[:1000])
    message = f"formulas read another workbook here ({cells}); the values stored are used."
    hint = "Type the values instead, so that the study is whole by itself."
    return [
        Finding(
            Level.NOTE,
            Code.EXTERNAL_FORMULA,
            title,
            facts.external[0],
            "",
            "",
            message if len(cells) < 200 else message.replace(cells, f"{len(facts.external)} cells"),
            hint,
        )
    ]


def _match_sheets(titles: list[str], findings: list[Finding]) -> dict[Sheet, str | None]:
    """The workbook's sheet for each sheet of the schema, by folded name."""
    matched: dict[Sheet, str | None] = {}
    for schema in load_sheets():
        found = [title for title in titles if fold(title) == fold(schema.name)]
        matched[schema] = found[0] if found else None
        if len(found) > 1:
            names = " and ".join(f"'{title}'" for title in found)
            findings.append(
                Finding(
                    Level.FAULT,
                    Code.SHEET_TWICE,
                    schema.name,
                    "",
                    "",
                    "",
                    f"there are two sheets of this name: {names}.",
                    "Delete or rename one.",
                )
            )
    taken = {title for title in matched.values() if title is not None}
    others = [t for t in titles if t not in taken and fold(t) not in SHEETS_OF_OUR_OWN]
    findings += _about_missing_sheets(matched, others)
    return matched


def _about_missing_sheets(matched: dict[Sheet, str | None], others: list[str]) -> list[Finding]:
    """Faults about sheets that are missing or mistyped; a note about sheets of the user's own."""
    findings = []
    suspects = set()
    for schema, title in matched.items():
        if title is not None:
            continue
        near = alike(fold(schema.name), [fold(other) for other in others])
        suspect = next((other for other in others if fold(other) == near), None)
        if suspect is not None:
            suspects.add(suspect)
            message = f"there is no sheet of this name, but one named '{suspect}'."
            hint = f"Rename it to {schema.name}, or to something less alike if it is your own."
        elif not schema.is_optional:
            message = "this sheet is missing."
            hint = "Add it from a blank template."
            if others:
                hint += f" Sheets found that are not known: {', '.join(others)}."
        else:
            continue
        findings.append(
            Finding(Level.FAULT, Code.SHEET_MISSING, schema.name, "", "", "", message, hint)
        )
    own = [other for other in others if other not in suspects]
    if own:
        names = ", ".join(own)
        findings.append(
            Finding(
                Level.NOTE, Code.SHEET_IGNORED, own[0], "", "", "", f"sheets not used: {names}."
            )
        )
    return findings


def _about_hidden_sheets(tables: dict[str, Table], states: dict[str, str]) -> list[Finding]:
    """Notes about hidden sheets whose values are used all the same."""
    return [
        Finding(
            Level.NOTE,
            Code.HIDDEN_SHEET,
            table.sheet,
            "",
            "",
            "",
            "this sheet is hidden. Its values are used.",
        )
        for table in tables.values()
        if table.header_row and states.get(table.sheet, "visible") != "visible"
    ]
