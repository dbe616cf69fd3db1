"""Capital recovery against handbook tables, and its defining identity."""

import csv
from pathlib import Path

import pytest

from xlplan.base.units import frac_from_pct
from xlplan.study.economics import capital_recovery_factor, present_value_factor

TABLE = (
    Path(__file__).parents[2] / "validation" / "economics" / "capital_recovery_handbook_values.csv"
)


def handbook_rows() -> list[tuple[float, float, float]]:
    """(rate in percent, years, factor as printed)."""
    with TABLE.open(newline="") as file:
        return [
            (float(row["rate_percent"]), float(row["years"]), float(row["crf_handbook"]))
            for row in csv.DictReader(file)
        ]


@pytest.mark.parametrize(("rate_pct", "years", "printed"), handbook_rows())
def test_capital_recovery_is_the_handbook_value(rate_pct, years, printed):
    assert capital_recovery_factor(frac_from_pct(rate_pct), years) == pytest.approx(
        printed, abs=5e-6
    )


def test_payments_repay_the_loan_year_by_year():
    payment = 1000.0 * capital_recovery_factor(0.06, 3)
    debt = 1000.0
    for _ in range(3):
        debt = debt * 1.06 - payment
    assert debt == pytest.approx(0.0, abs=1e-9)


def test_without_interest_capital_is_spread_evenly():
    assert capital_recovery_factor(0.0, 8) == 0.125
    assert present_value_factor(0.0, 8) == 8.0


def test_a_tiny_rate_is_close_to_none():
    # Series of (1 - (1+r)^-n)/r about r = 0: n - n (n+1)/2 r.
    assert present_value_factor(1e-10, 20) == pytest.approx(20 - 210 * 1e-10, rel=1e-13)


@pytest.mark.parametrize(("rate", "years"), [(0.05, 0.0), (0.05, -1.0), (-0.01, 10.0)])
def test_nonsense_is_refused(rate, years):
    with pytest.raises(ValueError, match="must"):
        capital_recovery_factor(rate, years)
