"""Voltage ranges."""

from __future__ import annotations

from validation.comparison import disagreements, read_rows
from validation.trade_tables.case import BASE_V, HERE, compare


def test_figures() -> None:
    found = compare()
    assert len(found) == 8
    assert disagreements(found) == []


def test_the_table_is_arithmetic() -> None:
    for row in read_rows(HERE, "ansi_c84_1_voltage_ranges.csv"):
        for end in ("min", "max"):
            if volts := row[f"v_{end}_volts_on_120"]:
                assert abs(float(volts) / BASE_V - float(row[f"v_{end}_pu"])) < 5e-5
