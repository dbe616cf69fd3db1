"""One family's linear program kept warm: members, states and capacities change, the basis stays.

Enter: states, capacities, the cuts of the children. Leaves: ``NodeOutcome``, from whose multipliers
``node_cuts.py`` makes cuts. Folded columns are left out of the program (``folding.py``). Three
things are left out at first and added where the solution violates them: lazy rows and the bounds of
folded columns (``node_rows.py``), the cuts of the children, and the lifting of a gated exit's cuts
(``node_children.py``).

What moves the model from point to point is worked out for a whole run of points, and so is what
comes out; missed rows are looked for in blocks of them: a call of NumPy costs as much for one point
as for ten. Only the solver and the children's cuts go point by point.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import ValueGraph
from xlplan.solve.cut_pool import CutPool
from xlplan.solve.cuts import DualBound, ExitMultipliers
from xlplan.solve.folding import Folding
from xlplan.solve.highs import FEASIBILITY_TOLERANCE, KeptModel, SolverFailureError
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.member_table import Numbers
from xlplan.solve.node_children import ChildRows
from xlplan.solve.node_rows import Differences, LazyRows, Now, ProgramRows, rows_of
from xlplan.solve.node_slots import Held, SlotRows
from xlplan.solve.result import SolveResult
from xlplan.solve.row_matrix import RowMatrix, way_back
from xlplan.solve.tables import GraphTables

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]
BoolArray = NDArray[np.bool_]

MAX_ROUNDS = 60
"""Rounds of adding violated rows; what is left then only makes the value a little too low."""

DUAL_TOLERANCE = 1e-6
"""Relative difference of a cut and the solver's objective that makes us drop the basis."""

FEW_ROWS = 40
"""Up to so many violated rows are all added at once."""

MOST_IN_BLOCK = 16
"""So many points are solved before the lazy rows that they break are looked for."""

MANY_LAZY_ROWS = 10_000
"""Programs with more lazy rows are solved point by point: calls of NumPy cost little beside the
work there, and solving a point again for its rows costs much."""

MOST_PREPARED, FEW_PREPARED = 64, 8
"""So many points are prepared together, the few in such programs, for the sake of memory."""

WORST_PART = 8
"""Of more violated rows this part is added, the worst ones first."""

LEAST_SCALE = 2.0**-10
"""Members whose objective is scaled by less are solved at a scale near 1: the solver's tolerances
are absolute, and costs of a plan that is reached once in a million times would be below them."""


@dataclass(frozen=True)
class NodePoint:
    """A member, and where its value is asked for.

    state (n_state,), capacity (n_capacity,); cut_tolerance : by how much the value may be too low
    because small violations of the children's cuts are left; second_cost (n_col,), minimised among
    the optimal points, or None: any of them
    """

    member: int
    state: FloatArray
    capacity: FloatArray
    cut_tolerance: float = 0.0
    second_cost: FloatArray | None = None


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


@dataclass(frozen=True)
class _Change:
    """What differs between the model and k points, or between these.

    whole : arrays (k, n_all) of what may differ; places (n,) : of the model, where it does; values
    (k, n). So each point's numbers go to the solver without being compared in between.
    """

    whole: tuple[FloatArray, ...]
    places: NDArray[np.int32]
    values: tuple[FloatArray, ...]

    @staticmethod
    def between(
        places: IntArray, before: Sequence[FloatArray], whole: tuple[FloatArray, ...]
    ) -> _Change:
        """From what stands in the model, (n_all,) each, and what is wanted."""
        moves = np.zeros(len(places), dtype=bool)
        for old, new in zip(before, whole, strict=True):
            moves |= (new != old).any(axis=0)
        at = moves.nonzero()[0]
        values = tuple(v.take(at, axis=1) for v in whole)
        return _Change(whole, places[at].astype(np.int32), values)

    def extended(self, places: IntArray, whole: tuple[FloatArray, ...]) -> _Change:
        """More of the model behind, which stands at one of the points."""
        more = _Change.between(places, [array[0] for array in whole], whole)
        return _Change(
            _beside(self.whole, whole),
            np.concatenate([self.places, more.places]),
            _beside(self.values, more.values),
        )


def _beside(left: tuple[FloatArray, ...], right: tuple[FloatArray, ...]) -> tuple[FloatArray, ...]:
    return tuple(np.hstack(pair) for pair in zip(left, right, strict=True))


