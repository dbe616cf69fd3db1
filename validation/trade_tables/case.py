"""Default limits of a study and the range of the Voltages sheet against the standard's table."""

from __future__ import annotations

from functools import cache
from pathlib import Path

from validation.comparison import HALF_DIGIT, Comparison, Origin, half_digit, read_rows
from xlplan.evaluate.ac_check import RANGE_A, RANGE_A_ABOVE_600_V
from xlplan.schema.fields import sheet

HERE = Path(__file__).resolve().parent

TITLE = "Voltage ranges of ANSI C84.1"
SOURCE = "ANSI C84.1, Table 1 (recalled); volts on a base of 120"
NOTES: tuple[str, ...] = ()

BASE_V = 120.0


def volts(place: str, name: str) -> tuple[float, float]:
    """Lowest and highest service voltage of a range, on a base of 120 V."""
    for row in read_rows(HERE, "ansi_c84_1_voltage_ranges.csv"):
        if (row["class"], row["location"], row["range"]) == (place, "service", name):
            return float(row["v_min_volts_on_120"]), float(row["v_max_volts_on_120"])
    raise KeyError((place, name))


@cache
def compare() -> list[Comparison]:
    """Limits in p.u."""
    settings = {field.key: field for field in sheet("Settings").fields}
    low_a, high_a = volts("up to 600 V", "A")
    low_b, high_b = volts("up to 600 V", "B")
    low_above, high_above = volts("above 600 V", "A")
    rows = (
        ("Default lowest voltage in normal service", low_a, settings["vmin_pu"].default),
        ("Default highest voltage in normal service", high_a, settings["vmax_pu"].default),
        ("Default lowest voltage during an outage", low_b, settings["vmin_event_pu"].default),
        ("Default highest voltage during an outage", high_b, settings["vmax_event_pu"].default),
        ("Range A, service up to 600 V, lowest", low_a, RANGE_A.low_pu),
        ("Range A, service up to 600 V, highest", high_a, RANGE_A.high_pu),
        ("Range A, service above 600 V, lowest", low_above, RANGE_A_ABOVE_600_V.low_pu),
        ("Range A, service above 600 V, highest", high_above, RANGE_A_ABOVE_600_V.high_pu),
    )
    return [
        Comparison(
            quantity,
            "p.u.",
            expected_v / BASE_V,
            float(str(got)),
            half_digit(3),
            HALF_DIGIT,
            Origin.COMMON_PRACTICE,
            3,
        )
        for quantity, expected_v, got in rows
    ]
