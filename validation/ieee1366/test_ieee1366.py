"""The guide's sample year."""

from __future__ import annotations

from validation.comparison import disagreements
from validation.ieee1366.case import compare


def test_figures() -> None:
    found = compare()
    assert len(found) == 5
    assert disagreements(found) == []
