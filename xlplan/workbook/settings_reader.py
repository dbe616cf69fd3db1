"""The Settings sheet to one row: settings are found by name, their values beside it.

Enters: a ``Grid`` and the schema of Settings. Leaves: a ``Table`` with a single ``Row`` whose cells
lie below each other, and findings.
"""

from __future__ import annotations

from openpyxl.utils import get_column_letter
from openpyxl.utils.cell import coordinate_from_string

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level
from xlplan.schema.fields import Field, Sheet
from xlplan.workbook.folding import fold_heading
from xlplan.workbook.grid import Grid
from xlplan.workbook.headings import (
    field_of_heading,
    near_miss,
    unit_differs,
    words_in_parentheses,
)
from xlplan.workbook.sheet_facts import SheetFacts
from xlplan.workbook.sheet_reader import (
    HEADING_ROWS,
    about_hidden_rows,
    about_merges,
    about_no_header,
)
from xlplan.workbook.tables import Cell, Row, Table, finding_at
from xlplan.workbook.values import is_blank


def read_settings(schema: Sheet, grid: Grid, facts: SheetFacts) -> tuple[Table, list[Finding]]:
    """The settings as one row whose cells lie below each other."""
    header_row, name_column, value_column, unit_column = _settings_columns(grid)
    findings: list[Finding] = []
    cells: dict[str, Cell] = {}
    others: list[Cell] = []
    for number, found in grid.rows.items():
        name = found.get(name_column)
        if number <= header_row or name is None or is_blank(name):
            continue
        address = f"{get_column_letter(value_column)}{number}"
        value = found.get(value_column) or Cell(grid.sheet, address)
        setting = field_of_heading(name.typed, schema.fields)
        if setting is None:
            others.append(name)
        elif setting.key in cells:
            findings.append(_about_setting_twice(value, setting, cells[setting.key]))
        else:
            cells[setting.key] = value
            unit = found.get(unit_column)
            unit_text = f"{words_in_parentheses(name.typed)} {unit.typed if unit else ''}"
            warning = unit_differs(unit or name, unit_text, setting)
            findings += [warning] if warning else []
    missing = [f for f in schema.fields if f.key not in cells]
    for name in others:
        miss = near_miss(name, missing)
        findings += [miss] if miss else []
    if not cells:
        return Table(schema.name, grid.sheet), about_no_header(schema, grid)
    column = get_column_letter(value_column)
    numbers = [coordinate_from_string(cell.address)[1] for cell in cells.values()]
    findings += about_merges(
        grid.sheet, facts, min(numbers), max(numbers), {name_column, value_column}
    )
    findings += about_hidden_rows(grid.sheet, facts, numbers)
    row = Row(grid.sheet, 0, cells, dict.fromkeys(cells, column))
    return Table(schema.name, grid.sheet, header_row or 1, {}, (row,)), findings


def _settings_columns(grid: Grid) -> tuple[int, int, int, int]:
    """Heading row (0: none), columns of name, value and unit."""
    for number in sorted(row for row in grid.rows if row <= HEADING_ROWS):
        headings = {fold_heading(cell.typed): column for column, cell in grid.rows[number].items()}
        if "value" in headings:
            value = headings["value"]
            name = headings.get("setting", max(value - 1, 1))
            return number, name, value, headings.get("unit", -1)
    return 0, 1, 2, -1


def _about_setting_twice(cell: Cell, setting: Field, first: Cell) -> Finding:
    return finding_at(
        cell,
        Level.FAULT,
        Code.HEADING_TWICE,
        setting.key,
        f"'{setting.title}' also stands in {first.address}.",
        "Delete one of the two rows.",
    )
