"""Each field against its schema: type, bounds, choices, what is required, what is unlikely.

Enters: a ``Table`` as typed. Leaves: a ``CheckedTable``: values in workbook units (percent stays
percent), blanks replaced by defaults, faulty cells marked as such. Nothing here looks at a second
cell.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level
from xlplan.base.listing import cell_ranges
from xlplan.base.units import frac_from_pct, pct_from_frac
from xlplan.schema.fields import Field, Kind, Sheet
from xlplan.workbook.tables import Cell, Row, Table, finding_at
from xlplan.workbook.values import in_unit, read_value

MOST_OF_A_KIND = 50
"""Faults of one kind that are listed for one column; more of them have one cause."""

MOST_FINDINGS = 1000
"""Findings of one study that are kept in all."""

LARGEST_NUMBER = 1e12
SMALLEST_POSITIVE = 1e-9
"""Numbers beyond these stand in no study, and would overflow in a product or a quotient."""

SMALL_PERCENT_KEYS = frozenset(
    [
        "gap_target_pct",
        "start_failure_pct",
        "boost_pct",
        "risk_tail_pct",
        "store_power_pct",
        "terminal_power_pct",
    ]
)
"""Percentages of which parts of one are ordinary."""


@dataclass(frozen=True)
class CheckedRow:
    """The values of one row by key; None: blank without default, or faulty.

    ``typed``: keys that were typed, ``faulty``: keys whose cell cannot be used.
    """

    row: Row
    values: Mapping[str, object]
    typed: frozenset[str]
    faulty: frozenset[str]

    def number(self, key: str) -> float | None:
        """Value of a number field, None where blank or faulty."""
        value = self.values.get(key)
        return float(value) if isinstance(value, (int, float)) else None

    def text(self, key: str) -> str | None:
        """Value of a name, choice or text field, None where blank or faulty."""
        value = self.values.get(key)
        return value if isinstance(value, str) else None

    def is_yes(self, key: str) -> bool:
        """True where a yes-or-no field says yes."""
        return self.values.get(key) is True


@dataclass(frozen=True)
class CheckedTable:
    """The rows of one sheet, each field checked."""

    table: Table
    schema: Sheet
    rows: tuple[CheckedRow, ...]


def check_table(table: Table, schema: Sheet) -> tuple[CheckedTable, list[Finding]]:
    """Every field of every row against its schema.

    Parameters
    ----------
    table : Table
    schema : Sheet, of the same name

    Returns
    -------
    (CheckedTable, findings); notes of one kind in one column are one note
    """
    findings: list[Finding] = []
    fields = list(schema.fields)
    if schema.other_columns is not None:
        known = {field.key for field in fields}
        fields += [
            replace(schema.other_columns, key=key, title=key)
            for key in table.column_of
            if key not in known
        ]
    rows = []
    for row in table.rows:
        checked, found = _check_row(row, fields)
        rows.append(checked)
        findings += found
    if not table.rows and not schema.is_optional and table.header_row:
        findings.append(
            Finding(
                Level.FAULT,
                Code.SHEET_EMPTY,
                table.sheet,
                f"A{table.header_row + 1}",
                schema.id_field or "",
                "",
                "the sheet has no rows.",
                "At least one is needed.",
            )
        )
    return CheckedTable(table, schema, tuple(rows)), shorten(findings, n_note=1)


def _check_row(row: Row, fields: list[Field]) -> tuple[CheckedRow, list[Finding]]:
    values: dict[str, object] = {}
    typed, faulty = set(), set()
    findings: list[Finding] = []
    for field in fields:
        if field.is_required and row.number and field.key not in row.cells:
            faulty.add(field.key)  # the whole column is missing, which the reader said once
            values[field.key] = None
            continue
        cell = row.cell(field.key)
        value, found = check_field(cell, field)
        findings += found
        if any(finding.level is Level.FAULT for finding in found):
            faulty.add(field.key)
            values[field.key] = None
        elif value is None:
            values[field.key] = _default_of(field)
        else:
            typed.add(field.key)
            values[field.key] = value
    return CheckedRow(row, values, frozenset(typed), frozenset(faulty)), findings


def check_field(cell: Cell, field: Field) -> tuple[object, tuple[Finding, ...]]:
    """Value of one cell (None: blank or faulty) and the findings about it."""
    reading = read_value(cell, field)
    if reading.is_faulty:
        return None, reading.findings
    if reading.value is None:
        if field.is_required:
            return None, (*reading.findings, _about_blank(cell, field))
        return None, reading.findings
    if isinstance(reading.value, (int, float)) and not isinstance(reading.value, bool):
        fault = _out_of_bounds(cell, field, float(reading.value))
        if fault:
            return None, (*reading.findings, fault)
        warning = _unlikely(cell, field, float(reading.value))
        if warning:
            return reading.value, (*reading.findings, warning)
    return reading.value, reading.findings


def _default_of(field: Field) -> object:
    """The schema's default in the form that a reading has."""
    if field.kind is Kind.YES_NO:
        return field.default in (True, "yes")
    return field.default


def _about_blank(cell: Cell, field: Field) -> Finding:
    if not cell.address:
        message, hint = (
            f"the setting '{field.title}' is missing.",
            "Add a row for it, with its value beside it.",
        )
    else:
        message, hint = f"'{field.title}' is blank, and a value is needed.", in_unit(field)
    return finding_at(cell, Level.FAULT, Code.BLANK, field.key, message, hint)


_Breaks = Callable[[float, float], bool]

