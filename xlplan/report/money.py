"""Stored values of the money formulas on the Alternatives sheet, and how amounts are worded.

The sheet shows live formulas; viewers without a calculator see these values. The definitions are
those of the formulas, in words beside each of them.
"""

from __future__ import annotations

from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import PlanResult, Purchase

STUDY_LIFE_YEARS = 20.0
"""Years over which the present value is taken (common practice); a cell of its own to change."""

HARDENING = "hardening"
NO_PAYBACK = "no payback"
NOTHING_BOUGHT = "no purchase"
CHEAPER, DEARER, UNDECIDED = "cheaper", "dearer", "undecided"
HALF_CENT = 0.005
LEAST_MINUTES = 0.5
"""Fewer avoided customer-minutes a year are rounding, not a result."""


def annuity_factor(rate_frac: float, years: float) -> float:
    """Present value of 1 a year for some years, paid at each year's end."""
    if rate_frac == 0.0:
        return years
    return float((1.0 - (1.0 + rate_frac) ** -years) / rate_frac)


def formula_net_capital(asset: Purchase) -> float:
    """Capital after the grant as the Plan sheet's formulas find it from prices and sizes."""
    if not asset.is_bought:
        return 0.0
    energy = asset.kwh * asset.capital_per_kwh
    gross = asset.capital_site + asset.kw * asset.capital_per_kw + energy
    return gross * (1.0 - asset.grant_frac)


def formula_yearly(asset: Purchase, rate_frac: float) -> float:
    """Yearly investment and fixed O&M as the Plan sheet's formulas find them."""
    if not asset.is_bought:
        return 0.0
    factor = 1.0 / annuity_factor(rate_frac, asset.life_years)
    units = 1.0 if asset.kind == HARDENING else asset.kw
    return formula_net_capital(asset) * factor + units * asset.fixed_om_rate


def saving(base: float, base_investment: float, total: float, investment: float) -> float:
    """Yearly saving against the existing feeder before the yearly cost of investment."""
    return (base - base_investment) - (total - investment)


def payback_years(extra_capital: float, yearly_saving: float) -> float | str:
    """Years until the savings have returned the capital, without interest."""
    return NO_PAYBACK if yearly_saving <= 0.0 else extra_capital / yearly_saving


def verdict(difference_interval: tuple[float, float]) -> str:
    """Cheaper or dearer where the whole interval says so (beyond half a cent), else undecided."""
    low, high = difference_interval
    return DEARER if low > HALF_CENT else CHEAPER if high < -HALF_CENT else UNDECIDED


def money_words(amount: float, currency: str) -> str:
    """An amount in words: ``12,300 EUR``; cents only where the amount is small."""
    cents_below = 100.0
    digits = 2 if 0.0 < abs(amount) < cents_below else 0
    number = f"{amount:,.{digits}f}"
    return f"{'0' if float(number.replace(',', '')) == 0.0 else number} {currency}"


def largest_amount(result: StudyResult) -> float:
    """The largest yearly cost of any plan, which settles the digits shown."""
    return max(abs(plan.costs.total) for plan in result.plans)


def baseline(result: StudyResult) -> PlanResult:
    """The existing feeder: the first plan by contract."""
    return result.plans[0]


def buys_anything(plan: PlanResult) -> bool:
    """True if the plan spends capital or buys an asset."""
    return plan.capital_gross > 0.0 or any(asset.is_bought for asset in plan.purchases)
