"""A study small enough for its whole tree, in which storage, a generator and two measures pay."""

from __future__ import annotations

import numpy as np

from tests.builders import (
    change_study,
    make_customer_class,
    make_generator,
    make_measure,
    make_outage_class,
    make_profiles,
    make_storage,
    make_window,
    small_study,
)
from xlplan.compare.plan_solver import PlanSolver, SolveOptions, Wish
from xlplan.compare.standing import StandingAlternatives
from xlplan.model.dispatch import Purchases
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.study.study import Alternative, Device, DeviceChange, FixedPurchase, Sensitivity, Study

GAP = 1e-5


def pack_study(**changes: object) -> Study:
    """``small_study`` with things for sale; outages are frequent and dear."""
    study = small_study(
        outage_classes=(make_outage_class("overhead", 12.0),),
        customer_classes=(
            make_customer_class(
                cost_1h_per_kw=10.0,
                cost_4h_per_kw=40.0,
                cost_8h_per_kw=80.0,
                cost_after_8h_per_kwh=10.0,
            ),
        ),
        storage=(
            make_storage(
                "battery",
                "B",
                capital_cost_per_kw=60.0,
                capital_cost_per_kwh=40.0,
                capital_site_cost=2000.0,
            ),
        ),
        generators=(make_generator("engine", "A", capital_cost_per_kw=700.0, is_outage_only=True),),
        measures=(
            make_measure("wire SA", ("SA",), capital_cost=9000.0, grant_frac=0.2, fixed_om=50.0),
            make_measure("trees SA", ("SA",), capital_cost=2500.0, failures_avoided_frac=0.2),
            make_measure("wire AB", ("AB",), capital_cost=30_000.0),
        ),
        profiles=make_profiles(3, price=np.array([1.0, 1.0, 2.0])),
        windows=(make_window(n_period=3, occurrences_per_year=400.0, price_profile="price"),),
        gap_target_frac=GAP,
    )
    return change_study(study, **changes)


def own_rows() -> dict[str, object]:
    """Alternatives of every kind."""
    return {
        "alternatives": (
            alternative("Small money", capital_budget=6000.0),
            alternative("Battery only", kind="fixed"),
            alternative("Leave it", kind="existing"),
            alternative("Fair weather", ignores_outages=True),
            alternative("No fuse", kind="existing"),
        ),
        "fixed_purchases": (
            FixedPurchase("Battery only", "battery", 50.0, 100.0, True),
            FixedPurchase("Battery only", "trees SA", 0.0, 0.0, True),
            FixedPurchase("Battery only", "wire AB", 0.0, 0.0, False),
        ),
        "device_changes": (DeviceChange("No fuse", "AB", Device.NONE, None, None, 4000.0, 25.0),),
    }


def alternative(name: str, **changes: object) -> Alternative:
    """Optimised under the study's budget unless said otherwise."""
    plain: dict[str, object] = {
        "description": "",
        "kind": "optimise",
        "capital_budget": None,
        "ignores_outages": False,
    }
    return Alternative(alternative=name, **{**plain, **changes})  # type: ignore[arg-type]


def solver(
    study: Study, method: str = "decomposed", gap_frac: float = GAP, **more: object
) -> StandingAlternatives:
    """Solver of a study to a close gap, unless said otherwise."""
    feeder = build_feeder(study)
    options = SolveOptions(method=method, gap_target_frac=gap_frac)
    windows = build_window_models(study, feeder)
    return StandingAlternatives(study, feeder, windows, options, **more)  # type: ignore[arg-type]


def by_tree(
    study: Study, capital_budget: float | None = None, fixed: Purchases | None = None
) -> float:
    """Yearly cost of one plan by the whole tree: another method, one run, no cuts shared."""
    feeder = build_feeder(study)
    options = SolveOptions(method="tree", gap_target_frac=GAP)
    with PlanSolver(study, feeder, build_window_models(study, feeder), options) as one:
        wish = Wish("tree", capital_budget=capital_budget, fixed=fixed, is_brief=True)
        return one.solve_wish(wish).result.costs.total


def sensitivity(parameter: str, low: float, high: float) -> Sensitivity:
    """A row of the Sensitivities sheet."""
    return Sensitivity(parameter, low, high)
