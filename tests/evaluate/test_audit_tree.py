"""The audit of solved whole trees: nothing found, and something found once the plan is spoilt."""

from __future__ import annotations

from dataclasses import replace

import pytest

from tests.builders import random_study
from xlplan.evaluate.audit_tree import audit_tree
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.tree import solve_tree


@pytest.mark.parametrize("seed", [6, 15, 16])
def test_solved_tree_passes_and_spoilt_ones_do_not(seed: int) -> None:
    study = random_study(seed)
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    solution = solve_tree(build_whole_tree(study, feeder, windows))
    assert solution.purchases is not None
    segments = list(solution.segments)
    assert audit_tree(study, feeder, windows, solution.purchases, segments) == []

    # A purchase above the demand that is paid for, in the first plan only.
    peaks = [
        float(segment.dispatch.import_kw.max())
        for segment in segments
        if segment.i_parent < 0 and windows[segment.i_window].series.counts_for_demand
    ]
    less = replace(solution.purchases, demand_kw=max(peaks) - 1.0)
    found = audit_tree(study, feeder, windows, less, segments)
    assert {v.what for _, v in found} == {"purchase above the demand"}
    assert all(segments[position].i_parent < 0 for position, _ in found)

    # One kilowatt more bought in the last period of the last event.
    last = segments[-1]
    import_kw = last.dispatch.import_kw.copy()
    import_kw[-1] += 1.0
    segments[-1] = replace(last, dispatch=replace(last.dispatch, import_kw=import_kw))
    found = audit_tree(study, feeder, windows, solution.purchases, segments)
    assert {position for position, _ in found} == {len(segments) - 1}
    assert "kW not balanced" in {v.what for _, v in found}
