"""Chances of failure against closed forms, and against every history of a short window."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.outages.histories import expectations
from xlplan.base.units import HOURS_PER_YEAR
from xlplan.outages.clock import Clock


def rate_of_chance(chance: float, period_h: float = 1.0) -> float:
    """Yearly rate that strikes in one period with this chance."""
    return -math.log(1.0 - chance) * HOURS_PER_YEAR / period_h


def test_survival_is_geometric_where_rates_are_constant():
    # (1 - p)^n for p = 0.02, n = 12; first failure in the 12th period (1 - p)^11 p: geometric law.
    clock = Clock.of_rates(np.full((12, 1), rate_of_chance(0.02)), 1.0, [1])
    assert clock.survival[12] == pytest.approx(0.784716723735, abs=1e-12)
    assert clock.first_failure_from(0)[11] == pytest.approx(0.016014627015, abs=1e-12)


def test_survival_is_exponential_in_time():
    # 0.3 a year over a week of quarter-hours: 1 - exp(-0.3 * 672 / 35040).
    clock = Clock.of_rates(np.full((672, 1), 0.3), 0.25, [1])
    assert 1.0 - clock.survival[-1] == pytest.approx(0.005736905406, abs=1e-12)
    assert clock.failure_chance[0] == pytest.approx(8.561607e-06, rel=1e-6)


def test_which_scenario_strikes_first_is_in_proportion_to_the_rates():
    clock = Clock.of_rates([[0.1, 0.2, 0.05]], 1.0, [1, 1, 1])
    assert clock.scenario_chance[0] == pytest.approx([2 / 7, 4 / 7, 1 / 7])


def test_chances_by_period_where_classes_differ_in_exposure():
    # Class 1 sheltered, rate 2; class 2 exposed, rate 2 times shape (0, 0.5, 2.5).
    rate = np.column_stack([np.full(3, 2.0), 2.0 * np.array([0.0, 0.5, 2.5])])
    clock = Clock.of_rates(rate, 1.0, [1, 1])
    assert clock.scenario_chance == pytest.approx(
        np.array([[1, 0], [2 / 3, 1 / 3], [2 / 7, 5 / 7]])
    )
    assert clock.survival[3] == pytest.approx(math.exp(-(2 + 3 + 7) / HOURS_PER_YEAR))


def test_survival_from_a_later_period():
    q = [0.1, 0.2, 0.3]
    clock = Clock.of_rates([[rate_of_chance(x)] for x in q], 1.0, [1])
    assert clock.survival_from(1) == pytest.approx([1.0, 0.8, 0.56])
    assert clock.first_failure_from(1) == pytest.approx([0.2, 0.8 * 0.3])
    assert clock.survival_from(3) == pytest.approx([1.0])
    # Some failure strikes first, or none does.
    assert clock.first_failure_from(0).sum() + clock.survival[3] == pytest.approx(1.0)


def test_expected_events_of_three_periods_by_hand():
    # q = 0.2, tau = 1. Period 0: 0.2. Period 1: in service if none in 0: 0.8 * 0.2 = 0.16.
    # Period 2: none in 0 and 1 (0.64), or one in 0, repaired in 1 (0.2): 0.84 * 0.2 = 0.168.
    clock = Clock.of_rates(np.full((3, 1), rate_of_chance(0.2)), 1.0, [1])
    in_service, events = clock.occupancy()
    assert in_service == pytest.approx([1.0, 0.8, 0.84, 0.832])  # 0.84 * 0.8 + 0.16
    assert events[:, 0] == pytest.approx([0.2, 0.16, 0.168])
    assert clock.expected_events() == pytest.approx(0.528)
    # Without the one-at-a-time rule: three periods at -ln 0.8 each.
    assert clock.poisson_mean() == pytest.approx(-3.0 * math.log(0.8))


@given(
    st.integers(1, 5).flatmap(
        lambda n: st.tuples(
            st.lists(
                st.lists(st.sampled_from([0.0, 500.0, 2000.0, 9000.0]), min_size=2, max_size=2),
                min_size=n,
                max_size=n,
            ),
            st.tuples(st.integers(1, 4), st.integers(1, 4)),
            st.tuples(st.sampled_from([0.0, 0.4, 1.0]), st.sampled_from([0.0, 0.7])),
        )
    )
)
def test_occupancy_equals_the_sum_over_every_history(case):
    rate, tau, avoided = case
    potential = Clock.of_rates(rate, 1.0, tau)
    for clock in (potential, potential.thinned(avoided)):
        service, events = expectations(clock.failure_chance, clock.scenario_chance, tau)
        in_service, renewed = clock.occupancy()
        assert in_service[:-1] == pytest.approx(service)
        assert renewed == pytest.approx(events)
        sums = clock.scenario_chance.sum(axis=1)
        assert sums == pytest.approx(np.where(clock.failure_chance > 0.0, 1.0, 0.0))


def test_long_run_rate_is_that_of_an_alternating_renewal_process():
    # Mean time to failure 1/q periods, the failing one counted, then tau of repair.
    q, tau = 0.01, 50
    clock = Clock.of_rates(np.full((6000, 1), rate_of_chance(q)), 1.0, [tau])
    events = clock.occupancy()[1][:, 0]
    assert events[3000:].mean() == pytest.approx(1.0 / (1.0 / q + tau), rel=1e-9)


def test_thinned_chances_by_hand():
    # q = 0.5, p = (1/4, 3/4), 40 % of the first avoided: real chance 0.5 * (1 - 0.1).
    total = rate_of_chance(0.5)
    clock = Clock.of_rates([[total / 4, total * 3 / 4]] * 2, 1.0, [1, 1])
    real = clock.thinned([0.4, 0.0])
    assert real.failure_chance == pytest.approx([0.45, 0.45])
    assert real.scenario_chance[0] == pytest.approx([0.15 / 0.9, 0.75 / 0.9])
    assert real.survival == pytest.approx([1.0, 0.55, 0.55**2])
    # Not 1 - exp of the thinned rates, which would be 1 - 0.5^0.9 = 0.464.
    assert real.failure_chance[0] != pytest.approx(1.0 - 0.5**0.9, abs=1e-3)
    assert real.poisson_mean() == pytest.approx(2 * 0.9 * math.log(2.0))


def test_all_failures_avoided():
    real = Clock.of_rates([[100.0]] * 3, 1.0, [2]).thinned([1.0])
    assert real.expected_events() == 0.0
    assert real.survival.tolist() == [1.0] * 4
    assert real.scenario_chance.sum() == 0.0


def test_a_window_without_scenarios():
    clock = Clock.of_rates(np.zeros((4, 0)), 1.0, [])
    assert clock.survival.tolist() == [1.0] * 5
    assert clock.expected_events() == 0.0


def test_impossible_clocks_are_refused():
    with pytest.raises(ValueError, match="negative"):
        Clock.of_rates([[-1.0]], 1.0, [1])
    with pytest.raises(ValueError, match="at least one period"):
        Clock.of_rates([[1.0]], 1.0, [0])
