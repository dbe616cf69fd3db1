"""Rows of a kept model that hold the cuts of children that change with the member.

The rows, *slots*, stay in the model for ever and are rewritten when the member changes, for
deleting a row that is in the basis would make the next solve cold. What stands in them is kept in
lists: it is looked at one slot at a time, between two runs of the solver. A cut ``theta >= a + g s
+ h c`` of the child is the row ``theta - g s >= a + h c``, capacities ``c`` being fixed.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import ValueGraph
from xlplan.solve.cut_pool import CutPool
from xlplan.solve.cuts import ExitMultipliers
from xlplan.solve.highs import KeptModel
from xlplan.solve.member_table import Numbers

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

CUT_TOLERANCE = 1e-9
"""Relative violation below which a child's cut is not added, for float rounding."""

FIRST_SLOTS = 3
"""Slots of an exit before loose ones are overwritten, beside one per component of the state."""

MOST_FIRST_SLOTS = 8
"""Slots filled at most when a member comes with cuts that were tight last time."""

FREE = -1
"""Position of a slot that holds no cut."""


@dataclass
class _Exit:
    """Slots of one exit, as they stand in the model.

    value : column of the model for the value at the exit; out : (n_state,) those of the states
    handed on; columns : the same without repeats, and that of the value; sums : (n_state, n_column
    - 1), which state counts in which column, or None where each has its own; row, position, slope,
    side : of every slot, its model row, the cut in the child's pool, minus the cut's slopes, and
    the lower side; child : family and member of the child whose cuts are held, -1 for none;
    last_state : handed on by the last point
    """

    value: int
    columns: IntArray
    sums: FloatArray | None
    out: IntArray
    row: list[int] = field(default_factory=list)
    position: list[int] = field(default_factory=list)
    slope: list[list[float]] = field(default_factory=list)
    side: list[float] = field(default_factory=list)
    child: tuple[int, int] = (-1, -1)
    last_state: FloatArray = field(default_factory=lambda: np.zeros(0))


Held = list[tuple[tuple[int, int], list[int], list[int]]]
"""By exit: child, rows and positions of the cuts in them, when a point was settled."""


