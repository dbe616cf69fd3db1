"""The handbook's factors."""

from __future__ import annotations

from validation.comparison import disagreements
from validation.economics.case import compare


def test_figures() -> None:
    found = compare()
    assert len(found) == 12
    assert disagreements(found) == []
