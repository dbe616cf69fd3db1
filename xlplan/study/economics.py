"""Money over time: what a purchase costs per year, and what a yearly sum is worth today.

All money is real (without inflation), before tax; payments fall at the ends of the years.
Textbook engineering economy: the uniform-series capital recovery factor and its inverse.
"""

from __future__ import annotations

import math


def capital_recovery_factor(rate_frac: float, life_years: float) -> float:
    """Yearly payment over the life that repays one unit of capital.

    Parameters
    ----------
    rate_frac : float, real discount rate per year, not negative
    life_years : float, above 0; need not be whole

    Returns
    -------
    float, ``r (1+r)^n / ((1+r)^n - 1)``; ``1/n`` at a rate of 0

    Raises ValueError if the life is not above 0 or the rate is negative.

    >>> round(capital_recovery_factor(0.07, 20), 5)
    0.09439
    >>> capital_recovery_factor(0.0, 8)
    0.125
    """
    return 1.0 / present_value_factor(rate_frac, life_years)


def present_value_factor(rate_frac: float, n_years: float) -> float:
    """Worth today of one unit per year for a number of years.

    Parameters
    ----------
    rate_frac : float, real discount rate per year, not negative
    n_years : float, above 0

    Returns
    -------
    float, ``(1 - (1+r)^-n) / r``; ``n`` at a rate of 0

    Raises ValueError if the number of years is not above 0 or the rate is negative.

    >>> present_value_factor(0.0, 8)
    8.0
    """
    if not n_years > 0:
        raise ValueError(f"a life must be above 0 years, not {n_years}")
    if rate_frac < 0:
        raise ValueError(f"a discount rate must not be negative, not {rate_frac}")
    if rate_frac == 0:
        return float(n_years)
    # expm1 and log1p keep all digits where the rate is tiny and 1 - (1+r)^-n would cancel.
    return -math.expm1(-n_years * math.log1p(rate_frac)) / rate_frac
