"""Rows as typed, each value with its cell: what the reader makes and the checks read.

Nothing here has a meaning yet. A ``Table`` is one sheet's rows under keys; the rows of a settings
sheet are one ``Row`` whose cells lie below each other.
"""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Mapping
from dataclasses import dataclass, field

from xlplan.base.errors import Finding, Level, Origin, one_line

_LITERAL = re.compile(r'"[^"]*"|\\.')
"""Parts of a number format that are shown as they stand and scale nothing, such as 0"%"."""

LONGEST_MESSAGE = 400
"""A cell may hold 32767 characters; this is enough of them to recognise it."""


@dataclass(frozen=True)
class Cell:
    """One cell as the file gives it.

    ``value``: str, int, float, bool, datetime, date, time, timedelta or None. ``is_error``: an
    Excel error, its text in ``value``. ``is_uncalculated``: a formula without a stored value, so
    that ``value`` is None though the cell is not blank.
    """

    sheet: str
    address: str
    value: object = None
    number_format: str = "General"
    is_error: bool = False
    is_uncalculated: bool = False

    @property
    def typed(self) -> str:
        """The value as text, for messages."""
        if isinstance(self.value, dt.datetime):
            is_whole_minute = self.value.second == self.value.microsecond == 0
            return self.value.isoformat(" ", "minutes" if is_whole_minute else "auto")
        return "" if self.value is None else str(self.value)

    @property
    def is_percent(self) -> bool:
        """True if the cell is shown as a percentage: 5 % is stored as 0.05."""
        return "%" in _LITERAL.sub("", self.number_format)


@dataclass(frozen=True)
class Row:
    """One row of a table: a cell for every key that the sheet has a column for."""

    sheet: str
    number: int
    cells: Mapping[str, Cell]
    column_of: Mapping[str, str]

    def cell(self, key: str) -> Cell:
        """The cell of a key; an empty one at the row's first cell where there is no column."""
        if key in self.cells:
            return self.cells[key]
        column = next(iter(self.column_of.values()), "A")
        return Cell(self.sheet, f"{column}{self.number}" if self.number else "")

    @property
    def origin(self) -> Origin:
        """Where the row stands, for the records made from it."""
        return Origin(self.sheet, self.number, dict(self.column_of))


@dataclass(frozen=True)
class Table:
    """The rows of one sheet.

    ``name`` is the schema's sheet name, ``sheet`` the name in the workbook. ``column_of`` gives
    the letter of each key; a profile column's key is the name the user gave it.
    ``header_row`` 0: the workbook has no such sheet.
    """

    name: str
    sheet: str
    header_row: int = 0
    column_of: Mapping[str, str] = field(default_factory=dict)
    rows: tuple[Row, ...] = ()

    def header_cell(self, key: str) -> str:
        """Address of the header of a key, "" where there is none."""
        return f"{self.column_of[key]}{self.header_row}" if key in self.column_of else ""


@dataclass(frozen=True)
class RawStudy:
    """A study workbook as typed: tables by schema sheet name, and what was found on the way.

    ``fingerprint``: ``sha256:...`` of the file's bytes. ``n_formula``: formulas whose stored
    values were used. ``rows_of``: every non-blank cell of the sheets that hold input, by title, row
    number and 1-based column.
    """

    file_name: str
    tables: Mapping[str, Table]
    findings: tuple[Finding, ...]
    fingerprint: str
    n_formula: int = 0
    rows_of: Mapping[str, Mapping[int, Mapping[int, Cell]]] = field(default_factory=dict)


def finding_at(
    cell: Cell, level: Level, code: str, key: str, message: str, hint: str = ""
) -> Finding:
    """A finding about one cell; what was typed there never breaks its one line."""
    return Finding(
        level,
        code,
        cell.sheet,
        cell.address,
        key,
        cell.typed,
        _one_line(message),
        _one_line(hint),
    )


def _one_line(text: str) -> str:
    line = one_line(text)
    return line if len(line) <= LONGEST_MESSAGE else f"{line[:LONGEST_MESSAGE]}..."
