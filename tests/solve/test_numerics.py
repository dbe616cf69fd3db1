"""Studies whose numbers lie many powers of ten apart are solved like any others."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.builders import (
    change_study,
    make_bus,
    make_customer_class,
    make_generator,
    make_line,
    make_load,
    make_measure,
    make_outage_class,
    make_profiles,
    make_storage,
    make_window,
    random_study,
    small_study,
)
from xlplan.base.units import HOURS_PER_YEAR
from xlplan.model.study_graph import build_study_graph
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.decomposition import Engine, EngineOptions
from xlplan.solve.tree import solve_tree
from xlplan.study.study import Device


def far_apart_study():
    """1 kW beside 10 MW, 1e-4 ohm beside 5 ohm, 0.01 beside 1e5 per kWh."""
    return small_study(
        buses=(make_bus("S"), make_bus("A"), make_bus("B"), make_bus("C")),
        loads=(
            make_load("LA", "A", peak_kw=10_000.0, power_factor=0.95),
            make_load("LB", "B", peak_kw=1.0, customer_class="ward", customers=1.0),
            make_load("LC", "C", peak_kw=40.0, customer_class="pumps"),
        ),
        lines=(
            make_line("SA", "S", "A", r_ohm=1e-4, x_ohm=1e-4, rating_kva=20_000.0),
            make_line("AB", "A", "B", r_ohm=5.0, x_ohm=3.0, from_device=Device.FUSE,
                      rating_kva=500.0),
            make_line("AC", "A", "C", r_ohm=1e-4, x_ohm=0.2, from_device=Device.RECLOSER),
        ),
        generators=(make_generator("unit", "B", max_new_kw=5.0, ramp_frac_per_period=0.5),),
        storage=(make_storage("battery", "A", max_new_kw=3000.0, max_new_kwh=12_000.0),
                 make_storage("cell", "B", max_new_kw=1.0, max_new_kwh=2.0)),
        outage_classes=(make_outage_class("overhead", 40.0, repair_h=2.0),),
        customer_classes=(
            make_customer_class("homes"),
            make_customer_class("ward", is_critical=True, cost_0h_per_kw=1e3, cost_1h_per_kw=1e5,
                                cost_4h_per_kw=4e5, cost_8h_per_kw=8e5, cost_after_8h_per_kwh=1e5),
            make_customer_class("pumps", cost_1h_per_kw=0.02, cost_4h_per_kw=0.08,
                                cost_8h_per_kw=0.16, cost_after_8h_per_kwh=0.02),
        ),
        profiles=make_profiles(6, flat=[1.0, 0.9, 0.8, 1.0, 0.7, 0.6]),
        windows=(make_window(n_period=6),),
        energy_price_per_kwh=0.01,
        substation_limit_kva=30_000.0,
    )  # fmt: skip


def solved(study, gap=1e-3, n_pass=1000):
    """(decomposition, tree, counted events) of a study."""
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    graph = build_study_graph(study, feeder, windows).graph
    with Engine(graph, seed=1, options=EngineOptions(n_pass=n_pass)) as engine:
        found = engine.run(gap, enumerate_paths=True)
        counts = engine.counts()
    return found, solve_tree(build_whole_tree(study, feeder, windows)), counts


def test_numbers_far_apart_give_the_same_by_both_methods():
    found, tree, counts = solved(far_apart_study())
    assert found.gap_frac <= 1e-3
    assert found.cost.mean == pytest.approx(tree.objective, rel=1e-3)
    assert found.lower_bound <= tree.objective * (1.0 + 1e-6)
    assert counts.get("failed node", 0) == 0


def in_money(records, factor, *names):
    """Records with some of their amounts in another money."""
    return tuple(
        replace(one, **{name: getattr(one, name) * factor for name in names}) for one in records
    )


@pytest.mark.parametrize("factor", [1e-3, 1e3])
@pytest.mark.parametrize("seed", [3, 8])
def test_the_same_study_in_other_money_is_the_same_plan(seed, factor):
    study = random_study(seed, n_period=3)
    found, *_ = solved(study)
    scaled = change_study(
        study,
        customer_classes=in_money(
            study.customer_classes, factor, "cost_0h_per_kw", "cost_1h_per_kw", "cost_4h_per_kw",
            "cost_8h_per_kw", "cost_after_8h_per_kwh",
        ),
        generators=in_money(
            study.generators, factor, "capital_cost_per_kw", "capital_site_cost",
            "fixed_om_per_kw", "running_cost_per_kwh",
        ),
        storage=in_money(
            study.storage, factor, "capital_cost_per_kw", "capital_cost_per_kwh",
            "capital_site_cost", "fixed_om_per_kw",
        ),
        measures=in_money(study.measures, factor, "capital_cost", "fixed_om"),
        outage_classes=in_money(study.outage_classes, factor, "repair_cost_per_failure"),
        **{
            name: getattr(study.settings, name) * factor
            for name in ("energy_price_per_kwh", "demand_charge_per_kw_year",
                         "surplus_cost_per_kwh", "export_price_per_kwh", "capital_budget",
                         "stored_energy_price_per_kwh")
            if getattr(study.settings, name) is not None
        },
    )  # fmt: skip
    other, *_ = solved(scaled)
    assert other.cost.mean == pytest.approx(found.cost.mean * factor, rel=2e-3)
    assert np.isfinite(other.lower_bound)


def rare_plans_study(expected):
    """S - A - B, two windows with storage and a generator with a memory; so many failures each."""
    rate = expected / 2 / (4 / HOURS_PER_YEAR)
    return small_study(
        outage_classes=(make_outage_class("overhead", rate, repair_h=1.0),),
        generators=(make_generator("unit", "B", ramp_frac_per_period=0.5, tank_h=2.0),),
        storage=(make_storage("battery", "A", max_new_kw=150.0, max_new_kwh=300.0),),
        measures=(make_measure("trees", ("AB",), capital_cost=30_000.0),),
        demand_charge_per_kw_year=50.0,
        windows=(make_window(), make_window("night", occurrences_per_year=20.0)),
    )


@pytest.mark.parametrize("expected", [20.0, 70.0])
def test_plans_that_are_hardly_ever_reached_without_a_failure(expected):
    # No failure in the first hour has a chance of exp(-5) or exp(-17), none in three of exp(-15) or
    # exp(-52); but plans made after a repair begin there, and then cost as much as any other.
    found, tree, counts = solved(rare_plans_study(expected), 1e-4, n_pass=30)
    assert found.gap_frac <= 1e-4
    assert found.cost.mean == pytest.approx(tree.objective, rel=1e-4)
    assert found.lower_bound <= tree.objective * (1.0 + 1e-6)
    assert counts.get("cut not tight", 0) == 0
