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
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import ValueGraph
from xlplan.solve.cut_pool import CutPool, SortedCuts
from xlplan.solve.cuts import ExitMultipliers, lift_amount
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


@dataclass(frozen=True)
class _Segments:
    """Targets that have cuts, where these begin and end, and the target of each cut."""

    target: IntArray
    start: IntArray
    end: IntArray
    by_cut: NDArray[np.int32]


@dataclass(frozen=True)
class _Target:
    """Exits that ask one child family, grouped by the child's member and the state handed on.

    exits (n,), place (n,) which target each exit asks; members (n_target,) of the child, ascending
    """

    i_child: int
    is_gated: bool
    exits: IntArray
    place: IntArray
    members: IntArray
    _known: list[tuple[IntArray, _Segments]] = field(default_factory=list)

    def segments(self, cuts: SortedCuts) -> _Segments:
        """Where the cuts of the targets lie; kept until there are other cuts."""
        if not self._known or self._known[0][0] is not cuts.order:
            begin, end = cuts.start[self.members], cuts.start[self.members + 1]
            has_cuts = np.flatnonzero(end > begin)
            by_cut = np.zeros(len(cuts.order), dtype=np.int32)
            start, stop = begin[has_cuts], end[has_cuts]
            if len(has_cuts):
                # Cuts of members between two targets count with the one before, and are left out.
                reach = np.append(start[1:], stop[-1])
                by_cut[start[0] : reach[-1]] = np.repeat(has_cuts, reach - start)
            self._known[:] = [(cuts.order, _Segments(has_cuts, start, stop, by_cut))]
        return self._known[0][1]


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
        self._targets = self._find_targets(family.out_columns) if self.table.is_fixed else []
        self._slots = [np.zeros(0, dtype=np.int64) for _ in range(self.n_exit)]
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
        for e, weight in enumerate(now.exit_weight.tolist()):
            i_child, i_member = now.exit_child[e].tolist()
            positions: list[int] = []
            if weight > 0.0 and i_member >= 0:
                positions = self._slot_cuts.get((e, i_child, i_member), [])
                if not positions:
                    best = self._highest(i_child, i_member, self._last_out[e])
                    positions = [] if best is None else [best[0]]
            slots = self._slots[e]
            if not positions:
                rows = self._cuts.row[slots]
                self._cuts.group[slots] = NO_CUT
                self._cuts.position[slots] = -1
                self._cuts.intercept[slots] = -np.inf
                self._model.set_row_bounds(
                    rows, np.full(len(rows), -np.inf), np.full(len(rows), np.inf)
                )
                continue
            more = positions[len(slots) : MOST_FIRST_SLOTS]
            if more:
                self._add_slots(e, i_child, more, now)
            # Slots that have nothing to hold repeat the first cut: a free row in the basis of
            # the solver would cost more iterations than a double one.
            n = len(slots)
            self._write_slots(e, slots, i_child, (positions + [positions[0]] * n)[:n])

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
        allowed = tolerance * float(now.scale) / total
        if not self.table.is_fixed:
            return self._use_slots(self._violated_varying(point, allowed, now), now)
        theta = point[self._n_kept :]
        reached = theta + np.maximum(allowed, CUT_TOLERANCE * (1.0 + np.abs(theta)))
        chosen = self._violated_fixed(point[self._out_places], reached, now)
        fresh = [choice for choice in chosen if choice not in self._known]
        self._known.update(fresh)
        self._append(fresh, now)
        return len(fresh)

    def _find_targets(self, out_columns: IntArray) -> list[_Target]:
        """Groups exits by child and state, so that a child's cuts are evaluated once."""
        found: dict[tuple[int, bool, int], dict[int, list[int]]] = {}
        layers: dict[tuple[int, bool, int], int] = {}
        seen: dict[tuple[object, ...], tuple[int, bool, int]] = {}
        for is_gated, table in ((False, self.table.child), (True, self.table.child_if_gated)):
            for e in range(self.n_exit):
                i_child, i_member = int(table[e, 0]), int(table[e, 1])
                if i_member < 0:
                    continue
                columns = tuple(out_columns[e].tolist())
                full = (i_child, i_member, is_gated, columns)
                if full not in seen:
                    depth = layers.get((i_child, is_gated, i_member), 0)
                    layers[i_child, is_gated, i_member] = depth + 1
                    seen[full] = (i_child, is_gated, depth)
                found.setdefault(seen[full], {}).setdefault(i_member, []).append(e)
        targets = []
        for (i_child, is_gated, _), by_member in found.items():
            members = sorted(by_member)
            exits = [e for m in members for e in by_member[m]]
            place = [i for i, m in enumerate(members) for _ in by_member[m]]
            targets.append(
                _Target(i_child, is_gated, np.array(exits), np.array(place), np.array(members))
            )
        return targets

    def _violated_fixed(
        self, states: FloatArray, reached: FloatArray, now: Numbers
    ) -> list[Choice]:
        """What to add, at most one cut for each exit: those above ``reached``."""
        best = reached.copy()
        choice: dict[int, tuple[int, int, int]] = {}
        for target in self._targets:
            pool, exits = self.pools[target.i_child], target.exits
            is_active = now.exit_weight[exits] > 0.0
            gate = self._gate[exits]
            is_active &= gate > 0.0 if target.is_gated else gate < 1.0
            if not pool.n or not is_active.any():
                continue
            cuts = pool.by_member(self._capacity)
            segments = target.segments(cuts)
            n_target = len(target.members)
            at_state = np.zeros((n_target, self.n_state))
            at_state[target.place] = states[exits]
            # What is wanted lies together: a plan from some period on needs the later ones.
            wanted = target.place[is_active]
            k = slice(*np.searchsorted(segments.target, [wanted.min(), wanted.max() + 1]).tolist())
            asked = segments.target[k]
            if not len(asked):
                continue
            first, last = int(segments.start[k][0]), int(segments.end[k][-1])
            by_cut = segments.by_cut[first:last]
            value = cuts.level[first:last].copy()
            for i in range(self.n_state):
                value += cuts.state_slope[first:last, i] * at_state[:, i][by_cut]
            start = segments.start[k] - first
            top = np.full(n_target, -np.inf)
            end = segments.end[k] - first
            # Every second part is what lies between two targets.
            parts = np.column_stack([start, end]).ravel()[:-1]
            top[asked] = np.maximum.reduceat(value, parts)[::2]
            position = np.full(n_target, -1, dtype=np.int64)
            above = is_active & (top[target.place] > best[exits])
            missed = np.zeros(n_target, dtype=bool)
            missed[target.place[above]] = True
            for j in np.flatnonzero(missed[asked]).tolist():
                # The oldest at ties.
                part = value[start[j] : end[j]]
                position[asked[j]] = cuts.order[first + start[j] + int(np.argmax(part))]
            for e, k in zip(exits[above].tolist(), target.place[above].tolist(), strict=True):
                reach = top[k]
                if 0.0 < self._gate[e] < 1.0:
                    share = self._gate[e] if not target.is_gated else 1.0 - self._gate[e]
                    lift = self._lift(e, target.i_child, int(position[k]), target.is_gated, now)
                    reach -= lift * share
                if reach > best[e]:
                    best[e] = reach
                    choice[e] = (target.i_child, int(position[k]), int(target.is_gated))
        return [(e, *choice[e]) for e in sorted(choice)]

    def _highest(self, i_child: int, i_member: int, state: FloatArray) -> tuple[int, float] | None:
        """Position and value of a child's highest cut at a state; None where it has none."""
        cuts = self.pools[i_child].by_member(self._capacity)
        begin, end = cuts.start[i_member], cuts.start[i_member + 1]
        if begin == end:
            return None
        value = cuts.level[begin:end] + cuts.state_slope[begin:end] @ state
        top = int(np.argmax(value))
        return int(cuts.order[begin + top]), float(value[top])

    def _violated_varying(self, point: FloatArray, allowed: float, now: Numbers) -> list[Choice]:
        """Like ``_violated_fixed`` for children that change with the member."""
        chosen = []
        for e, weight in enumerate(now.exit_weight.tolist()):
            if weight <= 0.0:
                continue
            if self._is_gated[e]:
                raise NotImplementedError("a gated exit whose children differ between members")
            i_child, i_member = now.exit_child[e].tolist()
            theta = float(point[self._n_kept + e])
            best = self._highest(i_child, i_member, point[self._out_places[e]])
            if best is None:
                continue
            if best[1] > theta + max(allowed, CUT_TOLERANCE * (1.0 + abs(theta))):
                chosen.append((e, i_child, best[0], 0))
        return chosen

    def _lift(self, e: int, i_child: int, position: int, is_gated: bool, now: Numbers) -> float:
        """``B`` of a cut of an exit's child against the cuts of its other child."""
        key = (e, position, int(is_gated))
        if key not in self._lifts:
            other = now.exit_child[e] if is_gated else now.exit_child_if_gated[e]
            pool, below = self.pools[i_child], self.pools[int(other[0])]
            places = below.positions(int(other[1]))
            floor = self.tables.families[int(other[0])].value_lower[int(other[1])]
            self._lifts[key] = lift_amount(
                float(pool.intercept[position]),
                pool.state_slope[position],
                pool.capacity_slope[position],
                np.concatenate([below.intercept[places], [floor]]),
                np.vstack([below.state_slope[places], np.zeros((1, self.n_state))]),
                np.vstack([below.capacity_slope[places], np.zeros((1, self._n_capacity))]),
                self.table.box,
                self._gates[e],
                gate_is_one=not is_gated,
            )
        return self._lifts[key]

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
        rows.exit[:] = [choice[0] for choice in chosen]
        for i, (e, i_child, position, is_gated) in enumerate(chosen):
            pool = self.pools[i_child]
            rows.intercept[i] = pool.intercept[position]
            rows.state_slope[i] = pool.state_slope[position]
            rows.capacity_slope[i] = pool.capacity_slope[position]
            rows.group[i] = pool.group_at(position)
            rows.position[i] = position
            if self._is_gated[e]:
                lift = self._lift(e, i_child, position, bool(is_gated), now)
                gate = list(self._gates[e])
                rows.group[i] = -1
                if is_gated:  # cut - B' (1 - gate)
                    rows.intercept[i] -= lift
                    rows.capacity_slope[i, gate] += lift
                else:  # cut - B gate
                    rows.capacity_slope[i, gate] -= lift
        return rows

    # -- slots: children that change with the member -------------------------------------------

    def _add_slots(self, e: int, i_child: int, positions: list[int], now: Numbers) -> None:
        """Appends rows for more slots of an exit."""
        n = len(self._cuts.row)
        self._append([(e, i_child, position, 0) for position in positions], now)
        self._slots[e] = np.append(self._slots[e], np.arange(n, n + len(positions)))

    def _write_slots(self, e: int, slots: IntArray, i_child: int, positions: list[int]) -> None:
        """Overwrites slots of an exit with cuts of its child."""
        if not len(slots):
            return
        pool, cuts = self.pools[i_child], self._cuts
        at = np.array(positions)
        slope = pool.state_slope[at]
        is_moved = slope != cuts.state_slope[slots]
        if is_moved.any():
            columns = self._out_places[e]
            if self._has_repeats:
                merged, inverse = np.unique(columns, return_inverse=True)
                for slot, numbers in zip(slots.tolist(), slope, strict=True):
                    total = np.bincount(inverse, weights=numbers)
                    self._model.set_row_coefficients(int(cuts.row[slot]), merged, -total)
            else:
                i, j = is_moved.nonzero()
                self._model.set_coefficients(cuts.row[slots[i]], columns[j], -slope[i, j])
            cuts.state_slope[slots] = slope
        capacity_slope, intercept = pool.capacity_slope[at], pool.intercept[at]
        cuts.intercept[slots], cuts.capacity_slope[slots] = intercept, capacity_slope
        cuts.group[slots] = pool.groups_at(at)
        cuts.position[slots] = at
        sides = intercept + capacity_slope @ self._capacity
        self._model.set_row_bounds(cuts.row[slots], sides, np.full(len(slots), np.inf))

    def _use_slots(self, chosen: list[Choice], now: Numbers) -> int:
        """Writes violated cuts into slots that are not tight, or into new ones."""
        if not chosen:
            return 0
        row_dual, n_used = self._model.row_dual(), 0
        for e, i_child, position, _ in chosen:
            slots = self._slots[e]
            held = self._cuts.position[slots].tolist()
            if position in held:
                continue  # it is there: what is left is the solver's tolerance
            is_loose = (row_dual[self._cuts.row[slots]] <= 0.0).tolist()
            loose = [i for i, is_so in enumerate(is_loose) if is_so]
            # Of those the ones that repeat a cut come first.
            idle = [i for i in loose if held.count(held[i]) > 1]
            # One cut per component of the state can be tight at once, beside the first ones.
            free = idle or (loose if len(slots) >= FIRST_SLOTS + self.n_state else [])
            if free:
                self._write_slots(e, slots[free[0] : free[0] + 1], i_child, [position])
            else:
                self._add_slots(e, i_child, [position], now)
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
