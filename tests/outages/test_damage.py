"""Cost of an interruption by the time since it began."""

from __future__ import annotations

import numpy as np
import pytest

from tests.builders import make_customer_class
from xlplan.outages.damage import (
    first_moment_cost,
    normal_service_price_per_kwh,
    price_per_kwh,
)

SHOPS = make_customer_class(
    "shops",
    cost_0h_per_kw=5.0,
    cost_1h_per_kw=10.0,
    cost_4h_per_kw=40.0,
    cost_8h_per_kw=100.0,
    cost_after_8h_per_kwh=20.0,
)


@pytest.mark.parametrize(
    ("clock_h", "price"),
    [
        (0.0, 5.0),  # (10 - 5) / 1
        (0.75, 5.0),
        (1.0, 10.0),  # (40 - 10) / 3
        (12 * (5.0 / 60.0) - 1e-12, 10.0),  # an hour counted in periods, rounded down
        (3.75, 10.0),
        (4.0, 15.0),  # (100 - 40) / 4
        (7.75, 15.0),
        (8.0, 20.0),  # as given
        (60.0, 20.0),
    ],
)
def test_price_by_the_clock(clock_h, price):
    assert price_per_kwh(SHOPS, clock_h) == pytest.approx(price)


def test_an_interruption_of_a_given_length_costs_what_the_survey_says():
    # 1 kW for 8 hours in quarters of an hour: first moment and energy add up to the 8-hour total.
    clock = np.arange(0.0, 8.0, 0.25)
    total = first_moment_cost(SHOPS) + 0.25 * price_per_kwh(SHOPS, clock).sum()
    assert total == pytest.approx(100.0)
    hour = first_moment_cost(SHOPS) + 0.25 * price_per_kwh(SHOPS, clock[:4]).sum()
    assert hour == pytest.approx(10.0)


def test_shedding_in_normal_service_costs_what_the_first_hour_does():
    assert normal_service_price_per_kwh(SHOPS) == pytest.approx(5.0)
