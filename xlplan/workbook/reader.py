"""A study workbook to tables in which each value remembers its cell.

Enters: a path. Leaves: a ``RawStudy``, with everything found about sheets, headings and rows.
Values stay as typed: ``values`` and ``field_checks`` turn them into numbers and names. The only
reader of openpyxl besides ``marking``. The file is read into memory once, so that no handle stays
open on it, and never written to.
"""

from __future__ import annotations

import hashlib
import io
import logging
import warnings
import zipfile
from pathlib import Path
from typing import Any

from openpyxl import load_workbook

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level, StudyFileError
from xlplan.schema.fields import Sheet, load_sheets
from xlplan.workbook.folding import alike, fold
from xlplan.workbook.settings_reader import read_settings
from xlplan.workbook.sheet_facts import SheetFacts, sheet_facts
from xlplan.workbook.sheet_reader import Grid, read_sheet
from xlplan.workbook.tables import Cell, RawStudy, Table
from xlplan.workbook.triage import triage
from xlplan.workbook.values import EXCEL_ERRORS

_LOG = logging.getLogger(__name__)

MAX_COLUMNS = 500
"""Columns beyond this are not read: more than a study has profiles."""
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

    Raises PathError or StudyFileError, with one plain line, for what is no readable workbook.
    """
    file = triage(path)
    findings = list(file.findings)
    try:
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            grids, facts, states = _read_grids(file.content, findings)
    except Exception as error:  # openpyxl raises whatever the broken part led it to
        _LOG.debug("openpyxl could not read %s", path, exc_info=True)
        raise StudyFileError(
            f"'{path}' cannot be read as a workbook ({type(error).__name__}). Open it in a "
            f"spreadsheet program and save it again as Excel Workbook (.xlsx)."
        ) from None
    if not grids:
        raise StudyFileError(
            f"'{path}' holds no sheets that can be read. Open it in a spreadsheet program and "
            f"save it again as Excel Workbook (.xlsx)."
        )
    for warning in caught:
        _LOG.info("openpyxl on %s: %s", path.name, warning.message)

    tables: dict[str, Table] = {}
    for schema, title in _match_sheets(list(grids), findings).items():
        if title is None:
            tables[schema.name] = Table(schema.name, schema.name)
        else:
            read = read_settings if schema.is_settings else read_sheet
            tables[schema.name], found = read(schema, grids[title], facts[title])
            findings += found
    findings += _about_hidden_sheets(tables, states)
    return RawStudy(
        file_name=path.name,
        tables=tables,
        findings=tuple(findings),
        fingerprint="sha256:" + hashlib.sha256(file.content).hexdigest(),
        n_formula=sum(facts[t.sheet].n_formula for t in tables.values() if t.sheet in facts),
    )


def _read_grids(
    content: bytes, findings: list[Finding]
) -> tuple[dict[str, Grid], dict[str, SheetFacts], dict[str, str]]:
    """Non-blank cells, facts and visibility of every sheet that may hold input."""
    book = load_workbook(io.BytesIO(content), read_only=True, data_only=True, keep_links=False)
    wanted = _wanted_titles([sheet.title for sheet in book.worksheets])
    grids: dict[str, Grid] = {}
    facts: dict[str, SheetFacts] = {}
    states: dict[str, str] = {}
    with zipfile.ZipFile(io.BytesIO(content)) as archive:
        for sheet in book.worksheets:
            states[sheet.title] = sheet.sheet_state
            grids[sheet.title], facts[sheet.title] = Grid(sheet.title), SheetFacts()
            if sheet.title not in wanted:
                continue
            # The path of the part is known to openpyxl only under this name.
            facts[sheet.title] = sheet_facts(archive.read(sheet._worksheet_path))
            grids[sheet.title] = _read_grid(sheet, facts[sheet.title], findings)
    book.close()
    return grids, facts, states


def _wanted_titles(titles: list[str]) -> set[str]:
    """Sheets worth reading: those whose folded name is a sheet of the schema."""
    names = {fold(schema.name) for schema in load_sheets()}
    return {title for title in titles if fold(title) in names}


def _read_grid(sheet: Any, facts: SheetFacts, findings: list[Finding]) -> Grid:
    """The non-blank cells of one sheet."""
    grid = Grid(sheet.title)
    sheet.reset_dimensions()  # the stated size may be wrong, and would then cut rows off
    n_blank = 0
    for number, row in enumerate(sheet.iter_rows(max_col=MAX_COLUMNS), start=1):
        cells = {}
        for cell in row:
            if cell.value is None:
                continue
            value = cell.value
            is_error = cell.data_type == "e" or (isinstance(value, str) and value in EXCEL_ERRORS)
            cells[cell.column] = Cell(
                sheet.title, cell.coordinate, value, cell.number_format or "General", is_error
            )
        if cells:
            grid.rows[number] = cells
            n_blank = 0
            continue
        n_blank += 1
        if n_blank > MAX_BLANK_ROWS:
            findings.append(
                Finding(
                    Level.NOTE,
                    Code.READING_STOPPED,
                    sheet.title,
                    f"A{number}",
                    "",
                    "",
                    f"reading stopped here, after {MAX_BLANK_ROWS} blank rows.",
                )
            )
            break
    grid.add_uncalculated(facts.uncalculated)
    return grid


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
            hint = f"Add it from a blank template. Sheets found: {', '.join(others) or 'none'}."
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
