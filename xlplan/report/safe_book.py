"""The one door to xlsxwriter: what it only returns or warns about is raised here.

xlsxwriter answers most faults with a return code and goes on: text is cut, a table or a chart is
left out. It also turns text that begins with ``=`` into formulas and stores 0 as the result of a
formula. So all writing goes through ``SafeSheet``: text is written as text, a formula always with
its value, and a return code other than 0 is an error. Nothing reaches the disk before the book
is closed, and a book left by an exception is never closed.
"""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Sequence
from pathlib import Path
from types import TracebackType
from typing import Any

import xlsxwriter
from xlsxwriter.chart import Chart
from xlsxwriter.format import Format
from xlsxwriter.utility import xl_rowcol_to_cell
from xlsxwriter.worksheet import Worksheet

from xlplan.report.looks import (
    FONT,
    LOOK_FILL,
    LOOK_FONT,
    LOOKS,
    MODIFIERS,
    OK_FILL,
    OK_FONT,
    PAD,
    money_format,
)
from xlplan.report.room import BODY_CHARS, HEADING_CHARS, lines_needed

MAX_TEXT = 32_767
"""Characters in a cell (Excel specifications and limits)."""

A4 = 9
PIXELS_PER_INCH = 96
PAGE_INCHES = (11.0, 210.0 / 25.4)
"""Landscape page on which A4 and Letter both fit: the width of Letter, the height of A4."""

MARGINS = {"left": 0.4, "right": 0.4, "top": 0.5, "bottom": 0.6}
WIDTH_SLACK = 0.94
"""Programs differ in how wide a column comes out: LibreOffice takes the width of a digit as 7.4
pixels, Excel as 7."""

MAX_FOOTER = 255
ABSENT = "not computed"


class WorkbookFault(RuntimeError):
    """xlsxwriter refused something: a fault of ours, never of the study."""


def ensure(code: object, what: str) -> None:
    """Raises ``WorkbookFault`` unless xlsxwriter's return code says that all went well."""
    if code not in (0, None):
        raise WorkbookFault(f"{what}: return code {code}")


