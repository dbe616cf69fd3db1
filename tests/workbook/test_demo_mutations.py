"""One slip of the pen at a time in the demo: every finding it leads to, by level, code and cell.

Each mutation lists all that it must lead to beyond what the demo itself shows, knock-on findings
included, and nothing else may be found. Cells are counted in the demo (rows from 6 on), never taken
from what the checks print.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable

import pytest

from tests.workbook.demo_sheets import Book, Found, found_in, split

Change = Callable[[Book], object]


def fault(code: str, place: str) -> Found:
    return ("fault", code, place)


def warning(code: str, place: str) -> Found:
    return ("warning", code, place)


def note(code: str, place: str) -> Found:
    return ("note", code, place)


def put(*cells: tuple[str, object]) -> Change:
    """Values in cells."""

    def change(book: Book) -> None:
        for place, value in cells:
            book.set(place, value)

    return change


def percent(place: str, value: float) -> Change:
    return lambda book: book.set(place, value, "0%")


def formula(place: str) -> Change:
    return lambda book: book.formula(place)


def column_of(sheet: str, letter: str, value: object, first: int, last: int) -> Change:
    return put(*((f"{sheet}!{letter}{row}", value) for row in range(first, last + 1)))


def copy_row(sheet: str, number: int, new: int, **changes: object) -> Change:
    """A copy of a row further down, with other values in the named columns."""

    def change(book: Book) -> None:
        for column in list(book.rows(sheet)[number]):
            letter = chr(ord("A") + column - 1)
            value = changes.get(letter, book.value(f"{sheet}!{letter}{number}"))
            book.set(f"{sheet}!{letter}{new}", value)

    return change


def hide_row(sheet: str, number: int) -> Change:
    def change(book: Book) -> None:
        book.rows(sheet)
        book.sheets.facts[sheet].hidden_rows.add(number)

    return change


def hide_column(sheet: str, column: int) -> Change:
    def change(book: Book) -> None:
        book.rows(sheet)
        book.sheets.facts[sheet].hidden_columns.add(column)

    return change


def merge(sheet: str, area: str) -> Change:
    def change(book: Book) -> None:
        book.rows(sheet)
        book.sheets.facts[sheet].merged_ranges.append(area)

    return change


def external(place: str) -> Change:
    def change(book: Book) -> None:
        sheet, *_ = split(place)
        book.rows(sheet)
        book.sheets.facts[sheet].external.append(place.split("!")[1])

    return change


def hide_sheet(sheet: str) -> Change:
    def change(book: Book) -> None:
        book.sheets.states[sheet] = "hidden"

    return change


def swap_columns(sheet: str, one: int, other: int) -> Change:
    places = {one: other, other: one}
    return lambda book: book.move(sheet, lambda row, column: (row, places.get(column, column)))


def extra_sheet(book: Book) -> None:
    book.sheets.grids["My workings"] = type(book.sheets.grids["Loads"])("My workings")
    book.sheets.facts["My workings"] = type(book.sheets.facts["Loads"])()


DATE = dt.datetime(2026, 2, 1)

MUTATIONS: list[tuple[str, Change, list[Found]]] = [
    # -- numbers as people type them (guide: cell values) --
    ("number as text", put(("Loads!D6", "260")), [note("text number", "Loads!D6")]),
    (
        "thousands and decimals",
        put(("Storage!K6", "40,000.5")),
        [note("text number", "Storage!K6")],
    ),
    (
        "two groups of thousands",
        put(("Settings!B22", "1,700,000")),
        [note("text number", "Settings!B22")],
    ),
    (
        "one comma is two numbers",
        put(("Loads!D6", "1,250")),
        [fault("ambiguous number", "Loads!D6")],
    ),
    ("decimal comma", put(("Lines!D6", "1,6")), [fault("ambiguous number", "Lines!D6")]),
    ("points and comma", put(("Loads!D6", "1.250,5")), [fault("ambiguous number", "Loads!D6")]),
    ("no-break space", put(("Loads!D6", "1\u00a0250")), [note("text number", "Loads!D6")]),
    ("narrow no-break space", put(("Loads!D6", "1\u202f250")), [note("text number", "Loads!D6")]),
    ("thin space", put(("Loads!D6", "1\u2009250")), [note("text number", "Loads!D6")]),
    (
        "minus sign",
        put(("Sensitivities!B14", "\u22122")),
        [note("text number", "Sensitivities!B14")],
    ),
    ("unit behind", put(("Loads!D6", "260 kW")), [fault("not a number", "Loads!D6")]),
    ("thousands and unit", put(("Loads!D6", "1,200 kW")), [fault("not a number", "Loads!D6")]),
    (
        "unit in settings",
        put(("Settings!B11", "12.47 kV")),
        [fault("not a number", "Settings!B11")],
    ),
    (
        "a range",
        put(("Outage assumptions!D6", "3-4")),
        [fault("not a number", "Outage assumptions!D6")],
    ),
    ("about", put(("Loads!D6", "~260")), [fault("not a number", "Loads!D6")]),
    ("infinity", put(("Loads!D6", "inf")), [fault("not a number", "Loads!D6")]),
    ("nan", put(("Loads!D6", "nan")), [fault("not a number", "Loads!D6")]),
    ("underscore", put(("Loads!D6", "1_000")), [fault("not a number", "Loads!D6")]),
    ("other digits", put(("Loads!D6", "\u0662\u0666")), [fault("not a number", "Loads!D6")]),
    ("a word", put(("Loads!D6", "unknown")), [fault("not a number", "Loads!D6")]),
    ("true for a number", put(("Loads!D6", True)), [fault("not a number", "Loads!D6")]),
    ("date for a number", put(("Loads!D6", DATE)), [fault("date for number", "Loads!D6")]),
    (
        "clock for a number",
        put(("Loads!D6", dt.time(4, 0))),
        [fault("date for number", "Loads!D6")],
    ),
    ("percent cell", percent("Storage!L7", 0.2), []),
    ("percent as text", put(("Storage!L7", "20%")), [note("text number", "Storage!L7")]),
    ("percent cell in a share", percent("Loads!E6", 0.96), []),
    ("percent typed for a share", put(("Loads!E6", 96)), [fault("out of bounds", "Loads!E6")]),
    ("fraction of a percent", put(("Storage!L7", 0.2)), [warning("unlikely value", "Storage!L7")]),
    ("n/a where needed", put(("Loads!D6", "N/A")), [fault("word for blank", "Loads!D6")]),
    ("dash where a blank may be", put(("Lines!K8", "-")), [note("word for blank", "Lines!K8")]),
    ("TBD", put(("Storage!I6", "TBD")), [fault("not a number", "Storage!I6")]),
    ("space alone where needed", put(("Loads!D6", " ")), [fault("blank", "Loads!D6")]),
    ("space alone where a blank may be", put(("Lines!K8", "\u00a0")), []),
    ("excel error", put(("Lines!D6", "#N/A")), [fault("excel error", "Lines!D6")]),
    ("division by zero", put(("Loads!D6", "#DIV/0!")), [fault("excel error", "Loads!D6")]),
    ("lost reference in a name", put(("Loads!B6", "#REF!")), [fault("excel error", "Loads!B6")]),
    (
        "formula never calculated",
        formula("Loads!D6"),
        [fault("formula not calculated", "Loads!D6")],
    ),
    (
        "formula in an optional cell",
        formula("Lines!K6"),
        [fault("formula not calculated", "Lines!K6")],
    ),
    (
        "formula in settings",
        formula("Settings!B23"),
        [fault("formula not calculated", "Settings!B23")],
    ),
    ("formula from another workbook", external("Loads!D6"), [note("external formula", "Loads!D6")]),
    ("beyond what can be meant", put(("Storage!E6", 1e15)), [fault("out of bounds", "Storage!E6")]),
    (
        "half a customer is no whole number",
        put(("Settings!B40", 1.5)),
        [fault("not whole", "Settings!B40")],
    ),
    # -- names --
    ("space behind a name", put(("Buses!A7", "B1 ")), [note("name tidied", "Buses!A7")]),
    (
        "zero-width space in a name",
        put(("Buses!A7", "B\u200b1")),
        [note("name tidied", "Buses!A7")],
    ),
    ("line break behind a name", put(("Loads!B6", "B1\n")), [note("name tidied", "Loads!B6")]),
    ("case of a reference", put(("Loads!B6", "b1")), [note("name spelling", "Loads!B6")]),
    (
        "number as a name",
        put(("Buses!A18", 12), ("Loads!B17", 12), ("Lines!C17", 12)),
        [
            note("number as name", "Buses!A18"),
            note("number as name", "Loads!B17"),
            note("number as name", "Lines!C17"),
        ],
    ),
    ("name turned into a date", put(("Loads!A6", DATE)), [fault("date for name", "Loads!A6")]),
    ("reference turned into a date", put(("Loads!B6", DATE)), [fault("date for name", "Loads!B6")]),
    ("true for a name", put(("Loads!A6", True)), [fault("not a name", "Loads!A6")]),
    (
        "12 and 0012",
        put(
            ("Buses!A20", "12"),
            ("Buses!A21", "0012"),
            ("Lines!A20", "L90"),
            ("Lines!B20", "B1"),
            ("Lines!C20", "12"),
            ("Lines!H20", 0.1),
            ("Lines!I20", 0.1),
            ("Lines!A21", "L91"),
            ("Lines!B21", "B1"),
            ("Lines!C21", "0012"),
            ("Lines!H21", 0.1),
            ("Lines!I21", 0.1),
        ),
        [warning("names alike", "Buses!A21")],
    ),
    (
        "names that differ by case",
        put(("Loads!A7", "station ROAD homes")),
        [fault("name twice", "Loads!A7")],
    ),
    (
        "names that differ by spaces",
        put(("Loads!A7", "Station  road homes")),
        [fault("name twice", "Loads!A7"), note("name tidied", "Loads!A7")],
    ),
    (
        "a store named as a generator",
        put(("Storage!A6", "Ridge gas engine")),
        [fault("name twice", "Storage!A6")],
    ),
    (
        "a measure named as a store",
        copy_row("Hardening", 8, 10, A="School battery"),
        [fault("name twice", "Hardening!A10"), note("measures share line", "Hardening!B10")],
    ),
    # -- choices and yes or no --
    ("Yes", put(("Generators!N6", "Yes")), []),
    ("TRUE", put(("Generators!N6", True)), []),
    ("1 for yes", put(("Generators!N6", 1)), []),
    ("y", put(("Generators!N6", "y")), []),
    ("maybe", put(("Generators!N6", "maybe")), [fault("not yes or no", "Generators!N6")]),
    ("2 for yes", put(("Generators!N6", 2)), [fault("not yes or no", "Generators!N6")]),
    ("device mistyped", put(("Lines!L6", "braker")), [fault("not a choice", "Lines!L6")]),
    ("device in capitals", put(("Lines!L6", "BREAKER ")), []),
    ("unit of length", put(("Settings!B14", "metres")), [fault("not a choice", "Settings!B14")]),
    (
        "kind of alternative",
        put(("Alternatives!C6", "best")),
        [fault("not a choice", "Alternatives!C6")],
    ),
    # -- times --
    ("date as ISO text", put(("Windows!C6", "2026-01-12")), [note("text time", "Windows!C6")]),
    ("date with slashes", put(("Windows!C6", "12/01/2026")), [fault("not a time", "Windows!C6")]),
    (
        "broken serial in a time",
        put(("Profiles!A9", "#VALUE!")),
        [fault("excel error", "Profiles!A9")],
    ),
    (
        "negative date",
        put(("Profiles!A9", dt.datetime(1899, 12, 30))),
        [fault("not a time", "Profiles!A9")],
    ),
    ("a number among dates", put(("Profiles!A9", 3)), [fault("times mixed", "Profiles!A9")]),
    (
        "the same time twice",
        put(("Profiles!A7", dt.datetime(2026, 1, 12))),
        [fault("time twice", "Profiles!A7"), fault("wrong step", "Profiles!A7")],
    ),
    (
        "a gap in the times",
        put(("Profiles!A9", dt.datetime(2026, 1, 12, 0, 50))),
        [fault("wrong step", "Profiles!A9")],
    ),
    (
        "window starts at no time",
        put(("Windows!C6", dt.datetime(2026, 1, 12, 0, 10))),
        [fault("start not found", "Windows!C6")],
    ),
    (
        "window runs past the profiles",
        put(("Windows!D8", 72)),
        [fault("profile too short", "Windows!D8")],
    ),
    (
        "window of part of a period",
        put(("Windows!D6", 23.9)),
        [fault("not whole periods", "Windows!D6")],
    ),
    (
        "windows that miss half a year",
        put(("Windows!B6", 100)),
        [warning("not a year", "Windows!B6")],
    ),
    ("more hours than a year", put(("Windows!B7", 365)), [warning("not a year", "Windows!B6")]),
    # -- the shape of sheets (guide: sheet shape) --
    (
        "blank row in the middle",
        lambda book: book.insert_rows("Loads", 9),
        [note("blank rows", "Loads!A6")],
    ),
    (
        "totals row",
        put(("Loads!A19", "Total"), ("Loads!D19", 3640)),
        [fault("totals row", "Loads!A19")],
    ),
    ("sum without a name", put(("Loads!D19", 3640)), [fault("row without id", "Loads!A19")]),
    (
        "sum as a formula",
        formula("Loads!D20"),
        [fault("row without id", "Loads!A20"), note("blank rows", "Loads!A6")],
    ),
    (
        "average under profiles",
        put(("Profiles!A198", "Average"), ("Profiles!B198", 0.5)),
        [fault("totals row", "Profiles!A198")],
    ),
    (
        "remark under a table",
        put(("Loads!A19", "metered in March")),
        [fault("blank", "Loads!B19"), fault("blank", "Loads!C19"), fault("blank", "Loads!D19")],
    ),
    ("remark beside a table", put(("Loads!K9", "metered in March")), []),
    (
        "notes column",
        put(("Loads!I5", "Remarks"), ("Loads!I6", "new meter")),
        [note("column ignored", "Loads!I5")],
    ),
    (
        "near-miss heading",
        put(("Loads!D5", "Peek load (kW)")),
        [fault("heading near miss", "Loads!D5"), fault("column missing", "Loads!A5")],
    ),
    (
        "needed column missing",
        lambda book: book.delete_column("Loads", "D"),
        [fault("column missing", "Loads!A5")],
    ),
    ("optional column missing", lambda book: book.delete_column("Loads", "H"), []),
    ("columns in another order", swap_columns("Loads", 2, 4), []),
    ("a column inserted", lambda book: book.insert_column("Lines", 3), []),
    ("heading in capitals", put(("Loads!D5", "PEAK LOAD (KW)")), []),
    ("heading with a line break", put(("Loads!D5", "Peak\nload\n(kW)")), []),
    ("heading without its unit", put(("Loads!D5", " peak  load ")), []),
    ("key for a heading", put(("Loads!D5", "peak_kw")), []),
    (
        "heading in another unit",
        put(("Loads!D5", "Peak load (MW)")),
        [warning("heading unit", "Loads!D5")],
    ),
    (
        "heading twice",
        put(("Loads!I5", "Peak load (kW)"), ("Loads!I6", 1)),
        [fault("heading twice", "Loads!I5")],
    ),
    (
        "heading is an error",
        put(("Loads!D5", "#REF!")),
        [fault("excel error", "Loads!D5"), fault("column missing", "Loads!A5")],
    ),
    ("title rows above", lambda book: book.insert_rows("Loads", 1, 4), []),
    ("sheet in capitals", lambda book: book.rename("Loads", "LOADS "), []),
    (
        "sheet misnamed",
        lambda book: book.rename("Windows", "Window"),
        [fault("sheet missing", "Windows!")],
    ),
    (
        "optional sheet misnamed",
        lambda book: book.rename("Storage curves", "Storage curve"),
        [fault("sheet missing", "Storage curves!"), fault("unknown name", "Storage!O7")],
    ),
    (
        "needed sheet missing",
        lambda book: book.remove("Windows"),
        [fault("sheet missing", "Windows!")],
    ),
    ("optional sheet missing", lambda book: book.remove("Sensitivities"), []),
    ("sheet of one's own", extra_sheet, [note("sheet ignored", "My workings!")]),
    ("hidden row", hide_row("Loads", 9), [note("hidden rows", "Loads!A9")]),
    ("hidden column", hide_column("Loads", 4), [note("hidden column", "Loads!D18")]),
    ("hidden sheet", hide_sheet("Loads"), [note("hidden sheet", "Loads!")]),
    ("merged cells in the table", merge("Loads", "C6:C8"), [fault("merged cells", "Loads!C6")]),
    ("merged cells above the table", merge("Loads", "A1:F1"), []),
    (
        "two settings of one name",
        put(("Settings!A43", "Line voltage"), ("Settings!B43", 11)),
        [fault("heading twice", "Settings!B43")],
    ),
    (
        "setting misspelt",
        put(("Settings!A23", "Enery price")),
        [fault("heading near miss", "Settings!A23"), fault("blank", "Settings!")],
    ),
    ("setting blank", put(("Settings!B23", None)), [fault("blank", "Settings!B23")]),
    (
        "unit of a setting changed",
        put(("Settings!C13", "MVA")),
        [warning("heading unit", "Settings!C13")],
    ),
    # -- single fields --
    ("negative length", put(("Lines!D6", -0.3)), [fault("out of bounds", "Lines!D6")]),
    (
        "5 MW at a bus",
        put(("Loads!D6", 5000)),
        [warning("unlikely value", "Loads!D6"), warning("above substation", "Settings!B13")],
    ),
    ("power factor of 0.3", put(("Loads!E6", 0.3)), [warning("unlikely value", "Loads!E6")]),
    (
        "400 failures a km",
        put(("Outage assumptions!C6", 400)),
        # In the storm that is more than any plan can be made for.
        [
            warning("unlikely value", "Outage assumptions!C6"),
            fault("failures too many", "Windows!G8"),
        ],
    ),
    (
        "discount rate of 40 %",
        put(("Settings!B21", 40)),
        [warning("unlikely value", "Settings!B21")],
    ),
    ("period of 3 minutes", put(("Settings!B15", 3)), [fault("out of bounds", "Settings!B15")]),
    ("grant of 120 %", put(("Storage!L7", 120)), [fault("out of bounds", "Storage!L7")]),
    ("profile below 0", put(("Profiles!B8", -0.1)), [fault("out of bounds", "Profiles!B8")]),
    ("profile blank", put(("Profiles!B8", None)), [fault("blank", "Profiles!B8")]),
    # -- between sheets --
    ("load at no bus", put(("Loads!B6", "B99")), [fault("unknown name", "Loads!B6")]),
    ("class that is nowhere", put(("Loads!C6", "Hoems")), [fault("unknown name", "Loads!C6")]),
    ("profile that is nowhere", put(("Loads!G6", "hoems")), [fault("unknown name", "Loads!G6")]),
    (
        "conductor that is nowhere",
        put(("Lines!E6", "Thin wire")),
        [fault("unknown name", "Lines!E6")],
    ),
    (
        "line that is nowhere",
        put(("Hardening!B6", "L03, L99")),
        [fault("unknown name", "Hardening!B6")],
    ),
    (
        "source that is nowhere",
        put(("Settings!B10", "S9")),
        [fault("unknown name", "Settings!B10")],
    ),
    ("a loop", put(("Lines!N19", "no")), [fault("loop", "Lines!N19")]),
    (
        "a loop beside another fault",
        put(("Lines!N19", "no"), ("Settings!B23", "cheap")),
        [fault("loop", "Lines!N19"), fault("not a number", "Settings!B23")],
    ),
    ("a bus without a line", put(("Buses!A20", "B14")), [fault("not connected", "Buses!A20")]),
    (
        "a line left out",
        lambda book: book.delete_row("Lines", 18),
        [fault("not connected", "Buses!A19")],
    ),
    (
        "a line from a bus to itself",
        put(("Lines!C18", "B5")),
        [fault("self loop", "Lines!C18"), fault("not connected", "Buses!A19")],
    ),
    (
        "two lines side by side",
        copy_row("Lines", 18, 20, A="L14"),
        [fault("parallel line", "Lines!C20")],
    ),
    ("no impedance", put(("Lines!E6", None)), [fault("no impedance", "Lines!E6")]),
    (
        "impedance twice",
        put(("Lines!H6", 0.3), ("Lines!I6", 0.4)),
        [fault("impedance twice", "Lines!H6")],
    ),
    (
        "resistance alone",
        put(("Lines!E6", None), ("Lines!H6", 0.3)),
        [fault("half impedance", "Lines!I6")],
    ),
    ("no length", put(("Lines!D6", None)), [fault("no length", "Lines!D6")]),
    ("candidate without a cost", put(("Storage!I6", None)), [fault("no cost", "Storage!I6")]),
    ("fuel without a price", put(("Generators!M6", None)), [fault("no cost", "Generators!M6")]),
    ("power without energy", put(("Storage!F6", None)), [fault("half store", "Storage!F6")]),
    ("sun without a profile", put(("Generators!D7", None)), [fault("no profile", "Generators!D7")]),
    (
        "sun above its rating",
        put(("Generators!D7", "price")),
        [warning("output above rating", "Generators!D7")],
    ),
    (
        "step above its limit",
        put(("Generators!G8", 900)),
        [fault("step too large", "Generators!G8")],
    ),
    (
        "curve that gains",
        put(("Storage curves!C9", 60)),
        [fault("curve gains", "Storage curves!C9")],
    ),
    (
        "curve that bends the wrong way",
        put(("Storage curves!C9", 40)),
        [warning("curve not concave", "Storage curves!C9")],
    ),
    (
        "curve that only gives",
        lambda book: (book.delete_row("Storage curves", 6), book.delete_row("Storage curves", 6)),
        [fault("curve one sided", "Storage curves!B6")],
    ),
    (
        "charge at the start below the lowest",
        put(("Storage!Q6", 5)),
        [fault("start below lowest", "Storage!Q6")],
    ),
    (
        "charge of a window below the lowest",
        put(("Windows!J8", 5)),
        [fault("start below lowest", "Windows!J8")],
    ),
    # 0.1 times the lowest price, 0.69 at midnight of the ordinary day and less on no other row.
    (
        "sale above a purchase price",
        put(("Settings!B24", 0.0695)),
        [fault("sale price", "Settings!B24")],
    ),
    (
        "demand charge that nothing counts for",
        put(("Windows!K6", "no"), ("Windows!K7", "no")),
        [warning("demand nowhere", "Windows!K6")],
    ),
    (
        "loads above the substation",
        put(("Settings!B13", 2500)),
        [warning("above substation", "Settings!B13")],
    ),
    (
        "longer interruption costs less",
        put(("Customer classes!E6", 2)),
        [fault("cost falls", "Customer classes!E6")],
    ),
    (
        "voltage limits crossed",
        put(("Settings!B16", 1.05)),
        [fault("band reversed", "Settings!B16"), warning("unlikely value", "Settings!B16")],
    ),
    (
        "source outside its limits",
        put(("Settings!B12", 1.07)),
        [fault("source voltage", "Settings!B12")],
    ),
    # 150 minutes are five periods, and so long the repair of 120 acts: 25 % more.
    (
        "switching longer than repair",
        put(("Outage assumptions!E8", 150)),
        [
            warning("switching long", "Outage assumptions!E8"),
            warning("time rounded", "Outage assumptions!D8"),
        ],
    ),
    (
        "class left out",
        put(("Outage assumptions!H9", "no")),
        [note("class left out", "Outage assumptions!H9")],
    ),
    (
        "failure shape of zeros",
        column_of("Profiles", "G", 0, 102, 197),
        [fault("profile all zero", "Windows!I8")],
    ),
    (
        "budget above the study's",
        put(("Alternatives!D6", 900000)),
        [warning("budget above study", "Alternatives!D6")],
    ),
    # 0.8 (300 kW x 280 + 1500 kWh x 240 + 35000) = 383,200, and 12,000 for the trees.
    (
        "fixed purchases above their budget",
        put(("Alternatives!D7", 395000)),
        [fault("over budget", "Alternatives!D7")],
    ),
    ("fixed purchases at their budget", put(("Alternatives!D7", 395200)), []),
    (
        "purchase larger than its limit",
        put(("Fixed purchases!C6", 501)),
        [fault("purchase too large", "Fixed purchases!C6")],
    ),
    (
        "more hours than a store allows",
        put(("Fixed purchases!C6", 150)),
        [fault("purchase too large", "Fixed purchases!D6")],
    ),
    (
        "alternative without purchases",
        put(("Alternatives!C6", "fixed")),
        [warning("no purchases", "Alternatives!C6")],
    ),
    (
        "alternative with a standing name",
        put(("Alternatives!A6", "Existing feeder")),
        [fault("name reserved", "Alternatives!A6")],
    ),
    (
        "device change of a line that is nowhere",
        put(("Device changes!B6", "L55")),
        [fault("unknown name", "Device changes!B6")],
    ),
    ("low above high", put(("Sensitivities!B6", 3)), [fault("range reversed", "Sensitivities!C6")]),
    (
        "discount rate varied below 0",
        put(("Sensitivities!B14", -5)),
        [fault("out of bounds", "Sensitivities!B14")],
    ),
    (
        "measure twice over one line",
        copy_row("Fixed purchases", 7, 8, B="Clear trees main line"),
        [],
    ),
    (
        "same purchase twice",
        copy_row("Fixed purchases", 7, 8),
        [fault("row twice", "Fixed purchases!B8")],
    ),
    # -- the same fault down a column --
    # Three remarks and no number: not a profile. 384 decimal commas: one, with 50 faults listed.
    (
        "a column of remarks beside the profiles",
        put(("Profiles!I5", "seen"), ("Profiles!I6", "yes"), ("Profiles!I7", "on Monday")),
        [note("column ignored", "Profiles!I5")],
    ),
    (
        "a profile of decimal commas",
        column_of("Profiles", "F", "0,5", 6, 197),
        [fault("ambiguous number", f"Profiles!F{row}") for row in range(6, 56)],
    ),
    (
        "a column of texts",
        column_of("Loads", "D", "260 kW", 6, 18),
        [fault("not a number", f"Loads!D{row}") for row in range(6, 19)],
    ),
]

NAMES = [name for name, *_ in MUTATIONS]


@pytest.fixture(scope="module")
def baseline() -> set[Found]:
    """What the demo itself shows: a note on measures that share a line, and no fault."""
    found = found_in(Book().check())
    assert {level for level, *_ in found} == {"note"}
    return found


def test_there_are_many_mutations_and_each_has_a_name() -> None:
    assert len(set(NAMES)) == len(NAMES) >= 120


@pytest.mark.parametrize(("change", "expected"), [m[1:] for m in MUTATIONS], ids=NAMES)
def test_a_mutation_leads_to_its_findings_and_no_others(
    change: Change, expected: list[Found], baseline: set[Found]
) -> None:
    book = Book()
    change(book)
    checked = book.check()
    found = found_in(checked)
    kept = {item for item in baseline if item in found}
    assert found - kept == set(expected)
    assert checked.is_usable == (not any(level == "fault" for level, *_ in expected))
    for finding in checked.findings:
        assert finding.message.endswith((".", "?")), finding.message
        assert "\n" not in finding.text()
