"""One family's linear program kept warm: members, states and capacities change, the basis stays.

Enters: a state, capacities, the cuts of the children. Leaves: ``NodeOutcome``, and cuts of the
node's own value. Folded columns are left out of the program (``folding.py``). Three things are left
out at first and added where the solution violates them: lazy rows and the bounds of folded columns,
the cuts of the children, and the lifting of a gated exit's cuts.

Capacities are fixed here, so a child's cut ``theta >= a + g s + h c`` is the row
``theta - g s >= a + h c`` whose right side moves with ``c``. Exits that have the same child in
all members keep their rows for ever; the others have a few slots whose coefficients are rewritten
when the member changes, for deleting a row that is in the basis would make the next solve cold.

A *gated* exit (model.md section 2) has, for a gate at 0 or 1, the cuts of the right child alone;
each is lifted, ``cut of child - B gate`` or ``cut of other child - B' (1 - gate)``, when its row is
made, so that it holds at the other value of the gate too.
"""

from __future__ import annotations

import logging
from collections import Counter
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import Member, ValueGraph
from xlplan.solve.cuts import (
    CutBatch,
    CutPool,
    DualBound,
    ExitMultipliers,
    SharedMultipliers,
    lift_amount,
)
from xlplan.solve.folding import Expanded, Folding
from xlplan.solve.highs import FEASIBILITY_TOLERANCE, KeptModel
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.result import SolveResult
from xlplan.solve.row_matrix import RowMatrix
from xlplan.solve.tables import GraphTables

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_LOG = logging.getLogger(__name__)

MAX_ROUNDS = 60
"""Rounds of adding violated rows; what is left then only makes the value a little too low."""

CUT_TOLERANCE = 1e-9
"""Relative violation below which a child's cut is not added, for float rounding."""

DUAL_TOLERANCE = 1e-6
"""Relative difference of a cut and the solver's objective that makes us drop the basis."""

FACE_TOLERANCE = 1e-7
"""Reduced cost, relative to the largest cost, that keeps a column at its bound on the face."""

FEW_ROWS = 40
"""Up to so many violated rows are all added at once."""

WORST_PART = 8
"""Of more violated rows this part is added, the worst ones first."""

FIRST_SLOTS = 3
"""Slots for the cuts of a child that changes with the member; more are added when needed."""


@dataclass(frozen=True)
class NodeOutcome:
    """One solved node.

    value : true scale, own cost included; cost : own cost without the exits, true scale
    y (n_col,), theta (n_exit,), out_states (n_exit, n_state) clipped into their domain
    """

    value: float
    cost: float
    y: FloatArray
    theta: FloatArray
    out_states: FloatArray
    pi: FloatArray
    exits: ExitMultipliers
    exit_group: IntArray
    """(n,) group of each cut in ``exits``, -1 where it is lifted."""


@dataclass
class _CutRows:
    """Rows of the kept model that hold cuts of children; arrays grow by appending."""

    row: IntArray
    exit: IntArray
    intercept: FloatArray
    state_slope: FloatArray
    capacity_slope: FloatArray
    group: IntArray

    def append(self, other: _CutRows) -> None:
        """Puts rows behind."""
        for name in vars(self):
            setattr(self, name, np.concatenate([getattr(self, name), getattr(other, name)]))


class _ProgramRows:
    """Which program rows, and bounds of folded columns, are in the model, and where.

    program (n,) program row or -1; bounded (n,) fold whose column's bound it is, or -1; place (n,)
    row of the model; ``multiple`` times fold row ``multiple_fold`` is part of the
    ``multiple_row``-th of them; of_program, of_bound: the way back, -1 where not in the model.
    """

    def __init__(self, n_row: int, n_fold: int, rows: IntArray, expanded: Expanded) -> None:
        self.program = self.bounded = self.place = np.zeros(0, dtype=np.int64)
        self.multiple_row = self.multiple_fold = np.zeros(0, dtype=np.int64)
        self.multiple = np.zeros(0)
        self.of_program = np.full(n_row, -1, dtype=np.int64)
        self.of_bound = np.full(n_fold, -1, dtype=np.int64)
        none = np.full(len(rows), -1, dtype=np.int64)
        self.append(rows, none, np.arange(len(rows)), expanded)

    def __len__(self) -> int:
        return len(self.program)

    def append(self, rows: IntArray, folds: IntArray, places: IntArray, expanded: Expanded) -> None:
        """Puts rows behind."""
        new = len(self) + np.arange(len(rows))
        self.of_program[rows[rows >= 0]] = new[rows >= 0]
        self.of_bound[folds[folds >= 0]] = new[folds >= 0]
        self.program = np.concatenate([self.program, rows])
        self.bounded = np.concatenate([self.bounded, folds])
        self.place = np.concatenate([self.place, places])
        counts = np.diff(expanded.fold_start)
        self.multiple_row = np.concatenate([self.multiple_row, np.repeat(new, counts)])
        self.multiple_fold = np.concatenate([self.multiple_fold, expanded.fold])
        self.multiple = np.concatenate([self.multiple, expanded.multiple])


