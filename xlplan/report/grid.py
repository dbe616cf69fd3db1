"""A table placed on a sheet: where each of its cells is, before anything is written.

Formulas need addresses, often of tables further down or on other sheets. So a ``Grid`` is placed
first, from its columns and its number of rows, and written once all formulas are known.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from xlsxwriter.utility import xl_rowcol_to_cell

from xlplan.report.room import BODY_CHARS, HEADING_CHARS, LINE_POINTS, lines_needed
from xlplan.report.safe_book import ABSENT, SafeSheet

MOST_FOR_A_WORD = 18.0
LEFT_LOOKS = ("text", "wrap", "status", "any")


@dataclass(frozen=True)
class Formula:
    """A live formula and the value it gives; where that is not finite the cell says so instead."""

    text: str
    value: float | str


Cell = Formula | float | str | None
"""``None`` and numbers that are not finite show as "not computed"; ``""`` stays blank."""


@dataclass(frozen=True)
class Column:
    """One column: ``title`` with its unit (``{money}`` stands for the currency), its format."""

    key: str
    title: str
    look: str = "text"
    is_input: bool = False
    """Typed figures that formulas use: shown in blue on a pale fill."""


def set_widths(sheet: SafeSheet, widths: Sequence[float], *tables: Sequence[Column]) -> None:
    """Width of each column, in characters: as given, or what the longest heading word needs."""
    wide = list(widths)
    for table in tables:
        for i, column in enumerate(table[: len(wide)]):
            words = sheet.book.words(column.title).replace("-", "- ").split()
            pad = 1.0 if column.look in LEFT_LOOKS else 1.5
            need = max(map(len, words)) / HEADING_CHARS + pad
            wide[i] = max(wide[i], min(need, MOST_FOR_A_WORD))
    sheet.widths(wide)


@dataclass(frozen=True)
class Grid:
    """A heading row at ``top`` and ``n_row`` rows under it, from column ``left`` on."""

    sheet: str
    top: int
    columns: tuple[Column, ...]
    n_row: int
    left: int = 0

    @property
    def below(self) -> int:
        """First row under the table (an empty table takes one row, which says so)."""
        return self.top + 1 + max(self.n_row, 1)

    def row(self, i_row: int) -> int:
        """Sheet row of a table row."""
        return self.top + 1 + i_row

    def col(self, key: str) -> int:
        """Sheet column of a key."""
        return self.left + [column.key for column in self.columns].index(key)

    def here(self, i_row: int, key: str) -> str:
        """Address within the sheet, relative: ``D7``."""
        return str(xl_rowcol_to_cell(self.row(i_row), self.col(key)))

    def fixed(self, i_row: int, key: str) -> str:
        """Address within the sheet, absolute: ``$D$7``."""
        return str(xl_rowcol_to_cell(self.row(i_row), self.col(key), True, True))

    def away(self, i_row: int, key: str) -> str:
        """Address for other sheets: ``'Plan'!$D$7``."""
        return f"'{self.sheet}'!{self.fixed(i_row, key)}"

    def span(self, key: str, first: int = 0, n: int | None = None) -> str:
        """Absolute range of a column, or of ``n`` of its rows: ``$D$7:$D$9``."""
        last = first + (self.n_row if n is None else n) - 1
        return f"{self.fixed(first, key)}:{self.fixed(last, key)}"

    def span_away(self, key: str, first: int = 0, n: int | None = None) -> str:
        """The same for other sheets."""
        return f"'{self.sheet}'!{self.span(key, first, n)}"

    def chart_values(self, key: str) -> list[str | int]:
        """Range of a column as charts take it."""
        col = self.col(key)
        return [self.sheet, self.row(0), col, self.row(self.n_row - 1), col]

    def chart_rows(self, key: str, first: int, n: int) -> list[str | int]:
        """The same of ``n`` rows of it."""
        col = self.col(key)
        return [self.sheet, self.row(first), col, self.row(first + n - 1), col]

    def chart_name(self, key: str) -> list[str | int]:
        """Heading cell of a column as charts take it."""
        return [self.sheet, self.top, self.col(key)]

    def write(
        self,
        sheet: SafeSheet,
        rows: Sequence[Mapping[str, Cell]],
        marked: Sequence[int] = (),
    ) -> None:
        """Writes headings and rows; rows in ``marked`` are set off.

        The widths of the sheet's columns must be set before: row heights follow from them.
        """
        if len(rows) != self.n_row:
            raise ValueError(f"{len(rows)} rows for a table of {self.n_row}")
        lines = 1
        for i, column in enumerate(self.columns):
            title = sheet.book.words(column.title)
            is_text = column.look in LEFT_LOOKS
            sheet.text(self.top, self.left + i, title, "heading" if is_text else "heading_right")
            room = HEADING_CHARS * sheet.width(self.left + i) - (0 if is_text else 1)
            lines = max(lines, lines_needed(title, room))
        sheet.height(self.top, LINE_POINTS * lines + 4)
        if not rows:
            sheet.text(self.row(0), self.left, "none", "note")
        for i_row, row in enumerate(rows):
            chars = HEADING_CHARS if i_row in marked else BODY_CHARS
            lines = max(1, *(self._lines(sheet, i, row, chars) for i in range(len(self.columns))))
            extra = (*(("plan",) if i_row in marked else ()), *(("top",) if lines > 1 else ()))
            for i, column in enumerate(self.columns):
                looks = (column.look, *(("input",) if column.is_input else ()), *extra)
                write_cell(sheet, self.row(i_row), self.left + i, row[column.key], *looks)
            if lines > 1:
                sheet.height(self.row(i_row), LINE_POINTS * lines + 3)

    def _lines(self, sheet: SafeSheet, i: int, row: Mapping[str, Cell], chars: float) -> int:
        """Lines that the text of a wrapped column takes."""
        cell = row[self.columns[i].key]
        if isinstance(cell, Formula):
            cell = cell.value
        if self.columns[i].look != "wrap" or not isinstance(cell, str):
            return 1
        return lines_needed(cell, chars * sheet.width(self.left + i))


def _is_known(value: float | str) -> bool:
    return isinstance(value, str) or math.isfinite(value)


def write_cell(sheet: SafeSheet, row: int, col: int, cell: Cell, *looks: str) -> None:
    """One cell of any kind."""
    if isinstance(cell, Formula) and not _is_known(cell.value):
        cell = None
    if isinstance(cell, Formula):
        sheet.formula(row, col, cell.text, cell.value, *looks)
    elif isinstance(cell, str) and not cell:
        # Truly empty: a chart would draw an empty text as 0.
        sheet.blank(row, col, *looks)
    elif isinstance(cell, str):
        sheet.text(row, col, cell, *looks)
    elif cell is None or not _is_known(cell):
        sheet.text(row, col, ABSENT, "absent", *looks[1:])
    else:
        sheet.number(row, col, cell, *looks)
