"""One typed cell to one value, or to a finding: no value is read wrong in silence.

Enters: a ``Cell`` and the ``Field`` it stands under. Leaves: a ``Reading``. Percent stays percent
here: under a ``_pct`` key 5, ``5%`` and a cell formatted as a percentage that holds 0.05 all read
5. Bounds and defaults belong to ``field_checks``, references to ``cross_checks``.
"""

from __future__ import annotations

import datetime as dt
import math
import re
import unicodedata
from collections.abc import Callable
from dataclasses import dataclass

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level
from xlplan.base.units import frac_from_pct, pct_from_frac
from xlplan.schema.fields import Field, Kind
from xlplan.workbook.folding import ZERO_WIDTH, clean, did_you_mean, fold
from xlplan.workbook.tables import Cell, finding_at
from xlplan.workbook.text_numbers import PLAIN_NUMBER, parse_number
from xlplan.workbook.units import units_in

EXCEL_ERRORS = frozenset(
    [
        "#N/A",
        "#DIV/0!",
        "#REF!",
        "#VALUE!",
        "#NAME?",
        "#NUM!",
        "#NULL!",
        "#SPILL!",
        "#CALC!",
        "#GETTING_DATA",
    ]
)
WORDS_FOR_BLANK = frozenset({"-", "--", "\u2013", "\u2014", "n/a", "na"})
"""Read as blank, with a note, in an optional cell that does not hold names."""
WORDS_FOR_YES = frozenset({"yes", "y", "true", "1"})
WORDS_FOR_NO = frozenset({"no", "n", "false", "0"})

_ISO_DATE = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}(?:[ T][0-9]{1,2}:[0-9]{2}(?::[0-9]{2})?)?")
_CLOCK = re.compile(r"([0-9]{1,2}):([0-9]{2})(?::([0-9]{2}))?")

FIRST_REAL_DATE = dt.datetime(1900, 1, 1)
"""Spreadsheets count days from here; anything earlier is a negative number in a date format."""


@dataclass(frozen=True)
class Reading:
    """What a cell was read as. ``value`` None: blank, or a fault among ``findings``."""

    value: object = None
    findings: tuple[Finding, ...] = ()

    @property
    def is_faulty(self) -> bool:
        """True if the cell cannot be used."""
        return any(finding.level is Level.FAULT for finding in self.findings)


def read_value(cell: Cell, field: Field) -> Reading:
    """The value of a cell under a field.

    Parameters
    ----------
    cell : Cell
    field : Field; its kind decides

    Returns
    -------
    Reading: float, int, bool, str, tuple of str, or a date, time or number for Kind.TIME
    """
    if cell.is_uncalculated:
        return _fault(
            cell,
            field,
            Code.FORMULA_NOT_CALCULATED,
            "the cell holds a formula that was never calculated.",
            "Open the workbook in a spreadsheet program, save it and run again.",
        )
    if cell.is_error or (isinstance(cell.value, str) and cell.value.strip() in EXCEL_ERRORS):
        return _fault(
            cell,
            field,
            Code.EXCEL_ERROR,
            f"the cell holds the spreadsheet error {cell.typed}.",
            "Mend its formula or type the value.",
        )
    if is_blank(cell):
        return Reading()
    reading = _READERS[field.kind](cell, field)
    if reading.is_faulty and _is_word_for_blank(cell, field):
        if field.is_required:
            return _fault(
                cell,
                field,
                Code.WORD_FOR_BLANK,
                f"'{cell.typed}' is no value, and one is needed here.",
                _ask_for(field),
            )
        return Reading(
            None, (_note(cell, field, Code.WORD_FOR_BLANK, f"'{cell.typed}' is read as blank."),)
        )
    return reading


def is_blank(cell: Cell) -> bool:
    """True for an empty cell and for one with nothing but space in it."""
    if cell.is_uncalculated or cell.is_error:
        return False
    return cell.value is None or (isinstance(cell.value, str) and not clean(cell.value))


def _is_word_for_blank(cell: Cell, field: Field) -> bool:
    if not isinstance(cell.value, str):
        return False
    return fold(cell.value) in WORDS_FOR_BLANK and field.kind is not Kind.ID


def _fault(cell: Cell, field: Field, code: Code, message: str, hint: str = "") -> Reading:
    return Reading(None, (finding_at(cell, Level.FAULT, code, field.key, message, hint),))


def _note(cell: Cell, field: Field, code: Code, message: str) -> Finding:
    return finding_at(cell, Level.NOTE, code, field.key, message)


