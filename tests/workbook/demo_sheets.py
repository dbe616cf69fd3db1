"""The demo study, read once; ways to change its cells and sheets in memory and check it again.

Addresses are those of the template: headings in row 5, rows from 6 on.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from copy import deepcopy
from dataclasses import replace
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

from openpyxl.utils import column_index_from_string, get_column_letter

from xlplan.pipeline import CheckedInput, check_raw
from xlplan.workbook.reader import Sheets, read_sheets, tables_of
from xlplan.workbook.tables import Cell
from xlplan.workbook.template import write_template

HEADING_ROW = 5


@cache
def _demo() -> Sheets:
    with TemporaryDirectory() as folder:
        path = Path(folder) / "demo.xlsx"
        write_template(path, with_demo=True)
        return read_sheets(path.read_bytes())


def split(place: str) -> tuple[str, int, int]:
    """Sheet, row and column of ``Loads!D6``."""
    sheet, address = place.split("!")
    match = re.fullmatch(r"([A-Z]+)([0-9]+)", address)
    assert match is not None
    return sheet, int(match[2]), column_index_from_string(match[1])


class Book:
    """The demo's sheets, of which those that are changed are copied first."""

    def __init__(self) -> None:
        demo = _demo()
        self.sheets = replace(
            demo,
            grids=dict(demo.grids),
            facts=dict(demo.facts),
            states=dict(demo.states),
        )
        self._own: set[str] = set()

    def rows(self, sheet: str) -> dict[int, dict[int, Cell]]:
        """Rows of a sheet, to be changed."""
        if sheet not in self._own:
            grid = self.sheets.grids[sheet]
            own = replace(grid, rows={number: dict(row) for number, row in grid.rows.items()})
            self.sheets.grids[sheet] = own
            self.sheets.facts[sheet] = deepcopy(self.sheets.facts[sheet])
            self._own.add(sheet)
        return self.sheets.grids[sheet].rows

    def set(self, place: str, value: object, number_format: str = "General", **more: bool) -> None:
        """Another value in one cell; None clears it."""
        sheet, number, column = split(place)
        rows = self.rows(sheet)
        is_error = isinstance(value, str) and value.startswith("#")
        if value is None and not more:
            rows.get(number, {}).pop(column, None)
            if not rows.get(number):
                rows.pop(number, None)
            return
        address = place.split("!")[1]
        cell = Cell(sheet, address, value, number_format, is_error, **more)
        rows.setdefault(number, {})[column] = cell
        self.sheets.grids[sheet].rows = dict(sorted(rows.items()))

    def formula(self, place: str) -> None:
        """A formula that was never calculated."""
        self.set(place, None, is_uncalculated=True)

    def value(self, place: str) -> object:
        """What stands in a cell."""
        sheet, number, column = split(place)
        cell = self.sheets.grids[sheet].rows.get(number, {}).get(column)
        return None if cell is None else cell.value

    def move(self, sheet: str, new_place: Callable[[int, int], tuple[int, int] | None]) -> None:
        """Every cell of a sheet to another place; None takes it away."""
        moved: dict[int, dict[int, Cell]] = {}
        for number, row in self.rows(sheet).items():
            for column, cell in row.items():
                place = new_place(number, column)
                if place is not None:
                    address = f"{get_column_letter(place[1])}{place[0]}"
                    moved.setdefault(place[0], {})[place[1]] = replace(cell, address=address)
        self.sheets.grids[sheet].rows = dict(sorted(moved.items()))

    def insert_rows(self, sheet: str, before: int, n: int = 1) -> None:
        """Blank rows above a row."""
        self.move(sheet, lambda row, column: (row + n if row >= before else row, column))

    def insert_column(self, sheet: str, before: int) -> None:
        """A blank column left of a column."""
        self.move(sheet, lambda row, column: (row, column + 1 if column >= before else column))

    def delete_row(self, sheet: str, number: int) -> None:
        """A row and its place."""
        self.move(
            sheet,
            lambda row, column: (
                None if row == number else (row - 1 if row > number else row, column)
            ),
        )

    def delete_column(self, sheet: str, letter: str) -> None:
        """A column's cells; its place stays."""
        gone = column_index_from_string(letter)
        self.move(sheet, lambda row, column: None if column == gone else (row, column))

    def rename(self, old: str, new: str) -> None:
        """Another title for a sheet."""
        rows = self.rows(old)
        for row in rows.values():
            for column, cell in row.items():
                row[column] = replace(cell, sheet=new)
        for held in (self.sheets.grids, self.sheets.facts, self.sheets.states):
            items = [(new if title == old else title, value) for title, value in held.items()]
            held.clear()
            held.update(items)  # type: ignore[arg-type]
        self.sheets.grids[new].sheet = new

    def remove(self, sheet: str) -> None:
        """A sheet less."""
        for held in (self.sheets.grids, self.sheets.facts, self.sheets.states):
            held.pop(sheet)

    def check(self) -> CheckedInput:
        """The checks that ``xlplan check`` makes."""
        return check_raw(tables_of("demo.xlsx", self.sheets, []))


Found = tuple[str, str, str]
"""Level, code and ``Sheet!Cell`` of a finding."""


def found_in(checked: CheckedInput) -> set[Found]:
    """What was found, but for the note on checks that wait."""
    return {
        (str(f.level), str(f.code), f"{f.sheet}!{f.cell}")
        for f in checked.findings
        if f.code != "checks left"
    }
