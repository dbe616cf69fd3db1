"""One figure from outside beside the figure found by running the program.

Every published case has a module ``case.py`` with ``TITLE``, ``SOURCE``, ``NOTES`` and
``compare()``. Tests assert what ``compare`` returns, ``validation.report`` writes it down.
"""

from __future__ import annotations

import csv
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path


class Origin(StrEnum):
    """Where an expected value comes from."""

    PUBLISHED = "published"
    RECALLED = "recalled and reproduced"
    CLOSED_FORM = "closed form"
    INDEPENDENT = "independent calculation"
    COMMON_PRACTICE = "common practice"


@dataclass(frozen=True)
class Comparison:
    """Expected and got; ``digits``: decimals that are shown; ``reason``: why this tolerance."""

    quantity: str
    unit: str
    expected: float
    got: float
    tolerance: float
    reason: str
    origin: Origin
    digits: int

    @property
    def agrees(self) -> bool:
        """True if the difference is within the tolerance; a figure that is no number never is."""
        return abs(self.got - self.expected) <= self.tolerance


HALF_DIGIT = "half of the last digit printed"


def half_digit(digits: int) -> float:
    """Half of the last of so many decimals, and a little for its own rounding.

    >>> round(half_digit(4), 6)
    5e-05
    """
    return 0.5 * 10.0**-digits * (1.0 + 1e-6)


def read_rows(folder: Path, name: str) -> list[dict[str, str]]:
    """Rows of a table beside a case."""
    with (folder / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def disagreements(comparisons: list[Comparison]) -> list[str]:
    """What does not agree, in words; empty if all does."""
    return [
        f"{c.quantity}: expected {c.expected:.10g}, got {c.got:.10g} {c.unit}, "
        f"allowed {c.tolerance:.3g}"
        for c in comparisons
        if not c.agrees
    ]
