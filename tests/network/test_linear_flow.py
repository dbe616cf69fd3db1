"""Lossless flows and voltages by hand, and the load below each line on random feeders."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.builders import make_line
from tests.outages.hand_feeders import study_of, tie, town
from tests.outages.random_feeders import random_feeders
from xlplan.network.feeder import build_feeder
from xlplan.network.linear_flow import flows_and_voltages
from xlplan.network.topology import connected_parts

KW = [0.0, 100.0, 200.0, 50.0, -30.0]  # drawn at S A B C D; D feeds in
KVAR = [0.0, 40.0, 60.0, 0.0, 10.0]


def test_flows_and_voltages_by_hand():
    # 10 kV, r = x = 0.1 ohm: each kW or kvar drops 2 * 0.1 / (1000 * 100) = 2e-6 of v squared.
    feeder = build_feeder(town(base_kv=10.0))
    flow = flows_and_voltages(feeder, ~feeder.normally_open, 0, KW, KVAR)
    assert flow.flow_kw == pytest.approx([320.0, 250.0, 50.0, -30.0])
    assert flow.flow_kvar == pytest.approx([110.0, 60.0, 0.0, 10.0])
    v_a = 1.0 - 2e-6 * 430
    v_b = v_a - 2e-6 * 310
    expected = [1.0, v_a, v_b, v_b - 2e-6 * 50, v_a + 2e-6 * 20]
    assert flow.v_sq_pu == pytest.approx(expected, abs=1e-12)


def test_a_line_drawn_towards_the_source_carries_the_opposite_sign():
    study = study_of([make_line("L1", "S", "A"), make_line("L2", "B", "A")])
    feeder = build_feeder(study)
    flow = flows_and_voltages(feeder, ~feeder.normally_open, 0, [0, 0, 10.0], [0, 0, 0])
    assert flow.flow_kw.tolist() == [10.0, -10.0]
    assert flow.v_sq_pu == pytest.approx([1.0, 1.0 - 2e-5, 1.0 - 4e-5], abs=1e-12)


@pytest.mark.parametrize("is_reversed", [False, True])
def test_a_boost_acts_at_the_start_of_the_line(is_reversed):
    # v_j = (1 + boost)^2 v_i - drop from i to j. Fed from j, v_i = (v_j + drop) / (1 + boost)^2,
    # where the drop is negative: 100 kW flow from j to i.
    ends = ("A", "S") if is_reversed else ("S", "A")
    line = replace(make_line("L", *ends), boost_frac=0.05)
    feeder = build_feeder(study_of([line]))
    flow = flows_and_voltages(feeder, ~feeder.normally_open, 0, [0.0, 100.0], [0.0, 0.0])
    expected = (1.0 - 2e-4) / 1.05**2 if is_reversed else 1.05**2 - 2e-4
    assert flow.v_sq_pu[1] == pytest.approx(expected, abs=1e-12)


def test_islands_have_roots_of_their_own_and_dead_buses_none():
    feeder = build_feeder(town())
    live = np.array([False, False, True, False])
    flow = flows_and_voltages(feeder, live, {3: 1.02}, KW, KVAR)
    assert flow.flow_kw.tolist() == [0.0, 0.0, -200.0, 0.0]  # C supplies B
    assert flow.v_sq_pu[2:4] == pytest.approx([1.02 - 2e-6 * 260, 1.02])
    assert np.isnan(flow.v_sq_pu[[0, 1, 4]]).all()


def test_periods_at_once():
    feeder = build_feeder(town())
    kw = np.outer([1.0, 0.5, 0.0], KW)
    kvar = np.outer([1.0, 0.5, 0.0], KVAR)
    live = ~feeder.normally_open
    together = flows_and_voltages(feeder, live, {0: [1.0, 1.1, 1.2]}, kw, kvar)
    assert together.flow_kw.shape == (3, 4)
    assert together.flow_kw[1] == pytest.approx([160.0, 125.0, 25.0, -15.0])
    assert together.v_sq_pu[:, 0].tolist() == [1.0, 1.1, 1.2]
    assert together.v_sq_pu[2].tolist() == [1.2] * 5


def test_a_loop_is_refused():
    feeder = build_feeder(town(tie("T", "C", "D")))
    with pytest.raises(ValueError, match="loop"):
        flows_and_voltages(feeder, np.ones(5, dtype=bool), 0, KW, KVAR)


@given(random_feeders(), st.integers(0, 2**31))
def test_flow_into_a_bus_is_what_is_drawn_below_it(study, seed):
    """Taking a line out leaves the buses below it without the source: their sum is its flow."""
    feeder = build_feeder(study)
    kw = np.random.default_rng(seed).normal(size=feeder.n_bus)
    closed = ~feeder.normally_open
    flow = flows_and_voltages(feeder, closed, feeder.source, kw, 2.0 * kw)
    everywhere = np.ones(feeder.n_bus, dtype=bool)
    for i_line in np.flatnonzero(closed):
        without = closed.copy()
        without[i_line] = False
        part = connected_parts(feeder, without, everywhere)
        below = part != part[feeder.source]
        sign = 1.0 if below[feeder.to_bus[i_line]] else -1.0
        assert flow.flow_kw[i_line] == pytest.approx(sign * kw[below].sum(), abs=1e-9)
        assert flow.flow_kvar[i_line] == pytest.approx(sign * 2.0 * kw[below].sum(), abs=1e-9)
