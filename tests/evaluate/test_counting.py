"""Interruptions and hours of one event, by the minutes of IEEE Std 1366."""

from __future__ import annotations

import numpy as np
import pytest

from xlplan.evaluate.metrics import count_interruptions

MINUTE_H = 1.0 / 60.0


@pytest.mark.parametrize(
    ("switching_minutes", "expected"),
    # Isolation takes one period of 15 minutes in the model; its true minutes count.
    [(4.0, (0.0, 1.0, 0.0)), (12.0, (1.0, 0.0, 0.2))],
)
def test_isolation_alone_counts_with_its_true_minutes(switching_minutes, expected):
    share = np.array([[1.0], [0.0], [0.0]])
    counted = count_interruptions(share, 0.25, 1, switching_minutes * MINUTE_H)
    assert [float(c[0]) for c in counted] == pytest.approx(expected)


def test_part_of_a_load_may_come_back_after_isolation():
    """All of it out while isolating (4 minutes), 30 % for 30 minutes more: 70 % were momentary."""
    share = np.array([[1.0], [0.3], [0.3]])
    sustained, momentary, hours = count_interruptions(share, 0.25, 1, 4.0 * MINUTE_H)
    assert float(sustained[0]) == pytest.approx(0.3)
    assert float(momentary[0]) == pytest.approx(0.7)
    assert float(hours[0]) == pytest.approx(0.3 * 0.75)


@pytest.mark.parametrize(("n_period", "is_momentary"), [(1, True), (2, False)])
def test_five_minutes_are_still_momentary(n_period, is_momentary):
    share = np.array([[0.5]] * n_period)
    sustained, momentary, hours = count_interruptions(share, 5.0 * MINUTE_H, 0, 0.0)
    assert (float(momentary[0]), float(sustained[0])) == ((0.5, 0.0) if is_momentary else (0, 0.5))
    assert float(hours[0]) == pytest.approx(0.0 if is_momentary else 0.5 * 10.0 / 60.0)
