"""Optima as printed."""

from __future__ import annotations

from validation.comparison import disagreements
from validation.stochastic_programs.case import compare


def test_figures() -> None:
    found = compare()
    assert len(found) == 2 * 9 + 3 + 3 + 4 + 2 + 2
    assert disagreements(found) == []
