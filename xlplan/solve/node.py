"""One family's linear program kept warm: members, states and capacities change, the basis stays.

Enters: a state, capacities, the cuts of the children. Leaves: ``NodeOutcome``, and cuts of the
node's own value. Folded columns are left out of the program (``folding.py``). Three things are left
out at first and added where the solution violates them: lazy rows and the bounds of folded columns
(``node_rows.py``), the cuts of the children, and the lifting of a gated exit's cuts
(``node_children.py``).
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import ValueGraph
from xlplan.solve.cut_pool import CutBatch, CutPool, joined
from xlplan.solve.cuts import ChildMultipliers, DualBound, ExitMultipliers
from xlplan.solve.folding import Folding
from xlplan.solve.highs import FEASIBILITY_TOLERANCE, KeptModel
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.member_table import Numbers
from xlplan.solve.node_children import ChildRows
from xlplan.solve.node_rows import LazyRows, Now, ProgramRows
from xlplan.solve.result import SolveResult
from xlplan.solve.row_matrix import RowMatrix
from xlplan.solve.tables import GraphTables

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]

MAX_ROUNDS = 60
"""Rounds of adding violated rows; what is left then only makes the value a little too low."""

DUAL_TOLERANCE = 1e-6
"""Relative difference of a cut and the solver's objective that makes us drop the basis."""

FACE_TOLERANCE = 1e-7
"""Reduced cost, relative to the largest cost, that keeps a column at its bound on the face."""

FEW_ROWS = 40
"""Up to so many violated rows are all added at once."""

MOST_PAIRS = 1024
"""So many cuts of other members are made in one pass over arrays."""

