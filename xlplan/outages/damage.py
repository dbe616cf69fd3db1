"""What an interruption costs customers, by the time since the outage event began.

Surveys publish the total cost per kW of an interruption of 0, 1, 4 and 8 hours. In between the
cost is linear in time, so a kWh lost costs the slope: ``c_j = (C_j - C_{j-1}) / (d_j - d_{j-1})``;
beyond 8 hours the study gives the price itself (model.md section 4).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from xlplan.study.study import CustomerClass

FloatArray = NDArray[np.float64]

DURATIONS_H = (0.0, 1.0, 4.0, 8.0)
"""Durations for which the study gives a total cost."""

CLOCK_TOLERANCE_H = 1e-9
"""A clock counted in periods, such as 12 times 5 minutes, may round to just under a full hour."""


def _totals_per_kw(customer_class: CustomerClass) -> tuple[float, float, float, float]:
    """Total cost per kW at each of the durations."""
    return (
        customer_class.cost_0h_per_kw,
        customer_class.cost_1h_per_kw,
        customer_class.cost_4h_per_kw,
        customer_class.cost_8h_per_kw,
    )


def prices_per_kwh(customer_class: CustomerClass) -> FloatArray:
    """Price of a kWh lost in the hours 0 to 1, 1 to 4, 4 to 8 and after 8; shape (4,)."""
    slopes = np.diff(_totals_per_kw(customer_class)) / np.diff(DURATIONS_H)
    return np.append(slopes, customer_class.cost_after_8h_per_kwh)


def price_per_kwh(customer_class: CustomerClass, clock_h: ArrayLike) -> FloatArray:
    """Price of a kWh lost in a period that begins ``clock_h`` after the event began.

    Parameters
    ----------
    customer_class : CustomerClass
    clock_h : hours since the event began, at the start of the period; any shape

    Returns
    -------
    array of the same shape
    """
    return prices_per_kwh(customer_class)[step_of(clock_h)]


def step_of(clock_h: ArrayLike) -> NDArray[np.int64]:
    """Position in ``prices_per_kwh`` of a period that begins at ``clock_h``; the same shape."""
    clock = np.asarray(clock_h, dtype=float) + CLOCK_TOLERANCE_H
    return np.searchsorted(np.array(DURATIONS_H[1:]), clock, side="right")


def first_moment_cost(customer_class: CustomerClass) -> float:
    """Cost per kW of being interrupted at all, ``C_0``."""
    return customer_class.cost_0h_per_kw


def normal_service_price_per_kwh(customer_class: CustomerClass) -> float:
    """Price of a kWh shed in normal service: that of the first hour, ``c_1``."""
    return float(prices_per_kwh(customer_class)[0])