@dataclass
class _Run:
    """Points solved one after the other, and what the model is brought to for each of them.

    now, members : numbers of the members, together and one by one; factors (k,) : of the
    objective, as the model has it; bounds, costs, sides : of the model's columns and rows;
    fold_low, fold_high (k or 1, n_fold), lazy_low, lazy_high (k or 1, n_lazy): sides beyond which
    a row is added; primal (k, n_model_col), y (k, n_col): the points found, in the columns of the
    model and of the program
    """

    points: Sequence[NodePoint]
    now: Now
    members: Sequence[Numbers]
    factors: FloatArray
    bounds: _Change
    costs: _Change
    sides: _Change
    fold_low: FloatArray
    fold_high: FloatArray
    lazy_low: FloatArray
    lazy_high: FloatArray
    primal: FloatArray
    y: FloatArray


@dataclass(frozen=True)
class _Solved:
    """What the solver says about one point, and which cuts of the children were in the model."""

    value: float
    theta: FloatArray
    row_dual: FloatArray
    held: Held


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
        self.cache = cache
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
        first = cache.get(i_family, 0)
        self._differences = Differences(first, bound.table)
        scales = [cache.get(i_family, i).scale for i in (0, family.n_member - 1)]
        self._is_rescaled = min(scales) < LEAST_SCALE
        self._find_moving(first.in_columns)
        self._rows = ProgramRows(family.name, self._folding, self._differences)
        # The model begins at member 0; what its first point asks for is moved there.
        now = self._now([0])
        lower = np.concatenate([first.col_lower[kept], self.table.theta_lower])
        upper = np.concatenate([first.col_upper[kept], np.full(self.n_exit, np.inf)])
        cost = np.concatenate([first.cost[kept], np.zeros(self.n_exit)])
        self._lower, self._upper = lower[self._moving], upper[self._moving]
        self._cost = cost[self._costing]
        is_fold_row = np.zeros(program.n_row, dtype=bool)
        is_fold_row[self._folding.row] = True
        loaded = np.flatnonzero(~program.is_lazy & ~is_fold_row)
        rows = self._folding.expand_rows(loaded)
        none = np.full(len(loaded), -1)
        low, high, _ = self._rows.append(loaded, none, np.arange(len(loaded)), rows, now)
        self._model = KeptModel(
            family.name,
            cost,
            lower,
            upper,
            low[0],
            high[0],
            rows.start,
            self._column_place[rows.index],
            rows.value,
        )
        self._out_places = self._column_place[family.out_columns]
        self._children: ChildRows | SlotRows
        parts = (i_family, self._model, self._out_places, self.n_kept)
        if self.table.is_fixed:
            self._children = ChildRows(graph, tables, pools, *parts)
        else:
            self._children = SlotRows(graph, pools, *parts)
        self._member_index = -1
        self._n_block, self._last_capacity = 1, np.zeros(0)
        is_lazy_patched = bool(program.is_lazy[bound.patch_row].any())
        is_large = len(self._lazy) > MANY_LAZY_ROWS
        # Patched lazy rows are those of one member at a time.
        self._most_in_block = 1 if is_large or is_lazy_patched else MOST_IN_BLOCK
        self._most_prepared = FEW_PREPARED if is_large else MOST_PREPARED
        if bound.table is None:
            self._most_in_block = self._most_prepared = 1
        self._is_lazy_patched = is_lazy_patched

    def _find_moving(self, in_columns: IntArray) -> None:
        """Columns of the model whose bounds or costs may change, and how to read them."""
        family, kept, differences = self.family, self._folding.kept, self._differences
        has_capacity = family.capacity_columns >= 0
        self._has_capacity = has_capacity
        capacities = family.capacity_columns[has_capacity]
        is_moving = differences.column_place >= 0
        self._differing = np.flatnonzero(is_moving)
        is_moving[capacities] = True
        is_moving[in_columns[in_columns >= 0]] = True
        self._moving = np.flatnonzero(is_moving[kept])
        """Columns of the model whose bounds may change."""
        columns = kept[self._moving]
        self._bounds = differences.bounds(columns)
        self._place_in_moving = way_back(columns, self.n_col)
        self._capacity_at = self._place_in_moving[capacities]
        is_costing = differences.column_place[kept] >= 0
        if self._is_rescaled:
            is_costing |= differences.first.cost[kept] != 0.0
        costing = np.flatnonzero(is_costing)
        self._costs = differences.costs(kept[costing])
        self._n_costing = len(costing)
        self._costing = np.concatenate([costing, self.n_kept + np.arange(self.n_exit)])
        """Columns of the model whose costs may change, the exits last."""
        if self._theta_columns is not None:
            self._theta_costs = differences.costs(self._theta_columns)
        self._fold_rows = differences.sides(self._folding.row)
        self._fold_bounds = differences.bounds(self._folding.column)
        self._lazy_sides = differences.sides(self._lazy.row)
        self._limits: tuple[FloatArray, FloatArray, FloatArray, FloatArray] | None = None
        self._do_limits_vary = (
            self._fold_rows.does_vary or self._fold_bounds.does_vary or self._lazy_sides.does_vary
        )
        self._same_cost = differences.first.cost.copy()
        self._same_cost[self._differing] = 0.0

    @property
    def seconds_in_solver(self) -> float:
        """Wall time spent inside HiGHS."""
        return self._model.seconds

    def all_counts(self) -> Counter[str]:
        """Events counted here and in the kept model."""
        return self.counts + self._children.counts + self._model.counts

    # -- solving -------------------------------------------------------------------------------

    def solve(
        self, i_member: int, state: FloatArray, capacity: FloatArray, cut_tolerance: float = 0.0
    ) -> NodeOutcome:
        """One point of ``solve_run``; raises SolverFailureError where HiGHS finds no optimum."""
        found = self.solve_run([NodePoint(i_member, state, capacity, cut_tolerance)])[0]
        if isinstance(found, SolverFailureError):
            raise found
        return found

    def solve_run(self, points: Sequence[NodePoint]) -> list[NodeOutcome | SolverFailureError]:
        """Values at some points, one after the other, with the cuts that the pools hold now.

        Where HiGHS finds no optimum its failure stands in the place of the outcome.
        """
        most = self._most_prepared
        if len(points) > most:
            parts = (points[i : i + most] for i in range(0, len(points), most))
            return [one for part in parts for one in self.solve_run(part)]
        run, found = self._prepared(points), list[_Solved | SolverFailureError]()
        while len(found) < len(points):
            begin = len(found)
            capacity = points[begin].capacity
            if not np.array_equal(capacity, self._last_capacity):
                # Other rows may be missed, and then each point had better see those of the one
                # before.
                self._n_block, self._last_capacity = max(1, self._n_block // 4), capacity
            n_before, end = len(self._rows), min(begin + self._n_block, len(points))
            if any(point.second_cost is not None for point in points[begin:end]):
                end = begin + 1
            found += self._solve_block(run, range(begin, end))
            n = 1 if len(self._rows) > n_before else 2 * self._n_block
            self._n_block = min(n, self._most_in_block)
        # What stands in the model would keep the arrays of the whole run.
        rows = self._rows
        self._lower, self._upper = self._lower.copy(), self._upper.copy()
        self._cost, rows.low, rows.high = self._cost.copy(), rows.low.copy(), rows.high.copy()
        return self._outcomes(run, found)

    def _solve_block(self, run: _Run, places: range) -> list[_Solved | SolverFailureError]:
        """Some points of a run: all once, then again those that broke rows left out."""
        is_alone = len(places) == 1
        found = [self._solved(run, i, with_lazy_rows=is_alone) for i in places]
        if not is_alone:
            solved = [i for i, one in zip(places, found, strict=True) if isinstance(one, _Solved)]
            self._complete(run, solved)
            missed = self._missed_rows(run, solved)
            for i, (rows, folds) in zip(solved, missed, strict=True):
                if len(rows) or len(folds):
                    found[i - places.start] = self._solved(run, i, with_lazy_rows=True)
        return found

    def _solved(self, run: _Run, i: int, with_lazy_rows: bool) -> _Solved | SolverFailureError:
        """One point of the run, solved until no cut of the children is missed.

        with_lazy_rows : whether the lazy rows that are missed come in too, in the same rounds
        """
        self._move(run, i)
        numbers, tolerance = run.members[i], run.points[i].cut_tolerance
        try:
            result = self._model.run(wants_dual=False)
            for _ in range(MAX_ROUNDS):
                n_new = 0
                if self.n_exit:  # first, for it may ask for multipliers, which new rows make void
                    n_new += self._children.add_violated(result.col_value, numbers, tolerance)
                run.primal[i] = result.col_value
                if with_lazy_rows:
                    self._complete(run, [i])
                    n_new += self._append_program_rows(run, i, *self._missed_rows(run, [i])[0])
                if not n_new:
                    break
                result = self._model.run(wants_dual=False)
            else:
                self.counts["row rounds used up"] += 1
                run.primal[i] = result.col_value
                self._complete(run, [i])
            dual = self._model.row_dual()
            if run.points[i].second_cost is not None:
                result, dual = self._seconded(run, i, result, dual)
            theta, factor = result.col_value[self.n_kept :].copy(), float(run.factors[i])
            value = result.objective / factor
            return _Solved(value, theta, dual / factor, self._children.settled())
        except SolverFailureError as failure:
            return failure

    def _seconded(
        self, run: _Run, i: int, result: SolveResult, dual: FloatArray
    ) -> tuple[SolveResult, FloatArray]:
        """Moves a point to the one that is best by its second cost; result and duals of the first.

        The second point may break rows that the first one did not need.
        """
        second_cost = run.points[i].second_cost
        assert second_cost is not None
        if second_cost[self._folding.column].any():
            raise ValueError("a folded column has a second cost")
        cost = np.concatenate([second_cost[self._folding.kept], np.zeros(self.n_exit)])
        for _ in range(MAX_ROUNDS):
            run.primal[i] = self._model.second_point(dual, cost)
            self._complete(run, [i])
            if not self._append_program_rows(run, i, *self._missed_rows(run, [i])[0]):
                break
            result = self._model.run()
            dual = result.row_dual
        return result, dual

    def _complete(self, run: _Run, places: Sequence[int]) -> None:
        """Fills ``y`` of some points of the run from the model's columns."""
        primal, y = run.primal[places], np.empty((len(places), self.n_col))
        y[:, self._folding.kept] = primal[:, : self.n_kept]
        if self._theta_columns is not None:
            y[:, self._theta_columns] = primal[:, self.n_kept :]
        if len(self._folding):
            self._folding.complete(y, rows_of(run.now.fold_shift, places))
        run.y[places] = y

    def _now(self, members: Sequence[int]) -> Now:
        """Numbers of some members."""
        table = self.bound.table
        if table is not None:
            numbers = table.numbers(np.array(members))
        else:
            (i_member,) = members
            own = Numbers.of(self.cache.get(self.i_family, i_member))
            numbers = Numbers(*(np.asarray(v)[None] for v in vars(own).values()))
        return Now.of(numbers, self._fold_rows, self._folding)

    def _prepared(self, points: Sequence[NodePoint]) -> _Run:
        """What the model is brought to for each point."""
        now, n = self._now([point.member for point in points]), len(points)
        numbers = now.numbers
        low, high = self._bounds.read(numbers.col_lower, numbers.col_upper)
        lower, upper = (np.array(np.broadcast_to(v, (n, len(self._moving)))) for v in (low, high))
        capacities = np.array([point.capacity for point in points])[:, self._has_capacity]
        lower[:, self._capacity_at] = upper[:, self._capacity_at] = capacities
        table = self.bound.table
        into = (
            self.cache.get(self.i_family, points[0].member).in_columns
            if table is None
            else table.first.in_columns
        )
        given = into >= 0
        states = np.array([point.state for point in points])[:, given]
        at = self._place_in_moving[into[given]]
        lower[:, at] = upper[:, at] = states
        cost = np.empty((n, len(self._costing)))
        cost[:, : self._n_costing] = self._costs.read(numbers.cost)[0]
        cost[:, self._n_costing :] = numbers.exit_weight
        if self._theta_columns is not None:
            cost[:, self._n_costing :] += self._theta_costs.read(numbers.cost)[0]
        factors = np.ones(n)
        if self._is_rescaled:
            factors = _factors(np.broadcast_to(numbers.scale, (n,)))
            cost *= factors[:, None]
        limits = self._limits
        if limits is None:
            limits = (
                *_with_tolerance(*now.fold_bounds(self._fold_bounds)),
                *_with_tolerance(*self._lazy_sides.read(numbers.row_lower, numbers.row_upper)),
            )
            if not self._do_limits_vary:
                self._limits = limits
        bounds = _Change.between(self._moving, (self._lower, self._upper), (lower, upper))
        costs = _Change.between(self._costing, (self._cost,), (cost,))
        members = [numbers.part(i) for i in range(n)]
        return _Run(
            points, now, members, factors, bounds, costs, self._side_change(now), *limits,
            np.zeros((n, self.n_kept + self.n_exit)), np.zeros((n, self.n_col)),
        )  # fmt: skip

    def _side_change(self, now: Now) -> _Change:
        """Sides of the rows of the model for the members of a run."""
        rows = self._rows
        return _Change.between(rows.place[rows.varying], (rows.low, rows.high), rows.sides(now))

    def _move(self, run: _Run, i: int) -> None:
        """Brings the kept model to a point of the run."""
        point, model, children, rows = run.points[i], self._model, self._children, self._rows
        low, high = run.bounds.values
        model.set_col_bounds(run.bounds.places, low[i], high[i])
        model.set_costs(run.costs.places, run.costs.values[0][i])
        low, high = run.sides.values
        model.set_row_bounds(run.sides.places, low[i], high[i])
        self._lower, self._upper = (whole[i] for whole in run.bounds.whole)
        self._cost = run.costs.whole[0][i]
        rows.low, rows.high = (whole[i] for whole in run.sides.whole)
        is_other = children.set_capacity(point.capacity)
        if is_other or point.member != self._member_index:
            self._member_index = point.member
            self._patch(run.members[i].patch_value)
            children.set_member(run.members[i])

    def _patch(self, value: FloatArray) -> None:
        """Matrix entries that differ between members."""
        patch = self.family.patch
        if not len(patch):
            return
        changed = (self._matrix.value[patch] != value).nonzero()[0]
        if not len(changed):
            return
        row = self._rows.of_program[self.bound.patch_row[changed]]
        is_here = row >= 0
        here = changed[is_here]
        self._model.set_coefficients(
            self._rows.place[row[is_here]].tolist(),
            self._column_place[self.bound.patch_column[here]].tolist(),
            value[here].tolist(),
        )
        self._matrix.value[patch] = value
        if self._is_lazy_patched:
            self._lazy.refresh()

    def _missed_rows(self, run: _Run, places: Sequence[int]) -> list[tuple[IntArray, IntArray]]:
        """Lazy rows, and folds whose bounds, that points of the run violate, not in the model."""
        y, none = run.y[places], np.zeros(0, dtype=np.int64)
        rows: list[IntArray] = [none] * len(places)
        folds = rows
        if len(self._lazy):
            place = self._rows.of_program[self._lazy.row]
            low, high = rows_of(run.lazy_low, places), rows_of(run.lazy_high, places)
            worst = self._worst(self._lazy.activity(y), low, high, place)
            rows = [self._lazy.row[at] for at in worst]
        if len(self._folding):
            low, high = rows_of(run.fold_low, places), rows_of(run.fold_high, places)
            values = y.take(self._folding.column, axis=1)
            folds = self._worst(values, low, high, self._rows.of_bound)
        return list(zip(rows, folds, strict=True))

    @staticmethod
    def _worst(
        activity: FloatArray, low: FloatArray, high: FloatArray, place: IntArray
    ) -> list[IntArray]:
        """The rows most violated at each of k points that are not in the model yet.

        activity (k, n); low, high (k, n) or (1, n); place (n,) in the model, -1 if not there. Where
        many are violated most of them follow from the worst ones (the voltage at the end of a line
        from that in its middle), and every row makes the later solves slower.
        """
        is_out = (activity > high) | (activity < low)
        hit: BoolArray = np.any(is_out, axis=1)
        none = np.zeros(0, dtype=np.int64)
        chosen: list[IntArray] = []
        for i, is_hit in enumerate(hit.tolist()):
            found = is_out[i].nonzero()[0] if is_hit else none
            if is_hit:
                found = found[place[found] < 0]
            if len(found) > FEW_ROWS:
                reached = activity[i, found]
                below, above = rows_of(low, [i])[0, found], rows_of(high, [i])[0, found]
                by = np.maximum(reached - above, below - reached)
                size = np.where(by == reached - above, above, below)
                order = np.argsort(-by / (1.0 + np.abs(size)), kind="stable")
                found = np.sort(found[order[: max(FEW_ROWS, len(found) // WORST_PART)]])
            chosen.append(found)
        return chosen

    def _append_program_rows(self, run: _Run, i: int, rows: IntArray, folds: IntArray) -> int:
        """Adds program rows and bounds of folded columns at a point of the run; their number."""
        parts = []
        if len(rows):
            none = np.full(len(rows), -1)
            parts.append((rows, none, self._folding.expand_rows(rows)))
        if len(folds):
            none = np.full(len(folds), -1)
            parts.append((none, folds, self._folding.expand_columns(folds)))
        for program, bounded, folded in parts:
            places = self._model.n_row + np.arange(len(program))
            low, high, varying = self._rows.append(program, bounded, places, folded, run.now, i)
            columns = self._column_place[folded.index]
            self._model.add_rows(low[i], high[i], folded.start, columns, folded.value)
            if len(run.points) > 1:
                more = (low[:, varying], high[:, varying])
                run.sides = run.sides.extended(places[varying], more)
        n = len(rows) + len(folds)
        self.counts["lazy row"] += n
        return n

    # -- what comes out ------------------------------------------------------------------------

    def _outcomes(
        self, run: _Run, found: Sequence[_Solved | SolverFailureError]
    ) -> list[NodeOutcome | SolverFailureError]:
        """Outcomes of a run, from what the solver said."""
        places = [i for i, one in enumerate(found) if isinstance(one, _Solved)]
        solved = [one for one in found if isinstance(one, _Solved)]
        outcomes: list[NodeOutcome | SolverFailureError | None] = [
            one if isinstance(one, SolverFailureError) else None for one in found
        ]
        if not solved:
            return [one for one in outcomes if one is not None]
        # Rows that came later than a result have no multiplier in it.
        dual = np.zeros((len(solved), self._model.n_row))
        for i, one in enumerate(solved):
            dual[i, : len(one.row_dual)] = one.row_dual
        pi = self._rows.multipliers(dual)
        numbers, y = run.now.numbers, run.y
        if len(places) < len(found):
            numbers, y = numbers.part(np.array(places)), y[places]
        cost = y @ self._same_cost + np.einsum(
            "ij,ij->i", y.take(self._differing, axis=1), numbers.cost
        )
        cost = (cost + numbers.offset) / numbers.scale
        objective = np.array([one.value for one in solved])
        value = (objective + numbers.offset) / numbers.scale
        n_exit, n_state, box = self.n_exit, self.table.n_state, self.table.box
        states = y[:, self.family.out_columns.ravel()].reshape(len(places), n_exit, n_state)
        capacity = np.array([run.points[i].capacity for i in places])
        exits = self._children.used(
            dual, [one.held for one in solved], [run.members[i] for i in places]
        )
        low = (capacity @ box.state_lower_matrix.T)[:, None, :]
        high = np.maximum((capacity @ box.state_upper_matrix.T)[:, None, :], low)
        states = np.minimum(np.maximum(states, low), high)
        for i, (place, one) in enumerate(zip(places, solved, strict=True)):
            outcomes[place] = NodeOutcome(
                value=float(value[i]),
                cost=float(cost[i]),
                y=y[i],
                theta=one.theta,
                out_states=states[i],
                pi=pi[i],
                exits=exits[i][0],
                exit_group=exits[i][1],
            )
        return [one for one in outcomes if one is not None]

    def rest(self) -> None:
        """Gives back the solver's working memory until the next solve."""
        self._model.rest()

    def forget_basis(self) -> None:
        """The next solve starts cold."""
        self._model.forget_basis()


def _factors(scale: FloatArray) -> FloatArray:
    """Powers of two that bring small scales near 1, so that no digit is lost; 1 for the others."""
    exact: FloatArray = np.exp2(-np.floor(np.log2(scale)))
    return np.where(scale < LEAST_SCALE, exact, 1.0)


def _with_tolerance(low: FloatArray, high: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Sides beyond which the solver would see a violation."""
    with np.errstate(invalid="ignore"):
        wide_low = low - FEASIBILITY_TOLERANCE * (1.0 + np.abs(low))
        wide_high = high + FEASIBILITY_TOLERANCE * (1.0 + np.abs(high))
    return wide_low, wide_high