class NodeModel:
    """A family's program in HiGHS, and the cut rows of its children."""

    def __init__(
        self,
        graph: ValueGraph,
        tables: GraphTables,
        cache: MemberCache,
        pools: list[CutPool],
        i_family: int,
        bound: DualBound,
    ) -> None:
        family = graph.families[i_family]
        program = family.program
        self.graph, self.tables, self.cache, self.pools = graph, tables, cache, pools
        self.i_family, self.family, self.table = i_family, family, tables.families[i_family]
        self.bound = bound
        self.n_col, self.n_exit = program.n_col, len(family.exit_gate)
        self.n_state = self.table.n_state
        self.counts: Counter[str] = Counter()
        self._matrix = RowMatrix(program)
        self._theta_columns = family.exit_columns
        self._folding = Folding(program, self._matrix, self._theta_columns)
        kept = self._folding.kept
        self.n_kept = len(kept)
        # Column of the model that holds each program column; exits stand behind the kept ones.
        self._column_place = np.full(self.n_col, -1, dtype=np.int64)
        self._column_place[kept] = np.arange(self.n_kept)
        if self._theta_columns is not None:
            self._column_place[self._theta_columns] = self.n_kept + np.arange(self.n_exit)
        self._lower = np.concatenate([program.col_lower[kept], self.table.theta_lower])
        self._upper = np.concatenate([program.col_upper[kept], np.full(self.n_exit, np.inf)])
        self._cost = np.zeros(self.n_kept + self.n_exit)
        self._fold_side = np.zeros(len(self._folding))
        self._is_fold_free = np.zeros(len(self._folding), dtype=bool)
        is_fold_row = np.zeros(program.n_row, dtype=bool)
        is_fold_row[self._folding.row] = True
        loaded = np.flatnonzero(~program.is_lazy & ~is_fold_row)
        first = self._folding.expand_rows(loaded)
        self._rows = _ProgramRows(program.n_row, len(self._folding), loaded, first)
        self._lazy = np.flatnonzero(program.is_lazy)
        self._lazy_entries = self._matrix.entries(self._lazy)
        self._lazy_index = program.index[self._lazy_entries]
        self._lazy_value = program.value[self._lazy_entries]
        self._lazy_of_entry = np.repeat(
            np.arange(len(self._lazy)), np.diff(program.start)[self._lazy]
        )
        self._row_lower, self._row_upper = program.row_lower, program.row_upper
        self._low, self._high = program.row_lower[loaded], program.row_upper[loaded]
        self._model = KeptModel(
            family.name,
            self._cost,
            self._lower,
            self._upper,
            self._low,
            self._high,
            first.start,
            self._column_place[first.index],
            first.value,
        )
        self._out_places = self._column_place[family.out_columns]
        self._member_index = -1
        self._member: Member | None = None
        self._capacity = np.full(len(graph.capacity_lower), np.nan)
        n_capacity = len(graph.capacity_lower)
        self._cuts = _CutRows(
            row=np.zeros(0, dtype=np.int64),
            exit=np.zeros(0, dtype=np.int64),
            intercept=np.zeros(0),
            state_slope=np.zeros((0, self.n_state)),
            capacity_slope=np.zeros((0, n_capacity)),
            group=np.zeros(0, dtype=np.int64),
        )
        self._has_capacity = family.capacity_columns >= 0
        self._capacity_columns = family.capacity_columns[self._has_capacity]
        self._known: set[tuple[int, int, int, int]] = set()
        self._is_gated = np.array([bool(g) for g in family.exit_gate], dtype=bool)
        self._gate = np.zeros(self.n_exit)
        out = np.sort(family.out_columns, axis=1)
        # Whether an exit hands on one column as two components of the state.
        self._has_repeats = bool((out[:, 1:] == out[:, :-1]).any()) if out.size else False
        self._targets = self._find_targets() if self.table.is_fixed else []
        self._slots: dict[int, list[int]] = {}
        self._slot_members: dict[tuple[int, int, int], list[int]] = {}
        self._last_out = np.zeros((self.n_exit, self.n_state))
        self._lifts: dict[tuple[int, int, int], float] = {}

    @property
    def seconds_in_solver(self) -> float:
        """Wall time spent inside HiGHS."""
        return self._model.seconds

    def all_counts(self) -> Counter[str]:
        """Events counted here and in the kept model."""
        return self.counts + self._model.counts

    # -- solving -------------------------------------------------------------------------------

    def solve(
        self,
        i_member: int,
        state: FloatArray,
        capacity: FloatArray,
        cut_tolerance: float = 0.0,
        second_cost: FloatArray | None = None,
    ) -> NodeOutcome:
        """Value of one member at one point, with the cuts that the pools hold now.

        Parameters
        ----------
        i_member : int
        state : array, shape (n_state,)
        capacity : array, shape (n_capacity,)
        cut_tolerance : float, by how much the value may be too low because small violations of
            the children's cuts are left
        second_cost : array, shape (n_col,), minimised among the optimal points; None: any of them

        Returns
        -------
        NodeOutcome

        Raises SolverFailureError where HiGHS finds no optimum.
        """
        self._place(i_member, state, capacity)
        assert self._member is not None
        result = self._model.run()
        for _ in range(MAX_ROUNDS):
            y = self._point(result.col_value)
            n_new = self._add_lazy_rows(y)
            n_new += self._add_cuts(result, capacity, cut_tolerance)
            if not n_new:
                break
            result = self._model.run()
        else:
            self.counts["row rounds used up"] += 1
            y = self._point(result.col_value)
        if second_cost is not None:
            for _ in range(MAX_ROUNDS):
                y = self._point(self._second(result, second_cost))
                # The second point may break rows that the first one did not need.
                if not self._add_lazy_rows(y):
                    break
                result = self._model.run()
        return self._outcome(result, y, capacity)

    def _point(self, primal: FloatArray) -> FloatArray:
        """``y`` of the program, (n_col,), from the model's columns."""
        y = np.empty(self.n_col)
        y[self._folding.kept] = primal[: self.n_kept]
        if self._theta_columns is not None:
            y[self._theta_columns] = primal[self.n_kept :]
        if len(self._folding):
            self._folding.complete(y, self._fold_side)
        return y

    def _place(self, i_member: int, state: FloatArray, capacity: FloatArray) -> None:
        """Brings the kept model to a member, a state and capacities."""
        member = self.cache.get(self.i_family, i_member)
        kept = self._folding.kept
        lower, upper = self._lower.copy(), self._upper.copy()
        lower[: self.n_kept], upper[: self.n_kept] = member.col_lower[kept], member.col_upper[kept]
        columns = self._column_place[self._capacity_columns]
        lower[columns] = upper[columns] = capacity[self._has_capacity]
        given = member.in_columns >= 0
        columns = self._column_place[member.in_columns[given]]
        lower[columns] = upper[columns] = state[given]
        moved = np.flatnonzero((lower != self._lower) | (upper != self._upper))
        self._model.set_col_bounds(moved, lower[moved], upper[moved])
        self._lower, self._upper = lower, upper
        is_new_member = i_member != self._member_index
        if is_new_member:
            weight = member.exit_weight
            if self._theta_columns is not None:
                weight = weight + member.cost[self._theta_columns]
            cost = np.concatenate([member.cost[kept], weight])
            moved = np.flatnonzero(cost != self._cost)
            self._model.set_costs(moved, cost[moved])
            self._cost = cost
            self._row_lower, self._row_upper = member.row_lower, member.row_upper
            if len(self._folding):
                side = member.row_lower[self._folding.row]
                self._is_fold_free = ~np.isfinite(side)
                self._fold_side = np.where(self._is_fold_free, 0.0, side)
                columns = self._folding.column
                self._fold_sides = _with_tolerance(
                    np.where(self._is_fold_free, -np.inf, member.col_lower[columns]),
                    np.where(self._is_fold_free, np.inf, member.col_upper[columns]),
                )
            self._lazy_sides = _with_tolerance(
                member.row_lower[self._lazy], member.row_upper[self._lazy]
            )
            low, high = self._sides(member)
            moved = np.flatnonzero((low != self._low) | (high != self._high))
            self._model.set_row_bounds(self._rows.place[moved], low[moved], high[moved])
            self._low, self._high = low, high
            self._patch(member)
        if not np.array_equal(capacity, self._capacity):
            self._capacity = capacity.copy()
            for e in np.flatnonzero(self._is_gated):
                self._gate[e] = capacity[list(self.family.exit_gate[e])].sum()
            cuts = self._cuts
            sides = cuts.intercept + cuts.capacity_slope @ capacity
            self._model.set_row_bounds(cuts.row, sides, np.full(len(sides), np.inf))
        self._member, self._member_index = member, i_member
        if is_new_member and not self.table.is_fixed:
            self._fill_slots(member, capacity)

    def _sides(self, member: Member, begin: int = 0) -> tuple[FloatArray, FloatArray]:
        """Sides of the program's rows in the model from the ``begin``-th on."""
        rows, folding = self._rows, self._folding
        is_bound = rows.program[begin:] < 0
        program = np.maximum(rows.program[begin:], 0)
        low, high = member.row_lower[program], member.row_upper[program]
        if is_bound.any():
            folds = rows.bounded[begin:][is_bound]
            columns = folding.column[folds]
            free = self._is_fold_free[folds]
            low[is_bound] = np.where(free, -np.inf, member.col_lower[columns])
            high[is_bound] = np.where(free, np.inf, member.col_upper[columns])
        here = rows.multiple_row >= begin
        if here.any():
            at = rows.multiple_row[here] - begin
            fold = rows.multiple_fold[here]
            shift = np.bincount(at, rows.multiple[here] * self._fold_side[fold], len(low))
            lost = self._is_fold_free[fold]
            if lost.any() and (np.isfinite(low[at[lost]]) | np.isfinite(high[at[lost]])).any():
                raise ValueError(f"{self.family.name}: a folded column counts without its row")
            low, high = low + shift, high + shift
        return low, high

    def _patch(self, member: Member) -> None:
        """Matrix entries that differ between members."""
        patch = self.family.patch
        changed = np.flatnonzero(self._matrix.value[patch] != member.patch_value)
        if not len(changed):
            return
        for i in changed:
            row = self._rows.of_program[self.bound.patch_row[i]]
            if row >= 0:
                self._model.set_row_coefficients(
                    int(self._rows.place[row]),
                    self._column_place[self.bound.patch_column[i : i + 1]],
                    member.patch_value[i : i + 1],
                )
        self._matrix.value[patch] = member.patch_value
        self._lazy_value = self._matrix.value[self._lazy_entries]

    def _add_lazy_rows(self, y: FloatArray) -> int:
        """Adds lazy rows and bounds of folded columns that ``y`` violates; their number."""
        n_new = 0
        if len(self._lazy):
            activity = np.bincount(
                self._lazy_of_entry, self._lazy_value * y[self._lazy_index], len(self._lazy)
            )
            low, high = self._lazy_sides
            rows = self._worst(activity, low, high, self._rows.of_program[self._lazy])
            if len(rows):
                rows = self._lazy[rows]
                n_new += self._append_program_rows(rows, np.full(len(rows), -1, dtype=np.int64))
        if len(self._folding):
            value = y[self._folding.column]
            low, high = self._fold_sides
            folds = self._worst(value, low, high, self._rows.of_bound)
            if len(folds):
                n_new += self._append_program_rows(np.full(len(folds), -1, dtype=np.int64), folds)
        self.counts["lazy row"] += n_new
        return n_new

    @staticmethod
    def _worst(
        activity: FloatArray, low: FloatArray, high: FloatArray, place: IntArray
    ) -> IntArray:
        """The most violated rows that are not in the model yet.

        Where many are violated most of them follow from the worst ones (the voltage at the end of
        a line from that in its middle), and every row makes the later solves slower.
        """
        found = np.flatnonzero((activity > high) | (activity < low))
        found = found[place[found] < 0]
        if len(found) <= FEW_ROWS:
            return found
        by = np.maximum(activity[found] - high[found], low[found] - activity[found])
        size = np.where(by == activity[found] - high[found], high[found], low[found])
        order = np.argsort(-by / (1.0 + np.abs(size)), kind="stable")
        worst: IntArray = np.sort(found[order[: max(FEW_ROWS, len(found) // WORST_PART)]])
        return worst

    def _append_program_rows(self, rows: IntArray, folds: IntArray) -> int:
        """Adds program rows, or bounds of folded columns where ``rows`` is -1; their number."""
        assert self._member is not None
        if folds[0] >= 0:
            expanded = self._folding.expand_columns(folds)
        else:
            expanded = self._folding.expand_rows(rows)
        begin = len(self._rows)
        self._rows.append(rows, folds, self._model.n_row + np.arange(len(rows)), expanded)
        low, high = self._sides(self._member, begin)
        self._low, self._high = np.concatenate([self._low, low]), np.concatenate([self._high, high])
        places = self._column_place[expanded.index]
        self._model.add_rows(low, high, expanded.start, places, expanded.value)
        return len(rows)

    # -- cuts of the children ------------------------------------------------------------------

    def _find_targets(self) -> list[tuple[int, bool, IntArray, IntArray, IntArray]]:
        """Groups exits by child and state, so that a child's cuts are evaluated once.

        Returns (child family, whether it is the gated child, exits, target of each exit, map from
        the child's members to a target); a target is one child node asked at one state.
        """
        found: dict[tuple[int, bool, int], tuple[list[int], list[int], dict[int, int]]] = {}
        layers: dict[tuple[int, bool, int], int] = {}
        seen: dict[tuple[object, ...], tuple[int, bool, int]] = {}
        for is_gated, table in ((False, self.table.child), (True, self.table.child_if_gated)):
            for e in range(self.n_exit):
                i_child, i_member = int(table[e, 0]), int(table[e, 1])
                if i_member < 0:
                    continue
                columns = tuple(self.family.out_columns[e].tolist())
                full = (i_child, i_member, is_gated, columns)
                if full not in seen:
                    depth = layers.get((i_child, is_gated, i_member), 0)
                    layers[i_child, is_gated, i_member] = depth + 1
                    seen[full] = (i_child, is_gated, depth)
                exits, places, members = found.setdefault(seen[full], ([], [], {}))
                members.setdefault(i_member, len(members))
                exits.append(e)
                places.append(members[i_member])
        groups = []
        for (i_child, is_gated, _), (exits, places, members) in found.items():
            to_target = np.full(self.graph.families[i_child].n_member, -1, dtype=np.int64)
            for i_member, place in members.items():
                to_target[i_member] = place
            groups.append((i_child, is_gated, np.array(exits), np.array(places), to_target))
        return groups

    def _add_cuts(self, result: SolveResult, capacity: FloatArray, tolerance: float) -> int:
        """Adds the highest violated cut of every exit; their number."""
        if not self.n_exit:
            return 0
        assert self._member is not None
        weight = self._member.exit_weight
        total = weight.sum()
        if total <= 0.0:
            return 0
        theta = result.col_value[self.n_kept :]
        allowed = np.maximum(
            tolerance * self._member.scale / total, CUT_TOLERANCE * (1.0 + np.abs(theta))
        )
        states = result.col_value[self._out_places]
        if self.table.is_fixed:
            chosen = self._violated_fixed(states, theta, weight, allowed, capacity)
        else:
            chosen = self._violated_varying(states, theta, weight, allowed, capacity)
        if not chosen:
            return 0
        fresh = [item for item in chosen if item not in self._known]
        if self.table.is_fixed:
            self._known.update(fresh)
            self._append_rows(fresh, capacity)
            return len(fresh)
        return self._use_slots(chosen, result, capacity)

    def _violated_fixed(
        self,
        states: FloatArray,
        theta: FloatArray,
        weight: FloatArray,
        allowed: FloatArray,
        capacity: FloatArray,
    ) -> list[tuple[int, int, int, int]]:
        """(exit, child family, position in its pool, 1 if of the gated child) to add."""
        best = np.full(self.n_exit, -np.inf)
        choice: list[tuple[int, int, int] | None] = [None] * self.n_exit
        for i_child, is_gated, exits, places, to_target in self._targets:
            pool = self.pools[i_child]
            active = weight[exits] > 0.0
            if is_gated:
                active = active & (self._gate[exits] > 0.0)
            else:
                active = active & (self._gate[exits] < 1.0)
            if not pool.n or not active.any():
                continue
            n_target = int(places.max()) + 1
            target_state = np.zeros((n_target, self.n_state))
            target_state[places] = states[exits]
            cuts = pool.by_member(capacity)
            target = to_target[cuts.members]
            wanted = np.zeros(n_target + 1, dtype=bool)
            wanted[places[active]] = True
            used = np.flatnonzero(wanted[target])
            if not len(used):
                continue
            # What is wanted lies together: a plan from some period on needs the later ones.
            begin = int(cuts.start[used[0]])
            end = (
                int(cuts.start[used[-1] + 1]) if used[-1] + 1 < len(cuts.start) else len(cuts.order)
            )
            start = cuts.start[used[0] : used[-1] + 1] - begin
            target = target[used[0] : used[-1] + 1]
            counts = np.diff(start, append=end - begin)
            at = np.repeat(target_state[np.maximum(target, 0)], counts, axis=0)
            value = cuts.level[begin:end] + np.einsum("ij,ij->i", cuts.state_slope[begin:end], at)
            highest = np.maximum.reduceat(value, start)
            is_top = np.flatnonzero(value == np.repeat(highest, counts))
            # The oldest at ties.
            first = cuts.order[begin + is_top[np.searchsorted(is_top, start)]]
            top = np.full(n_target, -np.inf)
            position = np.full(n_target, -1, dtype=np.int64)
            here = target >= 0
            top[target[here]], position[target[here]] = highest[here], first[here]
            for e, place in zip(exits[active], places[active], strict=True):
                if position[place] < 0 or top[place] <= theta[e] + allowed[e]:
                    continue
                reach = top[place]
                if 0.0 < self._gate[e] < 1.0:
                    share = self._gate[e] if not is_gated else 1.0 - self._gate[e]
                    lift = self._lift(int(e), i_child, int(position[place]), is_gated)
                    reach -= lift * share
                if reach > theta[e] + allowed[e] and reach > best[e]:
                    best[e] = reach
                    choice[e] = (i_child, int(position[place]), int(is_gated))
        return [(e, *found) for e, found in enumerate(choice) if found is not None]

    def _lift(self, e: int, i_child: int, position: int, is_gated: bool) -> float:
        """``B`` of a cut of an exit's child against the cuts of its other child."""
        key = (e, position, int(is_gated))
        if key not in self._lifts:
            assert self._member is not None
            other = self._member.exit_child[e] if is_gated else self._member.exit_child_if_gated[e]
            pool, below = self.pools[i_child], self.pools[int(other[0])]
            places = below.positions(int(other[1]))
            floor = self.tables.families[int(other[0])].value_lower[int(other[1])]
            n_capacity = len(self._capacity)
            self._lifts[key] = lift_amount(
                float(pool.intercept[position]),
                pool.state_slope[position],
                pool.capacity_slope[position],
                np.concatenate([below.intercept[places], [floor]]),
                np.vstack([below.state_slope[places], np.zeros((1, self.n_state))]),
                np.vstack([below.capacity_slope[places], np.zeros((1, n_capacity))]),
                self.table.box,
                self.family.exit_gate[e],
                gate_is_one=not is_gated,
            )
        return self._lifts[key]

    def _cut_rows(self, chosen: list[tuple[int, int, int, int]]) -> _CutRows:
        """Chosen cuts, lifted where the exit is gated; ``row`` is left to the caller."""
        n, n_capacity = len(chosen), len(self._capacity)
        rows = _CutRows(
            row=np.zeros(n, dtype=np.int64),
            exit=np.array([c[0] for c in chosen], dtype=np.int64),
            intercept=np.zeros(n),
            state_slope=np.zeros((n, self.n_state)),
            capacity_slope=np.zeros((n, n_capacity)),
            group=np.full(n, -1, dtype=np.int64),
        )
        for i, (e, i_child, position, is_gated) in enumerate(chosen):
            pool = self.pools[i_child]
            rows.intercept[i] = pool.intercept[position]
            rows.state_slope[i] = pool.state_slope[position]
            rows.capacity_slope[i] = pool.capacity_slope[position]
            rows.group[i] = pool.group[position]
            if self._is_gated[e]:
                lift = self._lift(e, i_child, position, bool(is_gated))
                gate = list(self.family.exit_gate[e])
                rows.group[i] = -1
                if is_gated:  # cut - B' (1 - gate)
                    rows.intercept[i] -= lift
                    rows.capacity_slope[i, gate] += lift
                else:  # cut - B gate
                    rows.capacity_slope[i, gate] -= lift
        return rows

    def _append_rows(self, chosen: list[tuple[int, int, int, int]], capacity: FloatArray) -> None:
        """Rows ``theta - g s >= a + h c`` at the end of the model."""
        if not chosen:
            return
        rows = self._cut_rows(chosen)
        n = len(chosen)
        columns = np.hstack([self._out_places[rows.exit], (self.n_kept + rows.exit)[:, None]])
        values = np.hstack([-rows.state_slope, np.ones((n, 1))])
        kept = values != 0.0
        start = np.concatenate([[0], np.cumsum(kept.sum(axis=1))])
        rows.row[:] = self._model.n_row + np.arange(n)
        index, value = columns[kept], values[kept]
        if self._has_repeats:
            index, value, start = _merge_repeats(columns, values)
        self._model.add_rows(
            rows.intercept + rows.capacity_slope @ capacity,
            np.full(n, np.inf),
            start,
            index,
            value,
        )
        self._cuts.append(rows)
        self.counts["cut row"] += n

    # -- slots: children that change with the member -------------------------------------------

    def _fill_slots(self, member: Member, capacity: FloatArray) -> None:
        """Puts the new child's cuts into the slots: those used last time, or the best guess."""
        for e in range(self.n_exit):
            i_child, i_member = member.exit_child[e].tolist()
            slots = self._slots.setdefault(e, [])
            positions: list[int] = []
            if member.exit_weight[e] > 0.0 and i_member >= 0:
                positions = list(self._slot_members.get((e, i_child, i_member), []))
                pool = self.pools[i_child]
                places = pool.positions(i_member)
                if not positions and places:
                    level = pool.level(capacity)[places]
                    value = level + pool.state_slope[places] @ self._last_out[e]
                    positions = [places[int(np.argmax(value))]]
            if not positions:
                rows = self._cuts.row[slots]
                self._cuts.group[slots] = -2
                self._free_slots(rows)
                self._cuts.intercept[slots] = -np.inf
                continue
            while len(slots) < min(len(positions), 8):
                slots.append(len(self._cuts.row))
                self._append_rows([(e, i_child, positions[len(slots) - 1], 0)], capacity)
            # Slots that have nothing to hold repeat the first cut: a free row in the basis of
            # the solver would cost more iterations than a double one.
            for i, slot in enumerate(slots):
                self._write_slot(slot, e, i_child, positions[i if i < len(positions) else 0])
            self._set_slot_sides(slots, capacity)

    def _free_slots(self, rows: IntArray) -> None:
        self._model.set_row_bounds(rows, np.full(len(rows), -np.inf), np.full(len(rows), np.inf))

    def _write_slot(self, slot: int, e: int, i_child: int, position: int) -> None:
        """Overwrites one slot with one cut; its side is set by ``_set_slot_sides``."""
        new = self._cut_rows([(e, i_child, position, 0)])
        old = self._cuts.state_slope[slot]
        columns = self._out_places[e]
        moved = new.state_slope[0] != old
        if moved.any():
            if self._has_repeats:
                merged, inverse = np.unique(columns, return_inverse=True)
                total = np.bincount(inverse, weights=new.state_slope[0])
                self._model.set_row_coefficients(int(self._cuts.row[slot]), merged, -total)
            else:
                self._model.set_row_coefficients(
                    int(self._cuts.row[slot]), columns[moved], -new.state_slope[0][moved]
                )
        self._cuts.intercept[slot] = new.intercept[0]
        self._cuts.state_slope[slot] = new.state_slope[0]
        self._cuts.capacity_slope[slot] = new.capacity_slope[0]
        self._cuts.group[slot] = new.group[0]

    def _set_slot_sides(self, slots: list[int], capacity: FloatArray) -> None:
        cuts = self._cuts
        sides = cuts.intercept[slots] + cuts.capacity_slope[slots] @ capacity
        self._model.set_row_bounds(cuts.row[slots], sides, np.full(len(slots), np.inf))

    def _violated_varying(
        self,
        states: FloatArray,
        theta: FloatArray,
        weight: FloatArray,
        allowed: FloatArray,
        capacity: FloatArray,
    ) -> list[tuple[int, int, int, int]]:
        """Like ``_violated_fixed`` for children that change with the member."""
        assert self._member is not None
        chosen = []
        for e in np.flatnonzero(weight > 0.0):
            i_child, i_member = self._member.exit_child[e].tolist()
            if self._is_gated[e]:
                raise NotImplementedError("a gated exit whose children differ between members")
            pool = self.pools[i_child]
            places = pool.positions(i_member)
            if not places:
                continue
            value = pool.level(capacity)[places] + pool.state_slope[places] @ states[e]
            top = int(np.argmax(value))
            if value[top] > theta[e] + allowed[e]:
                chosen.append((int(e), i_child, places[top], 0))
        return chosen

    def _use_slots(
        self,
        chosen: list[tuple[int, int, int, int]],
        result: SolveResult,
        capacity: FloatArray,
    ) -> int:
        """Writes violated cuts into slots that are not tight, or into new ones."""
        assert self._member is not None
        n_used = 0
        for e, i_child, position, _ in chosen:
            slots = self._slots[e]
            group = int(self.pools[i_child].group[position])
            if any(self._cuts.group[slot] == group for slot in slots):
                continue  # it is there: what is left is the solver's tolerance
            duals = result.row_dual[self._cuts.row[slots]] if slots else np.zeros(0)
            counts = Counter(self._cuts.group[slots].tolist())
            idle = [
                slot
                for slot, dual in zip(slots, duals, strict=True)
                if dual <= 0.0 and counts[int(self._cuts.group[slot])] > 1
            ]
            loose = [
                slot
                for slot, dual in zip(slots, duals, strict=True)
                if dual <= 0.0 and slot not in idle
            ]
            # One cut per component of the state can be tight at once, beside the first ones.
            free = idle or (loose if len(slots) >= FIRST_SLOTS + self.n_state else [])
            if free:
                self._write_slot(free[0], e, i_child, position)
                self._set_slot_sides([free[0]], capacity)
            else:
                slots.append(len(self._cuts.row))
                self._append_rows([(e, i_child, position, 0)], capacity)
            n_used += 1
        return n_used

    def _remember_slots(self, result: SolveResult) -> None:
        """Keeps which cuts were tight, for the next time that this child comes."""
        assert self._member is not None
        for e, slots in self._slots.items():
            if not slots or self._member.exit_weight[e] <= 0.0:
                continue
            i_child, i_member = self._member.exit_child[e].tolist()
            duals = result.row_dual[self._cuts.row[slots]]
            pool = self.pools[i_child]
            tight = [
                pool.position_of(i_member, int(self._cuts.group[slot]))
                for slot, dual in zip(slots, duals, strict=True)
                if dual > 0.0
            ]
            if tight:
                self._slot_members[e, i_child, i_member] = sorted(set(tight))

    # -- what comes out ------------------------------------------------------------------------

    def _outcome(self, result: SolveResult, y: FloatArray, capacity: FloatArray) -> NodeOutcome:
        assert self._member is not None
        member, rows = self._member, self._rows
        theta = result.col_value[self.n_kept :]
        pi = np.zeros(len(self._row_lower))
        dual = result.row_dual[rows.place]
        is_row = rows.program >= 0
        pi[rows.program[is_row]] = dual[is_row]
        if len(self._folding):
            pi[self._folding.row] = np.bincount(
                rows.multiple_fold, rows.multiple * dual[rows.multiple_row], len(self._folding)
            )
        cuts = self._cuts
        cut_pi = np.maximum(result.row_dual[cuts.row], 0.0)
        used = np.flatnonzero((cut_pi > 0.0) & (member.exit_weight[cuts.exit] > 0.0))
        if not self.table.is_fixed:
            used = used[cuts.group[used] != -2]
            self._remember_slots(result)
        states = y[self.family.out_columns].reshape(self.n_exit, self.n_state)
        self._last_out = states
        box = self.table.box
        low = box.state_lower_matrix @ capacity
        high = np.maximum(box.state_upper_matrix @ capacity, low)
        return NodeOutcome(
            value=(result.objective + member.offset) / member.scale,
            cost=float(member.cost @ y + member.offset) / member.scale,
            y=y,
            theta=theta,
            out_states=np.clip(states, low, high),
            pi=pi,
            exits=ExitMultipliers(
                exit=cuts.exit[used],
                pi=cut_pi[used],
                intercept=cuts.intercept[used],
                state_slope=cuts.state_slope[used],
                capacity_slope=cuts.capacity_slope[used],
            ),
            exit_group=cuts.group[used],
        )

    def cut_from(self, outcome: NodeOutcome, i_member: int, group: int) -> CutBatch:
        """The cut of the solved member, first, and of later ones of a nested family."""
        member = self.cache.get(self.i_family, i_member)
        if self.bound.is_nested:
            return self.bound.nested_cuts(member, i_member, outcome.pi, outcome.exits, group)
        cuts = SharedMultipliers(
            outcome.exits.exit,
            outcome.exits.pi,
            outcome.exits.intercept[None],
            outcome.exits.state_slope[None],
            outcome.exits.capacity_slope[None],
        )
        found = self.bound.cuts_of(np.array([i_member]), outcome.pi, cuts, group)
        if found is not None:
            return found
        return self.bound.cut(member, outcome.pi, outcome.exits, i_member, group)

    def shared_cuts(self, outcome: NodeOutcome, members: IntArray, group: int) -> CutBatch | None:
        """Cuts of other members from the same multipliers; None where there are none.

        The multipliers of children's cuts go to the same-numbered cuts of the other's children;
        members that have none of that number are left out.
        """
        exits, table = outcome.exits, self.bound.table
        if table is None:
            return None
        n_cut = len(exits.exit)
        intercept = np.tile(exits.intercept, (len(members), 1))
        state_slope = np.tile(exits.state_slope, (len(members), 1, 1))
        capacity_slope = np.tile(exits.capacity_slope, (len(members), 1, 1))
        kept = np.ones(len(members), dtype=bool)
        if not self.table.is_fixed and n_cut:
            now = table.numbers(members)
            for i in range(n_cut):
                e, number = int(exits.exit[i]), int(outcome.exit_group[i])
                # Without a child the multiplier is scaled to nothing.
                has_child = (now.exit_child[:, e, 1] >= 0) & (now.exit_weight[:, e] > 0.0)
                for i_child in np.unique(now.exit_child[has_child, e, 0]).tolist():
                    pool = self.pools[i_child]
                    here = np.flatnonzero(has_child & (now.exit_child[:, e, 0] == i_child))
                    position = np.array(
                        [pool.position_of(m, number) for m in now.exit_child[here, e, 1].tolist()],
                        dtype=np.int64,
                    )
                    kept[here[position < 0]] = False
                    intercept[here, i] = pool.intercept[position]
                    state_slope[here, i] = pool.state_slope[position]
                    capacity_slope[here, i] = pool.capacity_slope[position]
        if not kept.any():
            return None
        cuts = SharedMultipliers(
            exits.exit, exits.pi, intercept[kept], state_slope[kept], capacity_slope[kept]
        )
        return self.bound.cuts_of(members[kept], outcome.pi, cuts, group)

    def forget_basis(self) -> None:
        """The next solve starts cold."""
        self._model.forget_basis()

    def _second(self, result: SolveResult, second_cost: FloatArray) -> FloatArray:
        """Primal point that is best by a second cost among the optimal ones.

        Columns with a reduced cost and rows with a multiplier stay at their sides: that is the
        optimal face. Only bounds and costs change, so the model is as before afterwards.
        """
        n_all = self.n_kept + self.n_exit
        if second_cost[self._folding.column].any():
            raise ValueError("a folded column has a second cost")
        size = max(1.0, float(np.abs(self._cost).max(initial=0.0))) * FACE_TOLERANCE
        value = np.clip(result.col_value, self._lower, self._upper)
        columns = np.flatnonzero(np.abs(self._model.column_duals()) > size)
        rows = np.flatnonzero(np.abs(result.row_dual) > size)
        low, high = self._model_sides()
        dual = result.row_dual[rows]
        side = np.where(dual > 0.0, low[rows], high[rows])
        rows, side = rows[np.isfinite(side)], side[np.isfinite(side)]
        everything = np.arange(n_all)
        kept_cost = second_cost[self._folding.kept]
        self._model.set_col_bounds(columns, value[columns], value[columns])
        self._model.set_row_bounds(rows, side, side)
        self._model.set_costs(everything, np.concatenate([kept_cost, np.zeros(self.n_exit)]))
        again = self._model.run()
        self._model.set_costs(everything, self._cost)
        self._model.set_row_bounds(rows, low[rows], high[rows])
        self._model.set_col_bounds(columns, self._lower[columns], self._upper[columns])
        self.counts["second objective"] += 1
        return again.col_value

    def _model_sides(self) -> tuple[FloatArray, FloatArray]:
        """Sides of every row of the kept model, in its order."""
        low = np.full(self._model.n_row, -np.inf)
        high = np.full(self._model.n_row, np.inf)
        low[self._rows.place], high[self._rows.place] = self._low, self._high
        low[self._cuts.row] = self._cuts.intercept + self._cuts.capacity_slope @ self._capacity
        return low, high


def _with_tolerance(low: FloatArray, high: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Sides beyond which the solver would see a violation."""
    with np.errstate(invalid="ignore"):
        wide_low = low - FEASIBILITY_TOLERANCE * (1.0 + np.abs(low))
        wide_high = high + FEASIBILITY_TOLERANCE * (1.0 + np.abs(high))
    return wide_low, wide_high


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
