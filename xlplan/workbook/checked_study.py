"""Every checked table of a study, with what the checks between sheets ask of them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from xlplan.base.errors import Finding, Level
from xlplan.workbook.field_checks import CheckedRow, CheckedTable
from xlplan.workbook.tables import finding_at


@dataclass(frozen=True)
class CheckedStudy:
    """Checked tables by schema sheet name."""

    tables: Mapping[str, CheckedTable]

    def rows(self, sheet: str) -> tuple[CheckedRow, ...]:
        """The rows of a sheet; none where the workbook lacks it."""
        return self.tables[sheet].rows if sheet in self.tables else ()

    @property
    def settings(self) -> CheckedRow | None:
        """The one row of Settings, None where the sheet is missing."""
        rows = self.rows("Settings")
        return rows[0] if rows else None

    def by_id(self, sheet: str) -> dict[str, CheckedRow]:
        """Rows of a sheet by the name in their id column; the first where a name stands twice."""
        found: dict[str, CheckedRow] = {}
        id_field = self.tables[sheet].schema.id_field if sheet in self.tables else None
        for row in self.rows(sheet):
            name = row.text(id_field) if id_field else None
            if name is not None:
                found.setdefault(name, row)
        return found


def fault(row: CheckedRow, code: str, key: str, message: str, hint: str = "") -> Finding:
    """A fault at the cell of one key of a row."""
    return finding_at(row.row.cell(key), Level.FAULT, code, key, message, hint)


def warning(row: CheckedRow, code: str, key: str, message: str, hint: str = "") -> Finding:
    """A warning at the cell of one key of a row."""
    return finding_at(row.row.cell(key), Level.WARNING, code, key, message, hint)


def note(row: CheckedRow, code: str, key: str, message: str, hint: str = "") -> Finding:
    """A note at the cell of one key of a row."""
    return finding_at(row.row.cell(key), Level.NOTE, code, key, message, hint)
