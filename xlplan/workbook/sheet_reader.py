"""The cells of one sheet to a table: heading row, columns, rows, and what is wrong with them.

Enters: a ``Grid`` (non-blank cells by row and column) and the sheet's schema. Leaves: a ``Table``
and findings. Columns are found by heading, never by position; what stands beside, above or in
columns of the user's own is left alone.
"""

from __future__ import annotations

from dataclasses import replace as replace_in

from openpyxl.utils import column_index_from_string, get_column_letter
from openpyxl.utils.cell import range_boundaries

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level
from xlplan.schema.fields import Sheet
from xlplan.workbook.folding import clean, fold_heading
from xlplan.workbook.grid import Grid, sheet_finding
from xlplan.workbook.headings import (
    about_double,
    field_of_heading,
    heading_match_count,
    near_miss,
    unit_differs,
    words_in_parentheses,
)
from xlplan.workbook.profile_columns import profile_columns
from xlplan.workbook.sheet_facts import SheetFacts
from xlplan.workbook.tables import Cell, Row, Table, finding_at
from xlplan.workbook.values import is_blank

HEADING_ROWS = 15
"""The heading row is looked for so far down."""


def read_sheet(schema: Sheet, grid: Grid, facts: SheetFacts) -> tuple[Table, list[Finding]]:
    """The table of one sheet.

    Parameters
    ----------
    schema : Sheet
    grid : Grid, its cells
    facts : SheetFacts, what is hidden, merged or not calculated there

    Returns
    -------
    (Table, findings)
    """
    header_row = _find_header_row(schema, grid)
    if header_row == 0:
        return Table(schema.name, grid.sheet), about_no_header(schema, grid)
    findings: list[Finding] = []
    columns = _match_columns(schema, grid, header_row, findings)
    column_of = {key: get_column_letter(column) for key, column in columns.items()}
    rows, found = _read_rows(schema, grid, header_row, columns, column_of)
    findings += found
    findings += _about_missing_columns(schema, grid, header_row, columns, bool(rows))
    last_row = max((row.number for row in rows), default=header_row)
    findings += about_merges(grid.sheet, facts, header_row, last_row, set(columns.values()))
    findings += about_hidden_rows(grid.sheet, facts, [row.number for row in rows])
    findings += _about_hidden_columns(grid.sheet, facts, rows, column_of)
    return Table(schema.name, grid.sheet, header_row, column_of, rows), findings


def _find_header_row(schema: Sheet, grid: Grid) -> int:
    """The row among the first that names most fields; 0 where none names any."""
    best, best_count = 0, 0
    for number in sorted(row for row in grid.rows if row <= HEADING_ROWS):
        count = heading_match_count(grid.texts(number), schema)
        if count > best_count:
            best, best_count = number, count
    return best


def about_no_header(schema: Sheet, grid: Grid) -> list[Finding]:
    if schema.is_optional and not any(number > 3 for number in grid.rows):
        return []
    names = ", ".join(f.heading for f in schema.fields if f.is_required)
    return [
        sheet_finding(
            Level.FAULT,
            Code.NO_HEADINGS,
            grid.sheet,
            "",
            f"no heading row was found in the first {HEADING_ROWS} rows.",
            f"It needs at least: {names}.",
        )
    ]


def _match_columns(
    schema: Sheet, grid: Grid, header_row: int, findings: list[Finding]
) -> dict[str, int]:
    """Column of each key; a profile's key is its own heading."""
    columns: dict[str, int] = {}
    others: list[tuple[int, Cell]] = []
    for column, cell in sorted(grid.rows[header_row].items()):
        if cell.is_uncalculated or cell.is_error:
            findings.append(_about_unreadable_heading(cell))
            continue
        found = field_of_heading(cell.typed, schema.fields)
        if found is None:
            others.append((column, cell))
        elif found.key in columns:
            findings.append(
                about_double(
                    cell, found.key, f"{get_column_letter(columns[found.key])}{header_row}"
                )
            )
        else:
            columns[found.key] = column
            warning = unit_differs(cell, words_in_parentheses(cell.typed), found)
            findings += [warning] if warning else []
    if schema.other_columns is not None:
        columns |= profile_columns(schema, grid, header_row, others, columns, findings)
        return columns
    missing = [f for f in schema.fields if f.key not in columns]
    ignored = []
    for _, cell in others:
        miss = near_miss(cell, missing)
        if miss:
            findings.append(miss)
        elif not is_blank(cell):
            ignored.append(cell)
    if ignored:
        names = ", ".join(f"'{clean(cell.typed)}'" for cell in ignored)
        findings.append(
            finding_at(ignored[0], Level.NOTE, Code.COLUMN_IGNORED, "", f"not used: {names}.")
        )
    return columns


def _about_unreadable_heading(cell: Cell) -> Finding:
    code = Code.FORMULA_NOT_CALCULATED if cell.is_uncalculated else Code.EXCEL_ERROR
    what = "a formula that was never calculated" if cell.is_uncalculated else cell.typed
    return finding_at(
        cell, Level.FAULT, code, "", f"this heading holds {what}.", "Type the heading as text."
    )


def _about_missing_columns(
    schema: Sheet, grid: Grid, header_row: int, columns: dict[str, int], has_rows: bool
) -> list[Finding]:
    if schema.is_optional and not has_rows:
        return []
    first = min(grid.rows[header_row])
    return [
        sheet_finding(
            Level.FAULT,
            Code.COLUMN_MISSING,
            grid.sheet,
            f"{get_column_letter(first)}{header_row}",
            f"the column '{f.heading}' is missing.",
            "Add it to the heading row.",
            f.key,
        )
        for f in schema.fields
        if f.is_required and f.key not in columns
    ]


