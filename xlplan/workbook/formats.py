"""Fonts, colours and cell formats of every workbook that the program writes.

Colours carry no meaning alone: each is named in words beside it (row 3 of an input sheet says
"needed" or what a blank means), and the colour key of the sheet Start explains them. Contrast of
text on fill is above 4.5 to 1 (WCAG 2.1, criterion 1.4.3).
"""

from __future__ import annotations

from enum import StrEnum
from typing import Any

FONT = "Arial"
"""Has a metric twin on every system, so that nothing is cut off elsewhere."""

FONT_SIZE = 10

INK = "#26302B"
FAINT_INK = "#5E665F"
PINE = "#2F5D50"
MIST = "#DCE8E2"
STRAW = "#FBF5E4"
PAPER = "#FFFFFF"
RULE = "#C9CFC6"
ALERT_FILL = "#FFD8B0"
ALERT_INK = "#7A3E00"
LINK = "#1B4F8F"
INPUT_INK = "#0000FF"
"""Blue for what is typed, black for what is calculated: the custom of financial models."""
CALCULATED_FILL = "#ECEEEC"

TIME_FORMAT = "yyyy-mm-dd hh:mm"
TEXT_FORMAT = "@"


class Role(StrEnum):
    """What a cell is for; each has one format."""

    TITLE = "title"
    SUBTITLE = "subtitle"
    PART_HEADING = "part heading"
    HEADING_NEEDED = "heading of a needed column"
    HEADING_OPTIONAL = "heading of an optional column"
    HINT = "hint above a heading"
    EXAMPLE = "example above a heading"
    DEFAULT = "what a blank means"
    CALCULATED = "calculated number"
    CALCULATED_HOURS = "calculated number of hours"
    CALCULATED_WORD = "calculated word"
    CALCULATED_TEXT = "calculated text"
    TEXT = "text"
    NUMBER = "number"
    BIG_NUMBER = "whole number from a thousand on"
    TIME = "time"
    VALUE_TEXT = "setting, text"
    VALUE_NUMBER = "setting, number"
    VALUE_NEEDED_TEXT = "needed setting, text"
    VALUE_NEEDED_NUMBER = "needed setting, number"
    LABEL = "label"
    STEP = "number of a step"
    UNIT = "unit"
    NOTE = "wrapped note"
    PLAIN = "plain line"
    MEANING = "text beside a label"
    LINK = "link"
    SAMPLE_EXAMPLE = "colour key: example"
    SAMPLE_DEFAULT = "colour key: default"
    SAMPLE_CALCULATED = "colour key: calculated"
    SAMPLE_NEEDED = "colour key: needed"
    SAMPLE_OPTIONAL = "colour key: optional"
    SAMPLE_ALERT = "colour key: alert"


_EDGE = {"border": 1, "border_color": RULE}
_TOP = {"valign": "top"}
_WRAPPED = {"text_wrap": True, **_TOP}
_INDENTED = {"align": "left", "indent": 1}
_VALUE = {**_EDGE, **_TOP}
_TYPED = {"font_color": INPUT_INK}
_CALCULATED = {
    "font_color": "#000000",
    "bg_color": CALCULATED_FILL,
    **_EDGE,
    "left": 5,
    "left_color": FAINT_INK,
    **_TOP,
}

