"""The plan ignoring outages: of equal optima the one with the most stored energy, and feasible."""

from __future__ import annotations

import numpy as np

from tests.builders import (
    make_bus,
    make_line,
    make_load,
    make_outage_class,
    make_profiles,
    make_storage,
    make_window,
    small_study,
)
from xlplan.evaluate.audit import audit_dispatch
from xlplan.evaluate.follow_plan import Follower
from xlplan.evaluate.meters import attach_meters, read_dispatch
from xlplan.evaluate.purchases import read_purchases
from xlplan.evaluate.violations import capacities_in_service, start_of_window
from xlplan.model.study_graph import build_study_graph
from xlplan.network.feeder import build_feeder
from xlplan.outages.sections import build_sections
from xlplan.outages.window_model import build_window_models
from xlplan.solve.decomposition import Engine


def test_equal_optima_hold_the_most_energy_within_every_limit():
    """Flat prices and a lossless store that exists: filling and emptying it costs nothing.

    An existing store of 100 kW and 400 kWh starts half full, at 200 kWh. Energy left above that at
    the end earns nothing (no sale), so every optimum ends at 200 kWh. It can be given back only
    through the load of 60 kW; read backwards from the end the most stored energy is 200, 260, 320,
    380, and forwards from the start 300, 400 with 100 kW of charging.
    """
    study = small_study(
        buses=(make_bus("S"), make_bus("A")),
        lines=(make_line("L1", "S", "A"),),
        loads=(make_load("LA", "A", 60.0),),
        generators=(),
        storage=(
            make_storage(
                "B",
                "A",
                existing_kw=100.0,
                existing_kwh=400.0,
                max_new_kw=0.0,
                max_new_kwh=0.0,
                curve=((-1.0, -1.0), (0.0, 0.0), (1.0, 1.0)),
                start_soc_frac=0.5,
                outage_class=None,
            ),
        ),
        measures=(),
        outage_classes=(make_outage_class("overhead", 1.0),),
        profiles=make_profiles(6),
        windows=(make_window(n_period=6),),
    )
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    graph = build_study_graph(study, feeder, windows, plans_for_outages=False)
    attach_meters(graph, windows)
    engine = Engine(graph.graph, seed=1)
    found = engine.run(1e-6)
    capacity = found.capacities[0]
    follower = Follower(graph, windows, engine, lambda *_: 0.0, breaks_ties_by_energy=True)
    root = graph.graph.roots[0]
    state = root.state_matrix @ capacity + root.state_offset
    request = follower.plan_request(0, 0, state, capacity)
    dispatch = engine.solve_nodes([request], read_dispatch)[0].measured
    expected = [300.0, 400.0, 380.0, 320.0, 260.0, 200.0]
    np.testing.assert_allclose(dispatch.energy_kwh[:, 0], expected, atol=1e-4)

    bought = read_purchases(graph.first_stage, found.x)
    capacities = capacities_in_service(study, bought)
    series = windows[0].series
    broken = audit_dispatch(
        study,
        feeder,
        build_sections(feeder).section_of_bus,
        series,
        [windows[0].normal] * series.n_period,
        dispatch,
        capacities,
        start_of_window(study, capacities, series.start_soc_frac),
        0,
        False,
    )
    assert [violation.text() for violation in broken] == []
