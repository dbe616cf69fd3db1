"""Native charts, all of one manner: Arial, light gridlines, axis titles with units, no effects.

Names and values of series are always given as cells, never as text: text that begins with ``=``
would be taken for a formula.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from xlsxwriter.chart import Chart

from xlplan.report.looks import BLACK, FONT, GREY, GRID_GREY, INK
from xlplan.report.safe_book import SafeBook

CellRange = list[str | int]

PIXELS_PER_ROW = 20
"""Height of a sheet row of standard height."""

MAX_TICK_LABELS = 12
MAX_UPRIGHT = 16
"""Columns side by side that can all have a label."""

TICKS = 6
"""Steps of a numeric axis, about."""


@dataclass(frozen=True)
class Series:
    """One series: its name and values as cells, its colour.

    ``labels``: value of each point, to label those large enough to hold a label; ``dash``: line
    style, which keeps lines apart in a grey print; ``has_labels`` False: no figures beside bars.
    """

    name: CellRange
    values: CellRange
    colour: str
    labels: tuple[float, ...] = ()
    label_colour: str = BLACK
    dash: str = "solid"
    width_pt: float = 2.0
    has_labels: bool = True


def bars(
    book: SafeBook,
    title: str,
    categories: CellRange,
    series: Sequence[Series],
    category_title: str,
    axis_title: str,
    is_stacked: bool = False,
    label_above: float = 0.0,
    label_format: str = "#,##0",
    overlap: int | None = None,
) -> Chart:
    """Horizontal bars from 0, first category on top; stacked segments from ``label_above`` on.

    ``overlap`` 100: bars of one category on one line, for changes to both sides.
    """
    chart = book.new_chart("bar", "stacked" if is_stacked else None)
    for one in series:
        options: dict[str, Any] = {
            "name": one.name,
            "categories": categories,
            "values": one.values,
            "fill": {"color": one.colour},
            "border": {"color": INK, "width": 0.5},
            "gap": 60,
        }
        if is_stacked or overlap is not None:
            options["overlap"] = 100 if overlap is None else overlap
        if one.has_labels and (one.labels or not is_stacked):
            options["data_labels"] = _labels(one, is_stacked, label_above, label_format)
        chart.add_series(options)
    axis = {"reverse": True, "num_font": _font(10), "line": {"color": GREY}}
    # Names beside the plot, also where bars reach below 0.
    chart.set_y_axis(
        {
            **axis,
            "label_position": "low",
            "interval_unit": 1,
            "name": category_title,
            "name_font": _font(10),
        }
    )
    chart.set_x_axis(
        {**_value_axis(axis_title, label_format), "label_position": "high", "min": None}
    )
    return _finish(chart, title)


def columns(
    book: SafeBook,
    title: str,
    categories: CellRange,
    series: Sequence[Series],
    category_title: str,
    axis_title: str,
    number_format: str = "#,##0.0",
    has_legend: bool = True,
) -> Chart:
    """Columns side by side from 0, for names without room for bars."""
    chart = book.new_chart("column")
    for one in series:
        chart.add_series(
            {
                "name": one.name,
                "categories": categories,
                "values": one.values,
                "fill": {"color": one.colour},
                "border": {"color": INK, "width": 0.5},
                "gap": 60,
            }
        )
    axis = {"name": category_title, "name_font": _font(10), "num_font": _font(9)}
    n_point = int(categories[3]) - int(categories[1]) + 1
    step = 1 if n_point <= MAX_UPRIGHT else 2
    chart.set_x_axis(
        {**axis, "num_format": "#,##0", "interval_unit": step, "line": {"color": GREY}}
    )
    chart.set_y_axis({**_value_axis(axis_title, number_format), "min": 0})
    if not has_legend:
        chart.set_legend({"none": True})
    return _finish(chart, title, has_legend)


def _labels(one: Series, is_stacked: bool, above: float, number_format: str) -> dict[str, Any]:
    colour = one.label_colour if is_stacked else INK
    labels: dict[str, Any] = {
        "value": True,
        "num_format": number_format,
        "font": {**_font(9), "color": colour},
    }
    if is_stacked:
        labels["position"] = "center"
        labels["custom"] = [
            None if abs(value) >= above else {"delete": True} for value in one.labels
        ]
    return labels


def stacked_columns_and_line(
    book: SafeBook,
    title: str,
    categories: CellRange,
    columns: Sequence[Series],
    line: Series,
    axis_title: str,
    n_point: int,
) -> Chart:
    """Columns stacked by period (below 0 where a store charges), a line over them, one axis."""
    chart = book.new_chart("column", "stacked")
    for one in columns:
        chart.add_series(
            {
                "name": one.name,
                "categories": categories,
                "values": one.values,
                "fill": {"color": one.colour},
                "border": {"none": True},
                "gap": 0,
                "overlap": 100,
            }
        )
    over = book.new_chart("line")
    over.add_series(_line_options(line, categories))
    chart.combine(over)
    return _finish_over_time(chart, title, axis_title, n_point)


def columns_over_time(
    book: SafeBook, title: str, categories: CellRange, one: Series, axis_title: str, n_point: int
) -> Chart:
    """One series of columns over the periods."""
    chart = book.new_chart("column")
    chart.add_series(
        {
            "name": one.name,
            "categories": categories,
            "values": one.values,
            "fill": {"color": one.colour},
            "border": {"none": True},
            "gap": 0,
        }
    )
    chart.set_legend({"none": True})
    return _finish_over_time(chart, title, axis_title, n_point, has_legend=False, axis_min=0.0)


def lines_over_time(
    book: SafeBook,
    title: str,
    categories: CellRange,
    series: Sequence[Series],
    axis_title: str,
    n_point: int,
    axis_max: float | None = None,
    number_format: str = "#,##0",
) -> Chart:
    """Lines over the periods."""
    chart = book.new_chart("line")
    for one in series:
        chart.add_series(_line_options(one, categories))
    return _finish_over_time(
        chart, title, axis_title, n_point, axis_max=axis_max, number_format=number_format
    )


def lines_over_numbers(
    book: SafeBook,
    title: str,
    x_values: CellRange,
    series: Sequence[Series],
    x_title: str,
    y_title: str,
    y_range: tuple[float, float],
    x_max: float | None = None,
    x_format: str = "#,##0",
    has_markers: bool = False,
) -> Chart:
    """Straight lines over a numeric axis; ``y_range`` because automatic axes cut such lines."""
    chart = book.new_chart("scatter", "straight")
    for one in series:
        marker: dict[str, Any] = {"type": "none"}
        if has_markers:
            marker = {"type": "circle", "size": 6, "fill": {"color": one.colour}}
        chart.add_series({**_line_options(one, x_values), "marker": marker})
    x_axis = {**_value_axis(x_title, x_format), "min": 0, "major_gridlines": {}}
    chart.set_x_axis(x_axis if x_max is None else {**x_axis, "max": x_max})
    low, high = y_range
    chart.set_y_axis({**_value_axis(y_title, "#,##0"), "min": low, "max": high})
    return _finish(chart, title)


def lines_over_names(
    book: SafeBook,
    title: str,
    categories: CellRange,
    series: Sequence[Series],
    category_title: str,
    axis_title: str,
    n_point: int,
    y_range: tuple[float, float],
) -> Chart:
    """Lines over names in a given order; ``y_range`` because the axis does not begin at 0."""
    chart = book.new_chart("line")
    for one in series:
        chart.add_series(_line_options(one, categories))
    step = max(1, -(-n_point // (3 * MAX_TICK_LABELS)))
    chart.set_x_axis(
        {
            "name": category_title,
            "name_font": _font(10),
            "num_font": {**_font(9), "rotation": -45},
            "interval_unit": step,
            "interval_tick": step,
            "label_position": "low",
            "line": {"color": GREY},
            "text_axis": True,
        }
    )
    low, high = y_range
    chart.set_y_axis({**_value_axis(axis_title, "0.00"), "min": low, "max": high})
    return _finish(chart, title)


def _line_options(one: Series, categories: CellRange) -> dict[str, Any]:
    line = {"color": one.colour, "width": one.width_pt, "dash_type": one.dash}
    return {
        "name": one.name,
        "categories": categories,
        "values": one.values,
        "line": line,
        "marker": {"type": "none"},
    }


def _font(size: float, is_bold: bool = False) -> dict[str, Any]:
    return {"name": FONT, "size": size, "bold": is_bold, "color": INK}


def _value_axis(title: str, number_format: str) -> dict[str, Any]:
    return {
        "name": title,
        "name_font": _font(10),
        "num_font": _font(10),
        "num_format": number_format,
        "major_gridlines": {"visible": True, "line": {"color": GRID_GREY, "width": 0.5}},
        "line": {"color": GREY},
    }


def _finish_over_time(
    chart: Chart,
    title: str,
    axis_title: str,
    n_point: int,
    axis_max: float | None = None,
    number_format: str = "#,##0",
    has_legend: bool = True,
    axis_min: float | None = None,
) -> Chart:
    """Axes of charts over the periods: a dozen time labels at most, below the plot."""
    step = max(1, -(-n_point // MAX_TICK_LABELS))
    chart.set_x_axis(
        {
            "name": "Start of period",
            "name_font": _font(10),
            "num_font": {**_font(9), "rotation": -45},
            "interval_unit": step,
            "interval_tick": step,
            "label_position": "low",
            "major_tick_mark": "none",
            "line": {"color": GREY},
            "text_axis": True,
        }
    )
    axis = _value_axis(axis_title, number_format)
    if axis_max is not None:
        axis.update({"min": 0, "max": axis_max, "major_unit": 0.2})
    elif axis_min is not None:
        axis["min"] = axis_min
    chart.set_y_axis(axis)
    return _finish(chart, title, has_legend)


def _finish(chart: Chart, title: str, has_legend: bool = True) -> Chart:
    chart.set_title({"name": title, "name_font": _font(11, is_bold=True), "overlay": False})
    if has_legend:
        chart.set_legend({"position": "bottom", "font": _font(10)})
    chart.set_chartarea({"border": {"color": GRID_GREY}})
    return chart


@dataclass(frozen=True)
class Stroke:
    """One stroke of a drawing. ``name``: a fixed word of ours; the legend shows it once."""

    name: str
    x_values: CellRange
    y_values: CellRange
    colour: str
    dash: str
    width_pt: float


@dataclass(frozen=True)
class Dots:
    """Points of a drawing with one marker; ``labels``: a text a point, "" for none.

    A text may not begin with =, which would make it a formula. ``sides``: above, below, right or
    left of each point.
    """

    name: str
    x_values: CellRange
    y_values: CellRange
    colour: str
    marker: str
    labels: tuple[str, ...] = ()
    sides: tuple[str, ...] = ()


UNSEEN = {"type": "circle", "size": 12, "fill": {"none": True}, "border": {"none": True}}
"""A marker that keeps names clear of the one that is seen."""

MARKER_SIZES = {"circle": 9, "diamond": 12, "x": 11}


def drawing(
    book: SafeBook,
    title: str,
    strokes: Sequence[Stroke],
    dots: Sequence[Dots],
    x_range: tuple[float, float],
    y_range: tuple[float, float],
) -> Chart:
    """A drawing in the plane without axes: lines first, points over them."""
    chart = book.new_chart("scatter", "straight")
    for one in strokes:
        chart.add_series(
            {
                "name": one.name,
                "categories": one.x_values,
                "values": one.y_values,
                "line": {"color": one.colour, "width": one.width_pt, "dash_type": one.dash},
                "marker": {"type": "none"},
            }
        )
    for dot in dots:
        options: dict[str, Any] = {
            "name": dot.name,
            "categories": dot.x_values,
            "values": dot.y_values,
            "line": {"none": True},
            "marker": {
                "type": dot.marker,
                "size": MARKER_SIZES.get(dot.marker, 9),
                "fill": {"color": dot.colour},
                "border": {"color": INK if dot.marker != "x" else dot.colour, "width": 1.0},
            },
        }
        chart.add_series(options)
    n_shown = len(strokes) + len(dots)
    # A series has its labels all on one side: names stand on series of their own, unseen.
    names = [
        {
            "name": f"names {side} of {dot.name}",
            "categories": dot.x_values,
            "values": dot.y_values,
            "line": {"none": True},
            "marker": UNSEEN,
            "data_labels": _names(dot, side),
        }
        for dot in dots
        for side in dict.fromkeys(dot.sides)
        if any(dot.labels[i] for i in range(len(dot.labels)) if dot.sides[i] == side)
    ]
    for options in names:
        chart.add_series(options)
    for axis, (low, high) in ((chart.set_x_axis, x_range), (chart.set_y_axis, y_range)):
        axis({"visible": False, "min": low, "max": high, "major_gridlines": {"visible": False}})
    chart.show_blanks_as("gap")
    drawn = [one.name for one in strokes]
    unseen = [i for i, name in enumerate(drawn) if name in drawn[:i]]
    unseen += range(n_shown, n_shown + len(names))
    chart = _finish(chart, title)
    chart.set_legend({"position": "bottom", "font": _font(10), "delete_series": unseen})
    return chart


def _names(dot: Dots, side: str) -> dict[str, Any]:
    """Labels of the points whose names stand on one side."""
    texts = zip(dot.labels, dot.sides, strict=True)
    return {
        "value": True,
        "position": side,
        "font": _font(10),
        "custom": [
            {"value": text} if text and at == side else {"delete": True} for text, at in texts
        ],
    }


def wide_range(values: Sequence[float]) -> tuple[float, float]:
    """Axis range in round steps that holds all values; automatic axes cut lines at the edge."""
    low, high = min(values), max(values)
    spread = high - low or max(abs(high), 1.0)
    power = 10.0 ** math.floor(math.log10(spread / TICKS))
    step = next(m * power for m in (1.0, 2.0, 5.0, 10.0) if m * power >= spread / TICKS)
    bottom, top = math.floor(low / step) * step, math.ceil(high / step) * step
    return bottom, (top if top > bottom else bottom + step)


def padded(values: Sequence[float], margin: float = 0.1) -> tuple[float, float]:
    """The same for places in a drawing, where 0 means nothing."""
    low, high = min(values), max(values)
    room = (high - low) * margin or 1.0
    return low - room, high + room
