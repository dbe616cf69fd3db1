"""Numbers that follow the window's rows: written at once, or by member of a family.

The period builder says "this bound is the load series"; where the rows are fixed (a plan of the
whole window) the number is written into the program, where they shift with the member (an outage
event that may begin in any period) it is recorded and looked up later.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from xlplan.model.linear_program import ProgramBuilder

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

TARGETS = ("cost", "col_lower", "col_upper", "row_lower", "row_upper", "value")
MEMBER = -1
"""Row offset that reads a series by the member itself (the period of the failure)."""


class Numbers:
    """Sink for numbers of one period."""

    def put(self, target: str, position: int, series: FloatArray, offset: int) -> None:
        """``target[position]`` is ``series`` at the window row of the period ``offset``."""
        raise NotImplementedError


@dataclass
class FixedNumbers(Numbers):
    """Period ``offset`` is window row ``offset``: numbers are written into the builder."""

    builder: ProgramBuilder

    def put(self, target: str, position: int, series: FloatArray, offset: int) -> None:
        """See ``Numbers``."""
        getattr(self.builder, target)[position] = float(series[offset])


@dataclass
class ShiftingNumbers(Numbers):
    """Member ``k`` reads row ``(k + 1 + offset) mod n``: numbers are recorded."""

    entries: dict[str, list[tuple[int, int, int]]] = field(
        default_factory=lambda: {target: [] for target in TARGETS}
    )
    series: list[FloatArray] = field(default_factory=list)
    known: dict[bytes, int] = field(default_factory=dict)

    def put(self, target: str, position: int, series: FloatArray, offset: int) -> None:
        """See ``Numbers``."""
        key = np.ascontiguousarray(series, dtype=float).tobytes()
        if key not in self.known:
            self.known[key] = len(self.series)
            self.series.append(np.array(series, dtype=float))
        self.entries[target].append((position, self.known[key], offset))

    def table(self) -> ShiftTable:
        """The recorded numbers as arrays."""
        columns = {}
        for target, entries in self.entries.items():
            block = np.array(entries, dtype=np.int64).reshape(-1, 3)
            columns[target] = (block[:, 0].copy(), block[:, 1].copy(), block[:, 2].copy())
        series = np.array(self.series) if self.series else np.zeros((0, 1))
        return ShiftTable(series=series, entries=columns)


@dataclass(frozen=True)
class ShiftTable:
    """Recorded numbers: for each target positions, series and row offsets."""

    series: FloatArray
    entries: dict[str, tuple[IntArray, IntArray, IntArray]]

    def look_up(self, target: str, i_member: int) -> tuple[IntArray, FloatArray]:
        """Positions of a target that vary, and their values for one member."""
        position, series, offset = self.entries[target]
        rows = (i_member + 1 + offset) % self.series.shape[1]
        return position, self.series[series, rows]