_BOUNDS: tuple[tuple[str, _Breaks, str], ...] = (
    ("minimum", lambda value, bound: value < bound, "is below"),
    ("exclusive_minimum", lambda value, bound: value <= bound, "is not above"),
    ("maximum", lambda value, bound: value > bound, "is above"),
    ("exclusive_maximum", lambda value, bound: value >= bound, "is not below"),
)


def _out_of_bounds(cell: Cell, field: Field, value: float) -> Finding | None:
    if abs(value) > LARGEST_NUMBER or (
        field.exclusive_minimum == 0 and 0 < value < SMALLEST_POSITIVE
    ):
        size = "large" if abs(value) > LARGEST_NUMBER else "near to 0"
        message = f"{value:g} is too {size} to be meant."
        return finding_at(cell, Level.FAULT, Code.OUT_OF_BOUNDS, field.key, message, in_unit(field))
    for name, breaks, words in _BOUNDS:
        bound = getattr(field, name)
        if bound is not None and breaks(value, bound):
            return finding_at(
                cell,
                Level.FAULT,
                Code.OUT_OF_BOUNDS,
                field.key,
                f"{value:.6g} {words} {bound:g}.",
                _percent_meant(field, value) or in_unit(field),
            )
    return None


def _percent_meant(field: Field, value: float) -> str:
    """The question that goes with a percentage typed where a share of one is needed."""
    is_share = field.maximum == 1 and not field.key.endswith("_pct")
    if not is_share or not 1.0 < value <= pct_from_frac(1.0):
        return ""
    if field.likely_min is not None and frac_from_pct(value) < field.likely_min:
        return ""
    return f"Did you mean {value:.6g} %? That is {frac_from_pct(value):.6g} here."


PLURAL_UNITS = frozenset({"years", "hours", "minutes"})
"""Units that lose their s beside a 1."""


def _unlikely(cell: Cell, field: Field, value: float) -> Finding | None:
    below = field.likely_min is not None and value < field.likely_min
    above = field.likely_max is not None and value > field.likely_max
    if not (below or above):
        return _fraction_of_a_percent(cell, field, value)
    unit = f" {field.unit}" if field.unit else ""
    if value == 1.0 and field.unit in PLURAL_UNITS:
        unit = unit.removesuffix("s")
    means = (field.likely_text or "an unusual value").removesuffix(".")
    return finding_at(
        cell,
        Level.WARNING,
        Code.UNLIKELY_VALUE,
        field.key,
        f"{value:.6g}{unit} would mean {means}.",
        "It is used as it stands.",
    )


def _fraction_of_a_percent(cell: Cell, field: Field, value: float) -> Finding | None:
    """A plain 0.05 under a percent key means 0.05 %, which is seldom what was meant."""
    if not field.key.endswith("_pct") or field.key in SMALL_PERCENT_KEYS:
        return None
    if cell.is_percent or not 0.0 < value < 1.0 or isinstance(cell.value, str):
        return None
    return finding_at(
        cell,
        Level.WARNING,
        Code.UNLIKELY_VALUE,
        field.key,
        f"{value:g} would mean {value:g} %, less than one in a hundred.",
        f"Type {pct_from_frac(value):g} if that share is meant.",
    )


def shorten(findings: list[Finding], n_note: int = MOST_OF_A_KIND) -> list[Finding]:
    """Findings without the many that say the same of one column.

    Parameters
    ----------
    findings : list of Finding
    n_note : how many notes of one kind about one column are kept; of faults and warnings
        ``MOST_OF_A_KIND`` are

    Returns
    -------
    list of Finding; the last of a kind that is kept says how many more there are, and where
    """
    kept: list[Finding] = []
    last: dict[tuple[str, Level, str, str], int] = {}
    count: dict[tuple[str, Level, str, str], int] = {}
    left_out: dict[tuple[str, Level, str, str], list[str]] = {}
    for finding in findings:
        kind = (finding.sheet, finding.level, finding.code, finding.key)
        count[kind] = count.get(kind, 0) + 1
        if count[kind] <= (n_note if finding.level is Level.NOTE else MOST_OF_A_KIND):
            last[kind] = len(kept)
            kept.append(finding)
        else:
            left_out.setdefault(kind, []).append(finding.cell)
    for kind, cells in left_out.items():
        others = f"{len(cells)} other cell{'s' if len(cells) > 1 else ''}"
        finding = kept[last[kind]]
        where = shortened_ranges(cells)
        message = f"{finding.message} The same in {others} of this column ({where})."
        kept[last[kind]] = replace(finding, message=message)
    return kept


def shortened_ranges(cells: list[str], longest: int = 60) -> str:
    """The cells as ranges, or the first and last where that would be long."""
    text = cell_ranges(cells)
    return text if len(text) <= longest else f"{cells[0]} to {cells[-1]}"


def at_most(findings: list[Finding], most: int = MOST_FINDINGS) -> list[Finding]:
    """Not more findings than anybody could use: faults are kept first, then warnings, then notes.

    Parameters
    ----------
    findings : list of Finding
    most : how many are kept

    Returns
    -------
    list of Finding in the order given; where some are left out, a note at the end says how many
    """
    if len(findings) <= most:
        return findings
    ranked = sorted(range(len(findings)), key=lambda i: list(Level).index(findings[i].level))
    kept = [findings[i] for i in sorted(ranked[:most])]
    n_more = len(findings) - most
    message = f"{n_more} further findings are not listed."
    hint = "Mend those that are, and check again."
    return [
        *kept,
        Finding(Level.NOTE, Code.NOT_LISTED, kept[-1].sheet, "", "", "", message, hint),
    ]
