"""Losses, voltages and flows of the 33-bus feeder, alone and through the whole program."""

from __future__ import annotations

from validation.baran_wu_33.case import compare, feeder_of, run_program, solve
from validation.comparison import disagreements


def test_figures() -> None:
    found = compare()
    assert len(found) == 16
    assert disagreements(found) == []


def test_converged() -> None:
    assert bool(solve(feeder_of()).converged)
    assert all(row["periods_not_converged"] == 0 for row in run_program()["voltages"])


def test_the_misprint_would_be_seen() -> None:
    """The comparison tells the right data from the misprint: 8 kW apart, 0.01 kW allowed."""
    right, wrong = solve(feeder_of()), solve(feeder_of(has_misprint=True))
    assert abs(right.loss_kw.sum() - wrong.loss_kw.sum()) > 8.0
