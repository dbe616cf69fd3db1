"""Alternatives side by side: from cost parts to totals, present value and payback.

A statement: one row per figure, one column per alternative. Parts that evaluation found are
numbers; investment and fixed O&M are taken from the Plan sheet; everything else is a formula.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from xlsxwriter.utility import xl_rowcol_to_cell

from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import PlanResult
from xlplan.report import money
from xlplan.report.grid import Cell, Formula, write_cell
from xlplan.report.safe_book import SafeBook
from xlplan.report.sheets.plan import DISCOUNT_RATE, PlanCells
from xlplan.report.tables import ALTERNATIVES

STUDY_LIFE = "study_life_years"
RATE_ROW, LIFE_ROW, HEAD_ROW = 3, 4, 6
FIRST_PLAN_COL = 2


@dataclass(frozen=True)
class Line:
    """One row of the statement; ``cell`` gives the content for plan i."""

    key: str
    label: str
    unit: str
    look: str
    note: str
    cell: Callable[[int], Cell]
    modifier: str = ""


@dataclass(frozen=True)
class AlternativesCells:
    """Where each figure stands: ``here(key, i_plan)`` on the sheet, ``away`` for others."""

    row_of: dict[str, int]

    def here(self, key: str, i_plan: int) -> str:
        """Relative address on the sheet."""
        return str(xl_rowcol_to_cell(self.row_of[key], FIRST_PLAN_COL + i_plan))

    def fixed(self, key: str, i_plan: int) -> str:
        """Absolute address on the sheet."""
        return str(xl_rowcol_to_cell(self.row_of[key], FIRST_PLAN_COL + i_plan, True, True))

    def away(self, key: str, i_plan: int) -> str:
        """Address for other sheets."""
        return f"'{ALTERNATIVES}'!{self.fixed(key, i_plan)}"


def write(book: SafeBook, result: StudyResult, plan_cells: PlanCells) -> AlternativesCells:
    """Writes the sheet; Summary and Checks refer to its cells."""
    sheet = book.sheet(ALTERNATIVES)
    sheet.head(
        "Alternatives side by side",
        "Yearly cost from its parts to totals, then capital, present value and payback, all "
        "against the existing feeder. Blue figures can be changed; formulas follow.",
    )
    _write_assumptions(book, result)
    lines = _cost_lines(result, plan_cells) + _money_lines(result)
    row_of: dict[str, int] = {}
    row = HEAD_ROW + 1
    for block, block_lines in lines:
        row += 1 if row > HEAD_ROW + 1 else 0
        row_of[block] = row
        for line in block_lines:
            row += 1
            row_of[line.key] = row
        row += 1
    cells = AlternativesCells(row_of)
    _CURRENT.append(cells)
    try:
        _write_lines(book, result, lines, cells)
    finally:
        _CURRENT.pop()
    note_col = FIRST_PLAN_COL + len(result.plans)
    sheet.widths([42, 16] + [17] * len(result.plans) + [88])
    sheet.freeze(HEAD_ROW + 1, FIRST_PLAN_COL)
    sheet.print_setup(row, note_col)
    return cells