WORST_PART = 8
"""Of more violated rows this part is added, the worst ones first."""


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
        self.cache, self.pools = cache, pools
        self.i_family, self.family, self.table = i_family, family, tables.families[i_family]
        self.bound = bound
        self.n_col, self.n_exit = program.n_col, len(family.exit_gate)
        self.counts: Counter[str] = Counter()
        self._matrix = RowMatrix(program, is_changed=len(family.patch) > 0)
        self._theta_columns = family.exit_columns
        self._folding = Folding(program, self._matrix, self._theta_columns)
        kept = self._folding.kept
        self.n_kept = len(kept)
        # Column of the model that holds each program column; exits stand behind the kept ones.
        self._column_place = np.full(self.n_col, -1, dtype=np.int32)
        self._column_place[kept] = np.arange(self.n_kept)
        if self._theta_columns is not None:
            self._column_place[self._theta_columns] = self.n_kept + np.arange(self.n_exit)
        self._lazy = LazyRows(np.flatnonzero(program.is_lazy), self._matrix)
        self._find_differences()
        now = self._now
        self._lower = np.concatenate([now.col_lower[kept], self.table.theta_lower])
        self._upper = np.concatenate([now.col_upper[kept], np.full(self.n_exit, np.inf)])
        self._cost = np.concatenate([now.cost[kept], np.zeros(self.n_exit)])
        is_fold_row = np.zeros(program.n_row, dtype=bool)
        is_fold_row[self._folding.row] = True
        loaded = np.flatnonzero(~program.is_lazy & ~is_fold_row)
        first = self._folding.expand_rows(loaded)
        self._rows = ProgramRows(
            family.name, self._folding, self._differs_row, self._differs_column
        )
        none = np.full(len(loaded), -1)
        low, high = self._rows.append(loaded, none, np.arange(len(loaded)), first, now)
        self._model = KeptModel(
            family.name,
            self._cost,
            self._lower,
            self._upper,
            low,
            high,
            first.start,
            self._column_place[first.index],
            first.value,
        )
        self._out_places = self._column_place[family.out_columns]
        self._children = ChildRows(
            graph, tables, pools, i_family, self._model, self._out_places, self.n_kept
        )
        self._member_index = -1
        self._numbers: Numbers | None = None
        has_capacity = family.capacity_columns >= 0
        self._has_capacity = has_capacity
        self._capacity_places = self._column_place[family.capacity_columns[has_capacity]]
        patched_rows = bound.patch_row
        self._is_lazy_patched = bool(program.is_lazy[patched_rows].any())

    def _find_differences(self) -> None:
        """Where members differ: everywhere, unless there is a table of it."""
        table, program = self.bound.table, self.family.program
        self._differs_column = np.ones(program.n_col, dtype=bool)
        self._differs_row = np.ones(program.n_row, dtype=bool)
        first = self.cache.get(self.i_family, 0)
        if table is not None:
            self._differs_column[:] = self._differs_row[:] = False
            self._differs_column[table.columns] = self._differs_row[table.rows] = True
        self._now = Now(
            first.cost.copy(),
            first.col_lower.copy(),
            first.col_upper.copy(),
            first.row_lower.copy(),
            first.row_upper.copy(),
            fold_side=np.zeros(0),
            is_fold_free=np.zeros(0, dtype=bool),
        )
        self._now.fold(self._folding)
        kept = self._folding.kept
        self._moving = np.flatnonzero(self._differs_column[kept])
        """Columns of the model whose bounds and costs may change with the member."""
        self._moving_column = kept[self._moving]
        self._do_folds_move = bool(self._differs_row[self._folding.row].any())
        self._do_fold_bounds_move = bool(self._differs_column[self._folding.column].any())
        self._do_lazy_rows_move = bool(self._differs_row[self._lazy.row].any())
        self._take_sides()

    def _take_sides(self) -> None:
        """Sides of what is not in the model, as it is checked."""
        now, lazy = self._now, self._lazy.row
        self._fold_sides = _with_tolerance(*now.fold_bounds(self._folding))
        self._lazy_sides = _with_tolerance(now.row_lower[lazy], now.row_upper[lazy])

    @property
    def seconds_in_solver(self) -> float:
        """Wall time spent inside HiGHS."""
        return self._model.seconds

    def all_counts(self) -> Counter[str]:
        """Events counted here and in the kept model."""
        return self.counts + self._children.counts + self._model.counts

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
        assert self._numbers is not None
        result = self._model.run()
        for _ in range(MAX_ROUNDS):
            y = self._point(result.col_value)
            n_new = self._add_lazy_rows(y)
            if self.n_exit:
                n_new += self._children.add_violated(
                    result.col_value, result.row_dual, self._numbers, cut_tolerance
                )
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
            self._folding.complete(y, self._now.fold_side)
        return y

    def _place(self, i_member: int, state: FloatArray, capacity: FloatArray) -> None:
        """Brings the kept model to a member, a state and capacities."""
        is_new_member = i_member != self._member_index
        if is_new_member:
            self._take(i_member)
        lower, upper, now, moving = self._lower.copy(), self._upper.copy(), self._now, self._moving
        if is_new_member:
            lower[moving] = now.col_lower[self._moving_column]
            upper[moving] = now.col_upper[self._moving_column]
        lower[self._capacity_places] = upper[self._capacity_places] = capacity[self._has_capacity]
        lower[self._in_places] = upper[self._in_places] = state[self._is_given]
        moved = ((lower != self._lower) | (upper != self._upper)).nonzero()[0]
        self._model.set_col_bounds(moved, lower[moved], upper[moved])
        self._lower, self._upper = lower, upper
        self._children.set_capacity(capacity)
        if is_new_member:
            assert self._numbers is not None
            self._children.set_member(self._numbers)

    def _take(self, i_member: int) -> None:
        """Takes another member's costs, sides and matrix entries into the model."""
        table, now = self.bound.table, self._now
        member = None if table is not None else self.cache.get(self.i_family, i_member)
        if table is not None:
            numbers = table.one(i_member)
            now.cost[table.columns] = numbers.cost
            now.col_lower[table.columns] = numbers.col_lower
            now.col_upper[table.columns] = numbers.col_upper
            now.row_lower[table.rows] = numbers.row_lower
            now.row_upper[table.rows] = numbers.row_upper
            into = table.first.in_columns
        else:
            assert member is not None
            numbers, into = Numbers.of(member), member.in_columns
            now.cost, now.col_lower, now.col_upper = member.cost, member.col_lower, member.col_upper
            now.row_lower, now.row_upper = member.row_lower, member.row_upper
        self._numbers, self._member_index = numbers, i_member
        self._is_given = into >= 0
        self._in_places = self._column_place[into[self._is_given]]
        cost = self._cost.copy()
        cost[self._moving] = now.cost[self._moving_column]
        cost[self.n_kept :] = numbers.exit_weight
        if self._theta_columns is not None:
            cost[self.n_kept :] += now.cost[self._theta_columns]
        moved = (cost != self._cost).nonzero()[0]
        self._model.set_costs(moved, cost[moved])
        self._cost = cost
        was_free = now.is_fold_free
        if self._do_folds_move:
            now.fold(self._folding)
        is_changed = self._do_fold_bounds_move or self._do_lazy_rows_move
        if is_changed or not np.array_equal(was_free, now.is_fold_free):
            self._take_sides()
        moved = self._rows.move(now)
        rows = self._rows
        self._model.set_row_bounds(rows.place[moved], rows.low[moved], rows.high[moved])
        self._patch(numbers.patch_value)

    def _patch(self, value: FloatArray) -> None:
        """Matrix entries that differ between members."""
        patch = self.family.patch
        changed = (self._matrix.value[patch] != value).nonzero()[0]
        if not len(changed):
            return
        row = self._rows.of_program[self.bound.patch_row[changed]]
        is_here = row >= 0
        here = changed[is_here]
        self._model.set_coefficients(
            self._rows.place[row[is_here]],
            self._column_place[self.bound.patch_column[here]],
            value[here],
        )
        self._matrix.value[patch] = value
        if self._is_lazy_patched:
            self._lazy.refresh()

    def _add_lazy_rows(self, y: FloatArray) -> int:
        """Adds lazy rows and bounds of folded columns that ``y`` violates; their number."""
        n_new = 0
        if len(self._lazy):
            low, high = self._lazy_sides
            place = self._rows.of_program[self._lazy.row]
            at = self._worst(self._lazy.activity(y), low, high, place)
            if len(at):
                rows = self._lazy.row[at]
                n_new += self._append_program_rows(rows, np.full(len(rows), -1))
        if len(self._folding):
            value = y[self._folding.column]
            low, high = self._fold_sides
            folds = self._worst(value, low, high, self._rows.of_bound)
            if len(folds):
                n_new += self._append_program_rows(np.full(len(folds), -1), folds)
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
        found = ((activity > high) | (activity < low)).nonzero()[0]
        if len(found):
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
        if folds[0] >= 0:
            expanded = self._folding.expand_columns(folds)
        else:
            expanded = self._folding.expand_rows(rows)
        places = self._model.n_row + np.arange(len(rows))
        low, high = self._rows.append(rows, folds, places, expanded, self._now)
        columns = self._column_place[expanded.index]
        self._model.add_rows(low, high, expanded.start, columns, expanded.value)
        return len(rows)

    # -- what comes out ------------------------------------------------------------------------

    def _outcome(self, result: SolveResult, y: FloatArray, capacity: FloatArray) -> NodeOutcome:
        assert self._numbers is not None
        now, dual = self._numbers, result.row_dual
        states = y[self.family.out_columns].reshape(self.n_exit, self.table.n_state)
        exits, exit_group = self._children.used(dual, states, now)
        box = self.table.box
        low = box.state_lower_matrix @ capacity
        high = np.maximum(box.state_upper_matrix @ capacity, low)
        return NodeOutcome(
            value=float((result.objective + now.offset) / now.scale),
            cost=float((self._now.cost @ y + now.offset) / now.scale),
            y=y,
            theta=result.col_value[self.n_kept :],
            out_states=np.minimum(np.maximum(states, low), high),
            pi=self._rows.multipliers(dual),
            exits=exits,
            exit_group=exit_group,
        )

    def cuts_from(
        self, outcomes: Sequence[NodeOutcome], members: Sequence[int], groups: Sequence[int]
    ) -> tuple[CutBatch, IntArray]:
        """Cuts of solved members, and of later ones of a nested family.

        Returns
        -------
        the cuts, and the position of each outcome's own among them, (n_outcome,)
        """
        if self.bound.is_nested or self.bound.table is None:
            parts = [
                self._cut_alone(outcome, member, group)
                for outcome, member, group in zip(outcomes, members, groups, strict=True)
            ]
            lengths = [len(part) for part in parts]
            return joined(parts), np.cumsum([0, *lengths[:-1]])
        n = np.arange(len(outcomes))
        exits = [outcome.exits for outcome in outcomes]
        children = ChildMultipliers(
            np.repeat(n, [len(e.exit) for e in exits]),
            *(
                np.concatenate([getattr(e, name) for e in exits])
                for name in ("exit", "pi", "intercept", "state_slope", "capacity_slope")
            ),
        )
        found = self.bound.cuts_of_pairs(
            np.array([o.pi for o in outcomes]), n, np.array(members), children, np.array(groups)
        )
        assert found is not None
        cuts, is_valid = found
        if is_valid.all():
            return cuts, n
        parts = [
            cuts.take(n[i : i + 1])
            if is_valid[i]
            else self._cut_alone(outcomes[i], members[i], groups[i])
            for i in n.tolist()
        ]
        return joined(parts), n

    def cut_from(self, outcome: NodeOutcome, i_member: int, group: int) -> CutBatch:
        """The cut of the solved member, first, and of later ones of a nested family."""
        return self.cuts_from([outcome], [i_member], [group])[0]

    def _cut_alone(self, outcome: NodeOutcome, i_member: int, group: int) -> CutBatch:
        member = self.cache.get(self.i_family, i_member)
        if self.bound.is_nested:
            return self.bound.nested_cuts(member, i_member, outcome.pi, outcome.exits, group)
        return self.bound.cut(member, outcome.pi, outcome.exits, i_member, group)

    def shared_cuts(
        self, outcomes: Sequence[NodeOutcome], shared: Sequence[IntArray], groups: Sequence[int]
    ) -> tuple[CutBatch, IntArray] | None:
        """Cuts of other members from the multipliers of solved ones; None where there are none.

        The multipliers of children's cuts go to the same-numbered cuts of the other's children;
        members that have none of that number are left out.

        Parameters
        ----------
        outcomes, groups : solved nodes, and the numbers of their cuts
        shared : per outcome, members (n,) for which its multipliers are tried

        Returns
        -------
        the cuts, and the outcome that each came from, (n_cut,)
        """
        if self.bound.table is None:
            return None
        batches, origins = [], []
        for part in _parts([len(members) for members in shared]):
            found = self._shared_part(outcomes[part], shared[part], groups[part])
            if found is not None:
                batches.append(found[0])
                origins.append(found[1] + part.start)
        return (joined(batches), np.concatenate(origins)) if batches else None

    def _shared_part(
        self, outcomes: Sequence[NodeOutcome], shared: Sequence[IntArray], groups: Sequence[int]
    ) -> tuple[CutBatch, IntArray] | None:
        table = self.bound.table
        assert table is not None
        counts = np.array([len(members) for members in shared])
        origin = np.repeat(np.arange(len(outcomes)), counts)
        members = np.concatenate(shared)
        # One entry for each pair of a member and a child's cut of the outcome it shares.
        n_cut = np.array([len(o.exits.exit) for o in outcomes])
        n_entry = n_cut[origin]
        pair = np.repeat(np.arange(len(members)), n_entry)
        first = np.cumsum(n_entry) - n_entry
        at = np.arange(len(pair)) - first[pair] + (np.cumsum(n_cut) - n_cut)[origin[pair]]
        exits = [o.exits for o in outcomes]
        exit_ = np.concatenate([e.exit for e in exits])[at]
        pi = np.concatenate([e.pi for e in exits])[at]
        intercept = np.concatenate([e.intercept for e in exits])[at]
        state_slope = np.concatenate([e.state_slope for e in exits])[at]
        capacity_slope = np.concatenate([e.capacity_slope for e in exits])[at]
        kept = np.ones(len(members), dtype=bool)
        if not self.table.is_fixed and len(pair):
            number = np.concatenate([o.exit_group for o in outcomes])[at]
            weight, child = table.exits(members)
            weight, child = weight[pair, exit_], child[pair, exit_]
            # Without a child the multiplier is scaled to nothing.
            has_child = (child[:, 1] >= 0) & (weight > 0.0)
            for i_child in np.unique(child[has_child, 0]).tolist():
                pool = self.pools[i_child]
                here = (has_child & (child[:, 0] == i_child)).nonzero()[0]
                position = pool.positions_of(child[here, 1], number[here])
                kept[pair[here[position < 0]]] = False
                intercept[here] = pool.intercept[position]
                state_slope[here] = pool.state_slope[position]
                capacity_slope[here] = pool.capacity_slope[position]
        if not kept.any():
            return None
        new_pair = np.cumsum(kept) - 1
        stays = kept[pair]
        children = ChildMultipliers(
            new_pair[pair[stays]],
            exit_[stays],
            pi[stays],
            intercept[stays],
            state_slope[stays],
            capacity_slope[stays],
        )
        origin, members = origin[kept], members[kept]
        found = self.bound.cuts_of_pairs(
            np.array([o.pi for o in outcomes]), origin, members, children, np.array(groups)[origin]
        )
        assert found is not None
        cuts, is_valid = found
        return (cuts, origin) if is_valid.all() else (cuts.take(is_valid), origin[is_valid])

    def rest(self) -> None:
        """Gives back the solver's working memory until the next solve."""
        self._model.rest()

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
        low[self._rows.place], high[self._rows.place] = self._rows.low, self._rows.high
        rows, sides = self._children.sides()
        low[rows] = sides
        return low, high


def _parts(counts: Sequence[int]) -> list[slice]:
    """Consecutive outcomes whose pairs are worked out together: arrays of a bounded size."""
    parts, begin, n = [], 0, 0
    for i, count in enumerate(counts):
        if n and n + count > MOST_PAIRS:
            parts.append(slice(begin, i))
            begin, n = i, 0
        n += count
    if n:
        parts.append(slice(begin, len(counts)))
    return parts


def _with_tolerance(low: FloatArray, high: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Sides beyond which the solver would see a violation."""
    with np.errstate(invalid="ignore"):
        wide_low = low - FEASIBILITY_TOLERANCE * (1.0 + np.abs(low))
        wide_high = high + FEASIBILITY_TOLERANCE * (1.0 + np.abs(high))
    return wide_low, wide_high
