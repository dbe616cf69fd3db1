"""Outcomes of one occurrence of a window and the mean of the worst of them (``model.risk_aim``).

An outcome is: nothing fails, or the first potential failure. Its cost is what the first plan has
cost up to there, the event, and what is expected to follow: the figures of the first plan and its
events once more (``later_costs``), and the difference that the state after the event makes. Where
that difference is sampled it carries noise (``Noise``: without bias as far as failures of one
scenario that are near in time behave alike); the mean of the worst outcomes is then biased upward
(Jensen: it is convex in the costs), so as an upper end it is on the safe side. The interval is that
of the aim with the set of worst outcomes as found.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.risk_aim import RiskAim, tail_mean
from xlplan.outages.clock import Clock

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class Noise:
    """Sampled differences: ``n`` histories, each standing for an equal part of some failures.

    pairs (n_pair, 2) : period and scenario of the failures, in the order in which they were drawn
    share (n_pair,) : of their chance; weight : their chance
    residual (n,) : what each history adds to the difference that is known
    """

    pairs: IntArray
    share: FloatArray
    weight: float
    residual: FloatArray

    def spread(self) -> FloatArray:
        """Residual of each failure, (n_pair,): that of the histories that stand for it.

        A history was drawn within an equal part of the failures in their order, scenario by
        scenario and period by period, and stands for all of its part: neighbours behave alike.
        """
        n = len(self.residual)
        edges = np.concatenate([[0.0], np.cumsum(self.share)])
        edges /= edges[-1]
        steps = np.arange(n + 1) / n
        total = np.interp(edges, steps, np.concatenate([[0.0], np.cumsum(self.residual) / n]))
        found: FloatArray = np.diff(total) / np.diff(edges)
        return found

    def standard_error(self, slope: FloatArray) -> float:
        """Standard error of a sum in which failure i counts ``slope[i]`` times its chance."""
        n = len(self.residual)
        if n < 2:
            return 0.0
        edges = np.concatenate([[0.0], np.cumsum(self.share)])
        edges /= edges[-1]
        steps = np.arange(n + 1) / n
        total = np.interp(steps, edges, np.concatenate([[0.0], np.cumsum(slope * np.diff(edges))]))
        counted = self.weight * self.residual * np.diff(total) * n
        return float(counted.std(ddof=1) / np.sqrt(n))


@dataclass(frozen=True)
class WindowOutcomes:
    """Outcomes of one occurrence of a window: chances (add up to 1) and costs, (n_outcome,).

    standard_error : of the aim, 0 where nothing was sampled
    """

    aim: RiskAim
    chance: FloatArray
    cost: FloatArray
    standard_error: float = 0.0

    @property
    def tail_cost(self) -> float:
        """CVaR: mean cost of the worst share of outcomes."""
        return tail_mean(self.chance, self.cost, self.aim.tail_frac)


def later_costs(
    clock: Clock, plan_cost: FloatArray, event_cost: FloatArray, n_real: int
) -> FloatArray:
    """Expected cost from each period on if all is like the first plan and its events.

    Parameters
    ----------
    clock : Clock; scenarios from ``n_real`` on are failures that do not happen
    plan_cost : array, shape (n_period + 1,), by period, then the end of the window
    event_cost : array, shape (n_period, n_scenario)
    n_real : int, scenarios whose events have the end of the window in them where they reach it

    Returns
    -------
    array, shape (n_period + 1,); the last one is the end of the window
    """
    n_period = clock.n_period
    found = np.zeros(n_period + 1)
    found[n_period] = plan_cost[n_period]
    for k in reversed(range(n_period)):
        after = [
            found[u] if (u := return_period(clock, k, w, n_real)) is not None else 0.0
            for w in range(clock.n_scenario)
        ]
        fails = float(clock.scenario_chance[k] @ (event_cost[k] + np.array(after)))
        q = float(clock.failure_chance[k])
        found[k] = plan_cost[k] + q * fails + (1.0 - q) * found[k + 1]
    return found


def return_period(clock: Clock, k: int, w: int, n_real: int) -> int | None:
    """Period from which the rest of the window is planned after an event; None if none is.

    After an avoided failure in the last period only the end of the window is left; after a
    real event that reaches the end, the event has it in itself.
    """
    u = k + 1 + int(clock.event_periods[w])
    last = clock.n_period - (w < n_real)
    return u if u <= last else None


def followed_outcomes(
    aim: RiskAim,
    clock: Clock,
    plan_cost: FloatArray,
    event_cost: FloatArray,
    n_real: int,
    difference: FloatArray,
    noise: Noise | None,
) -> WindowOutcomes:
    """Outcomes of a followed window.

    Parameters
    ----------
    aim : RiskAim
    clock, plan_cost, event_cost, n_real : see ``later_costs``
    difference : array, shape (n_period, n_scenario), times the chance of that first failure: what
        follows it less what ``later_costs`` says
    noise : Noise or None, the sampled part of ``difference``

    Returns
    -------
    WindowOutcomes
    """
    first = clock.survival[:-1, None] * clock.failure_chance[:, None] * clock.scenario_chance
    later = later_costs(clock, plan_cost, event_cost, n_real)
    paid = np.cumsum(plan_cost)
    pairs = np.argwhere(first > 0.0)
    chance, cost = [], []
    for k, w in pairs.tolist():
        u = return_period(clock, k, w, n_real)
        chance.append(float(first[k, w]))
        after = float(event_cost[k, w]) + (0.0 if u is None else float(later[u]))
        cost.append(float(paid[k]) + after + float(difference[k, w] / first[k, w]))
    found = WindowOutcomes(
        aim, np.array([*chance, clock.survival[-1]]), np.array([*cost, paid[-1]])
    )
    if noise is None:
        return found
    slope = np.zeros(first.shape)
    slope[pairs[:, 0], pairs[:, 1]] = aim.slope(found.chance, found.cost)[:-1]
    error = noise.standard_error(slope[noise.pairs[:, 0], noise.pairs[:, 1]])
    return WindowOutcomes(aim, found.chance, found.cost, error)


def counted_outcomes(
    aim: RiskAim, chance: Sequence[float], cost: Sequence[float], calm_cost: float
) -> WindowOutcomes:
    """Outcomes that were counted one by one; what is left of the chance is that nothing fails."""
    rest = 1.0 - float(np.sum(chance))
    return WindowOutcomes(aim, np.array([*chance, rest]), np.array([*cost, calm_cost]))