class SafeSheet:
    """One worksheet. Rows and columns count from 0."""

    def __init__(self, book: SafeBook, sheet: Worksheet, name: str) -> None:
        self.book = book
        self.name = name
        self._sheet = sheet
        self._widths: dict[int, float] = {}

    def text(self, row: int, col: int, text: str, *looks: str) -> None:
        """Text as text, whatever it begins with; beyond what a cell holds it is cut visibly."""
        if len(text) > MAX_TEXT:
            text = text[: MAX_TEXT - 2] + " …"
        code = self._sheet.write_string(row, col, text, self.book.look(*(looks or ("text",))))
        ensure(code, f"text in {self.name} row {row} column {col}")

    def number(self, row: int, col: int, number: float, *looks: str) -> None:
        """A finite number."""
        if not math.isfinite(number):
            raise WorkbookFault(f"{number} in {self.name} row {row} column {col}")
        code = self._sheet.write_number(
            row, col, float(number), self.book.look(*(looks or ("any",)))
        )
        ensure(code, f"number in {self.name} row {row} column {col}")

    def formula(self, row: int, col: int, text: str, value: float | str, *looks: str) -> None:
        """A formula with the value it gives, which viewers without a calculator show."""
        if isinstance(value, float) and not math.isfinite(value):
            raise WorkbookFault(f"value {value} of {text} in {self.name}")
        if value == "":
            raise WorkbookFault(f"no value of {text} in {self.name}")
        shown: float | str = value if isinstance(value, str) else float(value)
        code = self._sheet.write_formula(
            row, col, text, self.book.look(*(looks or ("any",))), shown
        )
        ensure(code, f"formula in {self.name} row {row} column {col}")

    def blank(self, row: int, col: int, *looks: str) -> None:
        """An empty cell with a format."""
        code = self._sheet.write_blank(row, col, None, self.book.look(*(looks or ("text",))))
        ensure(code, f"blank in {self.name} row {row} column {col}")

    def paragraph(
        self, row: int, first_col: int, last_col: int, text: str, chars: int, *looks: str
    ) -> None:
        """Wrapped text over several columns; ``chars`` fit on a line, which gives the height."""
        look = self.book.look(*(looks or ("text",)), wrapped=True)
        ensure(
            self._sheet.merge_range(row, first_col, row, last_col, "", look),
            f"paragraph in {self.name} row {row}",
        )
        code = self._sheet.write_string(row, first_col, text[:MAX_TEXT], look)
        ensure(code, f"paragraph in {self.name} row {row}")
        points = 1.3 * (look.font_size or 10)
        self.height(row, points * max(1, math.ceil(len(text) / chars)) + 3)

    def block(self, row: int, first_col: int, last_col: int, text: str, *looks: str) -> int:
        """Wrapped text over several columns and as many rows as it needs; the next free row.

        Rows keep their standard height, so that blocks side by side do not stretch one another.
        """
        looks = looks or ("text",)
        chars = HEADING_CHARS if "bold" in looks else BODY_CHARS
        room = chars * sum(self.width(col) for col in range(first_col, last_col + 1))
        last_row = row + lines_needed(text, room) - 1
        look = self.book.look(*looks, wrapped=True)
        ensure(
            self._sheet.merge_range(row, first_col, last_row, last_col, "", look),
            f"block in {self.name} row {row}",
        )
        code = self._sheet.write_string(row, first_col, text[:MAX_TEXT], look)
        ensure(code, f"block in {self.name} row {row}")
        return last_row + 1

    def link(self, row: int, col: int, sheet_name: str, text: str) -> None:
        """A link to another sheet of this workbook."""
        target = f"internal:'{sheet_name}'!A1"
        code = self._sheet.write_url(row, col, target, self.book.look("link"), text)
        ensure(code, f"link in {self.name} row {row}")

    def head(self, title: str, subtitle: str) -> None:
        """Title in A1, one line under it that says what the sheet holds."""
        self.text(0, 0, title, "title")
        self.text(1, 0, subtitle, "subtitle")
        self.height(0, 24)

    def widths(self, widths: Sequence[float], first_col: int = 0) -> None:
        """Width of each column, in characters."""
        for i, width in enumerate(widths):
            ensure(self._sheet.set_column(first_col + i, first_col + i, width), "column width")
            self._widths[first_col + i] = width

    def width(self, col: int) -> float:
        """Width of a column set before, in characters; the standard one otherwise."""
        return self._widths.get(col, 8.43)

    def pixels(self, first_col: int, last_col: int) -> int:
        """Width of several columns on a screen: 7 pixels a character and 5 around it (Arial 10)."""
        return round(sum(7 * self.width(col) + 5 for col in range(first_col, last_col + 1)))

    def height(self, row: int, points: float) -> None:
        """Height of a row."""
        ensure(self._sheet.set_row(row, points), "row height")

    def print_scale(self, last_col: int) -> float:
        """Share of its size at which all columns fit on one page's width, on A4 and Letter."""
        room = PAGE_INCHES[0] - MARGINS["left"] - MARGINS["right"]
        return min(1.0, WIDTH_SLACK * room * PIXELS_PER_INCH / self.pixels(0, last_col))

    def page_pixels(self, last_col: int) -> int:
        """Height of a printed page in pixels of the sheet, on A4 and Letter."""
        room = PAGE_INCHES[1] - MARGINS["top"] - MARGINS["bottom"]
        return int(room * PIXELS_PER_INCH / self.print_scale(last_col))

    def default_height(self, points: float) -> None:
        """Height of all rows that get none of their own; to be set before anything is written."""
        self._sheet.set_default_row(points)

    def freeze(self, row: int, col: int) -> None:
        """Keeps the rows above and the columns left of a cell in sight."""
        self._sheet.freeze_panes(row, col)

    def chart(
        self, row: int, left_px: int, chart: Chart, width: int, height: int, alt_text: str
    ) -> None:
        """Puts a chart at a row, pixels from the left; ``alt_text`` is read out in its place."""
        chart.set_size({"width": width, "height": height})
        options = {
            "description": alt_text,
            "object_position": 2,
            "x_offset": left_px + 2,
            "y_offset": 4,
        }
        ensure(self._sheet.insert_chart(row, 0, chart, options), f"chart in {self.name}")

    def status_fill(self, first_row: int, last_row: int, col: int, last_col: int) -> None:
        """Fills cells by the word that column ``col`` begins with: OK one way, others another."""
        anchor = xl_rowcol_to_cell(first_row, col, False, True)
        fine = {"bg_color": OK_FILL, "font_color": OK_FONT}
        look = {"bg_color": LOOK_FILL, "font_color": LOOK_FONT}
        for words, colours in ((("PASS",), fine), (("FAIL", "LOOK", "CHANGED", "STOP"), look)):
            for word in words:
                rule = {
                    "type": "formula",
                    "criteria": f'=LEFT({anchor},{len(word)})="{word}"',
                    "format": self.book.raw_format(colours),
                }
                code = self._sheet.conditional_format(first_row, col, last_row, last_col, rule)
                ensure(code, f"status fill in {self.name}")

    def print_setup(
        self,
        last_row: int,
        last_col: int,
        heading_row: int | None = None,
        is_one_page: bool = False,
        breaks: Sequence[int] = (),
    ) -> None:
        """Paper, margins, footer; all columns on one page's width, or all on one page.

        Parameters
        ----------
        last_row, last_col : int, end of what is printed
        heading_row : int or None, repeated on every page that follows it
        is_one_page : bool
        breaks : rows at which a new page starts. Such pages have a scale of their own, since
            Excel leaves breaks out of account where it fits pages itself

        Made for A4 and narrow enough for Letter.
        """
        sheet = self._sheet
        sheet.set_landscape()
        sheet.set_paper(A4)
        sheet.set_margins(**MARGINS)
        if breaks:
            sheet.set_print_scale(math.floor(100.0 * self.print_scale(last_col)))
            ensure(sheet.set_h_pagebreaks(list(breaks)), "page breaks")
        else:
            sheet.fit_to_pages(1, 1 if is_one_page else 0)
        ensure(sheet.print_area(0, 0, last_row, last_col), "print area")
        if heading_row is not None:
            ensure(sheet.repeat_rows(heading_row), "repeated rows")
        if len(self.book.footer) > MAX_FOOTER:
            raise WorkbookFault("footer too long")
        ensure(sheet.set_footer(self.book.footer), "footer")
        if is_one_page:
            sheet.center_horizontally()
        sheet.hide_gridlines(2)


