"""How a year may turn out: simulated years, percentiles, CVaR.

Each simulated year draws, for every occurrence of every window, when something fails and what, from
the same chances as the expectation, and adds up the costs and unserved energies of the first plan
and its events. Second events in one occurrence take the figures of first ones (the state after an
event is not carried on), which the expectation corrects and this distribution does not.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xlplan.base.rng import stream
from xlplan.evaluate.follow_plan import FollowResult, WindowFollow
from xlplan.evaluate.metrics import Slots
from xlplan.evaluate.results import EventSpread, Risk, WorstEvent
from xlplan.evaluate.traces import time_label
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]

N_YEAR = 4000
"""Simulated years: the 95th percentile then rests on 200 years beyond it."""

PERCENTS = (1.0, 5.0, 10.0, 25.0, 50.0, 75.0, 90.0, 95.0, 99.0)
"""Percentiles that are reported."""

N_BIN = 20
"""Steps of a distribution: enough for its shape, few enough for a chart."""

N_LOST = 4
"""Loads named of those that an event leaves unserved."""


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
    missing = np.sort(eens)[int(np.ceil(0.95 * N_YEAR)) :]
    percents = np.array(PERCENTS)
    event_cost, event_eens = event_spreads(result)
    return Risk(
        mean=float(cost.mean()),
        p50=float(np.percentile(cost, 50.0)),
        p95=float(np.percentile(cost, 95.0)),
        cvar95=float(tail.mean()),
        n_year=N_YEAR,
        cost_percentiles=_pairs(percents, cost),
        eens_percentiles=_pairs(percents, eens),
        eens_mean=float(eens.mean()),
        eens_cvar95=float(missing.mean()),
        cost_bins=_bins(cost, np.full(N_YEAR, 1.0 / N_YEAR)),
        eens_bins=_bins(eens, np.full(N_YEAR, 1.0 / N_YEAR)),
        event_cost=event_cost,
        event_eens=event_eens,
    )


def event_spreads(result: FollowResult) -> tuple[EventSpread | None, EventSpread | None]:
    """Cost and unserved kWh of single outage events; None where nothing can fail.

    Every possible first event of the plan counts with how often it is expected in a year. The cost
    is that of repair and interruption.
    """
    slots = result.slots
    cost, eens, weight = [], [], []
    for window, n in zip(result.windows, result.occurrences, strict=True):
        cost.append(
            window.events[:, :, [slots.single("repair"), slots.single("interruption")]].sum(axis=2)
        )
        eens.append(window.events[:, :, slots.per_load("ens_kwh")].sum(axis=2))
        weight.append(n * window.event_count)
    weights = np.concatenate([one.ravel() for one in weight]) if weight else np.zeros(0)
    if weights.sum() <= 0.0:
        return None, None
    return (
        _spread(np.concatenate([one.ravel() for one in cost]), weights),
        _spread(np.concatenate([one.ravel() for one in eens]), weights),
    )


def _spread(values: FloatArray, weights: FloatArray) -> EventSpread:
    """Mean, percentiles and tail of weighted values."""
    seen = weights > 0.0
    order = np.argsort(values[seen], kind="stable")
    values, weights = values[seen][order], weights[seen][order]
    share = weights / weights.sum()
    reached = np.cumsum(share)
    last = len(values) - 1
    at = [min(int(np.searchsorted(reached, p / 100.0 - 1e-12)), last) for p in PERCENTS]
    # The tail holds exactly 5 %: the event at its edge counts with the part that belongs to it.
    inside = np.clip(reached - 0.95, 0.0, share)
    return EventSpread(
        mean=float(share @ values),
        cvar95=float(inside @ values / inside.sum()),
        largest=float(values[-1]),
        percentiles=tuple((p, float(values[i])) for p, i in zip(PERCENTS, at, strict=True)),
        bins=_bins(values, weights),
    )


def _bins(values: FloatArray, weights: FloatArray) -> tuple[tuple[float, float, float], ...]:
    """Weights by equal steps of the value; one step where all values are the same."""
    low, high = float(values.min()), float(values.max())
    if high - low <= 1e-9 * max(1.0, abs(high)):
        return ((low, high, float(weights.sum())),)
    sums, edges = np.histogram(values, N_BIN, (low, high), weights=weights)
    return tuple(
        (float(a), float(b), float(w)) for a, b, w in zip(edges, edges[1:], sums, strict=False)
    )


def worst_events(
    study: Study, windows: Sequence[WindowModel], follow: FollowResult
) -> tuple[WorstEvent, ...]:
    """Scenarios by the most unserved energy that one event of theirs can leave.

    Parameters
    ----------
    study, windows : what was followed
    follow : FollowResult

    Returns
    -------
    tuple of WorstEvent, the worst first; each scenario of a window once, at its worst time
    """
    slots = follow.slots
    customers = np.array([load.customers for load in study.loads], dtype=float)
    found = []
    for i, (window, result) in enumerate(zip(windows, follow.windows, strict=True)):
        record, series = study.windows[i], window.series
        by_load = result.events[:, :, slots.per_load("ens_kwh")]
        ens = np.where(result.first_chance > 0.0, by_load.sum(axis=2), -1.0)
        for w, scenario in enumerate(window.scenarios):
            k = int(ens[:, w].argmax())
            if ens[k, w] <= 0.0:
                continue
            event = result.events[k, w]
            row = record.start_row + (k + 1) % series.n_period
            found.append(
                WorstEvent(
                    window=series.window,
                    scenario=scenario.name,
                    causes=scenario.what_fails,
                    begins=time_label(study.profiles.times[row]),
                    hours=scenario.n_period * series.period_h,
                    per_year=float(follow.occurrences[i] * result.event_count[:, w].sum()),
                    eens_kwh=float(ens[k, w]),
                    customers=float(
                        customers @ (event[slots.per_load("sustained")])
                        + customers @ event[slots.per_load("momentary")]
                    ),
                    cost=float(event[slots.single("repair")] + event[slots.single("interruption")]),
                    lost=_lost_words(study, by_load[k, w]),
                )
            )
    return tuple(sorted(found, key=lambda one: -one.eens_kwh))


def _lost_words(study: Study, kwh: FloatArray) -> str:
    """The loads that lost most, in words."""
    order = [int(i) for i in np.argsort(-kwh, kind="stable") if kwh[i] > 0.05]
    words = [f"{study.loads[i].load} {kwh[i]:,.1f} kWh" for i in order[:N_LOST]]
    if len(order) > N_LOST:
        rest = float(sum(kwh[i] for i in order[N_LOST:]))
        words.append(f"{len(order) - N_LOST} more loads {rest:,.1f} kWh")
    return "; ".join(words) or "less than 0.05 kWh each"


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
