"""The live checks on Start: plain formulas over the input sheets, each with the value it gives.

They count rows, names that stand on no sheet, and the hours of the windows, while the study is
being filled in. Enters: schema, and the rows that are written. Leaves: formulas and values.
``xlplan check`` finds much more; these only show the way.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from xlsxwriter.utility import xl_col_to_name

from xlplan.schema.fields import Field, Kind, Sheet, sheet
from xlplan.workbook import prompts
from xlplan.workbook.layout import FIRST_ROW, LAST_CHECKED_ROW

Rows = Sequence[Mapping[str, object]]


@dataclass(frozen=True)
class Formula:
    """A formula and the value that it gives for the study as written."""

    text: str
    value: float


def rows_filled(entry: Sheet, rows: Rows, settings: Mapping[str, object]) -> Formula:
    """How many rows of a sheet hold something in their first column; of Settings, how many values.

    Parameters
    ----------
    entry : Sheet
    rows : its rows as typed
    settings : key -> value as typed
    """
    if entry.is_settings:
        area = f"{entry.name}!$B${FIRST_ROW + 1}:$B${FIRST_ROW + len(entry.fields)}"
        n = sum(1 for value in settings.values() if _is_typed(value))
        return Formula(f"=COUNTA({area})", n)
    n = sum(1 for row in rows if _is_typed(row.get(entry.fields[0].key)))
    return Formula(f"=COUNTA({_column(entry, 0)})", n)


def unknown_names(
    entry: Sheet, tables: Mapping[str, Rows], settings: Mapping[str, object]
) -> Formula | None:
    """How many cells of a sheet name something that stands nowhere; None where none names any.

    Lists of names in one cell are left to the program.

    Parameters
    ----------
    entry : Sheet
    tables : rows as typed by sheet name
    settings : key -> value as typed
    """
    terms: list[str] = []
    n_unknown = 0
    rows = [settings] if entry.is_settings else tables.get(entry.name, ())
    for column, field in enumerate(entry.fields):
        lists = _lists_of(field)
        if not lists:
            continue
        cells = f"set_{field.key}" if entry.is_settings else _column(entry, column)
        found = "+".join(f"COUNTIF({name},{cells})" for name in lists)
        terms.append(f'SUMPRODUCT(({cells}<>"")*(({found})=0))')
        known = {_folded(name) for name in _known(field, tables)}
        n_unknown += sum(
            1
            for row in rows
            if _is_typed(row.get(field.key)) and _folded(row[field.key]) not in known
        )
    return Formula("=" + "+".join(terms), n_unknown) if terms else None


def window_hours(tables: Mapping[str, Rows]) -> Formula:
    """Hours a year that all windows make up.

    Parameters
    ----------
    tables : rows as typed by sheet name
    """
    entry = sheet("Windows")
    keys = [field.key for field in entry.fields]
    times, hours = (_column(entry, keys.index(key)) for key in ("occurrences_per_year", "hours"))
    total = 0.0
    for row in tables.get("Windows", ()):
        n, length = row.get("occurrences_per_year"), row.get("hours")
        if isinstance(n, int | float) and isinstance(length, int | float):
            total += float(n) * float(length)
    return Formula(f"=SUMPRODUCT({times},{hours})", total)


def _lists_of(field: Field) -> list[str]:
    if field.kind is Kind.PROFILE:
        return [prompts.PROFILE_LIST]
    if field.kind is not Kind.REFERENCE:
        return []
    return [prompts.id_list_name(name) for name in field.refers_to]


def _known(field: Field, tables: Mapping[str, Rows]) -> list[object]:
    if field.kind is Kind.PROFILE:
        known = {entry.key for entry in sheet("Profiles").fields}
        return [key for row in tables.get("Profiles", ()) for key in row if key not in known]
    targets = [(name, sheet(name).id_field or "") for name in field.refers_to]
    return [
        row[key] for name, key in targets for row in tables.get(name, ()) if _is_typed(row.get(key))
    ]


def _folded(value: object) -> str:
    return str(value).casefold()


def _is_typed(value: object) -> bool:
    return value is not None and value != ""


def _column(entry: Sheet, column: int) -> str:
    letters = xl_col_to_name(column, col_abs=True)
    quoted = f"'{entry.name}'" if " " in entry.name else entry.name
    return f"{quoted}!{letters}${FIRST_ROW + 1}:{letters}${LAST_CHECKED_ROW + 1}"


MOST_ASSETS = 200
"""Ids that the list of what can be bought offers."""


def asset_list(tables: Mapping[str, Rows], first_cell: str) -> list[tuple[str, str]]:
    """The ids of several sheets below each other, as formulas with their values.

    Parameters
    ----------
    tables : rows as typed by sheet name
    first_cell : address of the first formula, such as ``$H$5``

    Returns
    -------
    list of (formula, value); beyond the last id the value is empty
    """
    targets = asset_sheets()
    names: list[str] = []
    for name in targets:
        key = sheet(name).id_field or ""
        found = [str(row[key]) for row in tables.get(name, ()) if _is_typed(row.get(key))]
        names += found or [""]  # the named range of an empty sheet is one blank cell
    lists = [prompts.id_list_name(name) for name in targets]
    formulas = []
    row = int(first_cell.rpartition("$")[2])
    column = first_cell.replace("$", "").rstrip("0123456789")
    for i in range(MOST_ASSETS):
        n = f"ROWS({first_cell}:{column}{row + i})"
        text = '""'
        for j in reversed(range(len(lists))):
            before = "".join(f"-ROWS({name})" for name in lists[:j])
            text = f'IFERROR(INDEX({lists[j]},{n}{before})&"",{text})'
        formulas.append((f"={text}", names[i] if i < len(names) else ""))
    return formulas


def asset_sheets() -> tuple[str, ...]:
    """Sheets whose ids can be bought: those that Fixed purchases refers to."""
    return sheet("Fixed purchases").field("asset").refers_to
