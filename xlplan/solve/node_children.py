"""Rows of a kept model that hold the cuts of the node's children.

Capacities are fixed in a node's program, so a child's cut ``theta >= a + g s + h c`` is the row
``theta - g s >= a + h c`` whose right side moves with ``c``. Exits that have the same child in
all members keep their rows for ever; the others have a few slots whose coefficients are rewritten
when the member changes, for deleting a row that is in the basis would make the next solve cold.

A *gated* exit (model.md section 2) has, for a gate at 0 or 1, the cuts of the right child alone;
each is lifted, ``cut of child - B gate`` or ``cut of other child - B' (1 - gate)``, when its row is
made, so that it holds at the other value of the gate too.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import ValueGraph
from xlplan.solve.cut_pool import CutPool
from xlplan.solve.cuts import ExitMultipliers, lift_amounts
from xlplan.solve.fixed_children import FixedChildren
from xlplan.solve.highs import KeptModel
from xlplan.solve.member_table import Numbers
from xlplan.solve.tables import GraphTables

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

CUT_TOLERANCE = 1e-9
"""Relative violation below which a child's cut is not added, for float rounding."""

FIRST_SLOTS = 3
"""Slots for the cuts of a child that changes with the member; more are added when needed."""

MOST_FIRST_SLOTS = 8
"""Slots filled at most when a member comes with cuts that were tight last time."""

MOST_LIFTS = 64
"""So many cuts are lifted in one pass over arrays, each against all cuts of another child."""

