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
PURPLE = "#CC79A7"
YELLOW = "#F0E442"
LIGHT_BLUE = "#BFE3F7"
LIGHT_VERMILION = "#F6CDB0"
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

AREA_COLOURS = (BLUE, ORANGE, NAVY, YELLOW, VERMILION, LIGHT_BLUE)
"""Up to six stacked series, apart in lightness: a grey print keeps them apart."""

LINE_COLOURS = (BLUE, ORANGE, VERMILION, SKY, GREEN, PURPLE)
"""Up to six lines, all dark enough on white; dashes keep them apart in a grey print."""

FONT = "Arial"

Properties = dict[str, Any]

_NUMBER: Properties = {"align": "right", "valign": "vcenter"}

PAD = "_W"
"""At the end of a number format: room as wide as a W, so that columns do not touch. Cell indents
would do the same, but LibreOffice ignores them for some numbers."""

_TEXT: Properties = {"align": "left", "valign": "vcenter"}

LOOKS: dict[str, Properties] = {
    "title": {"bold": True, "font_size": 16, "font_color": INK, "valign": "top"},
    "subtitle": {"font_color": GREY, "valign": "vcenter"},
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
        "indent": 1,
    },
    "text": _TEXT,
    "wrap": {**_TEXT, "text_wrap": True},
    "note": {**_TEXT, "font_color": GREY, "italic": True},
    "remark": {**_TEXT, "font_color": GREY, "italic": True, "indent": 1},
    "link": {**_TEXT, "font_color": BLUE, "underline": 1},
    "status": {**_TEXT, "bold": True},
    "verdict": {**_NUMBER, "bold": True, "indent": 1},
    "per_minute": {**_NUMBER, "num_format": f"#,##0.0000{PAD}"},
    "absent": {**_NUMBER, "indent": 1, "font_color": GREY, "italic": True},
    "money": _NUMBER,
    "change": _NUMBER,
    "price": {**_NUMBER, "num_format": f"#,##0.00{PAD}"},
    "power": {**_NUMBER, "num_format": f"#,##0.0{PAD}"},
    "energy": {**_NUMBER, "num_format": f"#,##0.0{PAD}"},
    "whole": {**_NUMBER, "num_format": f"#,##0{PAD}"},
    "index": {**_NUMBER, "num_format": f"0.000{PAD}"},
    "share": {**_NUMBER, "num_format": f"0.000000{PAD}"},
    "hours": {**_NUMBER, "num_format": f"#,##0.00{PAD}"},
    "years": {**_NUMBER, "num_format": f"#,##0.0{PAD}"},
    "percent": {**_NUMBER, "num_format": f"0.00%{PAD}"},
    "factor": {**_NUMBER, "num_format": f"0.00000{PAD}"},
    "small": {**_NUMBER, "num_format": f"0.0000{PAD}"},
    "any": {**_TEXT, "num_format": "General"},
    "exact": {**_NUMBER, "num_format": f"#,##0.000{PAD}"},
    "margin": {**_NUMBER, "num_format": f"[=0]0{PAD};[<0.001]0.0E+00{PAD};#,##0.000{PAD}"},
}

MODIFIERS: dict[str, Properties] = {
    "bold": {"bold": True},
    "total": {"bold": True, "top": 1, "top_color": INK},
    "input": {"font_color": INPUT_FONT, "bg_color": INPUT_FILL},
    "indent": {"indent": 1},
    "wrapped": {"text_wrap": True},
    # Where a row has several lines, figures stand beside the first of them.
    "top": {"valign": "top"},
    "plan": {"bold": True, "bg_color": "#EEF4F8"},
}


def money_format(largest: float) -> str:
    """Number format of money: whole units, or cents where every amount is small."""
    cents_below = 10_000.0
    return "#,##0.00" if largest < cents_below else "#,##0"
