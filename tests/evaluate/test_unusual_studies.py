"""Both methods on random studies bent in unusual ways, several of them at once.

The whole tree is the other statement of the model: the decomposition's bound lies below its
optimum, the cost of the plan above it, and the two within the gap asked for. Runs with one worker
and with two give the same digits.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from tests.builders import (
    change_study,
    make_generator,
    make_load,
    make_measure,
    make_storage,
    random_study,
)
from xlplan.base.rng import stream
from xlplan.model.study_graph import build_study_graph
from xlplan.model.tree_size import judge_size
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.decomposition import Engine, EngineOptions
from xlplan.solve.tree import solve_tree
from xlplan.study.study import RateBasis, Study

GAP = 1e-4

MOST_COLUMNS = 6_000
"""Larger trees are drawn anew: their solver takes too long here."""

SLACK = 2e-6
"""Tolerances of two solvers, relative to the cost."""


def one_period(study: Study) -> Study:
    """Windows of one period."""
    return change_study(study, windows=tuple(replace(w, n_period=1) for w in study.windows))


def windows_of_all_weights(study: Study) -> Study:
    """Windows once in a thousand years and eight times a day, some without load."""
    first = study.windows[0]
    windows = tuple(
        replace(
            first,
            window=f"window {i}",
            n_period=max(1, first.n_period - i),
            occurrences_per_year=occurrences,
            load_multiplier=load,
            counts_for_demand=i != 1,
        )
        for i, (occurrences, load) in enumerate(((0.001, 1.7), (3000.0, 1.0), (30.0, 0.0)))
    )
    return change_study(study, windows=windows)


def a_kilowatt_beside_ten_megawatt(study: Study) -> Study:
    """One load of 10 MW, the others of 1 kW; the lines as much stronger."""
    first, *others = study.loads
    factor = 10_000.0 / first.peak_kw
    loads = (replace(first, peak_kw=10_000.0), *(replace(x, peak_kw=1.0) for x in others))
    if not others:
        loads += (make_load("small", study.buses[-1].bus, 1.0, customer_class="shops"),)
    lines = tuple(
        replace(
            line,
            r_ohm=line.r_ohm / factor,
            x_ohm=line.x_ohm / factor,
            rating_kva=line.rating_kva * factor,
        )
        for line in study.lines
    )
    return change_study(study, loads=loads, lines=lines, substation_limit_kva=20_000.0)


def failures_often(study: Study) -> Study:
    """So many failures that plans are hardly ever carried out to their end."""
    classes = tuple(
        replace(
            c,
            failures_per_year=20.0 * c.failures_per_year,
            failures_per_length_year=20.0 * c.failures_per_length_year,
        )
        for c in study.outage_classes
    )
    return change_study(study, outage_classes=classes, rate_basis=RateBasis.FAIR_WEATHER)


def no_failures(study: Study) -> Study:
    """Nothing fails."""
    classes = tuple(
        replace(c, failures_per_year=0.0, failures_per_length_year=0.0)
        for c in study.outage_classes
    )
    return change_study(study, outage_classes=classes)


def long_repairs(study: Study) -> Study:
    """Repairs that take several times as long as any window."""
    repair_h = 20.0 * study.settings.period_h
    classes = tuple(replace(c, repair_h=repair_h) for c in study.outage_classes)
    return change_study(study, outage_classes=classes)


def nothing_to_spend(study: Study) -> Study:
    return change_study(study, capital_budget=0.0)


def no_candidates(study: Study) -> Study:
    return change_study(
        study,
        measures=(),
        generators=tuple(replace(g, max_new_kw=0.0) for g in study.generators),
        storage=tuple(replace(s, max_new_kw=0.0, max_new_kwh=0.0) for s in study.storage),
    )


def energy_for_nothing(study: Study) -> Study:
    return change_study(study, energy_price_per_kwh=0.0, export_price_per_kwh=None)


def a_high_demand_charge(study: Study) -> Study:
    return change_study(study, demand_charge_per_kw_year=2000.0)


def bad_outcomes_weigh(study: Study) -> Study:
    return change_study(study, risk_weight_frac=0.7, risk_tail_frac=0.05)


def stores_of_three_kinds(study: Study) -> Study:
    """Without losses, with a curve, and one that may never be used below full charge."""
    bus = study.buses[-1].bus
    curve = ((-0.85, -1.0), (-0.45, -0.5), (0.0, 0.0), (0.5, 0.45), (1.15, 0.98))
    straight = ((-1.0, -1.0), (0.0, 0.0), (1.0, 1.0))
    stores = (
        make_storage("lossless", bus, existing_kw=50.0, existing_kwh=80.0, curve=straight),
        make_storage("curved", study.buses[1].bus, capital_site_cost=4000.0, curve=curve),
        make_storage("full", bus, max_new_kw=0.001, min_soc_frac=1.0, start_soc_frac=1.0),
    )
    windows = tuple(replace(w, start_soc_frac=None) for w in study.windows)
    return change_study(study, storage=(*study.storage, *stores), windows=windows)


def a_slow_generator_and_rival_measures(study: Study) -> Study:
    """A ramp-limited unit that never starts at once, and two measures for one line."""
    unit = make_generator(
        "slow",
        study.buses[-1].bus,
        existing_kw=60.0,
        ramp_frac_per_period=0.2,
        tank_h=study.settings.period_h,
        refill_frac_per_h=0.0,
        start_failure_frac=0.5,
    )
    line = next(x.line for x in study.lines if x.outage_class and not x.normally_open)
    measures = (
        make_measure("half", (line,), capital_cost=8000.0, failures_avoided_frac=0.5),
        make_measure("all", (line,), capital_cost=20_000.0, failures_avoided_frac=1.0),
    )
    return change_study(study, generators=(*study.generators, unit), measures=measures)


BENDS: tuple[Callable[[Study], Study], ...] = (
    one_period,
    windows_of_all_weights,
    a_kilowatt_beside_ten_megawatt,
    failures_often,
    no_failures,
    long_repairs,
    nothing_to_spend,
    no_candidates,
    energy_for_nothing,
    a_high_demand_charge,
    bad_outcomes_weigh,
    stores_of_three_kinds,
    a_slow_generator_and_rival_measures,
)


def bent(seed: int) -> Study:
    """A random study bent by this seed's bend and two others, the first whose tree is small."""
    rng = stream(seed, "unusual study")
    while True:
        study = random_study(int(rng.integers(1_000_000)), n_period=2)
        others = rng.permutation(len(BENDS))[:2].tolist()
        for i in dict.fromkeys([seed % len(BENDS), *others]):
            study = BENDS[i](study)
        windows = build_window_models(study, build_feeder(study))
        if judge_size(study, windows).n_column <= MOST_COLUMNS:
            return study


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(3 * len(BENDS)))
def test_bound_optimum_and_cost_of_unusual_studies(seed):
    study = bent(seed)
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    reference = solve_tree(build_whole_tree(study, feeder, windows))
    assert reference.has_plan
    optimum, slack = reference.objective, SLACK * (1.0 + abs(reference.objective))
    graph = build_study_graph(study, feeder, windows).graph
    with Engine(graph, seed=1) as engine:
        found = engine.run(GAP, enumerate_paths=True)
    assert found.lower_bound <= optimum + slack
    assert found.cost.mean >= reference.bound - slack
    assert found.cost.mean <= optimum + GAP * abs(optimum) + slack
    assert found.gap_frac <= GAP
    # Parts of the events at a time, sampled histories: the same digits whoever solves.
    options = EngineOptions(small_exits=2, stride=3)
    results = []
    for workers in (1, 2):
        with Engine(graph, seed=3, workers=workers, options=options) as engine:
            results.append(engine.run(5e-3, enumerate_paths=False))
    one, two = results
    assert one.lower_bound == two.lower_bound
    assert one.cost == two.cost
    np.testing.assert_array_equal(one.x, two.x)
    assert one.lower_bound <= optimum + slack
