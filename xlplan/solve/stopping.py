"""Small rules that say when to go on to the next thing, and when to stop.

None of them calls a solver. A run stops on its measured gap, or because somebody or the clock says
so, never because the bound has been flat for a while: with few nodes refreshed per pass a bound can
look settled and be far away.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

from xlplan.solve.result import StopReason

SETTLED_SHARE = 0.05
"""The relaxed bound has settled when two passes together closed less than this share of the gap."""

RELAXED_TIME_SHARE = 0.4
"""Share of the time allowed after which whole numbers are turned to in any case."""

INNER_SHARE = 0.1
"""First stage and roots agree well enough when they differ by this share of the open gap."""


@dataclass
class Clock:
    """Deadline and interruption. ``deadline`` is a value of ``time.monotonic()`` or None."""

    deadline: float | None = None
    is_asked: Callable[[], bool] | None = None
    is_interrupted: bool = False
    begin: float = field(default_factory=time.monotonic)

    def seconds(self) -> float:
        """Since the run began."""
        return time.monotonic() - self.begin

    def remaining(self) -> float | None:
        """Seconds left, None without a deadline."""
        return None if self.deadline is None else self.deadline - time.monotonic()

    def should_stop(self) -> bool:
        """Whether the clock or somebody says stop."""
        if self.is_asked is not None and not self.is_interrupted and self.is_asked():
            self.is_interrupted = True
        remaining = self.remaining()
        return self.is_interrupted or (remaining is not None and remaining <= 0.0)

    def reason(self) -> StopReason:
        """Why ``should_stop`` says so."""
        return StopReason.INTERRUPTED if self.is_interrupted else StopReason.TIME_LIMIT


def is_relaxation_settled(
    bounds: Sequence[float], gap_abs: float, target_abs: float, clock: Clock
) -> bool:
    """Whether to turn from the relaxed first stage to whole numbers.

    Parameters
    ----------
    bounds : lower bound after each pass of the relaxed phase
    gap_abs : last measured gap of the relaxed phase, infinite if none was measured
    target_abs : gap at which the run as a whole may stop
    clock : Clock

    >>> is_relaxation_settled([1.0, 5.0, 5.01, 5.02], 1.0, 0.01, Clock())
    True
    >>> is_relaxation_settled([1.0, 3.0, 5.0], 1.0, 0.01, Clock())
    False
    """
    if gap_abs <= target_abs:
        return True
    if len(bounds) >= 3 and bounds[-1] - bounds[-3] < SETTLED_SHARE * gap_abs:
        return True
    if clock.deadline is None:
        return False
    return clock.seconds() > RELAXED_TIME_SHARE * (clock.deadline - clock.begin)


def must_measure_now(clock: Clock, pass_seconds: float, has_plan: bool) -> bool:
    """Whether the time left is only enough for a full measurement of the plan.

    pass_seconds : how long a full measurement is expected to take
    """
    remaining = clock.remaining()
    return not has_plan and remaining is not None and remaining < 2.0 * pass_seconds
