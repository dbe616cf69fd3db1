"""Equal shares among loads that cost the same to shed, worked out by hand.

One line feeds bus A, a second goes on to B. The first line fails; a neighbour supply of 60 kW at A
carries what it can of two loads of 60 kW (A) and 40 kW (B): 40 kW are short in each hour, so each
load is shed 40 / 100 of itself, whichever the solver picked.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.builders import (
    make_bus,
    make_customer_class,
    make_line,
    make_load,
    make_outage_class,
    make_profiles,
    make_supply,
    make_window,
    random_study,
    small_study,
)
from xlplan.evaluate.follow_plan import Follower
from xlplan.evaluate.meters import attach_meters
from xlplan.model.study_graph import build_study_graph
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.decomposition import Engine
from xlplan.study.study import Device, LoadControl


def short_of_supply(**changes):
    """The feeder of the module's docstring, one failure a year, two hours of repair."""
    return small_study(
        buses=(make_bus("S"), make_bus("A"), make_bus("B")),
        lines=(
            make_line("L1", "S", "A", to_device=Device.SWITCH),
            make_line("L2", "A", "B", from_device=Device.SWITCH, outage_class=None),
        ),
        loads=(make_load("LA", "A", 60.0), make_load("LB", "B", 40.0)),
        supplies=(make_supply("N", "A", 60.0),),
        generators=(),
        storage=(),
        measures=(),
        customer_classes=(make_customer_class(), make_customer_class("shops")),
        outage_classes=(make_outage_class("overhead", 1.0),),
        profiles=make_profiles(4),
        windows=(make_window(n_period=4, counts_for_demand=False),),
        **{"load_control": LoadControl.BUS, **changes},
    )


def followed(study):
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    graph = build_study_graph(study, feeder, windows)
    attach_meters(graph, windows)
    engine = Engine(graph.graph, seed=1)
    found = engine.run(1e-6)
    follower = Follower(graph, windows, engine, lambda *_: 0.0)
    return follower.follow(found.capacities[0], 10, 1), found


@pytest.mark.parametrize("control", list(LoadControl))
def test_loads_of_one_class_share_what_is_missing(control):
    result, _ = followed(short_of_supply(load_control=control))
    window = result.windows[0]
    ens = window.events[:, 0, result.slots.per_load("ens_kwh")]
    hours = window.events[:, 0, result.slots.per_load("hours")]
    # Two hours of 24 of 60 kW, and of 16 of 40 kW; each a share of 0.4 for two hours.
    np.testing.assert_allclose(ens, np.tile([48.0, 32.0], (4, 1)), atol=1e-6)
    np.testing.assert_allclose(hours, np.full((4, 2), 0.8), atol=1e-6)


def test_a_dearer_class_is_shed_last():
    dear = make_customer_class("shops", cost_1h_per_kw=20.0, cost_4h_per_kw=80.0,
                               cost_8h_per_kw=160.0, cost_after_8h_per_kwh=20.0)  # fmt: skip
    study = short_of_supply()
    loads = (study.loads[0], make_load("LB", "B", 40.0, customer_class="shops"))

    study = replace(study, loads=loads, customer_classes=(study.customer_classes[0], dear))
    result, _ = followed(study)
    ens = result.windows[0].events[:, 0, result.slots.per_load("ens_kwh")]
    np.testing.assert_allclose(ens, np.tile([80.0, 0.0], (4, 1)), atol=1e-6)


@pytest.mark.parametrize("seed", [2, 5, 9, 16])
def test_spreading_moves_no_cost(seed):
    result, _ = followed(random_study(seed))
    for window in result.windows:
        repriced = float((window.first_chance * result.slots.cost(window.events)).sum())
        assert repriced == pytest.approx(window.solver_event_cost, rel=1e-7, abs=1e-6)
