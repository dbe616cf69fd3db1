"""The sweep against a quadratic by hand, a general root finder, and what a feeder cannot carry."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import root

from tests.builders import make_line
from tests.outages.hand_feeders import study_of, tie, town
from tests.outages.random_feeders import random_feeders
from xlplan.network.ac_flow import TOLERANCE_KVA, solve_ac_flow
from xlplan.network.feeder import Feeder, build_feeder
from xlplan.network.linear_flow import flows_and_voltages


def two_buses(r_ohm: float, x_ohm: float, boost_frac: float = 0.0, ends=("S", "A")) -> Feeder:
    line = replace(make_line("L", *ends), r_ohm=r_ohm, x_ohm=x_ohm, boost_frac=boost_frac)
    return build_feeder(study_of([line], base_kv=10.0))


def test_one_line_is_a_quadratic():
    """``u^2 + (2 (r p + x q) - 1) u + (r^2 + x^2)(p^2 + q^2) = 0`` for ``u = v^2``, p.u.

    On 100,000 kVA and 10 kV an ohm is 1 p.u.: r = 2, x = 1, p = 0.04, q = 0.02.
    """
    p, q, r, x = 0.04, 0.02, 2.0, 1.0
    b = 2.0 * (r * p + x * q) - 1.0
    c = (r**2 + x**2) * (p**2 + q**2)
    v_sq = (-b + np.sqrt(b * b - 4.0 * c)) / 2.0
    flow = solve_ac_flow(two_buses(r, x), [True], {0: 1.0}, [0.0, 4000.0], [0.0, 2000.0])
    assert bool(flow.converged)
    assert abs(flow.v_pu[1]) ** 2 == pytest.approx(v_sq, abs=1e-9)
    current_sq = (p * p + q * q) / v_sq
    assert flow.loss_kw[0] == pytest.approx(100_000.0 * r * current_sq, rel=1e-8)
    assert flow.loss_kvar[0] == pytest.approx(100_000.0 * x * current_sq, rel=1e-8)
    assert flow.root_kw[0] == pytest.approx(4000.0 + flow.loss_kw[0], abs=1e-5)
    assert flow.current_kva[0] == pytest.approx(100_000.0 * np.sqrt(current_sq), rel=1e-8)


def test_most_that_a_line_can_carry():
    """Over a resistance alone at most ``v^2 / 4r`` arrives; above that there is no solution."""
    feeder = two_buses(1.0, 0.0)
    limit_kw = 100_000.0 / 4.0
    flow = solve_ac_flow(
        feeder, [True], {0: 1.0}, np.outer([0.98, 1.02, 0.5], [0.0, limit_kw]), np.zeros((3, 2))
    )
    assert flow.converged.tolist() == [True, False, True]
    # Half of the voltage and more is left where there is a solution; no number where there is none.
    assert abs(flow.v_pu[0, 1]) > 0.5
    assert np.isnan(flow.v_pu[1]).all()
    assert np.isnan(flow.from_kw[1, 0])
    assert np.isnan(flow.loss_kw[1, 0])
    assert np.isnan(flow.root_kw[1, 0])
    assert flow.mismatch_kva[1] > TOLERANCE_KVA


@pytest.mark.parametrize("is_reversed", [False, True])
def test_a_boost_is_a_transformer_at_the_start_of_the_line(is_reversed):
    ends = ("A", "S") if is_reversed else ("S", "A")
    feeder = two_buses(1.0, 2.0, 0.05, ends)
    idle = solve_ac_flow(feeder, [True], {0: 1.0}, [0.0, 0.0], [0.0, 0.0])
    assert abs(idle.v_pu[1]) == pytest.approx(1 / 1.05 if is_reversed else 1.05)
    assert idle.root_kw[0] == pytest.approx(0.0, abs=1e-9)
    # Power in is power out and losses, whatever the ratio: the transformer itself loses nothing.
    flow = solve_ac_flow(feeder, [True], {0: 1.0}, [0.0, 2000.0], [0.0, 500.0])
    arriving = flow.from_kw[0] if is_reversed else flow.to_kw[0]
    assert abs(arriving) == pytest.approx(2000.0, abs=1e-5)
    current = abs(2000.0 + 500.0j) / abs(flow.v_pu[1]) / 100_000.0 / (1.05 if is_reversed else 1)
    assert flow.loss_kw[0] == pytest.approx(100_000.0 * 1.0 * current**2, rel=1e-7)


def test_islands_and_dead_buses():
    feeder = build_feeder(town())
    live = np.array([False, False, True, False])
    flow = solve_ac_flow(feeder, live, {3: 1.02}, [0, 100.0, 200.0, 50.0, 0], np.zeros(5))
    assert np.isnan(flow.v_pu[[0, 1, 4]]).all()
    assert abs(flow.v_pu[3]) == pytest.approx(1.02)
    assert flow.from_kw[2] == pytest.approx(-200.0, abs=1e-5)  # C supplies B
    assert flow.root_kw[3] == pytest.approx(-flow.to_kw[2])
    assert flow.from_kw[[0, 1, 3]].tolist() == [0.0, 0.0, 0.0]


def test_a_loop_is_refused():
    feeder = build_feeder(town(tie("T", "C", "D")))
    with pytest.raises(ValueError, match="loop"):
        solve_ac_flow(feeder, np.ones(5, dtype=bool), {0: 1.0}, np.zeros(5), np.zeros(5))


def root_finder_voltages(feeder, line_live, root_v_pu, drawn_kw, drawn_kvar):
    """Complex voltages from the power balance of every bus by MINPACK's hybrid method.

    Written as node equations of the whole network (bus admittances), not along the tree.
    """
    base = 1000.0 * feeder.base_kv**2
    drawn = (drawn_kw + 1j * drawn_kvar) / base
    n = feeder.n_bus
    y = np.zeros((n, n), dtype=complex)
    for i in np.flatnonzero(line_live):
        f, t = feeder.from_bus[i], feeder.to_bus[i]
        series, tap = 1.0 / (feeder.r_ohm[i] + 1j * feeder.x_ohm[i]), 1.0 + feeder.boost_frac[i]
        y[f, f] += series * tap * tap
        y[t, t] += series
        y[f, t] -= series * tap
        y[t, f] -= series * tap
    free = [i for i in range(n) if i not in root_v_pu]

    def voltages(z):
        v = np.zeros(n, dtype=complex)
        for bus, size in root_v_pu.items():
            v[bus] = size
        v[free] = z[: len(free)] + 1j * z[len(free) :]
        return v

    def mismatch(z):
        v = voltages(z)
        off = (v * np.conj(y @ v) + drawn)[free]
        return np.concatenate([off.real, off.imag]) * 1e3

    start = np.concatenate([np.ones(len(free)), np.zeros(len(free))])
    found = root(mismatch, start, method="hybr", tol=1e-13)
    assert np.abs(found.fun).max() < 1e-8
    return voltages(found.x)


@given(random_feeders(), st.integers(0, 2**31), st.sampled_from([0.2, 1.0, 3.0]))
def test_against_a_general_root_finder(study, seed, scale):
    """Random feeders with boosts, infeed and two roots: voltages, flows and losses agree."""
    rng = np.random.default_rng(seed)
    n_line = len(study.lines)
    lines = tuple(
        replace(
            line,
            r_ohm=float(rng.uniform(0.05, 0.6)),
            x_ohm=float(rng.uniform(0.05, 0.6)),
            boost_frac=float(rng.choice([0.0, 0.0, 0.025, -0.05])),
        )
        for line in study.lines
    )
    feeder = build_feeder(replace(study, lines=lines))
    live = ~feeder.normally_open
    roots = {feeder.source: 1.03}
    if n_line > 1:
        # One line is opened, and the part beyond it becomes an island with a root of its own.
        cut = int(rng.choice(np.flatnonzero(live)))
        live = live.copy()
        live[cut] = False
        whole = flows_and_voltages(feeder, live, feeder.source, *np.zeros((2, feeder.n_bus)))
        beyond = np.flatnonzero(np.isnan(whole.v_sq_pu))
        roots[int(rng.choice(beyond))] = 0.98
    kw = scale * rng.uniform(-300.0, 700.0, feeder.n_bus)
    kvar = scale * rng.uniform(-200.0, 300.0, feeder.n_bus)
    flow = solve_ac_flow(feeder, live, roots, kw, kvar)
    assert bool(flow.converged)
    expected = root_finder_voltages(feeder, live, roots, kw, kvar)
    np.testing.assert_allclose(flow.v_pu, expected, atol=1e-8)
    # Losses from the voltages alone: what all buses together inject beyond what is drawn.
    ratio = 1.0 + feeder.boost_frac[live]
    across = expected[feeder.from_bus[live]] * ratio - expected[feeder.to_bus[live]]
    conductance = (1.0 / (feeder.r_ohm + 1j * feeder.x_ohm)).real[live]
    losses = 1000.0 * feeder.base_kv**2 * conductance * np.abs(across) ** 2
    np.testing.assert_allclose(flow.loss_kw[live], losses, atol=1e-3)
    given_kw = sum(flow.root_kw[bus] + kw[bus] for bus in roots)
    assert given_kw == pytest.approx(kw.sum() + losses.sum(), abs=1e-3)


@given(random_feeders(), st.integers(0, 2**31))
def test_periods_together_are_periods_alone(study, seed):
    feeder = build_feeder(study)
    live = ~feeder.normally_open
    kw = np.random.default_rng(seed).uniform(-500.0, 1500.0, (4, feeder.n_bus))
    together = solve_ac_flow(feeder, live, {feeder.source: [1.0, 1.05, 0.95, 1.0]}, kw, 0.3 * kw)
    for i, v_pu in enumerate([1.0, 1.05, 0.95, 1.0]):
        alone = solve_ac_flow(feeder, live, {feeder.source: v_pu}, kw[i], 0.3 * kw[i])
        assert bool(together.converged[i]) == bool(alone.converged)
        np.testing.assert_allclose(together.v_pu[i], alone.v_pu, atol=1e-12)
        np.testing.assert_allclose(together.loss_kw[i], alone.loss_kw, atol=1e-9)
