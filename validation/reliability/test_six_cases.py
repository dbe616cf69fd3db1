"""All six cases of the textbook's feeder by the whole program."""

from __future__ import annotations

from validation.comparison import disagreements
from validation.reliability.case import compare


def test_figures() -> None:
    found = compare()
    assert len(found) == 36
    assert disagreements(found) == []
