"""The decision made once: a program over ``x`` with the roots' cuts, LP first, then MILP.

``phi_r >= cut`` for every cut of a root's value, written in ``x`` through the root's maps
``c = capacity_matrix x + capacity_offset`` and ``s = state_matrix c + state_offset``. The optimum
is a lower bound of the whole problem; of a MILP it is the proven dual bound, not the incumbent.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.model.linear_program import LinearProgram
from xlplan.model.value_graph import Root, ValueGraph
from xlplan.solve.cut_pool import CutPool
from xlplan.solve.highs import KeptModel, solve_program
from xlplan.solve.tables import GraphTables

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class FirstStagePlan:
    """A decision: ``x`` (n_x,), what it costs itself, the roots' values as the cuts know them.

    bound : proven lower bound of the whole problem within the bounds of ``x`` that were asked for
    """

    x: FloatArray
    cost: float
    phi: FloatArray
    bound: float


def capacities_of(root: Root, x: FloatArray, lower: FloatArray, upper: FloatArray) -> FloatArray:
    """Capacities in service at a root, clipped into their box, (n_capacity,)."""
    capacity = root.capacity_matrix @ x + root.capacity_offset
    clipped: FloatArray = np.clip(capacity, lower, upper)
    # A binary or a step that the solver left off by its tolerance is put on the whole number.
    near = np.round(clipped)
    return np.where(np.abs(clipped - near) <= 1e-9 * (1.0 + np.abs(near)), near, clipped)


def state_of(root: Root, capacity: FloatArray) -> FloatArray:
    """Initial state at a root, (n_state,)."""
    state: FloatArray = root.state_matrix @ capacity + root.state_offset
    return state


class FirstStage:
    """Keeps the program over ``x`` and its cuts. ``sync`` takes new cuts from the pools."""

    def __init__(self, graph: ValueGraph, tables: GraphTables) -> None:
        self.graph = graph
        program = graph.first_stage
        self.program, self.n_x = program, program.n_col
        self.n_root = len(graph.roots)
        self._phi_lower = np.array(
            [tables.families[r.family].value_lower[r.member] for r in graph.roots]
        )
        self._weight = np.array([r.weight for r in graph.roots])
        self._n_seen = [0] * self.n_root
        self._cut_root: list[int] = []
        self._cut_constant: list[float] = []
        self._cut_slope: list[FloatArray] = []
        self._model = KeptModel(
            "first stage",
            np.concatenate([program.cost, self._weight]),
            np.concatenate([program.col_lower, self._phi_lower]),
            np.concatenate([program.col_upper, np.full(self.n_root, np.inf)]),
            program.row_lower,
            program.row_upper,
            program.start,
            program.index,
            program.value,
        )
        self.lower, self.upper = program.col_lower.copy(), program.col_upper.copy()
        self._start_point: FloatArray | None = None

    @property
    def has_integers(self) -> bool:
        """Whether a column that is still free must be a whole number."""
        return bool((self.program.is_integer & (self.lower < self.upper)).any())

    def set_bounds(self, lower: FloatArray, upper: FloatArray) -> None:
        """New bounds of ``x``, inside those of the graph."""
        self.lower = np.maximum(lower, self.program.col_lower)
        self.upper = np.minimum(upper, self.program.col_upper)
        if (self.lower > self.upper).any():
            column = int(np.argmax(self.lower - self.upper))
            raise ValueError(f"no value of first stage column {column} is within its bounds")
        self._model.set_col_bounds(np.arange(self.n_x), self.lower, self.upper)
        self._start_point = None

    def sync(self, pools: list[CutPool]) -> int:
        """Takes the roots' new cuts; their number."""
        n_new = 0
        start, index, value, sides = [0], [], [], []
        for i, root in enumerate(self.graph.roots):
            pool = pools[root.family]
            positions = pool.positions(root.member)
            for position in positions[self._n_seen[i] :]:
                slope = pool.state_slope[position]
                by_capacity = slope @ root.state_matrix + pool.capacity_slope[position]
                constant = float(
                    pool.intercept[position]
                    + slope @ root.state_offset
                    + by_capacity @ root.capacity_offset
                )
                by_x = by_capacity @ root.capacity_matrix
                self._cut_root.append(i)
                self._cut_constant.append(constant)
                self._cut_slope.append(by_x)
                columns = np.flatnonzero(by_x)
                index += [*columns.tolist(), self.n_x + i]
                value += [*(-by_x[columns]).tolist(), 1.0]
                start.append(len(index))
                sides.append(constant)
                n_new += 1
            self._n_seen[i] = len(positions)
        if n_new:
            self._model.add_rows(
                np.array(sides),
                np.full(n_new, np.inf),
                np.array(start),
                np.array(index),
                np.array(value),
            )
        return n_new

    def phi(self, x: FloatArray) -> FloatArray:
        """The roots' values as the cuts know them, (n_root,)."""
        values = self._phi_lower.copy()
        for root, constant, slope in zip(
            self._cut_root, self._cut_constant, self._cut_slope, strict=True
        ):
            values[root] = max(values[root], constant + slope @ x)
        return values

    def cost(self, x: FloatArray) -> float:
        """Cost of the decision itself."""
        return float(self.program.cost @ x) + self.program.offset

    def solve_relaxed(self) -> FirstStagePlan:
        """Best ``x`` with whole numbers forgotten."""
        result = self._model.run()
        x = np.clip(result.col_value[: self.n_x], self.lower, self.upper)
        bound = result.objective + self.program.offset
        return FirstStagePlan(x, self.cost(x), self.phi(x), bound)

    def solve_integer(
        self, gap_frac: float, time_limit_s: float | None = None
    ) -> FirstStagePlan | None:
        """Best ``x`` in whole numbers; None where there was no time to find one."""
        program = self._whole_program()
        start = None
        if self._start_point is not None:
            start = np.concatenate([self._start_point, self.phi(self._start_point)])
        result = solve_program(program, time_limit_s, gap_frac, start)
        if not result.has_incumbent:
            return None
        x = np.clip(result.col_value[: self.n_x], self.lower, self.upper)
        x = np.where(self.program.is_integer, np.round(x), x)
        self._start_point = x
        return FirstStagePlan(x, self.cost(x), self.phi(x), result.bound)

    def _whole_program(self) -> LinearProgram:
        """First stage and cuts as one program."""
        program, n = self.program, len(self._cut_root)
        slopes = np.array(self._cut_slope).reshape(n, self.n_x)
        block = np.zeros((n, self.n_x + self.n_root))
        block[:, : self.n_x] = -slopes
        block[np.arange(n), self.n_x + np.array(self._cut_root, dtype=np.int64)] = 1.0
        rows, columns = np.nonzero(block)
        counts = np.bincount(rows, minlength=n)
        return replace(
            program,
            cost=np.concatenate([program.cost, self._weight]),
            col_lower=np.concatenate([self.lower, self._phi_lower]),
            col_upper=np.concatenate([self.upper, np.full(self.n_root, np.inf)]),
            row_lower=np.concatenate([program.row_lower, np.array(self._cut_constant)]),
            row_upper=np.concatenate([program.row_upper, np.full(n, np.inf)]),
            start=np.concatenate([program.start, program.start[-1] + np.cumsum(counts)]),
            index=np.concatenate([program.index, columns]),
            value=np.concatenate([program.value, block[rows, columns]]),
            is_integer=np.concatenate([program.is_integer, np.zeros(self.n_root, dtype=bool)]),
            is_lazy=np.zeros(program.n_row + n, dtype=bool),
            col_names=(),
            row_names=(),
        )