class SlotRows:
    """Slots of one kept model.

    Parameters
    ----------
    graph, pools : what is solved, and the cuts known
    i_family : int
    model : KeptModel, whose columns ``n_kept + e`` are the values at the exits
    out_places : (n_exit, n_state), columns of the model that hold the states handed on
    n_kept : int

    Raises NotImplementedError where an exit is gated.
    """

    def __init__(
        self,
        graph: ValueGraph,
        pools: list[CutPool],
        i_family: int,
        model: KeptModel,
        out_places: IntArray,
        n_kept: int,
    ) -> None:
        if any(graph.families[i_family].exit_gate):
            raise NotImplementedError("a gated exit whose children differ between members")
        self.pools, self._model = pools, model
        self.counts: Counter[str] = Counter()
        self._n_capacity = len(graph.capacity_lower)
        self._capacity = np.full(self._n_capacity, np.nan)
        self._exits = []
        for e, out in enumerate(out_places):
            columns, inverse = np.unique(out, return_inverse=True)
            sums = None
            if len(columns) < len(out):  # one column is handed on as two components of the state
                sums = np.zeros((len(out), len(columns)))
                sums[np.arange(len(out)), inverse] = 1.0
            else:
                columns = out
            self._exits.append(
                _Exit(n_kept + e, np.append(columns, n_kept + e), sums, out,
                      last_state=np.zeros(len(out)))
            )  # fmt: skip
        self._n_state = out_places.shape[1]
        self._tight: dict[tuple[int, int, int], list[int]] = {}

    # -- the model moves -----------------------------------------------------------------------

    def set_capacity(self, capacity: FloatArray) -> bool:
        """Whether these are other capacities than before: ``set_member`` must then follow."""
        if capacity is self._capacity or np.array_equal(capacity, self._capacity):
            return False
        self._capacity = capacity
        return True

    def set_member(self, now: Numbers) -> None:
        """Puts the member's child into the slots: cuts tight last time, or the best guess."""
        weights, children = now.exit_weight.tolist(), now.exit_child.tolist()
        for e, (at, weight, child) in enumerate(zip(self._exits, weights, children, strict=True)):
            at.child = (child[0], child[1]) if weight > 0.0 else (-1, -1)
            i_child, i_member = at.child
            positions: list[int] = []
            if i_member >= 0:
                positions = self._tight.get((e, i_child, i_member), [])
                if not positions:
                    best = _highest(self.pools[i_child], i_member, at.last_state, self._capacity)
                    positions = [] if best is None else [best[0]]
            n = len(at.row)
            if positions:
                if len(positions) > n:
                    self._append(at, positions[n:MOST_FIRST_SLOTS])
                # Slots that have nothing to hold repeat the first cut: a free row in the basis of
                # the solver would cost more iterations than a double one.
                self._write(at, range(n), (positions + [positions[0]] * n)[:n])
            elif n:
                at.position, at.side = [FREE] * n, [-np.inf] * n
                self._set_sides(at, range(n))

    # -- cuts that are missed ------------------------------------------------------------------

    def add_violated(self, point: FloatArray, now: Numbers, tolerance: float) -> int:
        """Adds the highest violated cut of every exit; their number.

        Parameters
        ----------
        point : array, (n_kept + n_exit,), of the model
        now : Numbers of the member
        tolerance : by how much the value may be too low, in true scale
        """
        total = float(now.exit_weight.sum())
        allowed = tolerance * float(now.scale) / total if total > 0.0 else 0.0
        n_used = 0
        row_dual: list[float] | None = None
        for at in self._exits:
            i_child, i_member = at.child
            if i_member < 0:
                continue
            theta, at.last_state = float(point[at.value]), point[at.out]
            best = _highest(self.pools[i_child], i_member, at.last_state, self._capacity)
            if best is None:
                continue
            position, reached = best
            if reached <= theta + max(allowed, CUT_TOLERANCE * (1.0 + abs(theta))):
                continue
            if position in at.position:
                continue  # it is there: what is left is the solver's tolerance
            if row_dual is None:  # before any row changes: multipliers are void then
                row_dual = self._model.row_dual().tolist()
            self._use(at, position, row_dual)
            n_used += 1
        return n_used

    def _use(self, at: _Exit, position: int, row_dual: list[float]) -> None:
        """Writes a cut into a slot that is not tight, or into a new one."""
        loose = [i for i, row in enumerate(at.row) if row_dual[row] <= 0.0]
        # Of those the ones that repeat a cut come first.
        idle = [i for i in loose if at.position.count(at.position[i]) > 1]
        # One cut per component of the state can be tight at once, beside the first ones.
        free = idle or (loose if len(at.row) >= FIRST_SLOTS + self._n_state else [])
        if free:
            self._write(at, free[:1], [position])
        else:
            self._append(at, [position])

    # -- rows ----------------------------------------------------------------------------------

    def _cuts(self, at: _Exit, positions: Sequence[int]) -> tuple[list[list[float]], list[float]]:
        """Coefficients of the states and lower sides of some cuts of the exit's child."""
        pool = self.pools[at.child[0]]
        places = np.array(positions)
        slope = -pool.state_slope[places]
        if at.sums is not None:
            slope = slope @ at.sums
        return slope.tolist(), pool.level(self._capacity)[places].tolist()

    def _write(self, at: _Exit, slots: Sequence[int], positions: Sequence[int]) -> None:
        """Overwrites some slots."""
        if not len(slots):
            return
        slopes, sides = self._cuts(at, positions)
        rows, columns, values = [], [], []
        held = at.columns[:-1].tolist()
        for slot, position, slope, side in zip(slots, positions, slopes, sides, strict=True):
            old, row = at.slope[slot], at.row[slot]
            for column, number, before in zip(held, slope, old, strict=True):
                if number != before:
                    rows.append(row)
                    columns.append(column)
                    values.append(number)
            at.slope[slot], at.side[slot], at.position[slot] = slope, side, position
        self._model.set_coefficients(rows, columns, values)
        self._set_sides(at, slots)

    def _set_sides(self, at: _Exit, slots: Sequence[int]) -> None:
        """Sides of some slots into the model."""
        rows, sides = np.array([at.row[i] for i in slots]), np.array([at.side[i] for i in slots])
        self._model.set_row_bounds(rows, sides, np.full(len(rows), np.inf))

    def _append(self, at: _Exit, positions: Sequence[int]) -> None:
        """More slots, with cuts in them."""
        slopes, sides = self._cuts(at, positions)
        n, n_row = len(positions), self._model.n_row
        values = np.hstack([np.array(slopes).reshape(n, -1), np.ones((n, 1))])
        kept = values != 0.0
        start = np.concatenate([[0], np.cumsum(kept.sum(axis=1))])
        index = np.broadcast_to(at.columns, values.shape)[kept]
        self._model.add_rows(np.array(sides), np.full(n, np.inf), start, index, values[kept])
        at.row += range(n_row, n_row + n)
        at.position += positions
        at.slope += slopes
        at.side += sides
        self.counts["cut row"] += n

    # -- what comes out ------------------------------------------------------------------------

    def settled(self) -> Held:
        """Notes what stands in the slots: where the same point is solved again it begins there."""
        for e, at in enumerate(self._exits):
            if at.child[1] >= 0:
                self._tight[e, *at.child] = sorted(set(at.position) - {FREE})
        return [(at.child, list(at.row), list(at.position)) for at in self._exits]

    def used(
        self, dual: FloatArray, held: Sequence[Held], numbers: Sequence[Numbers]
    ) -> list[tuple[ExitMultipliers, IntArray]]:
        """Multipliers of the cuts that were tight at k settled points, and the group of each.

        dual (k, n_model_row); held : what stood in the slots; numbers : not needed here
        """
        del numbers
        found = []
        for row_dual, slots in zip(dual, held, strict=True):
            exits: list[int] = []
            multipliers: list[float] = []
            cuts: list[tuple[int, int]] = []
            for e, ((i_child, i_member), rows, positions) in enumerate(slots):
                if i_member < 0:
                    continue
                tight = set()
                for pi, position in zip(row_dual[rows].tolist(), positions, strict=True):
                    if pi > 0.0 and position != FREE:
                        exits.append(e)
                        multipliers.append(pi)
                        cuts.append((i_child, position))
                        tight.add(position)
                if tight:
                    self._tight[e, i_child, i_member] = sorted(tight)
            found.append(self._multipliers(exits, multipliers, cuts))
        return found

    def _multipliers(
        self, exits: list[int], pi: list[float], cuts: list[tuple[int, int]]
    ) -> tuple[ExitMultipliers, IntArray]:
        families = {i_child for i_child, _ in cuts}
        n = len(cuts)
        intercept, group = np.zeros(n), np.zeros(n, dtype=np.int64)
        state, capacity = np.zeros((n, self._n_state)), np.zeros((n, self._n_capacity))
        for i_child in families:
            pool = self.pools[i_child]
            if len(families) == 1:
                here: IntArray | slice = slice(None)
                places = np.array([position for _, position in cuts], dtype=np.int64)
            else:
                here = np.array([i for i, cut in enumerate(cuts) if cut[0] == i_child])
                places = np.array([cuts[i][1] for i in here.tolist()])
            intercept[here], group[here] = pool.intercept[places], pool.groups_at(places)
            state[here], capacity[here] = pool.state_slope[places], pool.capacity_slope[places]
        exit_ = np.array(exits, dtype=np.int64)
        return ExitMultipliers(exit_, np.array(pi), intercept, state, capacity), group


def _highest(
    pool: CutPool, i_member: int, state: FloatArray, capacity: FloatArray
) -> tuple[int, float] | None:
    """Position and value of a member's highest cut at a state; None where it has none."""
    cuts = pool.by_member(capacity)
    begin, end = cuts.start[i_member], cuts.start[i_member + 1]
    if begin == end:
        return None
    value = cuts.level[begin:end] + cuts.state_slope[begin:end] @ state
    top = int(value.argmax())
    return int(cuts.order[begin + top]), float(value[top])
