"""Which columns of Profiles are profiles: those under headings of the user's own that hold numbers.

Enters: the cells of the sheet and its heading row. Leaves: each profile's column, and findings.
"""

from __future__ import annotations

import re

from openpyxl.utils import get_column_letter

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level
from xlplan.schema.fields import Field, Sheet
from xlplan.workbook.folding import clean, fold
from xlplan.workbook.grid import Grid, sheet_finding
from xlplan.workbook.headings import about_double
from xlplan.workbook.tables import Cell, finding_at
from xlplan.workbook.values import is_blank, read_value


def profile_columns(
    schema: Sheet,
    grid: Grid,
    header_row: int,
    others: list[tuple[int, Cell]],
    columns: dict[str, int],
    findings: list[Finding],
) -> dict[str, int]:
    """Columns under headings of the user's own, next to the others, that hold any number.

    A column without a heading ends the table; what stands beyond it is the user's own.
    """
    profiles: dict[str, int] = {}
    spelling: dict[str, str] = {}
    named = {column for column, cell in others if not is_blank(cell)} | set(columns.values())
    first = last = columns.get("time", min(named, default=1))
    while first - 1 in named:
        first -= 1
    while last + 1 in named:
        last += 1
    below = [number for number in grid.rows if number > header_row]
    assert schema.other_columns is not None
    for column, cell in others:
        name = clean(cell.typed)
        if not first <= column <= last:
            if not is_blank(cell):
                findings.append(
                    finding_at(
                        cell,
                        Level.NOTE,
                        Code.COLUMN_IGNORED,
                        "",
                        f"'{name}' stands apart from the table and is not used as a profile.",
                    )
                )
        elif not _has_number(grid, below, column, schema.other_columns):
            findings.append(
                finding_at(
                    cell,
                    Level.NOTE,
                    Code.COLUMN_IGNORED,
                    "",
                    f"'{name}' holds no numbers and is not used as a profile.",
                )
            )
        elif fold(name) in spelling:
            other = profiles[spelling[fold(name)]]
            first_address = f"{get_column_letter(other)}{header_row}"
            findings.append(about_double(cell, name, first_address))
        else:
            profiles[name] = column
            spelling[fold(name)] = name
    nameless = sorted(
        {
            column
            for number in below
            for column, cell in grid.rows[number].items()
            if column in (first - 1, last + 1)
            and read_value(cell, schema.other_columns).value is not None
        }
    )
    for column in nameless:
        findings.append(
            sheet_finding(
                Level.FAULT,
                Code.PROFILE_WITHOUT_NAME,
                grid.sheet,
                f"{get_column_letter(column)}{header_row}",
                "this column holds numbers but has no heading.",
                "Name the profile, or clear the column.",
            )
        )
    return profiles


_MEANT_AS_NUMBER = re.compile(r"\W{0,2}[0-9]")


def _has_number(grid: Grid, below: list[int], column: int, profile: Field) -> bool:
    """True if any cell of a column could be a profile's value, or most were meant as numbers.

    A column of decimal commas pasted as text is a profile with faults, not a column of remarks.
    """
    n_meant = n_filled = 0
    for number in below:
        cell = grid.rows[number].get(column)
        if cell is None or is_blank(cell):
            continue
        if cell.is_uncalculated or cell.is_error or read_value(cell, profile).value is not None:
            return True
        n_filled += 1
        n_meant += isinstance(cell.value, str) and bool(_MEANT_AS_NUMBER.match(cell.value))
    return 2 * n_meant > n_filled
