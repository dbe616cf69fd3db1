"""One cell to one value: the rules for what people really type."""

from __future__ import annotations

import datetime as dt

import pytest

from xlplan.base.codes import Code
from xlplan.base.errors import Level
from xlplan.schema.fields import Field, sheet
from xlplan.workbook.tables import Cell
from xlplan.workbook.values import Reading, read_value

LENGTH = sheet("Lines").field("length")
PEAK = sheet("Loads").field("peak_kw")
GRANT = sheet("Storage").field("grant_pct")
POWER_FACTOR = sheet("Loads").field("power_factor")
BUS = sheet("Buses").field("bus")
LINES = sheet("Hardening").field("lines")
OPEN = sheet("Lines").field("normally_open")
DEVICE = sheet("Lines").field("from_device")
TIME = sheet("Profiles").field("time")
SEED = sheet("Settings").field("random_seed")


def read(value: object, field: Field = LENGTH, number_format: str = "General") -> Reading:
    return read_value(Cell("Sheet", "D7", value, number_format), field)


def codes(reading: Reading) -> list[str]:
    return [str(finding.code) for finding in reading.findings]


@pytest.mark.parametrize(("typed", "number"), [(3, 3.0), (0.25, 0.25), (-2, -2.0), (1e5, 1e5)])
def test_a_number_is_a_number_without_remark(typed: float, number: float) -> None:
    assert read(typed) == Reading(number)


@pytest.mark.parametrize(
    ("typed", "number"),
    [
        ("12.5", 12.5),
        (" 12.5 ", 12.5),
        ("1e3", 1000.0),
        (".5", 0.5),
        ("1,250.5", 1250.5),
        ("1,250,000", 1250000.0),
        ("1\u00a0250", 1250.0),  # no-break space
        ("1\u202f250.5", 1250.5),  # narrow no-break space
        ("1\u2009250", 1250.0),  # thin space
        ("\u22123", -3.0),  # minus sign
        ("\u200b7", 7.0),  # zero-width space
    ],
)
def test_a_plain_number_as_text_is_read_with_a_note(typed: str, number: float) -> None:
    reading = read(typed)
    assert reading.value == number
    assert codes(reading) == ["text number"]
    assert reading.findings[0].level is Level.NOTE
    assert reading.findings[0].value == typed


@pytest.mark.parametrize(
    "typed", ["1.250,5", "1,25", "1,250", "1.250.000", "1,2500", "0,5", "-3,7"]
)
def test_a_text_with_two_readings_is_a_fault(typed: str) -> None:
    reading = read(typed)
    assert reading.value is None
    assert codes(reading) == ["ambiguous number"]


def test_both_readings_of_an_ambiguous_number_are_shown() -> None:
    message = read("1,250").findings[0].message
    assert "1.250" in message
    assert "1250" in message


@pytest.mark.parametrize(
    "typed",
    [
        *("12 kV", "10-12", "~5", "5 km", "1 25", "12,34,56", "0x10", "1_000"),
        *("inf", "nan", "-inf", "Infinity", "\u0661\u0662", "1e999", "TBD", "?", "five"),
        *(True, False, float("nan"), float("inf")),
    ],
)
def test_what_is_no_number_is_a_fault(typed: object) -> None:
    reading = read(typed)
    assert reading.value is None
    assert codes(reading) == ["not a number"]
    assert reading.is_faulty


@pytest.mark.parametrize(
    "typed", [dt.datetime(2030, 1, 2), dt.time(1, 30), dt.timedelta(hours=30), dt.date(2030, 1, 2)]
)
def test_a_date_is_no_number(typed: object) -> None:
    assert codes(read(typed)) == ["date for number"]


@pytest.mark.parametrize(
    ("typed", "number_format", "field", "value"),
    [
        (0.05, "0%", GRANT, 5.0),
        (0.07, "0.00%", GRANT, 7.0),
        (5, "General", GRANT, 5.0),
        (5, '0"%"', GRANT, 5.0),  # the sign is only shown, nothing is scaled
        (0.05, "0\\%", GRANT, 0.05),
        ("5%", "General", GRANT, 5.0),
        ("5 %", "General", GRANT, 5.0),
        (0.95, "0%", POWER_FACTOR, 0.95),
        ("95%", "General", POWER_FACTOR, 0.95),
        (1.1, "0%", sheet("Windows").field("load_multiplier"), 1.1),
    ],
)
def test_percent_cells(typed: object, number_format: str, field: Field, value: float) -> None:
    assert read(typed, field, number_format).value == value


@pytest.mark.parametrize("typed", [None, "", " ", "\u00a0", "\t\n", "\u200b"])
def test_space_alone_is_blank(typed: object) -> None:
    assert read(typed) == Reading()


@pytest.mark.parametrize("typed", ["-", "n/a", "N/A", "NA", "\u2014"])
def test_words_for_blank_are_noted_where_a_blank_is_allowed(typed: str) -> None:
    reading = read(typed)  # the length of a line may be blank
    assert reading.value is None
    assert not reading.is_faulty
    assert codes(reading) == ["word for blank"]
    needed = read(typed, PEAK)
    assert needed.is_faulty
    assert codes(needed) == ["word for blank"]