NO_CUT = -2
"""Group of a slot that holds no cut; -1 is that of a lifted cut."""

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
    position: IntArray
    """Where the cut stands in the pool of its exit's child."""

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
            position=np.full(n, -1, dtype=np.int64),
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
        self._asked = self._capacity
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
        self._slots: dict[int, list[int]] = {}
        self._slot_cuts: dict[tuple[int, int, int], list[int]] = {}
        self._last_out = np.zeros((self.n_exit, self.n_state))
        self._lifts: dict[tuple[int, int, int], float] = {}

    # -- the model moves -----------------------------------------------------------------------

    def set_capacity(self, capacity: FloatArray) -> None:
        """Moves the right sides to other capacities."""
        if capacity is self._asked or np.array_equal(capacity, self._capacity):
            return
        self._asked = capacity
        self._capacity = capacity.copy()
        for e in np.flatnonzero(self._is_gated):
            self._gate[e] = capacity[list(self._gates[e])].sum()
        cuts = self._cuts
        sides = cuts.intercept + cuts.capacity_slope @ capacity
        self._model.set_row_bounds(cuts.row, sides, np.full(len(sides), np.inf))

    def sides(self) -> tuple[IntArray, FloatArray]:
        """Rows and their lower sides."""
        cuts = self._cuts
        return cuts.row, cuts.intercept + cuts.capacity_slope @ self._capacity

    def set_member(self, now: Numbers) -> None:
        """Puts the new member's child into the slots: cuts used last time, or the best guess."""
        if self.table.is_fixed:
            return
        for e in range(self.n_exit):
            i_child, i_member = now.exit_child[e].tolist()
            slots = self._slots.setdefault(e, [])
            positions: list[int] = []
            if now.exit_weight[e] > 0.0 and i_member >= 0:
                positions = self._slot_cuts.get((e, i_child, i_member), [])
                if not positions:
                    best = self._highest(i_child, i_member, self._last_out[e])
                    positions = [] if best is None else [best[0]]
            if not positions:
                rows = self._cuts.row[slots]
                self._cuts.group[slots] = NO_CUT
                self._cuts.position[slots] = -1
                self._model.set_row_bounds(
                    rows, np.full(len(rows), -np.inf), np.full(len(rows), np.inf)
                )
                self._cuts.intercept[slots] = -np.inf
                continue
            while len(slots) < min(len(positions), MOST_FIRST_SLOTS):
                slots.append(len(self._cuts.row))
                self._append([(e, i_child, positions[len(slots) - 1], 0)], now)
            # Slots that have nothing to hold repeat the first cut: a free row in the basis of
            # the solver would cost more iterations than a double one.
            for i, slot in enumerate(slots):
                self._write_slot(slot, e, i_child, positions[i if i < len(positions) else 0])
            self._set_slot_sides(slots)

    # -- cuts that are missed ------------------------------------------------------------------

    def add_violated(
        self, point: FloatArray, row_dual: FloatArray, now: Numbers, tolerance: float
    ) -> int:
        """Adds the highest violated cut of every exit; their number.

        Parameters
        ----------
        point : array, (n_kept + n_exit,), of the model
        row_dual : array, (n_model_row,)
        now : Numbers of the member
        tolerance : by how much the value may be too low, in true scale
        """
        weight = now.exit_weight
        total = weight.sum()
        if total <= 0.0:
            return 0
        theta = point[self._n_kept :]
        allowed = np.maximum(tolerance * now.scale / total, CUT_TOLERANCE * (1.0 + np.abs(theta)))
        if self.table.is_fixed:
            chosen = self._violated_fixed(point, theta + allowed, now)
            fresh = [choice for choice in chosen if choice not in self._known]
            self._known.update(fresh)
            self._append(fresh, now)
            return len(fresh)
        states = point[self._out_places]
        chosen = self._violated_varying(states, theta + allowed, now)
        return self._use_slots(chosen, row_dual, now)

    def _violated_fixed(self, point: FloatArray, reached: FloatArray, now: Numbers) -> list[Choice]:
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

    def _highest(self, i_child: int, i_member: int, state: FloatArray) -> tuple[int, float] | None:
        """Position and value of a child's highest cut at a state; None where it has none."""
        cuts = self.pools[i_child].by_member(self._capacity)
        begin, end = cuts.start[i_member], cuts.start[i_member + 1]
        if begin == end:
            return None
        value = cuts.level[begin:end] + cuts.state_slope[begin:end] @ state
        top = int(np.argmax(value))
        return int(cuts.order[begin + top]), float(value[top])

    def _violated_varying(
        self, states: FloatArray, reached: FloatArray, now: Numbers
    ) -> list[Choice]:
        """Like ``_violated_fixed`` for children that change with the member."""
        chosen = []
        for e in (now.exit_weight > 0.0).nonzero()[0].tolist():
            i_child, i_member = now.exit_child[e].tolist()
            if self._is_gated[e]:
                raise NotImplementedError("a gated exit whose children differ between members")
            best = self._highest(i_child, i_member, states[e])
            if best is not None and best[1] > reached[e]:
                chosen.append((e, i_child, best[0], 0))
        return chosen

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
        rows.exit[:], rows.position[:] = exits, positions
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

    # -- slots: children that change with the member -------------------------------------------

    def _write_slot(self, slot: int, e: int, i_child: int, position: int) -> None:
        """Overwrites one slot with one cut; its side is set by ``_set_slot_sides``."""
        pool, cuts = self.pools[i_child], self._cuts
        slope = pool.state_slope[position]
        is_moved = slope != cuts.state_slope[slot]
        if is_moved.any():
            row, columns = int(cuts.row[slot]), self._out_places[e]
            if self._has_repeats:
                merged, inverse = np.unique(columns, return_inverse=True)
                total = np.bincount(inverse, weights=slope)
                self._model.set_row_coefficients(row, merged, -total)
            else:
                self._model.set_row_coefficients(row, columns[is_moved], -slope[is_moved])
            cuts.state_slope[slot] = slope
        cuts.intercept[slot] = pool.intercept[position]
        cuts.capacity_slope[slot] = pool.capacity_slope[position]
        cuts.group[slot] = pool.group_at(position)
        cuts.position[slot] = position

    def _set_slot_sides(self, slots: list[int]) -> None:
        cuts = self._cuts
        sides = cuts.intercept[slots] + cuts.capacity_slope[slots] @ self._capacity
        self._model.set_row_bounds(cuts.row[slots], sides, np.full(len(slots), np.inf))

    def _use_slots(self, chosen: list[Choice], row_dual: FloatArray, now: Numbers) -> int:
        """Writes violated cuts into slots that are not tight, or into new ones."""
        n_used = 0
        for e, i_child, position, _ in chosen:
            slots = self._slots[e]
            held = self._cuts.position[slots].tolist()
            if position in held:
                continue  # it is there: what is left is the solver's tolerance
            is_loose = (row_dual[self._cuts.row[slots]] <= 0.0).tolist() if slots else []
            loose = [slot for slot, is_so in zip(slots, is_loose, strict=True) if is_so]
            # Of those the ones that repeat a cut come first.
            idle = [s for s in loose if held.count(int(self._cuts.position[s])) > 1]
            # One cut per component of the state can be tight at once, beside the first ones.
            free = idle or (loose if len(slots) >= FIRST_SLOTS + self.n_state else [])
            if free:
                self._write_slot(free[0], e, i_child, position)
                self._set_slot_sides([free[0]])
            else:
                slots.append(len(self._cuts.row))
                self._append([(e, i_child, position, 0)], now)
            n_used += 1
        return n_used

    # -- what comes out ------------------------------------------------------------------------

    def used(
        self, row_dual: FloatArray, states: FloatArray, now: Numbers
    ) -> tuple[ExitMultipliers, IntArray]:
        """Multipliers of the cuts that were tight, and the group of each, -1 where it is lifted.

        ``states`` (n_exit, n_state) are those handed on: where the next member's search begins.
        """
        cuts = self._cuts
        self._last_out = states
        pi = row_dual[cuts.row]
        at = (pi > 0.0).nonzero()[0]
        at = at[now.exit_weight[cuts.exit[at]] > 0.0]
        if not self.table.is_fixed:
            at = at[cuts.group[at] != NO_CUT]
            self._remember(at, now)
        multipliers = ExitMultipliers(
            exit=cuts.exit[at],
            pi=pi[at],
            intercept=cuts.intercept[at],
            state_slope=cuts.state_slope[at],
            capacity_slope=cuts.capacity_slope[at],
        )
        return multipliers, cuts.group[at]

    def _remember(self, at: IntArray, now: Numbers) -> None:
        """Keeps which cuts were tight, for the next time that this child comes."""
        exits, positions = self._cuts.exit[at].tolist(), self._cuts.position[at].tolist()
        tight: dict[int, set[int]] = {}
        for e, position in zip(exits, positions, strict=True):
            tight.setdefault(e, set()).add(position)
        for e, found in tight.items():
            i_child, i_member = now.exit_child[e].tolist()
            self._slot_cuts[e, i_child, i_member] = sorted(found)


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
