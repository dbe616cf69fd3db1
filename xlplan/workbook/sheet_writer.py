"""Writing into one sheet so that nothing fails in silence.

xlsxwriter reports most failures (row out of range, text too long, a validation that it drops) by
a return code. Every call goes through ``SheetWriter``, which raises on any code but 0. Text is
written as text whatever it begins with.
"""

from __future__ import annotations

import math
import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import date, datetime, time, timedelta
from pathlib import Path
from typing import Any

import xlsxwriter

from xlplan.base.errors import PathError, ResultFileError
from xlplan.workbook.formats import FONT, INK, Formats, Role, workbook_options

LONGEST_TEXT = 32767
"""Characters in a cell (limit of the file format)."""

LONGEST_PROMPT_TITLE = 32
LONGEST_PROMPT = 255
"""Limits of the title and text of an input message (file format)."""

A4 = 9
WIDE = 250.0
"""Characters beyond which one page's width leaves print too small to read."""

_CREATED = datetime(2026, 1, 1)
"""A fixed date: the same content gives the same file."""


class WorkbookWriteError(RuntimeError):
    """The writing library refused something: a fault of this program, never of the user."""


def demand_written(code: int | None, what: str) -> None:
    """Raise WorkbookWriteError unless the return code says that it was written."""
    if code not in (0, None):
        raise WorkbookWriteError(f"{what} could not be written (code {code})")


def shortened(text: str, longest: int) -> str:
    """The text, cut at a word and ended with ... where it is too long.

    >>> shortened("highest voltage of all", 18)
    'highest ...'
    """
    if len(text) <= longest:
        return text
    return text[: longest - 4].rsplit(" ", 1)[0] + " ..."


