"""Chances, renewals and unserved energy."""

from __future__ import annotations

import numpy as np
import pytest

from validation.closed_forms.case import compare, renewals
from validation.comparison import disagreements


def test_figures() -> None:
    found = compare()
    assert len(found) == 15
    assert disagreements(found) == []


def test_the_renewal_formula_itself() -> None:
    """Against simulated histories in continuous time: lives are exponential, repairs fixed."""
    rate_per_h, repair_h, window_h = 0.2, 4.0, 48.0
    rng = np.random.default_rng(5)
    counts = []
    for _ in range(20_000):
        now, n = rng.exponential(1.0 / rate_per_h), 0
        while now <= window_h:
            n += 1
            now += repair_h + rng.exponential(1.0 / rate_per_h)
        counts.append(n)
    error = np.std(counts) / np.sqrt(len(counts))
    expected = renewals(rate_per_h, repair_h, window_h)
    assert np.mean(counts) == pytest.approx(expected, abs=4.0 * error)