_PROPERTIES: dict[Role, dict[str, Any]] = {
    Role.TITLE: {"bold": True, "font_size": 15, "font_color": PINE},
    Role.SUBTITLE: {"font_color": FAINT_INK},
    Role.PART_HEADING: {"bold": True, "font_size": 11, "font_color": PINE, "bottom": 1},
    Role.HEADING_NEEDED: {
        "bold": True,
        "font_color": PAPER,
        "bg_color": PINE,
        **_INDENTED,
        **_WRAPPED,
        **_EDGE,
    },
    Role.HEADING_OPTIONAL: {
        "bold": True,
        "font_color": INK,
        "bg_color": MIST,
        **_INDENTED,
        **_WRAPPED,
        **_EDGE,
    },
    Role.HINT: {**_INDENTED, "italic": True, "font_size": 8, "font_color": FAINT_INK},
    Role.EXAMPLE: {
        "italic": True,
        "font_size": 9,
        "font_color": FAINT_INK,
        "bottom": 4,
        "bottom_color": FAINT_INK,
        **_INDENTED,
    },
    Role.DEFAULT: {"italic": True, "font_color": FAINT_INK, **_INDENTED, **_EDGE, **_WRAPPED},
    Role.CALCULATED: {**_CALCULATED, "align": "right", "num_format": "#,##0"},
    Role.CALCULATED_HOURS: {**_CALCULATED, "align": "right", "num_format": "#,##0.##"},
    Role.CALCULATED_TEXT: {**_CALCULATED, **_INDENTED},
    Role.CALCULATED_WORD: {**_CALCULATED, **_INDENTED, "bold": True},
    Role.TEXT: {"num_format": TEXT_FORMAT, **_TYPED, **_INDENTED},
    Role.NUMBER: {"align": "right", **_TYPED},
    Role.BIG_NUMBER: {"align": "right", "num_format": "#,##0", **_TYPED},
    Role.TIME: {"num_format": TIME_FORMAT, **_TYPED, **_INDENTED},
    Role.VALUE_TEXT: {"num_format": TEXT_FORMAT, **_TYPED, **_INDENTED, **_VALUE},
    Role.VALUE_NUMBER: {"align": "right", **_TYPED, **_VALUE},
    Role.VALUE_NEEDED_TEXT: {
        "num_format": TEXT_FORMAT,
        "bg_color": STRAW,
        **_TYPED,
        **_INDENTED,
        **_VALUE,
    },
    Role.VALUE_NEEDED_NUMBER: {"align": "right", "bg_color": STRAW, **_TYPED, **_VALUE},
    Role.LABEL: {**_INDENTED, **_EDGE, **_TOP},
    Role.STEP: {"align": "center", **_EDGE, **_TOP},
    Role.UNIT: {"font_color": FAINT_INK, **_INDENTED, **_EDGE, **_WRAPPED},
    Role.NOTE: {"font_color": FAINT_INK, **_INDENTED, **_EDGE, **_WRAPPED},
    Role.PLAIN: {"align": "left", **_TOP},
    Role.MEANING: {**_INDENTED, **_TOP},
    Role.LINK: {"font_color": LINK, "underline": 1, **_INDENTED, **_EDGE, **_TOP},
    Role.SAMPLE_NEEDED: {**_INDENTED, **_TYPED, "bg_color": STRAW, **_EDGE},
    Role.SAMPLE_OPTIONAL: {**_INDENTED, **_TYPED, "bg_color": PAPER, **_EDGE},
    Role.SAMPLE_EXAMPLE: {
        "italic": True,
        "font_size": 9,
        "font_color": FAINT_INK,
        "bottom": 4,
        "bottom_color": FAINT_INK,
        **_INDENTED,
    },
    Role.SAMPLE_DEFAULT: {"italic": True, "font_color": FAINT_INK, **_INDENTED},
    Role.SAMPLE_CALCULATED: {**_CALCULATED, **_INDENTED},
    Role.SAMPLE_ALERT: {**_INDENTED, "bg_color": ALERT_FILL, "font_color": ALERT_INK, **_EDGE},
}

NEEDED_CELLS = {"bg_color": STRAW, **_EDGE}
OPTIONAL_CELLS = {"bg_color": PAPER, **_EDGE}
MISSING_CELLS = {"bg_color": ALERT_FILL, "font_color": ALERT_INK, **_EDGE}
"""Formats of rules rather than cells, so that empty rows need no stored cells."""


class Formats:
    """The formats of one workbook, each made when first asked for.

    Parameters
    ----------
    workbook : xlsxwriter Workbook that will hold them
    """

    def __init__(self, workbook: Any) -> None:
        self._workbook = workbook
        self._by_role: dict[Role, Any] = {}
        self._by_name: dict[str, Any] = {}

    def role(self, role: Role) -> Any:
        """Format of a role."""
        if role not in self._by_role:
            properties = {"font_color": INK, **_PROPERTIES[role]}
            self._by_role[role] = self._workbook.add_format(properties)
        return self._by_role[role]

    def rule(self, properties: dict[str, Any]) -> Any:
        """Format of a conditional rule (NEEDED_CELLS and its like)."""
        name = repr(sorted(properties.items()))
        if name not in self._by_name:
            self._by_name[name] = self._workbook.add_format(properties)
        return self._by_name[name]


def workbook_options() -> dict[str, Any]:
    """Options with which every workbook is opened: no text ever becomes a formula or a link."""
    return {
        "strings_to_formulas": False,
        "strings_to_urls": False,
        "strings_to_numbers": False,
        "default_format_properties": {"font_name": FONT, "font_size": FONT_SIZE},
    }
