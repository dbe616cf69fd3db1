"""Colours and cell formats of the results workbook.

The palette is Okabe and Ito's (Color Universal Design), made for colour-blind readers; the order
of the series colours alternates dark and light, so that a grey print keeps them apart. Status is
always a word; the fill only repeats it.
"""

from __future__ import annotations

from typing import Any

BLUE = "#0072B2"
VERMILION = "#D55E00"
GREEN = "#009E73"
ORANGE = "#E69F00"
SKY = "#56B4E9"
NAVY = "#0B3954"
BLACK = "#000000"
INK = "#1B2B34"
GREY = "#5B6770"
GRID_GREY = "#D5DADD"
HEAD_FILL = "#E4EAEE"
INPUT_FILL = "#FFF8E1"
INPUT_FONT = "#0000FF"
OK_FILL, OK_FONT = "#D9F0E6", "#00543C"
LOOK_FILL, LOOK_FONT = "#FFD8B0", "#7A3E00"

SERIES_COLOURS = (BLUE, ORANGE, NAVY, SKY, VERMILION, GREEN)
"""Up to six series, neighbours apart in lightness."""

FONT = "Arial"

Properties = dict[str, Any]

_NUMBER: Properties = {"align": "right", "valign": "top"}
_TEXT: Properties = {"align": "left", "valign": "top"}

LOOKS: dict[str, Properties] = {
    "title": {"bold": True, "font_size": 16, "font_color": INK, "valign": "top"},
    "subtitle": {"font_color": GREY, "valign": "top"},
    "section": {"bold": True, "font_size": 12, "font_color": INK},
    "heading": {
        "bold": True,
        "font_color": INK,
        "bg_color": HEAD_FILL,
        "bottom": 1,
        "bottom_color": INK,
        "text_wrap": True,
        "valign": "bottom",
        "align": "left",
    },
    "heading_right": {
        "bold": True,
        "font_color": INK,
        "bg_color": HEAD_FILL,
        "bottom": 1,
        "bottom_color": INK,
        "text_wrap": True,
        "valign": "bottom",
        "align": "right",
    },
    "text": _TEXT,
    "wrap": {**_TEXT, "text_wrap": True},
    "note": {**_TEXT, "font_color": GREY, "italic": True},
    "link": {**_TEXT, "font_color": BLUE, "underline": 1},
    "status": {**_TEXT, "bold": True},
    "absent": {**_NUMBER, "font_color": GREY, "italic": True},
    "money": _NUMBER,
    "change": _NUMBER,
    "price": {**_NUMBER, "num_format": "#,##0.00"},
    "power": {**_NUMBER, "num_format": "#,##0.0"},
    "energy": {**_NUMBER, "num_format": "#,##0.0"},
    "whole": {**_NUMBER, "num_format": "#,##0"},
    "index": {**_NUMBER, "num_format": "0.000"},
    "share": {**_NUMBER, "num_format": "0.000000"},
    "hours": {**_NUMBER, "num_format": "#,##0.00"},
    "years": {**_NUMBER, "num_format": "#,##0.0"},
    "percent": {**_NUMBER, "num_format": "0.00%"},
    "factor": {**_NUMBER, "num_format": "0.00000"},
    "small": {**_NUMBER, "num_format": "0.0000"},
    "any": {**_NUMBER, "num_format": "General"},
    "exact": {**_NUMBER, "num_format": "#,##0.000###"},
}

MODIFIERS: dict[str, Properties] = {
    "bold": {"bold": True},
    "total": {"bold": True, "top": 1, "top_color": INK},
    "input": {"font_color": INPUT_FONT, "bg_color": INPUT_FILL},
    "plan": {"bold": True, "bg_color": "#EEF4F8"},
}


def money_format(largest: float) -> str:
    """Number format of money: whole units, or cents where every amount is small."""
    cents_below = 10_000.0
    return "#,##0.00" if largest < cents_below else "#,##0"
