"""Chances of the whole tree's nodes against every history of a window, by enumeration."""

from __future__ import annotations

import numpy as np
import pytest

from tests.builders import random_study
from tests.outages.histories import expectations
from xlplan.model.dispatch import Purchases, SegmentKind
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.tree import solve_tree


@pytest.mark.parametrize("seed", [0, 4, 7, 12, 19])
def test_nodes_have_the_chances_of_the_histories_that_pass_them(seed):
    study = random_study(seed)
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    nothing = Purchases(
        np.zeros(len(study.generators)),
        np.zeros(len(study.storage)),
        np.zeros(len(study.storage)),
        np.zeros(len(study.measures), dtype=bool),
    )
    solution = solve_tree(build_whole_tree(study, feeder, windows, nothing))
    assert solution.has_plan
    for i_window, window in enumerate(windows):
        clock, n_period = window.clock, window.series.n_period
        # Rates and chances once more from the scenarios' own rates.
        rate = np.column_stack([s.rate_per_year for s in window.scenarios])
        total = rate.sum(axis=1)
        q = 1.0 - np.exp(-total * study.settings.period_h / 8760.0)
        p = np.divide(rate, total[:, None], out=np.zeros_like(rate), where=total[:, None] > 0)
        service, events = expectations(q, p, [s.n_period for s in window.scenarios])
        served, struck, ended = np.zeros(n_period), np.zeros(p.shape), 0.0
        lived = np.zeros(n_period)
        for segment in (s for s in solution.segments if s.i_window == i_window):
            periods = segment.start_period + np.arange(segment.n_period)
            inside = periods < n_period
            np.add.at(lived, periods[inside], segment.period_weight[inside])
            ended += segment.end_weight
            if segment.kind is SegmentKind.PLAN:
                np.add.at(served, periods, segment.period_weight)
            else:
                assert segment.period_weight == pytest.approx(segment.weight)
                struck[segment.start_period - 1, segment.i_scenario] += segment.weight
        assert served == pytest.approx(service, abs=1e-12)
        assert struck == pytest.approx(events, abs=1e-12)
        # In every period, and at the end, something is the case.
        assert lived == pytest.approx(np.ones(n_period))
        assert ended == pytest.approx(1.0)
        assert clock.n_period == n_period
