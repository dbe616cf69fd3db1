"""How a year may turn out: simulated years, percentiles, CVaR.

Each simulated year draws, for every occurrence of every window, when something fails and what, from
the same chances as the expectation, and adds up the costs and unserved energies of the first plan
and its events. Second events in one occurrence take the figures of first ones (the state after an
event is not carried on), which the expectation corrects and this distribution does not.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xlplan.base.rng import stream
from xlplan.evaluate.follow_plan import FollowResult, WindowFollow
from xlplan.evaluate.metrics import Slots
from xlplan.evaluate.results import Risk

FloatArray = NDArray[np.float64]

N_YEAR = 4000
"""Simulated years: the 95th percentile then rests on 200 years beyond it."""

PERCENTS = (1.0, 5.0, 10.0, 25.0, 50.0, 75.0, 90.0, 95.0, 99.0)
"""Percentiles that are reported."""


def simulate_years(result: FollowResult, fixed_cost: float, seed: int) -> Risk:
    """Distribution of a year's cost and unserved energy.

    Parameters
    ----------
    result : FollowResult
    fixed_cost : float, what every year costs (investment, fixed O&M, demand charge)
    seed : int

    Returns
    -------
    Risk
    """
    cost = np.full(N_YEAR, fixed_cost)
    eens = np.zeros(N_YEAR)
    for i_window, (window, n) in enumerate(zip(result.windows, result.occurrences, strict=True)):
        random = stream(seed, "years", i_window)
        whole = int(np.floor(n))
        times = whole + (random.random(N_YEAR) < n - whole)
        calm = float(result.slots.cost(window.plan.metrics).sum())
        cost += times * calm
        chance = 1.0 - float(window.clock.survival[-1])
        disturbed = random.binomial(times, chance) if chance > 0.0 else np.zeros(N_YEAR, dtype=int)
        year = np.repeat(np.arange(N_YEAR), disturbed)
        if len(year):
            extra, missed = _histories(window, result.slots, len(year), random)
            cost += np.bincount(year, extra, N_YEAR)
            eens += np.bincount(year, missed, N_YEAR)
    tail = np.sort(cost)[int(np.ceil(0.95 * N_YEAR)) :]
    percents = np.array(PERCENTS)
    return Risk(
        mean=float(cost.mean()),
        p50=float(np.percentile(cost, 50.0)),
        p95=float(np.percentile(cost, 95.0)),
        cvar95=float(tail.mean()),
        n_year=N_YEAR,
        cost_percentiles=_pairs(percents, cost),
        eens_percentiles=_pairs(percents, eens),
    )


def _pairs(percents: FloatArray, values: FloatArray) -> tuple[tuple[float, float], ...]:
    return tuple(
        (float(p), float(v)) for p, v in zip(percents, np.percentile(values, percents), strict=True)
    )


def _histories(
    window: WindowFollow, slots: Slots, n: int, random: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Cost above that of a calm occurrence and unserved kWh, of n occurrences that fail once."""
    clock = window.clock
    n_period, tau = clock.n_period, clock.event_periods
    plan_cost = slots.cost(window.plan.metrics)
    before = np.concatenate([[0.0], np.cumsum(plan_cost)])
    event_cost = slots.cost(window.events)
    event_ens = window.events[:, :, slots.per_load("ens_kwh")].sum(axis=2)
    shares = np.cumsum(clock.scenario_chance, axis=1)
    extra = np.zeros(n)
    missed = np.zeros(n)
    active = np.arange(n)
    start = np.zeros(n, dtype=np.int64)
    forced = True
    survival = clock.survival
    while len(active):
        alive = survival[start]
        fails = 1.0 - np.divide(survival[-1], alive, out=np.ones(len(active)), where=alive > 0.0)
        draw = random.random(len(active))
        if forced:
            draw = draw * fails
        strikes = draw < fails
        active, start, alive, draw = (
            active[strikes],
            start[strikes],
            alive[strikes],
            draw[strikes],
        )
        if not len(active):
            break
        # First k with survival[k + 1] at or below the level drawn.
        level = alive * (1.0 - draw)
        k = np.searchsorted(-survival, -level, side="left") - 1
        k = np.clip(k, start, n_period - 1)
        pick = random.random(len(active)) * shares[k, -1]
        w = (shares[k] <= pick[:, None]).sum(axis=1).clip(0, shares.shape[1] - 1)
        back = k + 1 + tau[w]
        extra[active] += event_cost[k, w] - (before[np.minimum(back, n_period)] - before[k + 1])
        missed[active] += event_ens[k, w]
        # An event that reaches the end of the window has the end's cost in it already.
        over = back >= n_period
        extra[active[over]] -= plan_cost[n_period]
        active, start = active[~over], back[~over]
        forced = False
    return extra, missed