def _read_rows(
    schema: Sheet,
    grid: Grid,
    header_row: int,
    columns: dict[str, int],
    column_of: dict[str, str],
) -> tuple[tuple[Row, ...], list[Finding]]:
    """Rows with a value in any column of ours; those without a name are faults and left out."""
    rows: list[Row] = []
    findings: list[Finding] = []
    n_gap = 0
    previous = header_row
    for number, found in grid.rows.items():
        if number <= header_row:
            continue
        cells = {
            key: found.get(column) or Cell(grid.sheet, f"{column_of[key]}{number}")
            for key, column in columns.items()
        }
        if all(is_blank(cell) for cell in cells.values()):
            continue
        n_gap += number - previous - 1
        previous = number
        row = Row(grid.sheet, number, cells, column_of)
        if schema.id_field in cells and is_blank(cells[schema.id_field]):
            findings.append(_about_no_id(schema, schema.id_field, row))
        elif _is_totals_row(schema, row):
            findings.append(_about_totals(next(iter(filter(_is_total, cells.values())))))
        else:
            rows.append(row)
    if n_gap:
        findings.append(
            sheet_finding(
                Level.NOTE,
                Code.BLANK_ROWS,
                grid.sheet,
                f"A{header_row + 1}",
                f"{n_gap} blank row{'s' if n_gap > 1 else ''} between the others skipped.",
            )
        )
    return tuple(rows), findings


_WORDS_FOR_TOTALS = frozenset(
    ["total", "totals", "sum", "sums", "subtotal", "grand total", "average", "mean", "count"]
)


def _is_total(cell: Cell) -> bool:
    return isinstance(cell.value, str) and fold_heading(cell.value) in _WORDS_FOR_TOTALS


def _is_totals_row(schema: Sheet, row: Row) -> bool:
    """True for a row of sums below a table: named so, and blank where a row needs a value."""
    if schema.other_columns is not None:
        needed = []  # a time is never a word
    else:
        needed = [f.key for f in schema.fields if f.is_required and f.key != schema.id_field]
    first = next((cell for cell in row.cells.values() if not is_blank(cell)), None)
    return (
        first is not None
        and _is_total(first)
        and (not needed or any(is_blank(row.cell(key)) for key in needed if key in row.cells))
    )


def _about_totals(cell: Cell) -> Finding:
    return finding_at(
        cell,
        Level.FAULT,
        Code.TOTALS_ROW,
        "",
        f"'{clean(cell.typed)}' looks like a row of sums below the table.",
        "Clear the row or move it to the right of the table: every row here is read.",
    )


def _about_no_id(schema: Sheet, key: str, row: Row) -> Finding:
    cell = row.cells[key]
    typed = next(c for c in row.cells.values() if not is_blank(c))
    title = schema.field(key).title
    finding = finding_at(
        cell,
        Level.FAULT,
        Code.ROW_WITHOUT_ID,
        key,
        f"row {row.number} has values (such as {typed.typed or 'a formula'} in {typed.address}) "
        f"but nothing under '{title}'.",
        f"Fill in '{title}', or clear the row; notes and sums belong outside these columns.",
    )
    return replace_in(finding, value=typed.typed)


def about_merges(
    sheet: str, facts: SheetFacts, header_row: int, last_row: int, columns: set[int]
) -> list[Finding]:
    """Faults about merged cells inside the table: all but one of them lost their value."""
    findings = []
    for merged in facts.merged_ranges:
        try:
            first_column, first_row, last_column, final_row = range_boundaries(merged)
        except ValueError:
            continue  # no range at all: nothing that a spreadsheet program would merge
        if None in (first_column, first_row, last_column, final_row):
            continue
        is_inside = first_row <= last_row and final_row >= header_row
        if is_inside and columns & set(range(first_column, last_column + 1)):
            findings.append(
                sheet_finding(
                    Level.FAULT,
                    Code.MERGED_CELLS,
                    sheet,
                    merged.split(":")[0],
                    f"the cells {merged} are merged inside the table.",
                    "Unmerge them and give every row its own value.",
                )
            )
    return findings


def about_hidden_rows(sheet: str, facts: SheetFacts, numbers: list[int]) -> list[Finding]:
    """A note about hidden or filtered rows, whose values are used all the same."""
    hidden = [number for number in numbers if number in facts.hidden_rows]
    if not hidden:
        return []
    how_many = "1 hidden or filtered row was"
    if len(hidden) > 1:
        how_many = f"{len(hidden)} hidden or filtered rows were"
    return [
        sheet_finding(
            Level.NOTE,
            Code.HIDDEN_ROWS,
            sheet,
            f"A{hidden[0]}",
            f"{how_many} used.",
            "Delete rows that are not to count.",
        )
    ]


def _about_hidden_columns(
    sheet: str, facts: SheetFacts, rows: tuple[Row, ...], column_of: dict[str, str]
) -> list[Finding]:
    """Notes about hidden columns, whose values are used all the same."""
    last = max((row.number for row in rows), default=1)
    return [
        sheet_finding(
            Level.NOTE,
            Code.HIDDEN_COLUMN,
            sheet,
            f"{letter}{last}",
            "this column is hidden. Its values are used.",
            key=key,
        )
        for key, letter in column_of.items()
        if column_index_from_string(letter) in facts.hidden_columns
    ]
