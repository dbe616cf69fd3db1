"""Which field a heading means: by title or key, whatever the case, spaces, units and order.

Enters: headings as typed. Leaves: the field of each, and findings about near misses, doubles and
units that differ.
"""

from __future__ import annotations

import re
from collections.abc import Iterable

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level
from xlplan.schema.fields import Field, Sheet
from xlplan.workbook.folding import alike, clean, fold, fold_heading
from xlplan.workbook.tables import Cell, finding_at
from xlplan.workbook.units import units_in


def field_of_heading(text: str, fields: Iterable[Field]) -> Field | None:
    """The field that a heading means, None where it is none of them.

    The words in parentheses decide only where two fields would match without them.
    """
    if not fold(text):
        return None
    for with_units in (True, False):
        typed = fold_heading(text, with_units)
        found = [f for f in fields if typed and typed in _names_of(f, with_units)]
        if len(found) == 1:
            return found[0]
    return None


def _names_of(field: Field, with_units: bool) -> set[str]:
    return {
        fold_heading(field.heading, with_units),
        fold_heading(field.title, with_units),
        fold_heading(field.key, with_units),
    }


def near_miss(cell: Cell, missing: Iterable[Field]) -> Finding | None:
    """A fault where a heading looks like a mistyped form of one that the sheet lacks."""
    by_name = {fold_heading(f.title): f for f in missing} | {
        fold_heading(f.key): f for f in missing
    }
    found = alike(fold_heading(cell.typed), by_name)
    if found is None:
        return None
    field = by_name[found]
    return finding_at(
        cell,
        Level.FAULT,
        Code.HEADING_NEAR_MISS,
        field.key,
        f"'{clean(cell.typed)}' is not known. Did you mean '{field.title}'?",
        f"Type '{field.title}', or another word if it is something of your own.",
    )


def about_double(cell: Cell, key: str, first: str) -> Finding:
    """A fault where a heading stands twice; ``first`` is the address of the other."""
    return finding_at(
        cell,
        Level.FAULT,
        Code.HEADING_TWICE,
        key,
        f"'{clean(cell.typed)}' also stands in {first}.",
        "Delete or rename one of the two columns.",
    )


def unit_differs(cell: Cell, unit_text: str, field: Field) -> Finding | None:
    """A warning where a unit is written that is not the field's own.

    ``unit_text`` is a heading's words in parentheses, or a unit cell of Settings.
    """
    strange = units_in(unit_text) - units_in(field.unit)
    if not strange:
        return None
    expected = f"in {field.unit}" if field.unit else "without a unit"
    return finding_at(
        cell,
        Level.WARNING,
        Code.HEADING_UNIT,
        field.key,
        f"'{clean(unit_text)}' is written here, but the values are read {expected}.",
        "Convert the values if they are in another unit, then mend the heading.",
    )


def words_in_parentheses(heading: str) -> str:
    """``kW`` of ``Peak load (kW)``."""
    return " ".join(re.findall(r"[(\[]([^()\[\]]*)[)\]]", heading))


def heading_match_count(texts: Iterable[str], schema: Sheet) -> int:
    """How many different fields of a sheet the texts of a row name."""
    found = {field.key for text in texts if (field := field_of_heading(text, schema.fields))}
    return len(found)
