"""Bounds that gate avoided failures must hold at any purchase."""

from dataclasses import replace

import numpy as np
import pytest

from tests.builders import change_study, random_study
from xlplan.model.dispatch import Purchases
from xlplan.model.tree_bounds import bound_values
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.tree import solve_tree
from xlplan.study.study import Study


def yearly_operation(study: Study, share: float) -> tuple[float, float, float]:
    """Cost of operation at a share of what can be bought, and its two bounds."""
    study = change_study(
        study,
        generators=tuple(
            replace(unit, capital_cost_per_kw=0.0, capital_site_cost=0.0, fixed_om_per_kw=0.0)
            for unit in study.generators
        ),
        storage=tuple(
            replace(
                unit,
                capital_cost_per_kw=0.0,
                capital_cost_per_kwh=0.0,
                capital_site_cost=0.0,
                fixed_om_per_kw=0.0,
            )
            for unit in study.storage
        ),
        measures=(),
        demand_charge_per_kw_year=0.0,
    )
    bought = Purchases(
        generator_kw=share * np.array([unit.max_new_kw for unit in study.generators]),
        storage_kw=share * np.array([unit.max_new_kw for unit in study.storage]),
        storage_kwh=share * np.array([unit.max_new_kwh for unit in study.storage]),
        is_hardened=np.zeros(0, dtype=bool),
    )
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    tree = build_whole_tree(study, feeder, windows, bought)
    cost = solve_tree(tree, reads_segments=False).objective
    low = high = 0.0
    for window in windows:
        bounds = bound_values(study, window)
        low += window.series.occurrences_per_year * bounds.plan_low[0]
        high += window.series.occurrences_per_year * (bounds.plan_high[0] + bounds.trip)
    return low, cost, high


@pytest.mark.parametrize("share", [0.0, 1.0])
@pytest.mark.parametrize("seed", range(12))
def test_cost_lies_between_its_bounds(seed, share):
    low, cost, high = yearly_operation(random_study(seed), share)
    assert low <= cost <= high
