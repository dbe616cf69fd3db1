"""The clock of a study with a failure profile against simulated arrivals in continuous time."""

from __future__ import annotations

import numpy as np
import pytest

from tests.builders import (
    make_bus,
    make_line,
    make_load,
    make_outage_class,
    make_profiles,
    make_window,
    small_study,
)
from xlplan.base.units import HOURS_PER_YEAR
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models

N_HISTORY = 200_000
SHAPE = (0.2, 0.2, 0.5, 2.0, 4.0, 3.0, 1.0, 0.3)
"""As typed in a profile; its mean is not 1."""

MULTIPLIER = 6.0
EXPOSED_PER_YEAR, SHELTERED_PER_YEAR = 60.0, 90.0
REPAIR_H = {"overhead": 2.0, "cable": 3.0}


def window_of_a_storm():
    """Two lines from the source: one exposed to weather, one not; hourly periods."""
    study = small_study(
        buses=(make_bus("S"), make_bus("A"), make_bus("B")),
        lines=(
            make_line("SA", "S", "A", outage_class="overhead"),
            make_line("SB", "S", "B", outage_class="cable"),
        ),
        loads=(make_load("LA", "A"), make_load("LB", "B")),
        outage_classes=(
            make_outage_class(
                "overhead", EXPOSED_PER_YEAR, repair_h=REPAIR_H["overhead"], is_weather_exposed=True
            ),
            make_outage_class(
                "cable", SHELTERED_PER_YEAR, repair_h=REPAIR_H["cable"], is_weather_exposed=False
            ),
        ),
        profiles=make_profiles(len(SHAPE), gusts=np.array(SHAPE)),
        windows=(
            make_window(
                n_period=len(SHAPE), failure_multiplier=MULTIPLIER, failure_profile="gusts"
            ),
        ),
    )
    return build_window_models(study, build_feeder(study))[0]


def simulate(rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Failures by period and kind, and periods in service, each as a mean over histories.

    Arrival times of each kind are drawn within every hour from its own exponential clock; whichever
    comes first within the hour strikes, if everything is in service; then the repair runs from the
    next hour on, for whole hours, and nothing else fails.
    """
    shape = np.array(SHAPE) / np.mean(SHAPE)
    per_hour = np.column_stack(
        [EXPOSED_PER_YEAR * MULTIPLIER * shape, np.full(len(SHAPE), SHELTERED_PER_YEAR)]
    )
    per_hour = per_hour / HOURS_PER_YEAR
    repair = np.array([REPAIR_H["overhead"], REPAIR_H["cable"]])
    free_from = np.zeros(N_HISTORY)
    failures, service = np.zeros(per_hour.shape), np.zeros(len(SHAPE))
    for k, rates in enumerate(per_hour):
        in_service = free_from <= k
        service[k] = in_service.mean()
        arrival = rng.exponential(1.0, (N_HISTORY, 2)) / rates
        first = arrival.argmin(axis=1)
        strikes = in_service & (arrival.min(axis=1) <= 1.0)
        for kind in range(2):
            mine = strikes & (first == kind)
            failures[k, kind] = mine.mean()
            free_from[mine] = k + 1 + repair[kind]
    return failures, service


def test_clock_of_a_study_with_a_failure_profile():
    window = window_of_a_storm()
    names = [scenario.causes[0].ident for scenario in window.scenarios]
    order = [names.index("SA"), names.index("SB")]
    in_service, events = window.clock.occupancy()
    failures, service = simulate(np.random.default_rng(11))
    # 24 figures: each within 4.5 standard errors, so that chance alone fails once in 6000 runs.
    error = np.sqrt(np.maximum(failures * (1.0 - failures), 1e-6) / N_HISTORY)
    assert (np.abs(events[:, order] - failures) <= 4.5 * error).all()
    error = np.sqrt(np.maximum(service * (1.0 - service), 1e-6) / N_HISTORY)
    assert (np.abs(in_service[:-1] - service) <= 4.5 * error).all()
    # The profile matters: hours with gusts have many times the failures of calm ones.
    assert events[4, order[0]] > 10.0 * events[0, order[0]]
    # Without the one-at-a-time rule: multiplier x rate of the exposed, rate of the sheltered.
    hours = len(SHAPE) / HOURS_PER_YEAR
    mean = (EXPOSED_PER_YEAR * MULTIPLIER + SHELTERED_PER_YEAR) * hours
    assert window.clock.poisson_mean() == pytest.approx(mean)
