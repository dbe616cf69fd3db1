"""Published stochastic programs: data and optima are those of validation/stochastic_programs."""

from __future__ import annotations

import numpy as np
import pytest

from tests.solve.graphs import (
    air_conditioner_graph,
    capacity_expansion_graph,
    farmer_graph,
    hydrothermal_graph,
    known_optimum,
)
from xlplan.solve.decomposition import Engine
from xlplan.solve.result import StopReason


def _solve(graph, **options):
    with Engine(graph, seed=1) as engine:
        return engine.run(1e-8, **options)


def _check(result, optimum, half_digit):
    assert result.termination is StopReason.GAP_REACHED
    assert result.cost.mean == pytest.approx(optimum, abs=half_digit)
    assert result.lower_bound == pytest.approx(optimum, abs=half_digit)
    assert result.lower_bound <= result.cost.mean + 1e-6


def test_farmer():
    result = _solve(farmer_graph())
    _check(result, known_optimum("farmer", "RP"), 0.5)
    # Acres 170/80/250 are printed beside the optimum.
    np.testing.assert_allclose(result.x, [170.0, 80.0, 250.0], atol=0.5)


def test_farmer_in_whole_acres():
    # The optimal acres are whole numbers, so asking for whole numbers changes nothing.
    _check(_solve(farmer_graph(is_integer=True)), known_optimum("farmer", "RP"), 0.5)


def test_farmer_with_acres_fixed_to_the_mean_yield_plan():
    # EEV: expected cost of the plan 120/80/300 that is best for mean yields (the same source).
    result = _solve(farmer_graph(), fixed_x=np.array([120.0, 80.0, 300.0]))
    _check(result, known_optimum("farmer", "EEV"), 0.5)


def test_hydrothermal_three_stages():
    _check(_solve(hydrothermal_graph()), known_optimum("hydro-thermal 3-stage", "opt"), 0.005)


def test_capacity_expansion_two_stages():
    optimum = known_optimum("capacity expansion 2-stage (problem 5.2)", "optimum")
    _check(_solve(capacity_expansion_graph()), optimum, 0.005)


def test_air_conditioners():
    optimum = known_optimum("air conditioner 3-stage", "optimum")
    _check(_solve(air_conditioner_graph()), optimum, 0.5)


def test_sampled_chains_agree_with_every_path():
    # The same problem without enumeration: the interval must hold the published optimum.
    result = _solve(hydrothermal_graph(), enumerate_paths=False)
    optimum = known_optimum("hydro-thermal 3-stage", "opt")
    assert result.lower_bound <= optimum + 0.005
    assert result.cost.low - 0.005 <= optimum <= result.cost.high + 0.005
