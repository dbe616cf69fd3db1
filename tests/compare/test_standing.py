"""The standing alternatives against each other."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.builders import random_study
from xlplan.base.names import EXISTING, IGNORING_OUTAGES, LEAST_COST
from xlplan.compare import standing
from xlplan.compare.standing import SolvedPlan, SolveOptions, StandingAlternatives, choose_method
from xlplan.model.tree_size import TreeFit, TreeSize
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models


def solver(seed: int, **options: object) -> StandingAlternatives:
    study = random_study(seed)
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    return StandingAlternatives(
        study,
        feeder,
        windows,
        SolveOptions(**{"method": "decomposed", **options}),  # type: ignore[arg-type]
    )


@pytest.mark.parametrize("seed", [0, 3, 8, 14])
def test_least_cost_is_least(seed):
    """Buying nothing and buying for normal service are among the plans that it may choose."""
    plans = {p.result.name: p.result for p in solver(seed, gap_target_frac=1e-4).solve()}
    best = plans[LEAST_COST]
    for name in (EXISTING, IGNORING_OUTAGES):
        assert best.costs.total <= plans[name].costs.total + standing.CENT
        assert best.lower_bound <= plans[name].costs.total + standing.CENT
    assert plans[EXISTING].difference == 0.0
    assert best.difference == pytest.approx(best.costs.total - plans[EXISTING].costs.total)
    assert all(not p.is_bought for p in plans[EXISTING].purchases)


def test_cheaper_purchases_of_another_plan_are_taken(monkeypatch):
    """A search that stops at poor purchases is put right by the plan that turned out cheaper."""
    alternatives = solver(3, gap_target_frac=1e-4)
    good = alternatives._optimise(LEAST_COST)
    poor = alternatives._optimise(EXISTING)
    assert good.result.costs.total < poor.result.costs.total - 1.0
    named = replace(poor, result=replace(poor.result, name=LEAST_COST))
    tried = alternatives._try_purchases(named, good)
    assert isinstance(tried, SolvedPlan)
    assert tried.result.costs.total == pytest.approx(good.result.costs.total, rel=1e-4)
    bought = [p.is_bought for p in tried.result.purchases]
    assert bought == [p.is_bought for p in good.result.purchases]
    assert np.isfinite(tried.result.gap_frac)


def test_method_is_chosen_by_size_and_says_why():
    small = TreeFit(TreeSize(10, 20), 300, True, "the tree is small")
    large = TreeFit(TreeSize(10**9, 10**9), 10**12, False, "the tree is large")
    assert choose_method("auto", small) == ("tree", "The tree is small.")
    assert choose_method("auto", large) == ("decomposed", "The tree is large.")
    assert choose_method("decomposed", small)[0] == "decomposed"
    assert choose_method("tree", small)[0] == "tree"
    with pytest.raises(standing.NoPlanError, match="--method decomposed"):
        choose_method("tree", large)