def _ask_for(field: Field) -> str:
    """What to type, as the last sentence of a message."""
    if field.kind is Kind.YES_NO:
        return "Give yes or no."
    if field.kind is Kind.CHOICE:
        return f"Give one of: {', '.join(field.choices)}."
    if field.unit:
        return in_unit(field)
    return "Give a number." if field.kind in (Kind.NUMBER, Kind.INTEGER) else "Give it."


def in_unit(field: Field) -> str:
    """The sentence that asks for a field's unit: "Give it in km." or "Give it per kWh."."""
    if not field.unit:
        return ""
    return f"Give it {'' if field.unit.startswith('per ') else 'in '}{field.unit}."


# Numbers


def _read_number(cell: Cell, field: Field) -> Reading:
    value = cell.value
    if isinstance(value, bool):
        return _fault(
            cell,
            field,
            Code.NOT_A_NUMBER,
            f"{cell.typed.upper()} is not a number.",
            _ask_for(field),
        )
    if isinstance(value, (int, float)):
        return _read_plain_number(cell, field, float(value))
    if isinstance(value, str):
        return _read_text_number(cell, field, value)
    return _fault(
        cell,
        field,
        Code.DATE_FOR_NUMBER,
        f"the cell holds a date or time ({cell.typed}) where a number is needed.",
        f"Format the cell as a number and type it again. {_ask_for(field)}",
    )


def _read_plain_number(cell: Cell, field: Field, value: float) -> Reading:
    if not math.isfinite(value):
        return _fault(
            cell, field, Code.NOT_A_NUMBER, f"{cell.typed} is not a number.", _ask_for(field)
        )
    if cell.is_percent and field.key.endswith("_pct"):
        # Twelve digits: 0.07 shown as 7 % is to read 7, not 7.000000000000001.
        return Reading(float(f"{pct_from_frac(value):.12g}"))
    return Reading(value)


def _read_text_number(cell: Cell, field: Field, text: str) -> Reading:
    """A number stored as text, if there is only one way to read it."""
    parsed = parse_number(text)
    if parsed.number is None:
        hint = _ask_for(field)
        if parsed.code is Code.AMBIGUOUS_NUMBER:
            hint = "Type it as a number, not as text."
        elif parsed.has_more_than_a_number:
            unit = f" ({field.unit})" if field.unit else ""
            hint = f"Give one number alone; the unit stands in the heading{unit}."
            if parsed.unit and parsed.before_unit is not None:
                is_same = units_in(parsed.unit) == units_in(field.unit) != set()
                hint = (
                    f"Type {parsed.before_unit:.12g} alone; the unit stands in the heading{unit}."
                    if is_same
                    else "Type the number alone, "
                    f"{in_unit(field).removeprefix('Give it ').rstrip('.') or 'without a unit'}."
                )
        return _fault(cell, field, parsed.code, parsed.problem, hint)
    number = parsed.number
    if parsed.is_percent and not field.key.endswith("_pct"):
        number = frac_from_pct(number)
    message = f"the text '{text}' is read as the number {number:.12g}."
    return Reading(number, (_note(cell, field, Code.TEXT_NUMBER, message),))


def _read_integer(cell: Cell, field: Field) -> Reading:
    reading = _read_number(cell, field)
    if not isinstance(reading.value, float):
        return reading
    if reading.value != round(reading.value):
        return _fault(
            cell,
            field,
            Code.NOT_WHOLE,
            f"{reading.value:g} is not a whole number.",
            _ask_for(field),
        )
    return Reading(int(reading.value), reading.findings)


# Names, texts, choices


def _read_id(cell: Cell, field: Field) -> Reading:
    value = cell.value
    if isinstance(value, bool):
        return _fault(
            cell,
            field,
            Code.NOT_A_NAME,
            f"{cell.typed.upper()} is not a name.",
            "Format the column as Text and type the name again.",
        )
    if isinstance(value, (int, float)):
        if isinstance(value, float) and not math.isfinite(value):
            return _fault(cell, field, Code.NOT_A_NAME, f"{value} is not a name.")
        name = str(int(value)) if value == int(value) else repr(float(value))
        message = f"the number {cell.typed} is used as the name '{name}'."
        return Reading(name, (_note(cell, field, Code.NUMBER_AS_NAME, message),))
    if isinstance(value, str):
        return _read_name_text(cell, field, value)
    return _fault(
        cell,
        field,
        Code.DATE_FOR_NAME,
        f"the spreadsheet program turned this name into a date or time ({cell.typed}).",
        "Format the column as Text and type the name again.",
    )


def _read_name_text(cell: Cell, field: Field, text: str) -> Reading:
    name = unicodedata.normalize("NFC", clean(text))
    if name == text:
        return Reading(name)
    what = "invisible characters" if ZERO_WIDTH.search(text) else "spaces or line breaks"
    message = f"the name is read as '{name}', without the {what} around or in it."
    return Reading(name, (_note(cell, field, Code.NAME_TIDIED, message),))


