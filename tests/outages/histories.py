"""Every history of a short window, walked from the definition: clocks and trees are held to it."""

from __future__ import annotations

import numpy as np
import pytest


def every_history(q, p, tau):
    """Every history of a window: (chance, failures as (period, scenario), periods in service).

    Walked forwards, period by period, from the definition: in service, a failure may strike;
    after one in k, periods k+1..k+tau are those of the event.
    """
    n_period = len(q)

    def walk(k, chance, failures, in_service):
        if k >= n_period:
            yield chance, failures, in_service
            return
        served = [*in_service, k]
        yield from walk(k + 1, chance * (1.0 - q[k]), failures, served)
        for w, repair in enumerate(tau):
            yield from walk(k + 1 + repair, chance * q[k] * p[k][w], [*failures, (k, w)], served)

    yield from walk(0, 1.0, [], [])


def expectations(q, p, tau):
    """Chance of service by period and expected failures by period and scenario, by enumeration."""
    service, events, total = np.zeros(len(q)), np.zeros(np.shape(p)), 0.0
    for chance, failures, in_service in every_history(q, p, tau):
        total += chance
        service[in_service] += chance
        for failure in failures:
            events[failure] += chance
    assert total == pytest.approx(1.0)
    return service, events