class SheetWriter:
    """One sheet of a workbook being written.

    Parameters
    ----------
    workbook : xlsxwriter Workbook
    name : name of the new sheet
    formats : Formats of the same workbook
    """

    def __init__(self, workbook: Any, name: str, formats: Formats) -> None:
        self.name = name
        self.formats = formats
        self.worksheet = workbook.add_worksheet(name)
        self._widths: dict[int, float] = {}

    def text(self, row: int, column: int, text: str, role: Role = Role.TEXT) -> None:
        """Write text, as text, whatever it begins with."""
        if len(text) > LONGEST_TEXT:
            raise WorkbookWriteError(f"{self._place(row, column)}: the text is too long for a cell")
        code = self.worksheet.write_string(row, column, text, self.formats.role(role))
        demand_written(code, self._place(row, column))

    def value(self, row: int, column: int, value: object, text: Role, number: Role) -> None:
        """Write a value as a person would have typed it; None and "" leave a formatted blank."""
        place = self._place(row, column)
        if value is None or value == "":
            code = self.worksheet.write_blank(row, column, None, self.formats.role(text))
        elif isinstance(value, bool):
            code = self.worksheet.write_boolean(row, column, value, self.formats.role(text))
        elif isinstance(value, str):
            self.text(row, column, value, text)
            return
        elif isinstance(value, datetime):
            code = self.worksheet.write_datetime(row, column, value, self.formats.role(Role.TIME))
        elif isinstance(value, int | float):
            if not math.isfinite(value):
                raise WorkbookWriteError(f"{place}: {value} is no number that a cell can hold")
            is_big = number is Role.NUMBER and abs(value) >= 1000 and value == int(value)
            look = self.formats.role(Role.BIG_NUMBER if is_big else number)
            code = self.worksheet.write_number(row, column, value, look)
        else:
            raise WorkbookWriteError(f"{place}: cannot write a {type(value).__name__}")
        demand_written(code, place)

    def formula(self, row: int, column: int, text: str, value: float | str, role: Role) -> None:
        """Write a formula with the value it gives, which viewers without a calculator show."""
        look = self.formats.role(role)
        code = self.worksheet.write_formula(row, column, text, look, value)
        demand_written(code, self._place(row, column))

    def chart(self, row: int, column: int, chart: Any, size: tuple[int, int], alt: str) -> None:
        """Put a chart with its upper left corner at a cell; ``alt`` is read out in its place."""
        chart.set_size({"width": size[0], "height": size[1]})
        options = {"description": alt, "object_position": 3}
        code = self.worksheet.insert_chart(row, column, chart, options)
        demand_written(code, f"chart at {self._place(row, column)}")

    def blank(self, row: int, column: int, role: Role) -> None:
        """Write a formatted cell without a value."""
        code = self.worksheet.write_blank(row, column, None, self.formats.role(role))
        demand_written(code, self._place(row, column))

    def put(self, row: int, column: int, value: object, properties: dict[str, Any]) -> None:
        """Write a value of any type that a cell can hold, with a format of its own; text stays
        text whatever it begins with, and None leaves a formatted blank."""
        place = self._place(row, column)
        look = self.formats.rule({"font_color": INK, **properties})
        sheet = self.worksheet
        if value is None:
            code = sheet.write_blank(row, column, None, look)
        elif isinstance(value, bool):
            code = sheet.write_boolean(row, column, value, look)
        elif isinstance(value, str):
            if len(value) > LONGEST_TEXT:
                raise WorkbookWriteError(f"{place}: the text is too long for a cell")
            code = sheet.write_string(row, column, value, look)
        elif isinstance(value, datetime | date | time | timedelta):
            code = sheet.write_datetime(row, column, value, look)
        elif isinstance(value, int | float) and math.isfinite(value):
            code = sheet.write_number(row, column, value, look)
        else:
            raise WorkbookWriteError(f"{place}: cannot write {value!r}")
        demand_written(code, place)

    def cell_link(self, row: int, column: int, sheet: str, address: str, text: str) -> None:
        """Write a link to a cell of another sheet of this workbook."""
        quoted = sheet.replace("'", "''")
        code = self.worksheet.write_url(
            row, column, f"internal:'{quoted}'!{address}", self.formats.role(Role.LINK), text
        )
        demand_written(code, self._place(row, column))

    def sheet_link(self, row: int, column: int, sheet: str) -> None:
        """Write a link to the top of another sheet of this workbook."""
        code = self.worksheet.write_url(
            row, column, f"internal:'{sheet}'!A1", self.formats.role(Role.LINK), sheet
        )
        demand_written(code, self._place(row, column))

    def note(self, row: int, column: int, text: str) -> None:
        """Attach a note to a cell, sized to its text."""
        n_line = sum(1 + len(part) // 44 for part in text.split("\n"))
        options = {
            "font_name": FONT,
            "font_size": 9,
            "color": "#FFFDF4",
            "width": 290,
            "height": 14 * n_line + 16,
            "author": "",
        }
        code = self.worksheet.write_comment(row, column, text, options)
        demand_written(code, f"note at {self._place(row, column)}")

    def width(self, column: int, width: float, role: Role | None = None) -> None:
        """Set a column's width in characters, and the format of its unwritten cells."""
        cell_format = None if role is None else self.formats.role(role)
        self._widths[column] = width
        code = self.worksheet.set_column(column, column, width, cell_format)
        demand_written(code, f"width of column {column} of {self.name}")

    def height(self, row: int, points: float) -> None:
        """Set a row's height."""
        demand_written(self.worksheet.set_row(row, points), f"height of row {row} of {self.name}")

    def validation(self, area: tuple[int, int, int, int], options: dict[str, Any]) -> None:
        """Add a data validation to an area (first row, first column, last row, last column)."""
        code = self.worksheet.data_validation(*area, options)
        demand_written(code, f"validation at {self._place(*area[:2])}")

    def rule(self, area: tuple[int, int, int, int], options: dict[str, Any]) -> None:
        """Add a conditional format to an area."""
        code = self.worksheet.conditional_format(*area, options)
        demand_written(code, f"conditional format at {self._place(*area[:2])}")

    def table(self, area: tuple[int, int, int, int], options: dict[str, Any]) -> None:
        """Make an area a table; its first row holds the headings."""
        code = self.worksheet.add_table(*area, options)
        demand_written(code, f"table at {self._place(*area[:2])}")

    def head(self, title: str, line: str) -> None:
        """Title in A1, and one line under it that says what the sheet holds."""
        self.text(0, 0, title, Role.TITLE)
        self.text(1, 0, line, Role.SUBTITLE)
        self.height(0, 24)
        self.height(1, 17)

    def page(self, last_row: int, last_column: int, heading_row: int | None, line: str) -> None:
        """Print setup: landscape, wide enough for the line of text in A2.

        One page wide; two with the first column on both where the print would be too small.
        """
        sheet = self.worksheet
        while self._width_to(last_column) < len(line) * 0.95:
            last_column += 1
        sheet.set_landscape()
        sheet.set_paper(A4)
        sheet.set_margins(left=0.5, right=0.5, top=0.6, bottom=0.7)
        is_wide = self._width_to(last_column) > WIDE
        sheet.fit_to_pages(2 if is_wide else 1, 0)
        if is_wide:
            demand_written(sheet.repeat_columns(0), f"repeated column of {self.name}")
        demand_written(sheet.print_area(0, 0, last_row, last_column), f"print area of {self.name}")
        sheet.set_footer(f"&L&8{self.name}&R&8&P / &N")
        if heading_row is not None:
            sheet.repeat_rows(heading_row)
        sheet.hide_gridlines(2)

    def _width_to(self, last_column: int) -> float:
        return sum(self._widths.get(column, 8.43) for column in range(last_column + 1))

    def _place(self, row: int, column: int) -> str:
        return f"{self.name}!{xlsxwriter.utility.xl_rowcol_to_cell(row, column)}"


@contextmanager
def new_workbook(path: Path, title: str) -> Iterator[tuple[Any, Formats]]:
    """A workbook that appears under its name only when it is whole.

    Parameters
    ----------
    path : where it will stand; a file already there is replaced
    title : title among the document's properties

    Yields (xlsxwriter Workbook, its Formats). Raises PathError if the folder is missing,
    ResultFileError if the file cannot be written or replaced.
    """
    folder = path.parent
    if not folder.is_dir():
        raise PathError(f"There is no folder '{folder}' to write '{path.name}' into.")
    try:
        handle, name = tempfile.mkstemp(prefix=".", suffix=".part", dir=folder)
    except OSError as error:
        raise ResultFileError(
            f"Cannot write into the folder '{folder}': {error.strerror}."
        ) from error
    os.close(handle)
    part = Path(name)
    try:
        workbook = xlsxwriter.Workbook(name, workbook_options())
        workbook.set_properties({"title": title, "created": _CREATED})
        yield workbook, Formats(workbook)
        workbook.close()
        _give_usual_mode(part)
        os.replace(part, path)
    except OSError as error:
        raise ResultFileError(f"Cannot write '{path}': {error.strerror}.") from error
    finally:
        part.unlink(missing_ok=True)


def _give_usual_mode(path: Path) -> None:
    """Temporary files are made private; give this one the mode of any new file."""
    mask = os.umask(0)
    os.umask(mask)
    path.chmod(0o666 & ~mask)
