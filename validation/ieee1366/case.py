"""The sample year counted by the program's own rules."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np

from validation.comparison import HALF_DIGIT, Comparison, Origin, half_digit, read_rows
from xlplan.base.units import hours_from_minutes, minutes_from_hours
from xlplan.evaluate.metrics import Slots, count_interruptions
from xlplan.evaluate.reliability import indices
from xlplan.evaluate.results import Indices

HERE = Path(__file__).resolve().parent

TITLE = "Indices of the sample year of IEEE Std 1366"
SOURCE = "IEEE Std 1366, Guide for Electric Power Distribution Reliability Indices"
NOTES = ("ASIFI, ASIDI, CEMI, CELID and major event days are not reported by xlplan.",)

PERIODS_PER_MINUTE = 100
"""The sample's durations have hundredths of a minute."""


def printed(quantity: str) -> float:
    """A figure of the guide, as recalled."""
    for row in read_rows(HERE, "ieee1366_example_results.csv"):
        if row["quantity"] == quantity:
            return float(row["published_value"])
    raise KeyError(quantity)


def sample_year() -> Indices:
    """The nine events, as shares of one group of customers."""
    customers = printed("customers served")
    slots = Slots(1)
    yearly = np.zeros(slots.n_slot)
    for row in read_rows(HERE, "ieee1366_example_events.csv"):
        n_period = round(float(row["duration_min"]) * PERIODS_PER_MINUTE)
        share = np.full((n_period, 1), float(row["customers_interrupted"]) / customers)
        counted = count_interruptions(share, hours_from_minutes(1.0 / PERIODS_PER_MINUTE), 0, 0.0)
        for name, values in zip(("sustained", "momentary", "hours"), counted, strict=True):
            yearly[slots.per_load(name)] += values
    return indices(np.array([customers]), slots, yearly)


@cache
def compare() -> list[Comparison]:
    """SAIFI, SAIDI, CAIDI, ASAI as printed; MAIFI by counting."""
    year = sample_year()
    momentary = sum(
        float(row["customers_interrupted"])
        for row in read_rows(HERE, "ieee1366_example_events.csv")
        if row["type"] == "momentary"
    )
    rows = (
        ("SAIFI", "per customer", printed("SAIFI"), year.saifi, 2, Origin.RECALLED),
        ("SAIDI", "min", printed("SAIDI"), minutes_from_hours(year.saidi_h), 2, Origin.RECALLED),
        ("CAIDI", "min", printed("CAIDI"), minutes_from_hours(year.caidi_h), 2, Origin.RECALLED),
        ("ASAI", "", printed("ASAI"), year.asai, 6, Origin.RECALLED),
        (
            "MAIFI, counted from the events",
            "per customer",
            momentary / printed("customers served"),
            year.maifi,
            2,
            Origin.CLOSED_FORM,
        ),
    )
    return [
        Comparison(quantity, unit, expected, got, half_digit(digits), HALF_DIGIT, origin, digits)
        for quantity, unit, expected, got, digits, origin in rows
    ]
