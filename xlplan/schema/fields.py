"""The input sheets and their fields, loaded from one JSON Schema per sheet.

Each ``*.json`` beside this module describes one sheet of the study workbook: a row schema whose
properties stand in column order (for Settings: one property per setting). Standard keywords carry
title, type, bounds, enum, default and help (``description``); ``unit`` and the keywords that
start with ``x-`` are ours:

    x-kind              what is typed there (see ``Kind``)
    x-refers-to         sheets whose id column must hold the value
    x-likely-minimum, x-likely-maximum, x-likely-text
                        outside: a warning, and what such a value would mean
    x-source            where a default that is a trade figure comes from
    x-comes-from        where a planner usually finds the figure; of a sheet: its figures
    x-group             group of settings
    x-key, x-optional, x-settings, x-id-field, x-unique-ids
                        of the sheet itself

Titles are the headings that people see, without the unit.
"""

from __future__ import annotations

import json
from dataclasses import dataclass
from enum import StrEnum
from functools import cache
from importlib.resources import files
from typing import Any

TEMPLATE_VERSION = 2
"""Raised whenever a sheet or a column is added, renamed or taken away."""

SCHEMA_STEMS = (
    "settings",
    "buses",
    "loads",
    "lines",
    "neighbour_supplies",
    "conductors",
    "generators",
    "storage",
    "storage_curves",
    "outage_assumptions",
    "hardening",
    "customer_classes",
    "profiles",
    "windows",
    "alternatives",
    "fixed_purchases",
    "device_changes",
    "sensitivities",
)
"""Schema files, in the order of the sheets."""


class Kind(StrEnum):
    """What is typed into a field.

    ``PROFILE``: the heading of a column of Profiles. ``TIME``: a date and time, or a number.
    """

    ID = "id"
    TEXT = "text"
    NUMBER = "number"
    INTEGER = "integer"
    CHOICE = "choice"
    YES_NO = "yes_no"
    REFERENCE = "reference"
    ID_LIST = "id_list"
    TIME = "time"
    PROFILE = "profile"


@dataclass(frozen=True)
class Field:
    """One column of a sheet, or one setting.

    ``refers_to`` names the sheets whose id column must hold the value (one of them at least).
    ``likely_min`` and ``likely_max``: a value outside is a warning, and ``likely_text`` completes
    "this would mean ...". ``unit`` "": none. ``default`` None: blank stays blank, with the meaning
    that ``help`` gives.
    """

    key: str
    title: str
    unit: str
    kind: Kind
    is_required: bool
    default: object | None
    minimum: float | None
    exclusive_minimum: float | None
    maximum: float | None
    exclusive_maximum: float | None
    choices: tuple[str, ...]
    refers_to: tuple[str, ...]
    likely_min: float | None
    likely_max: float | None
    likely_text: str
    help: str
    source: str
    group: str
    example: object
    comes_from: str = ""

    @property
    def heading(self) -> str:
        """Heading of the column as the template writes it: ``Peak load (kW)``."""
        return f"{self.title} ({self.unit})" if self.unit else self.title


@dataclass(frozen=True)
class Sheet:
    """One input sheet; ``fields`` stand in column order.

    ``id_field``: key of the column that other sheets refer to, None where there is none.
    ``has_unique_ids`` False: an id stands on several rows (the points of a storage curve).
    ``is_optional``: the sheet, or its rows, may be absent. ``other_columns``: what a column with a
    heading of the user's own holds (Profiles only), else None.
    """

    name: str
    key: str
    title: str
    help: str
    fields: tuple[Field, ...]
    is_settings: bool
    is_optional: bool
    id_field: str | None
    has_unique_ids: bool
    other_columns: Field | None
    comes_from: str = ""

    def field(self, key: str) -> Field:
        """The field with this key; KeyError if there is none."""
        for candidate in self.fields:
            if candidate.key == key:
                return candidate
        raise KeyError(f"{self.name} has no field {key}")


def schema_text(stem: str) -> str:
    """Text of one schema file, such as ``lines``."""
    return files("xlplan.schema").joinpath(f"{stem}.json").read_text(encoding="utf-8")


@cache
def load_sheets() -> tuple[Sheet, ...]:
    """Every input sheet, in workbook order."""
    return tuple(_sheet_from(json.loads(schema_text(stem))) for stem in SCHEMA_STEMS)


def sheet(name: str) -> Sheet:
    """The input sheet of this name; KeyError if there is none."""
    for candidate in load_sheets():
        if candidate.name == name:
            return candidate
    raise KeyError(f"there is no input sheet {name}")


def _sheet_from(schema: dict[str, Any]) -> Sheet:
    required = set(schema["required"])
    others = schema["additionalProperties"]
    return Sheet(
        name=schema["title"],
        key=schema["x-key"],
        title=schema["title"],
        help=schema["description"],
        fields=tuple(
            _field_from(key, entry, key in required) for key, entry in schema["properties"].items()
        ),
        is_settings=schema["x-settings"],
        is_optional=schema["x-optional"],
        id_field=schema.get("x-id-field"),
        has_unique_ids=schema.get("x-unique-ids", False),
        other_columns=_field_from("", others, True) if isinstance(others, dict) else None,
        comes_from=schema.get("x-comes-from", ""),
    )


def _field_from(key: str, entry: dict[str, Any], is_required: bool) -> Field:
    examples = entry.get("examples", [None])
    return Field(
        key=key,
        title=entry.get("title", ""),
        unit=entry.get("unit", ""),
        kind=Kind(entry["x-kind"]),
        is_required=is_required,
        default=entry.get("default"),
        minimum=entry.get("minimum"),
        exclusive_minimum=entry.get("exclusiveMinimum"),
        maximum=entry.get("maximum"),
        exclusive_maximum=entry.get("exclusiveMaximum"),
        choices=tuple(entry.get("enum", ())),
        refers_to=tuple(entry.get("x-refers-to", ())),
        likely_min=entry.get("x-likely-minimum"),
        likely_max=entry.get("x-likely-maximum"),
        likely_text=entry.get("x-likely-text", ""),
        help=entry["description"],
        source=entry.get("x-source", ""),
        group=entry.get("x-group", ""),
        example=examples[0],
        comes_from=entry.get("x-comes-from", ""),
    )
