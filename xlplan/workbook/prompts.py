"""What a field tells its user: hint above the heading, note on it, message and check on its cells.

All of it is made from the schema, so that a field is described once.
"""

from __future__ import annotations

from typing import Any

from xlsxwriter.utility import xl_rowcol_to_cell

from xlplan.schema.fields import Field, Kind, Sheet, load_sheets
from xlplan.workbook.sheet_writer import LONGEST_PROMPT, LONGEST_PROMPT_TITLE, shortened

PROFILE_LIST = "profile_names"
ASSET_LIST = "assets"
"""Range that holds the ids of several sheets: what can be bought."""
LIST_KINDS = (Kind.CHOICE, Kind.YES_NO)

_SHARED_LISTS = {
    ("yes", "no"): ("list_yes_no", "Yes or no"),
    ("breaker", "recloser", "fuse", "switch", "none"): ("list_device", "Device"),
}


def choice_list(field: Field) -> tuple[str, str]:
    """Name of the list of a field's choices, and its heading on the sheet Lists."""
    return _SHARED_LISTS.get(field.choices, (f"list_{field.key}", field.title))


def choice_lists() -> dict[str, tuple[str, tuple[str, ...]]]:
    """Every list of choices: name -> (heading, choices), in order of first use."""
    lists: dict[str, tuple[str, tuple[str, ...]]] = {}
    for sheet in load_sheets():
        for field in sheet.fields:
            if field.kind in LIST_KINDS:
                name, heading = choice_list(field)
                if lists.setdefault(name, (heading, field.choices))[1] != field.choices:
                    raise ValueError(f"two different lists of choices are called {name}")
    return lists


def id_list_name(sheet_name: str) -> str:
    """Name of the range that holds the ids of a sheet."""
    return "ids_" + sheet_name.lower().replace(" ", "_")


def hint(field: Field) -> str:
    """The few words above a heading: is it needed, and if not, what does a blank mean?"""
    if field.is_required:
        return "needed"
    return "may be blank" if field.default is None else f"blank: {plain(field.default)}"


def plain(value: object) -> str:
    """A default or an example in plain writing."""
    return f"{value:.12g}" if isinstance(value, float) else str(value)


def limits(field: Field) -> str:
    """The bounds in words, "" where there are none.

    >>> from xlplan.schema.fields import sheet
    >>> limits(sheet("Loads").field("power_factor"))
    'above 0, up to 1'
    """
    words = []
    if field.minimum is not None:
        words.append(f"{plain(float(field.minimum))} or more")
    if field.exclusive_minimum is not None:
        words.append(f"above {plain(float(field.exclusive_minimum))}")
    if field.maximum is not None:
        words.append(f"up to {plain(float(field.maximum))}")
    if field.exclusive_maximum is not None:
        words.append(f"below {plain(float(field.exclusive_maximum))}")
    return ", ".join(words)


def note(field: Field) -> str:
    """The note on a heading: help, unit, limits, choices, default with its source, example."""
    lines = [field.help]
    if field.unit:
        lines.append(f"Unit: {field.unit}.")
    if field.choices:
        lines.append("Choices: " + ", ".join(field.choices) + ".")
    elif limits(field):
        lines.append(f"Allowed: {limits(field)}.")
    if field.is_required:
        lines.append("Needed in every row." if not field.group else "Needed.")
    elif field.default is not None:
        lines.append(f"Blank means {plain(field.default)}.")
    if field.source:
        lines.append(f"Source of that: {field.source}.")
    if field.comes_from:
        lines.append(f"Usually from: {field.comes_from}.")
    lines.append(f"Example: {plain(field.example)}")
    return "\n".join(lines)


def setting_note(field: Field) -> str:
    """The note beside a setting, as running text."""
    parts = [field.help]
    if field.default is not None and field.source:
        parts.append(f"Source of the default: {field.source}.")
    return " ".join(parts)


def validation(field: Field, sheet: Sheet, row: int, column: int, last_row: int) -> dict[str, Any]:
    """Data validation of a field's cells, first of them at (row, column).

    Lists stop; bounds and references only warn, since a study may be filled in any order and
    whatever is pasted goes past validation anyway. The program checks every cell again.
    """
    options = _criterion(field, sheet, row, column, last_row)
    message = shortened(_prompt(field), LONGEST_PROMPT)
    options["input_title"] = shortened(field.title, LONGEST_PROMPT_TITLE)
    options["input_message"] = message
    options["ignore_blank"] = True
    return options


def _prompt(field: Field) -> str:
    ending = f" [{hint(field)}]"
    unit = f"{field.unit}. " if field.unit else ""
    return shortened(unit + field.help, LONGEST_PROMPT - len(ending)) + ending


def _criterion(field: Field, sheet: Sheet, row: int, column: int, last_row: int) -> dict[str, Any]:
    if field.kind in LIST_KINDS:
        message = "Choose one of: " + ", ".join(field.choices) + "."
        return _list(choice_list(field)[0], "stop", message)
    if field.kind is Kind.PROFILE:
        return _list(PROFILE_LIST, "warning", "There is no such heading on Profiles yet.")
    if field.kind is Kind.REFERENCE and len(field.refers_to) == 1:
        target = field.refers_to[0]
        return _list(id_list_name(target), "warning", f"{target} has no such row yet.")
    if field.kind is Kind.REFERENCE:
        targets = ", ".join(field.refers_to)
        return _list(ASSET_LIST, "warning", f"None of {targets} has such a row yet.")
    if field.kind is Kind.TIME and field.refers_to:
        target = field.refers_to[0]
        return _list(id_list_name(target), "warning", f"{target} has no such time yet.")
    if field.kind is Kind.ID and sheet.has_unique_ids:
        cell = xl_rowcol_to_cell(row, column)
        top = xl_rowcol_to_cell(row, column, row_abs=True, col_abs=True)
        bottom = xl_rowcol_to_cell(last_row, column, row_abs=True, col_abs=True)
        return {
            "validate": "custom",
            "value": f"=COUNTIF({top}:{bottom},{cell})=1",
            "error_type": "stop",
            "error_title": "Used twice",
            "error_message": "Another row has this name already.",
        }
    if field.kind in (Kind.NUMBER, Kind.INTEGER):
        return _number(field, xl_rowcol_to_cell(row, column))
    return {"validate": "any"}


def _list(name: str, error_type: str, message: str) -> dict[str, Any]:
    return {
        "validate": "list",
        "source": f"={name}",
        "error_type": error_type,
        "error_title": "Not in the list",
        "error_message": shortened(message, LONGEST_PROMPT),
    }


def _number(field: Field, cell: str) -> dict[str, Any]:
    tests = [f"ISNUMBER({cell})"]
    for bound, sign in (
        (field.minimum, ">="),
        (field.exclusive_minimum, ">"),
        (field.maximum, "<="),
        (field.exclusive_maximum, "<"),
    ):
        if bound is not None:
            tests.append(f"{cell}{sign}{plain(float(bound))}")
    if field.kind is Kind.INTEGER:
        tests.append(f"{cell}=INT({cell})")
    whole = "a whole number" if field.kind is Kind.INTEGER else "a number"
    allowed = f", {limits(field)}" if limits(field) else ""
    return {
        "validate": "custom",
        "value": "=AND(" + ",".join(tests) + ")" if len(tests) > 1 else f"={tests[0]}",
        "error_type": "warning",
        "error_title": "Outside the limits",
        "error_message": f"This should be {whole}{allowed}. The unit is in the heading.",
    }
