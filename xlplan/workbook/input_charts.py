"""Charts beside the tables that show what was typed: profiles, and points of loss curves.

Enters: an xlsxwriter workbook, the schema of the sheet, and how far its table reaches. Leaves: a
chart and the text that is read out in its place.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from xlplan.schema.fields import Sheet
from xlplan.workbook.formats import FONT, RULE
from xlplan.workbook.layout import FIRST_ROW, HEADING_ROW, ROOM

CHARTED_ROWS = 2000
"""Rows that a chart shows at most: about three weeks of quarter hours."""
CHART_SIZE = (620, 330)
"""Pixels across and down."""


def chart_of_profiles(workbook: Any, sheet: Sheet, n_column: int, n_row: int) -> tuple[Any, str]:
    """Every profile as a line over the time, so that a slip of the finger stands out."""
    n_charted = min(n_row, CHARTED_ROWS)
    last_row = HEADING_ROW + n_charted
    chart = workbook.add_chart({"type": "line"})
    for i, column in enumerate(range(len(sheet.fields), n_column)):
        dash = "solid" if i < len(LINE_COLOURS) else "dash"
        colour = LINE_COLOURS[i % len(LINE_COLOURS)]
        chart.add_series(
            {
                "name": [sheet.name, HEADING_ROW, column],
                "categories": [sheet.name, FIRST_ROW, 0, last_row, 0],
                "values": [sheet.name, FIRST_ROW, column, last_row, column],
                "line": {"color": colour, "width": 1.5, "dash_type": dash},
            }
        )
    part = f", first {n_charted} rows" if n_charted < n_row else ""
    _dress(chart, f"Profiles as typed{part}", "Time", "Share or multiple")
    chart.set_x_axis(
        {
            "name": "Time",
            "text_axis": True,  # as dates, steps within a day would fall on one another
            "num_format": "mm-dd hh:mm",
            "interval_unit": max(1, n_charted // 5),
            "interval_tick": max(1, n_charted // 5),
            **_axis_fonts(),
            "label_position": "low",
        }
    )
    return chart, "Line chart of every profile of this sheet over its times."


def chart_of_curves(workbook: Any, sheet: Sheet, n_column: int, n_row: int) -> tuple[Any, str]:
    """The points of the loss curves: power at the terminals over power of the cells."""
    keys = [field.key for field in sheet.fields]
    across, upwards = keys.index("store_power_pct"), keys.index("terminal_power_pct")
    last_row = HEADING_ROW + max(n_row, ROOM)
    chart = workbook.add_chart({"type": "scatter"})
    chart.add_series(
        {
            "name": "points of the curves",
            "categories": [sheet.name, FIRST_ROW, across, last_row, across],
            "values": [sheet.name, FIRST_ROW, upwards, last_row, upwards],
            "marker": {
                "type": "diamond",
                "size": 8,
                "fill": {"color": LINE_COLOURS[0]},
                "border": {"color": LINE_COLOURS[0]},
            },
        }
    )
    titles = [sheet.field(key).heading for key in ("store_power_pct", "terminal_power_pct")]
    _dress(chart, "Points as typed", *titles)
    chart.set_legend({"none": True})
    return chart, "Scatter chart of the points of all loss curves, terminal over store power."


CHARTS: Mapping[str, Callable[[Any, Sheet, int, int], tuple[Any, str]]] = {
    "Profiles": chart_of_profiles,
    "Storage curves": chart_of_curves,
}
LINE_COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#000000", "#E69F00", "#56B4E9")
"""Okabe and Ito, Color Universal Design; further lines are dashed as well."""
STANDARD_COLUMN_PIXELS = 64


def _axis_fonts() -> dict[str, Any]:
    return {
        "name_font": {"name": FONT, "size": 9, "bold": False},
        "num_font": {"name": FONT, "size": 8},
        "line": {"color": RULE},
    }


def _dress(chart: Any, title: str, across: str, upwards: str) -> None:
    chart.set_title({"name": title, "name_font": {"name": FONT, "size": 11, "bold": True}})
    chart.set_x_axis({"name": across, "label_position": "low", **_axis_fonts()})
    chart.set_y_axis(
        {
            "name": upwards,
            "label_position": "low",
            "major_gridlines": {"visible": True, "line": {"color": "#E3E6E1", "width": 0.75}},
            **_axis_fonts(),
        }
    )
    chart.set_legend({"position": "bottom", "font": {"name": FONT, "size": 9}})