class SafeBook:
    """A new workbook; use as a context manager. ``looks.py`` holds the formats."""

    def __init__(
        self,
        path: Path,
        currency: str,
        largest_amount: float,
        footer_note: str = "",
        title: str = "",
        created: dt.datetime | None = None,
    ) -> None:
        options = {
            "strings_to_formulas": False,
            "strings_to_urls": False,
            "strings_to_numbers": False,
            "default_format_properties": {"font_name": FONT, "font_size": 10},
        }
        self._book = xlsxwriter.Workbook(str(path), options)
        self._currency = currency
        self._money = money_format(largest_amount)
        self._formats: dict[object, Format] = {}
        self._sheets: dict[str, SafeSheet] = {}
        note = footer_note[:80].replace("&", "&&")
        self.footer = f"&L&8{note}&C&8&A&R&8Page &P of &N"
        properties: dict[str, Any] = {"title": title[:200]}
        if created is not None:
            properties["created"] = created
        self._book.set_properties(properties)

    def __enter__(self) -> SafeBook:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if kind is None:
            self._book.close()

    def add_sheet(self, name: str) -> SafeSheet:
        """A new sheet at the end; names come from a fixed list."""
        self._sheets[name] = SafeSheet(self, self._book.add_worksheet(name), name)
        return self._sheets[name]

    def sheet(self, name: str) -> SafeSheet:
        """A sheet added before."""
        return self._sheets[name]

    def words(self, title: str) -> str:
        """A title with the study's currency in place of ``{money}``."""
        return title.replace("{money}", self._currency)

    def look(self, *names: str, wrapped: bool = False) -> Format:
        """The format of a look and its modifiers, made once."""
        key = (names, wrapped)
        if key not in self._formats:
            properties: dict[str, Any] = {}
            for name in names:
                properties.update(LOOKS[name] if name in LOOKS else MODIFIERS[name])
                if name == "money":
                    properties["num_format"] = f"{self._money}{PAD}"
                if name == "change":
                    properties["num_format"] = f"+{self._money}{PAD};-{self._money}{PAD};0{PAD}"
            if wrapped:
                properties.update({"text_wrap": True, "valign": "top"})
            self._formats[key] = self._book.add_format(properties)
        return self._formats[key]

    def raw_format(self, properties: dict[str, Any]) -> Format:
        """A format for a conditional rule."""
        key = tuple(sorted(properties.items()))
        if key not in self._formats:
            self._formats[key] = self._book.add_format(properties)
        return self._formats[key]

    def define_name(self, name: str, sheet_name: str, cell: str) -> None:
        """A name for one cell, which formulas use."""
        ensure(self._book.define_name(name, f"='{sheet_name}'!{cell}"), f"name {name}")

    def new_chart(self, kind: str, subtype: str | None = None) -> Chart:
        """An empty chart; xlsxwriter only warns of an unknown kind."""
        options = {"type": kind} if subtype is None else {"type": kind, "subtype": subtype}
        chart = self._book.add_chart(options)
        if chart is None:
            raise WorkbookFault(f"no chart of kind {kind}")
        return chart
