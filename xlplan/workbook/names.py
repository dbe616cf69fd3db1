"""Names across sheets: every reference to the spelling it refers to, doubles, names too alike.

Enters: a ``CheckedStudy`` whose references are as typed. Leaves: one whose references have the
spelling of the row they mean, and findings. Names are compared folded (``folding.fold``).
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import replace

from xlplan.base.codes import Code
from xlplan.base.errors import Finding
from xlplan.base.names import EXISTING, IGNORING_OUTAGES, LEAST_COST
from xlplan.schema.fields import Field, Kind
from xlplan.workbook.checked_study import CheckedStudy, fault, note, warning
from xlplan.workbook.field_checks import MOST_OF_A_KIND, CheckedRow, CheckedTable
from xlplan.workbook.folding import did_you_mean, fold

ASSET_SHEETS = ("Generators", "Storage", "Hardening")
"""Sheets of what can be bought: their names must differ from each other as well."""

_ROW_KEYS: Mapping[str, tuple[str, ...]] = {
    "Storage curves": ("curve", "store_power_pct"),
    "Fixed purchases": ("alternative", "asset"),
    "Device changes": ("alternative", "line"),
    "Sensitivities": ("parameter",),
}
"""Sheets without names of their own: what may stand together only once."""


def resolve_names(study: CheckedStudy) -> tuple[CheckedStudy, list[Finding]]:
    """References resolved and names checked.

    Parameters
    ----------
    study : CheckedStudy, each field checked

    Returns
    -------
    (CheckedStudy, findings): references that mean nothing are None and among the faulty keys
    """
    findings: list[Finding] = []
    names = {sheet: _spellings(table) for sheet, table in study.tables.items()}
    profiles = {fold(name): name for name in _profile_names(study)}
    tables = {}
    for sheet, table in study.tables.items():
        fields = [f for f in table.schema.fields if _is_reference(f)]
        if not fields:
            tables[sheet] = table
            continue
        rows = []
        n_unknown: Counter[str] = Counter()
        for row in table.rows:
            resolved, found = _resolve_row(row, fields, names, profiles, n_unknown)
            rows.append(resolved)
            findings += found
        tables[sheet] = replace(table, rows=tuple(rows))
    resolved_study = CheckedStudy(tables)
    findings += _doubles(resolved_study)
    findings += _asset_doubles(resolved_study)
    findings += _row_doubles(resolved_study)
    findings += _numbers_alike(resolved_study)
    findings += _reserved_alternatives(resolved_study)
    return resolved_study, findings


def _spellings(table: CheckedTable) -> dict[str, str]:
    """Spelling of each name of a sheet by its folded form; the first spelling counts."""
    found: dict[str, str] = {}
    if table.schema.id_field is None:
        return found
    for row in table.rows:
        name = row.text(table.schema.id_field)
        if name is not None:
            found.setdefault(fold(name), name)
    return found


def _profile_names(study: CheckedStudy) -> list[str]:
    if "Profiles" not in study.tables:
        return []
    return [key for key in study.tables["Profiles"].table.column_of if key != "time"]


def _is_reference(field: Field) -> bool:
    # A window's start also refers to Profiles, but by time: see the checks of windows.
    return field.kind in (Kind.REFERENCE, Kind.ID_LIST, Kind.PROFILE)


def _resolve_row(
    row: CheckedRow,
    fields: list[Field],
    names: Mapping[str, Mapping[str, str]],
    profiles: Mapping[str, str],
    n_unknown: Counter[str],
) -> tuple[CheckedRow, list[Finding]]:
    values, faulty = dict(row.values), set(row.faulty)
    findings: list[Finding] = []
    for field in fields:
        typed = row.values.get(field.key)
        if typed is None:
            continue
        known = profiles if field.kind is Kind.PROFILE else _known(field, names)
        parts = typed if isinstance(typed, tuple) else (str(typed),)
        resolved = []
        for part in parts:
            name = known.get(fold(part))
            if name is None:
                n_unknown[field.key] += 1
                # So many have one cause, and comparing each with every name would take long.
                has_few = n_unknown[field.key] <= MOST_OF_A_KIND
                offered = list(known.values()) if has_few else []
                if known:
                    findings.append(_about_unknown(row, field, part, offered))
                else:
                    findings.append(_about_nothing_known(row, field))
                faulty.add(field.key)
                continue
            if name != part:
                message = f"'{part}' is taken to be '{name}'."
                findings.append(note(row, Code.NAME_SPELLING, field.key, message))
            if name not in resolved:
                resolved.append(name)
        if field.key in faulty:
            values[field.key] = None
        else:
            values[field.key] = tuple(resolved) if isinstance(typed, tuple) else resolved[0]
    return replace(row, values=values, faulty=frozenset(faulty)), findings


def _known(field: Field, names: Mapping[str, Mapping[str, str]]) -> dict[str, str]:
    known: dict[str, str] = {}
    for sheet in field.refers_to:
        known |= names.get(sheet, {})
    return known


def _about_unknown(row: CheckedRow, field: Field, name: str, known: list[str]) -> Finding:
    where = " or ".join(field.refers_to) or "Profiles"
    return fault(
        row,
        Code.UNKNOWN_NAME,
        field.key,
        f"'{name}' is not in the sheet {where}.",
        did_you_mean(name, known),
    )


def _about_nothing_known(row: CheckedRow, field: Field) -> Finding:
    """The same words for every name, so that they are listed once with their range."""
    where = " and ".join(field.refers_to) or "Profiles"
    what = "have no rows" if len(field.refers_to) > 1 else "has no rows"
    if field.kind is Kind.PROFILE:
        what = "has no profiles"
    message = f"{where} {what} yet, so that this name means nothing."
    return fault(row, Code.UNKNOWN_NAME, field.key, message, f"Fill in {where}.")


def _doubles(study: CheckedStudy) -> Iterator[Finding]:
    """Names that stand twice in one sheet, whatever the case."""
    for table in study.tables.values():
        key = table.schema.id_field
        if key is None or not table.schema.has_unique_ids:
            continue
        first: dict[str, CheckedRow] = {}
        for row in table.rows:
            name = row.text(key)
            if name is None:
                continue
            other = first.setdefault(fold(name), row)
            if other is not row:
                yield fault(
                    row,
                    Code.NAME_TWICE,
                    key,
                    f"'{name}' also stands in {other.row.cell(key).address}"
                    f"{_spelt(other.text(key), name)}.",
                    "Give each a name of its own; case and spaces do not count.",
                )


def _spelt(other: str | None, name: str) -> str:
    return f", as '{other}'" if other != name else ""


def _asset_doubles(study: CheckedStudy) -> Iterator[Finding]:
    """The same name in two of the sheets that hold what can be bought."""
    first: dict[str, tuple[str, CheckedRow, str]] = {}
    for sheet in ASSET_SHEETS:
        if sheet not in study.tables:
            continue
        key = study.tables[sheet].schema.id_field or ""
        for row in study.rows(sheet):
            name = row.text(key)
            if name is None:
                continue
            other_sheet, other, other_key = first.setdefault(fold(name), (sheet, row, key))
            if other_sheet != sheet:
                yield fault(
                    row,
                    Code.NAME_TWICE,
                    key,
                    f"'{name}' also stands in "
                    f"{other.row.sheet}!{other.row.cell(other_key).address}.",
                    "Generators, stores and measures need different names.",
                )


def _row_doubles(study: CheckedStudy) -> Iterator[Finding]:
    """Rows without a name of their own that say the same thing twice."""
    for sheet, keys in _ROW_KEYS.items():
        first: dict[tuple[object, ...], CheckedRow] = {}
        for row in study.rows(sheet):
            values = tuple(row.values.get(key) for key in keys)
            if any(value is None for value in values):
                continue
            folded = tuple(fold(v) if isinstance(v, str) else v for v in values)
            other = first.setdefault(folded, row)
            if other is not row:
                yield fault(
                    row,
                    Code.ROW_TWICE,
                    keys[-1],
                    f"row {other.row.number} already says something about this "
                    f"({', '.join(str(value) for value in values)}).",
                    "Delete one of the two rows.",
                )


def _numbers_alike(study: CheckedStudy) -> Iterator[Finding]:
    """Names such as 12 and 0012, which a spreadsheet easily turns into each other."""
    for table in study.tables.values():
        key = table.schema.id_field
        if key is None or not table.schema.has_unique_ids:
            continue
        first: dict[int, CheckedRow] = {}
        for row in table.rows:
            name = row.text(key)
            # Beyond 18 digits no spreadsheet keeps the number, so nothing turns into it.
            if name is None or not (name.isascii() and name.isdigit()) or len(name) > 18:
                continue
            other = first.setdefault(int(name), row)
            if other is not row and other.text(key) != name:
                yield warning(
                    row,
                    Code.NAMES_ALIKE,
                    key,
                    f"'{name}' and '{other.text(key)}' in {other.row.cell(key).address} are "
                    f"different names here.",
                    "Make sure that both are meant.",
                )


def _reserved_alternatives(study: CheckedStudy) -> Iterator[Finding]:
    """The standing alternatives are always there and need no row."""
    standing = {fold(name) for name in (EXISTING, IGNORING_OUTAGES, LEAST_COST)}
    for row in study.rows("Alternatives"):
        name = row.text("alternative")
        if name is not None and fold(name) in standing:
            yield fault(
                row,
                Code.NAME_RESERVED,
                "alternative",
                f"'{name}' is always calculated and has this name already.",
                "Choose another name, or delete the row.",
            )
