"""A control variate narrows an interval, and never moves a mean far where it says nothing."""

from __future__ import annotations

import numpy as np
import pytest

from xlplan.evaluate.follow_plan import controlled


def test_a_good_control_takes_out_its_share_of_the_spread():
    rng = np.random.default_rng(1)
    control = rng.normal(3.0, 2.0, 4000)
    cost = control + rng.normal(5.0, 0.1, 4000)
    samples = controlled(cost, control, 3.0)
    assert samples.std() == pytest.approx(0.1, rel=0.1)
    assert samples.mean() == pytest.approx(8.0, abs=0.01)


@pytest.mark.parametrize("noise", [1e-15, 1e-12, 1e-9])
def test_a_control_of_rounding_alone_moves_nothing(noise):
    rng = np.random.default_rng(2)
    cost = rng.normal(5.0, 1.0, 50)
    # In step with the cost, and off its true mean by more than it varies: a plain regression
    # would shift the mean by about 100.
    control = noise * (cost - 5.0)
    samples = controlled(cost, control, 100.0 * noise)
    assert samples.mean() == pytest.approx(cost.mean(), abs=1e-6)


def test_a_control_against_the_cost_is_left_out():
    rng = np.random.default_rng(3)
    control = rng.normal(0.0, 1.0, 100)
    assert controlled(-control, control, 0.5) == pytest.approx(-control)


def test_a_control_that_never_varies_is_left_out():
    cost = np.array([1.0, 2.0, 4.0])
    assert controlled(cost, np.full(3, 7.0), 9.0) == pytest.approx(cost)
