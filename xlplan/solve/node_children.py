"""Rows of a kept model that hold the cuts of the node's children.

Capacities are fixed in a node's program, so a child's cut ``theta >= a + g s + h c`` is the row
``theta - g s >= a + h c`` whose right side moves with ``c``. Here are the rows of families whose
exits have the same child in all members: they stay for ever. Others have slots (``node_slots.py``).

A *gated* exit (model.md section 2) has, for a gate at 0 or 1, the cuts of the right child alone;
each is lifted, ``cut of child - B gate`` or ``cut of other child - B' (1 - gate)``, when its row is
made, so that it holds at the other value of the gate too.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import ValueGraph
from xlplan.solve.cut_pool import CutPool
from xlplan.solve.cuts import ExitMultipliers, lift_amounts
from xlplan.solve.fixed_children import FixedChildren
from xlplan.solve.highs import KeptModel
from xlplan.solve.member_table import Numbers
from xlplan.solve.node_slots import CUT_TOLERANCE, Held
from xlplan.solve.tables import GraphTables

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

MOST_LIFTS = 64
"""So many cuts are lifted in one pass over arrays, each against all cuts of another child."""

Choice = tuple[int, int, int, int]
"""Exit, child family, position in its pool, 1 if it is the gated child."""


@dataclass
class _CutRows:
    """Rows of the kept model that hold cuts of children; arrays grow by appending."""

    row: IntArray
    exit: IntArray
    intercept: FloatArray
    state_slope: FloatArray
    capacity_slope: FloatArray
    group: IntArray
    """-1 where the cut is lifted."""

    @staticmethod
    def empty(n: int, n_state: int, n_capacity: int) -> _CutRows:
        """Room for n rows."""
        return _CutRows(
            row=np.zeros(n, dtype=np.int64),
            exit=np.zeros(n, dtype=np.int64),
            intercept=np.zeros(n),
            state_slope=np.zeros((n, n_state)),
            capacity_slope=np.zeros((n, n_capacity)),
            group=np.full(n, -1, dtype=np.int64),
        )

    def append(self, other: _CutRows) -> None:
        """Puts rows behind."""
        for name in vars(self):
            setattr(self, name, np.concatenate([getattr(self, name), getattr(other, name)]))


class ChildRows:
    """The cut rows of one kept model.

    Parameters
    ----------
    graph, tables, pools : what is solved, and the cuts known
    i_family : int
    model : KeptModel, whose columns ``n_kept + e`` are the values at the exits
    out_places : (n_exit, n_state), columns of the model that hold the states handed on
    n_kept : int
    """

    def __init__(
        self,
        graph: ValueGraph,
        tables: GraphTables,
        pools: list[CutPool],
        i_family: int,
        model: KeptModel,
        out_places: IntArray,
        n_kept: int,
    ) -> None:
        family = graph.families[i_family]
        self.tables, self.pools, self.table = tables, pools, tables.families[i_family]
        self.counts: Counter[str] = Counter()
        self.n_exit, self.n_state = len(family.exit_gate), self.table.n_state
        self._gates = family.exit_gate
        self._model, self._out_places, self._n_kept = model, out_places, n_kept
        self._n_capacity = len(graph.capacity_lower)
        self._capacity = np.full(self._n_capacity, np.nan)
        self._cuts = _CutRows.empty(0, self.n_state, self._n_capacity)
        self._known: set[Choice] = set()
        self._is_gated = np.array([bool(g) for g in family.exit_gate], dtype=bool)
        self._gate = np.zeros(self.n_exit)
        out = np.sort(family.out_columns, axis=1)
        # Whether an exit hands on one column as two components of the state.
        self._has_repeats = bool((out[:, 1:] == out[:, :-1]).any()) if out.size else False
        self._fixed = FixedChildren(
            self.table.child, self.table.child_if_gated, out_places, self.table.box, pools
        )
        self._asked_by: Numbers | None = None
        self._asked_at = self._capacity
        self._lifts: dict[tuple[int, int, int], float] = {}

    # -- the model moves -----------------------------------------------------------------------

    def set_capacity(self, capacity: FloatArray) -> bool:
        """Moves the right sides to other capacities; whether ``set_member`` must follow."""
        if capacity is not self._capacity and not np.array_equal(capacity, self._capacity):
            self._capacity = capacity
            for e in np.flatnonzero(self._is_gated):
                self._gate[e] = capacity[list(self._gates[e])].sum()
            cuts = self._cuts
            sides = cuts.intercept + cuts.capacity_slope @ capacity
            self._model.set_row_bounds(cuts.row, sides, np.full(len(sides), np.inf))
        return False

    def set_member(self, now: Numbers) -> None:
        """Children are the same in all members."""

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
        if total <= 0.0:
            return 0
        allowed, theta = tolerance * float(now.scale) / total, point[self._n_kept :]
        reached = theta + np.maximum(allowed, CUT_TOLERANCE * (1.0 + np.abs(theta)))
        chosen = self._violated(point, reached, now)
        fresh = [choice for choice in chosen if choice not in self._known]
        self._known.update(fresh)
        self._append(fresh, now)
        return len(fresh)

    def _violated(self, point: FloatArray, reached: FloatArray, now: Numbers) -> list[Choice]:
        """What to add, at most one cut for each exit: those above ``reached``."""
        layer, all_exits, all_targets = self._asked_of(now)
        if not len(all_exits):
            return []
        found = self._fixed.highest(self._capacity, point, all_targets)
        missed = np.flatnonzero(found.top[all_targets] > reached[all_exits])
        if not len(missed):
            return []
        best, choice = reached.copy(), dict[int, Choice]()
        for is_gated in (0, 1):
            at = missed[layer[missed] == is_gated]
            at = at[found.top[all_targets[at]] > best[all_exits[at]]]
            exits, target, gate = all_exits[at], all_targets[at], self._gate[all_exits[at]]
            families, positions = self._fixed.family[target], found.positions(target)
            above = [
                (e, i_child, position, is_gated)
                for e, i_child, position in zip(
                    exits.tolist(), families.tolist(), positions.tolist(), strict=True
                )
            ]
            reach = found.top[target]
            partly = np.flatnonzero((gate > 0.0) & (gate < 1.0))
            if len(partly):
                share = 1.0 - gate[partly] if is_gated else gate[partly]
                reach[partly] -= self._find_lifts([above[i] for i in partly], now) * share
            is_better = reach > best[exits]
            best[exits[is_better]] = reach[is_better]
            choice.update((above[i][0], above[i]) for i in np.flatnonzero(is_better).tolist())
        return [choice[e] for e in sorted(choice)]

    def _asked_of(self, now: Numbers) -> tuple[IntArray, IntArray, IntArray]:
        """Which children count, (n,) each: 1 for the gated one, exit, target; kept for a member."""
        if self._asked_by is not now or self._asked_at is not self._capacity:
            is_active, place = now.exit_weight > 0.0, self._fixed.place
            counts = np.array([self._gate < 1.0, self._gate > 0.0]) & is_active & (place >= 0)
            is_gated, exits = np.nonzero(counts)
            self._children_asked = is_gated, exits, place[is_gated, exits]
            self._asked_by, self._asked_at = now, self._capacity
        return self._children_asked

    def _find_lifts(self, chosen: list[Choice], now: Numbers) -> FloatArray:
        """``B`` of cuts of gated exits' children against the cuts of their other children, (n,)."""
        missing: dict[tuple[int, int, int, tuple[int, ...]], list[Choice]] = {}
        for one in chosen:
            e, i_child, position, is_gated = one
            if (e, position, is_gated) not in self._lifts:
                other = now.exit_child if is_gated else now.exit_child_if_gated
                key = (i_child, is_gated, int(other[e, 0]), self._gates[e])
                missing.setdefault(key, []).append(one)
        for (i_child, is_gated, i_other, gate), cuts in missing.items():
            other = now.exit_child if is_gated else now.exit_child_if_gated
            for begin in range(0, len(cuts), MOST_LIFTS):
                part = cuts[begin : begin + MOST_LIFTS]
                members = other[[choice[0] for choice in part], 1]
                amounts = self._lifts_against(
                    i_child, [choice[2] for choice in part], i_other, members, gate, not is_gated
                )
                for (e, _, position, _), amount in zip(part, amounts.tolist(), strict=True):
                    self._lifts[e, position, is_gated] = amount
        return np.array([self._lifts[e, position, g] for e, _, position, g in chosen])

    def _lifts_against(
        self,
        i_child: int,
        positions: list[int],
        i_other: int,
        members: IntArray,
        gate: tuple[int, ...],
        gate_is_one: bool,
    ) -> FloatArray:
        """Lifts of some cuts of a family, each against all cuts of a member of another one."""
        pool, below = self.pools[i_child], self.pools[i_other]
        # Behind the cuts of each member comes what is known of its value without any.
        places, count = below.positions_of_each(members)
        ends = np.cumsum(count)
        floor = self.tables.families[i_other].value_lower[members]
        return lift_amounts(
            (
                pool.intercept[positions],
                pool.state_slope[positions],
                pool.capacity_slope[positions],
            ),
            (
                np.insert(below.intercept[places], ends, floor),
                np.insert(below.state_slope.take(places, axis=0), ends, 0.0, axis=0),
                np.insert(below.capacity_slope.take(places, axis=0), ends, 0.0, axis=0),
            ),
            ends - count + np.arange(len(ends)),
            self.table.box,
            gate,
            gate_is_one=gate_is_one,
        )

    def _append(self, chosen: list[Choice], now: Numbers) -> None:
        """Rows ``theta - g s >= a + h c`` at the end of the model."""
        if not chosen:
            return
        rows = self._cut_rows(chosen, now)
        n = len(chosen)
        columns = np.hstack([self._out_places[rows.exit], (self._n_kept + rows.exit)[:, None]])
        values = np.hstack([-rows.state_slope, np.ones((n, 1))])
        kept = values != 0.0
        start = np.concatenate([[0], np.cumsum(kept.sum(axis=1))])
        rows.row[:] = self._model.n_row + np.arange(n)
        index, value = columns[kept], values[kept]
        if self._has_repeats:
            index, value, start = _merge_repeats(columns, values)
        sides = rows.intercept + rows.capacity_slope @ self._capacity
        self._model.add_rows(sides, np.full(n, np.inf), start, index, value)
        self._cuts.append(rows)
        self.counts["cut row"] += n

    def _cut_rows(self, chosen: list[Choice], now: Numbers) -> _CutRows:
        """Chosen cuts, lifted where the exit is gated; ``row`` is left to the caller."""
        rows = _CutRows.empty(len(chosen), self.n_state, self._n_capacity)
        exits, families, positions, _ = np.array(chosen).T
        rows.exit[:] = exits
        for i_child in np.unique(families).tolist():
            here = np.flatnonzero(families == i_child)
            pool, at = self.pools[i_child], positions[here]
            rows.intercept[here] = pool.intercept[at]
            rows.state_slope[here] = pool.state_slope[at]
            rows.capacity_slope[here] = pool.capacity_slope[at]
            rows.group[here] = pool.groups_at(at)
        lifted = np.flatnonzero(self._is_gated[exits]).tolist()
        lifts = self._find_lifts([chosen[i] for i in lifted], now).tolist()
        for i, lift in zip(lifted, lifts, strict=True):
            e, _, _, is_gated = chosen[i]
            gate = list(self._gates[e])
            rows.group[i] = -1
            if is_gated:  # cut - B' (1 - gate)
                rows.intercept[i] -= lift
                rows.capacity_slope[i, gate] += lift
            else:  # cut - B gate
                rows.capacity_slope[i, gate] -= lift
        return rows

    # -- what comes out ------------------------------------------------------------------------

    def settled(self) -> Held:
        """Rows stay: there is nothing to note."""
        return []

    def used(
        self, dual: FloatArray, held: Sequence[Held], numbers: Sequence[Numbers]
    ) -> list[tuple[ExitMultipliers, IntArray]]:
        """Multipliers of the cuts that were tight at k points; group of each, -1 where lifted.

        dual (k, n_model_row); held : not needed here; numbers : of each point's member
        """
        del held
        cuts, found = self._cuts, []
        for row_dual, now in zip(dual, numbers, strict=True):
            pi = row_dual[cuts.row]
            at = (pi > 0.0).nonzero()[0]
            at = at[now.exit_weight[cuts.exit[at]] > 0.0]
            multipliers = ExitMultipliers(
                exit=cuts.exit[at],
                pi=pi[at],
                intercept=cuts.intercept[at],
                state_slope=cuts.state_slope[at],
                capacity_slope=cuts.capacity_slope[at],
            )
            found.append((multipliers, cuts.group[at]))
        return found


def _merge_repeats(columns: IntArray, values: FloatArray) -> tuple[IntArray, FloatArray, IntArray]:
    """Rows in which a column may occur twice, as index, value, start with the sums."""
    index, value, start = [], [], [0]
    for row, numbers in zip(columns, values, strict=True):
        merged, inverse = np.unique(row, return_inverse=True)
        total = np.bincount(inverse, weights=numbers)
        index.append(merged[total != 0.0])
        value.append(total[total != 0.0])
        start.append(start[-1] + len(index[-1]))
    return np.concatenate(index), np.concatenate(value), np.array(start)