def _read_text(cell: Cell, field: Field) -> Reading:
    value = cell.value
    if isinstance(value, bool):
        return Reading(str(value).upper())
    if isinstance(value, float) and math.isfinite(value) and value == int(value):
        return Reading(str(int(value)))
    return Reading(ZERO_WIDTH.sub("", str(value)).strip())


def _read_choice(cell: Cell, field: Field) -> Reading:
    if isinstance(cell.value, str):
        for choice in field.choices:
            if fold(cell.value).replace("-", " ") == fold(choice).replace("-", " "):
                return Reading(choice)
        suggestion = did_you_mean(cell.value, field.choices)
        hint = suggestion if suggestion.startswith("Did") else _ask_for(field)
    else:
        hint = _ask_for(field)
    return _fault(
        cell, field, Code.NOT_A_CHOICE, f"'{cell.typed}' is not one of the choices.", hint
    )


def _read_yes_no(cell: Cell, field: Field) -> Reading:
    value = cell.value
    if isinstance(value, bool):
        return Reading(value)
    word = fold(value) if isinstance(value, str) else ""
    if word in WORDS_FOR_YES or (isinstance(value, (int, float)) and value == 1):
        return Reading(True)
    if word in WORDS_FOR_NO or (isinstance(value, (int, float)) and value == 0):
        return Reading(False)
    return _fault(
        cell, field, Code.NOT_YES_OR_NO, f"'{cell.typed}' is neither yes nor no.", _ask_for(field)
    )


def _read_id_list(cell: Cell, field: Field) -> Reading:
    if not isinstance(cell.value, str):
        reading = _read_id(cell, field)
        return Reading((reading.value,) if reading.value else None, reading.findings)
    names = tuple(clean(part) for part in unicodedata.normalize("NFC", cell.value).split(","))
    kept = tuple(name for name in names if name)
    if not kept:
        return _fault(cell, field, Code.NOT_A_NAME, f"'{cell.typed}' names nothing.")
    return Reading(kept)


# Times


def _read_time(cell: Cell, field: Field) -> Reading:
    value = cell.value
    if isinstance(value, bool):
        return _not_a_time(cell, field, "is not a time")
    if isinstance(value, (int, float)):
        if not math.isfinite(value):
            return _not_a_time(cell, field, "is not a time")
        return Reading(float(value))
    if isinstance(value, dt.datetime):
        if value < FIRST_REAL_DATE:
            return _not_a_time(cell, field, "is a negative number shown as a date")
        return Reading(value)
    if isinstance(value, dt.date):
        return Reading(dt.datetime(value.year, value.month, value.day))
    if isinstance(value, (dt.time, dt.timedelta)):
        return Reading(value)
    return _read_text_time(cell, field, clean(str(value)))


def _read_text_time(cell: Cell, field: Field, text: str) -> Reading:
    note = _note(cell, field, Code.TEXT_TIME, f"the text '{cell.typed}' is read as a time.")
    try:
        if _ISO_DATE.fullmatch(text):
            day, _, clock = text.replace("T", " ").partition(" ")
            padded = f"{day} {clock.zfill(5) if clock.count(':') == 1 else clock.zfill(8)}"
            return Reading(dt.datetime.fromisoformat(padded if clock else day), (note,))
        if match := _CLOCK.fullmatch(text):
            hour, minute, second = (int(part or 0) for part in match.groups())
            return Reading(dt.time(hour, minute, second), (note,))
    except ValueError:
        return _not_a_time(cell, field, "is no date or time of any day")
    if PLAIN_NUMBER.fullmatch(text):
        return Reading(float(text), (note,))
    return _not_a_time(cell, field, "is not a date, a time or a number")


def _not_a_time(cell: Cell, field: Field, what: str) -> Reading:
    return _fault(
        cell,
        field,
        Code.NOT_A_TIME,
        f"'{cell.typed}' {what}.",
        "Give a date and time, or a number; as text only 2030-01-31 or 2030-01-31 14:00.",
    )


_READERS: dict[Kind, Callable[[Cell, Field], Reading]] = {
    Kind.ID: _read_id,
    Kind.TEXT: _read_text,
    Kind.NUMBER: _read_number,
    Kind.INTEGER: _read_integer,
    Kind.CHOICE: _read_choice,
    Kind.YES_NO: _read_yes_no,
    Kind.REFERENCE: _read_id,
    Kind.ID_LIST: _read_id_list,
    Kind.TIME: _read_time,
    Kind.PROFILE: _read_id,
}
