"""Stopping rules with hand-made logs; no solver."""

from __future__ import annotations

import time

import pytest

from xlplan.solve.result import (
    MissingValueError,
    SolveResult,
    StopReason,
    Termination,
    relative_gap,
)
from xlplan.solve.stopping import Clock, is_relaxation_settled, must_measure_now


def test_clock_without_limits_never_stops():
    assert not Clock().should_stop()
    assert Clock().remaining() is None


def test_clock_past_its_deadline():
    clock = Clock(deadline=time.monotonic() - 1.0)
    assert clock.should_stop()
    assert clock.reason() is StopReason.TIME_LIMIT


def test_clock_that_is_asked_remembers():
    answers = iter([False, True])
    clock = Clock(is_asked=lambda: next(answers))
    assert not clock.should_stop()
    assert clock.should_stop()
    assert clock.should_stop()  # not asked again
    assert clock.reason() is StopReason.INTERRUPTED


def test_relaxation_settles_on_a_small_gap_or_a_flat_bound():
    clock = Clock()
    assert is_relaxation_settled([1.0], 0.5, 1.0, clock)
    assert is_relaxation_settled([1.0, 1.01, 1.02], 1.0, 1e-6, clock)
    assert not is_relaxation_settled([1.0, 1.5, 1.9], 1.0, 1e-6, clock)
    assert not is_relaxation_settled([1.0, 1.01], 1.0, 1e-6, clock)


def test_relaxation_ends_with_its_share_of_the_time():
    clock = Clock(deadline=time.monotonic() + 1.0, begin=time.monotonic() - 9.0)
    assert is_relaxation_settled([1.0, 2.0], 100.0, 1e-6, clock)


def test_measuring_before_the_time_is_up():
    clock = Clock(deadline=time.monotonic() + 10.0)
    assert must_measure_now(clock, pass_seconds=6.0, has_plan=False)
    assert not must_measure_now(clock, pass_seconds=6.0, has_plan=True)
    assert not must_measure_now(clock, pass_seconds=1.0, has_plan=False)


@pytest.mark.parametrize(
    ("upper", "lower", "gap"),
    [(100.0, 99.0, 0.01), (-100.0, -101.0, 0.01), (5.0, 6.0, 0.0), (0.0, -1.0, float("inf"))],
)
def test_relative_gap(upper, lower, gap):
    assert relative_gap(upper, lower) == pytest.approx(gap)


def test_values_that_do_not_exist_cannot_be_read():
    result = SolveResult(Termination.INFEASIBLE, False, False, "Infeasible", 0.0)
    for name in ("objective", "bound", "gap_frac", "col_value", "row_dual"):
        with pytest.raises(MissingValueError):
            getattr(result, name)