@pytest.mark.parametrize("typed", ["#N/A", "#DIV/0!", "#REF!", "#VALUE!"])
def test_spreadsheet_errors_are_faults_that_name_the_error(typed: str) -> None:
    for field in (LENGTH, BUS, OPEN, TIME):
        reading = read(typed, field)
        assert codes(reading) == ["excel error"]
        assert typed in reading.findings[0].message


def test_a_formula_without_a_stored_value_is_not_a_blank() -> None:
    reading = read_value(Cell("Sheet", "D7", is_uncalculated=True), LENGTH)
    assert codes(reading) == ["formula not calculated"]
    assert reading.is_faulty


@pytest.mark.parametrize(
    ("typed", "name", "code"),
    [
        ("B12", "B12", None),
        ("0012", "0012", None),
        ("NA", "NA", None),
        ("None", "None", None),
        ("=1+1", "=1+1", None),
        (" B12", "B12", Code.NAME_TIDIED),
        ("B\u00a0 12\n", "B 12", Code.NAME_TIDIED),
        ("B\u200b12", "B12", Code.NAME_TIDIED),
        ("Cafe\u0301", "Caf\u00e9", Code.NAME_TIDIED),
        (12, "12", Code.NUMBER_AS_NAME),
        (12.0, "12", Code.NUMBER_AS_NAME),
        (12.5, "12.5", Code.NUMBER_AS_NAME),
        (1e5, "100000", Code.NUMBER_AS_NAME),
    ],
)
def test_names(typed: object, name: str, code: Code | None) -> None:
    reading = read(typed, BUS)
    assert reading.value == name
    assert codes(reading) == ([] if code is None else [str(code)])


@pytest.mark.parametrize("typed", [dt.datetime(2030, 1, 2), dt.time(1, 2), True])
def test_a_name_that_became_a_date_is_a_fault(typed: object) -> None:
    assert read(typed, BUS).is_faulty


@pytest.mark.parametrize(
    ("typed", "names"),
    [
        ("L1", ("L1",)),
        ("L1, L2", ("L1", "L2")),
        ("L1,L2,", ("L1", "L2")),
        (12, ("12",)),
    ],
)
def test_lists_of_names(typed: object, names: tuple[str, ...]) -> None:
    assert read(typed, LINES).value == names


@pytest.mark.parametrize(
    ("typed", "value"),
    [
        *((True, True), ("TRUE", True), ("Yes", True), (" y ", True), (1, True), ("1", True)),
        *((False, False), ("no", False), ("N", False), (0, False), ("false", False)),
    ],
)
def test_yes_and_no_in_any_usual_form(typed: object, value: bool) -> None:
    assert read(typed, OPEN) == Reading(value)


@pytest.mark.parametrize("typed", ["maybe", 2, "x", 0.5, dt.time(1)])
def test_anything_else_is_neither_yes_nor_no(typed: object) -> None:
    assert codes(read(typed, OPEN)) == ["not yes or no"]


@pytest.mark.parametrize("typed", ["recloser", "Recloser", " RECLOSER "])
def test_choices_whatever_the_case(typed: str) -> None:
    assert read(typed, DEVICE) == Reading("recloser")


def test_a_mistyped_choice_is_offered_the_right_one() -> None:
    reading = read("reclosr", DEVICE)
    assert codes(reading) == ["not a choice"]
    assert "recloser" in reading.findings[0].hint


@pytest.mark.parametrize(("typed", "value"), [(3, 3), (3.0, 3), ("3", 3)])
def test_whole_numbers(typed: object, value: int) -> None:
    reading = read(typed, SEED)
    assert reading.value == value
    assert isinstance(reading.value, int)


def test_half_a_whole_number_is_a_fault() -> None:
    assert codes(read(3.5, SEED)) == ["not whole"]


@pytest.mark.parametrize(
    ("typed", "value", "code"),
    [
        (dt.datetime(2030, 1, 2, 3), dt.datetime(2030, 1, 2, 3), None),
        (dt.date(2030, 1, 2), dt.datetime(2030, 1, 2), None),
        (dt.time(1, 30), dt.time(1, 30), None),
        (dt.timedelta(hours=30), dt.timedelta(hours=30), None),
        (7, 7.0, None),
        ("2030-01-02", dt.datetime(2030, 1, 2), "text time"),
        ("2030-01-02 14:30", dt.datetime(2030, 1, 2, 14, 30), "text time"),
        ("2030-01-02T4:30", dt.datetime(2030, 1, 2, 4, 30), "text time"),
        ("14:30", dt.time(14, 30), "text time"),
        ("7.5", 7.5, "text time"),
        ("03/04/2026", None, "not a time"),
        ("2030-13-02", None, "not a time"),
        ("25:00", None, "not a time"),
        ("noon", None, "not a time"),
        (True, None, "not a time"),
        (dt.datetime(1899, 12, 30), None, "not a time"),
    ],
)
def test_times(typed: object, value: object, code: str | None) -> None:
    reading = read(typed, TIME)
    assert reading.value == value
    assert codes(reading) == ([] if code is None else [code])
