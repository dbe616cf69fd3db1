"""The non-blank cells of one sheet, before a heading row is found.

Enters: cells one by one. Leaves: a ``Grid``.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

from openpyxl.utils import column_index_from_string
from openpyxl.utils.cell import coordinate_from_string

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level
from xlplan.workbook.tables import Cell


@dataclass
class Grid:
    """Non-blank cells of one sheet, by row number and 1-based column."""

    sheet: str
    rows: dict[int, dict[int, Cell]] = field(default_factory=dict)

    def add_uncalculated(self, addresses: Iterable[str]) -> None:
        """Puts in the formulas without a stored value, which otherwise look blank."""
        for address in addresses:
            letters, number = coordinate_from_string(address)
            cells = self.rows.setdefault(number, {})
            cells[column_index_from_string(letters)] = Cell(
                self.sheet, address, is_uncalculated=True
            )
        self.rows = dict(sorted(self.rows.items()))

    def texts(self, number: int) -> list[str]:
        """The texts of one row."""
        return [c.value for c in self.rows.get(number, {}).values() if isinstance(c.value, str)]


def sheet_finding(
    level: Level, code: Code, sheet: str, cell: str, message: str, hint: str = "", key: str = ""
) -> Finding:
    """A finding about a sheet, or about a place in it that holds no value."""
    return Finding(level, code, sheet, cell, key, "", message, hint)
