"""The balanced equivalent gives the means of the published solution, and no more than that."""

from __future__ import annotations

import numpy as np

from validation.comparison import disagreements
from validation.ieee13.case import MAIN, compare, drawn, published, published_phases, solve


def test_figures() -> None:
    found = compare()
    assert len(found) == 8 + 2
    assert disagreements(found) == []


def test_totals_are_those_of_the_data_sheet() -> None:
    kw, kvar = drawn()
    assert kw.sum() == published("spot + distributed load at nominal voltage P")
    capacitors = 700.0
    assert kvar.sum() + capacitors == published("spot + distributed load at nominal voltage Q")


def test_what_it_cannot_reproduce() -> None:
    """Losses come out lower, and no phase is anywhere near what the balanced model says."""
    flow = solve()
    assert bool(flow.converged)
    assert flow.loss_kw.sum() < published("real loss total")
    phases = published_phases()
    spread = max(
        float(np.abs(np.array(phases[node]) - abs(flow.v_pu[i])).max())
        for i, node in enumerate(MAIN)
    )
    assert spread > 0.04
