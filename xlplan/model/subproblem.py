"""The two kinds of subproblem of model.md section 3 as families of linear programs.

``PlanFamily`` is ``V``: member ``u`` plans a window from period ``u`` to its end, to be followed
until something fails; member ``n_period`` is the end of the window alone. ``EventFamily`` is ``D``
of one scenario: member ``k`` is the event whose failure strikes in period ``k`` and acts from
``k + 1`` on. The objective of member ``u`` of a plan is scaled by the chance of getting there, so
that one set of multipliers serves all later members.

``whole_tree.py`` states the same model a second time without this module (see its docstring).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.columns import PeriodColumns, stack
from xlplan.model.devices import FREE
from xlplan.model.layout import state_domain
from xlplan.model.linear_program import INF, LinearProgram, ProgramBuilder
from xlplan.model.numbers import MEMBER, FixedNumbers, ShiftingNumbers, ShiftTable
from xlplan.model.period import FeederModel, Previous, add_capacities, add_period
from xlplan.model.value_graph import Family, Member, Nest
from xlplan.outages.clock import Clock
from xlplan.outages.records import Scenario, ServicePeriod
from xlplan.study.study import Technology

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


def _state_columns(model: FeederModel, previous: Previous, zero: int) -> IntArray:
    """Columns of the state: energies, outputs (0 where the unit stood still), fuels."""
    layout = model.layout
    outputs = [int(previous.output[i]) for i in layout.ramp_generators]
    return np.array(
        [int(previous.energy[i]) for i in range(layout.n_storage)]
        + [zero if column == -1 else column for column in outputs]
        + [int(previous.fuel[i]) for i in layout.tank_generators],
        dtype=np.int64,
    )


def _incoming(builder: ProgramBuilder, model: FeederModel) -> Previous:
    """Columns of an incoming state, in its box."""
    layout = model.layout
    _, matrix = state_domain(model.study, layout)
    upper = matrix @ layout.capacity_upper
    columns = [
        builder.add_column(f"before: {name}", 0.0, float(high))
        for name, high in zip(layout.state_names, upper, strict=True)
    ]
    output = np.full(layout.n_generator, FREE, dtype=np.int64)
    fuel = np.full(layout.n_generator, -1, dtype=np.int64)
    for i in layout.ramp_generators:
        output[i] = columns[layout.output_state(i)]
    for i in layout.tank_generators:
        fuel[i] = columns[layout.fuel_state(i)]
    return Previous(
        energy=np.array(columns[: layout.n_storage], dtype=np.int64), output=output, fuel=fuel
    )


def _add_end(
    builder: ProgramBuilder, model: FeederModel, capacities: IntArray, previous: Previous
) -> IntArray:
    """``end(s)``: energy missing against the window's start; the columns, unpriced."""
    columns = []
    for i, unit in enumerate(model.study.storage):
        soc = float(model.series.start_soc_frac[i])
        kwh = model.storage_kwh(capacities, i)
        column = builder.add_column(f"missing: {unit.storage}", 0.0, soc * kwh.upper)
        terms = [(column, 1.0), (int(previous.energy[i]), 1.0), (kwh.column, -soc)]
        builder.add_row(f"missing: {unit.storage}", terms, lower=0.0)
        columns.append(column)
    return np.array(columns, dtype=np.int64)


def slices(scenario: Scenario) -> list[tuple[float, tuple[int, ...]]]:
    """Shares of a scenario's failures and the measures that avoid each share, () for none.

    With shares ``a_1 <= a_2`` on one line ``a_1`` is avoided by either measure, ``a_2 - a_1`` by
    the second only (model.md section 2).
    """
    parts: list[tuple[float, tuple[int, ...]]] = []
    below = 0.0
    measures = [m for m, _ in scenario.hardening]
    for i, (_, share) in enumerate(scenario.hardening):
        if share > below:
            parts.append((share - below, tuple(measures[i:])))
        below = max(below, share)
    if below < 1.0:
        parts.insert(0, (1.0 - below, ()))
    return parts


@dataclass
class PlanFamily(Family):
    """``V``: plans of one window from any period on. See ``Family`` for the common attributes."""

    name: str
    program: LinearProgram
    n_member: int
    capacity_columns: IntArray
    out_columns: IntArray
    exit_gate: tuple[tuple[int, ...], ...]
    patch: IntArray
    is_expanded: bool
    n_period: int
    survival: FloatArray
    col_period: IntArray
    row_period: IntArray
    first_plan_rows: IntArray
    state_columns: IntArray
    """(n_period + 1, n_state): state columns before each period."""
    output_states: IntArray
    state_upper: FloatArray
    exit_period: IntArray
    exit_scenario: IntArray
    exit_weight: FloatArray
    exit_child: IntArray
    exit_child_if_gated: IntArray
    value_upper: FloatArray
    columns: dict[str, IntArray]
    end_columns: IntArray
    nest: Nest | None = None
    meter: object = None
    """Set by evaluation: reads a solution where it was solved."""

    def member(self, i_member: int) -> Member:
        """Numbers of the plan from period ``i_member`` on."""
        u, program = i_member, self.program
        past = self.col_period < u
        low, high = program.col_lower.copy(), program.col_upper.copy()
        still = np.clip(0.0, low[past], high[past])
        low[past] = high[past] = still
        cost = np.where(past, 0.0, program.cost)
        free = self.row_period < u
        if u > 0:
            free[self.first_plan_rows] = True
        into = self.state_columns[u].copy()
        low[into], high[into] = 0.0, self.state_upper
        if u == 0:
            into[self.output_states] = -1
        return Member(
            cost=cost,
            offset=0.0,
            col_lower=low,
            col_upper=high,
            row_lower=np.where(free, -INF, program.row_lower),
            row_upper=np.where(free, INF, program.row_upper),
            in_columns=into,
            exit_weight=np.where(self.exit_period >= u, self.exit_weight, 0.0),
            exit_child=self.exit_child,
            exit_child_if_gated=self.exit_child_if_gated,
            scale=float(self.survival[u]),
            patch_value=np.zeros(0),
            value_lower=-INF,
            value_upper=float(self.value_upper[u]),
        )


@dataclass
class EventFamily(Family):
    """``D``: one scenario of one window. See ``Family`` for the common attributes."""

    name: str
    program: LinearProgram
    n_member: int
    capacity_columns: IntArray
    out_columns: IntArray
    exit_gate: tuple[tuple[int, ...], ...]
    patch: IntArray
    is_expanded: bool
    table: ShiftTable
    in_columns: IntArray
    offset: FloatArray
    exit_child: IntArray
    """(n_member, 1, 2)."""
    value_upper: FloatArray
    columns: dict[str, IntArray]
    end_columns: IntArray
    n_event_period: int
    meter: object = None
    """Set by evaluation: reads a solution where it was solved."""

    def member(self, i_member: int) -> Member:
        """Numbers of the event whose failure strikes in period ``i_member``."""
        program = self.program
        arrays = {
            "cost": program.cost.copy(),
            "col_lower": program.col_lower.copy(),
            "col_upper": program.col_upper.copy(),
            "row_lower": program.row_lower.copy(),
            "row_upper": program.row_upper.copy(),
        }
        for target, array in arrays.items():
            position, value = self.table.look_up(target, i_member)
            array[position] = value
        child = self.exit_child[i_member]
        return Member(
            cost=arrays["cost"],
            offset=float(self.offset[i_member]),
            col_lower=arrays["col_lower"],
            col_upper=arrays["col_upper"],
            row_lower=arrays["row_lower"],
            row_upper=arrays["row_upper"],
            in_columns=self.in_columns,
            exit_weight=np.where(child[:, 0] >= 0, 1.0, 0.0),
            exit_child=child,
            exit_child_if_gated=np.full_like(child, -1),
            scale=1.0,
            patch_value=self.table.look_up("value", i_member)[1],
            value_lower=-INF,
            value_upper=float(self.value_upper[i_member]),
        )


def build_plan_family(
    model: FeederModel,
    normal: ServicePeriod,
    clock: Clock | None,
    scenarios: tuple[Scenario, ...],
    own_family: int,
    event_families: list[int],
    value_upper: FloatArray,
) -> PlanFamily:
    """Plans of one window.

    Parameters
    ----------
    model : FeederModel
    normal : ServicePeriod of normal service
    clock : Clock of potential failures; None plans as if nothing could fail
    scenarios : tuple of Scenario
    own_family : int, this family's position in the graph
    event_families : positions of the scenarios' families
    value_upper : array, shape (n_period + 1,), bound of each member's value

    Returns
    -------
    PlanFamily
    """
    n_period = model.series.n_period
    survival = np.ones(n_period + 1) if clock is None else clock.survival
    builder = ProgramBuilder()
    numbers = FixedNumbers(builder)
    capacities = add_capacities(builder, model.layout)
    zero = builder.add_column("zero", 0.0, 0.0)
    n_shared = len(builder.cost)
    previous = _incoming(builder, model)
    col_period = [n_period + 1] * n_shared + [-1] * (len(builder.cost) - n_shared)
    row_period: list[int] = []
    periods: list[PeriodColumns] = []
    states = [_state_columns(model, previous, zero)]
    first_plan_rows: list[int] = []
    for k in range(n_period):
        weight = float(survival[k])
        columns = add_period(
            builder, numbers, model, normal, capacities, previous, k, weight, is_event=False
        )
        is_charged = model.study.settings.demand_charge_per_kw_year > 0.0
        if is_charged and model.series.counts_for_demand and columns.import_kw >= 0:
            terms = [(columns.import_kw, 1.0), (int(capacities[model.layout.demand_kw]), -1.0)]
            first_plan_rows.append(builder.add_row(f"demand [{k}]", terms, upper=0.0))
        periods.append(columns)
        states.append(_state_columns(model, previous, zero))
        col_period += [k] * (len(builder.cost) - len(col_period))
        row_period += [k] * (len(builder.row_lower) - len(row_period))
    end = _add_end(builder, model, capacities, previous)
    for i, column in enumerate(end):
        price = float(model.series.stored_energy_price_per_kwh[i])
        builder.cost[column] = price * float(survival[n_period])
    col_period += [n_period] * (len(builder.cost) - len(col_period))
    row_period += [n_period] * (len(builder.row_lower) - len(row_period))
    exits = [] if clock is None else _plan_exits(model, clock, scenarios, event_families)
    _, domain = state_domain(model.study, model.layout)
    return PlanFamily(
        name=f"plan of {model.series.window}",
        program=builder.build(),
        n_member=n_period + 1,
        capacity_columns=capacities,
        out_columns=np.array([states[k + 1] for k, *_ in exits], dtype=np.int64).reshape(
            len(exits), model.layout.n_state
        ),
        exit_gate=tuple(gate for *_, gate in exits),
        patch=np.zeros(0, dtype=np.int64),
        is_expanded=False,
        n_period=n_period,
        survival=np.asarray(survival),
        col_period=np.array(col_period),
        row_period=np.array(row_period),
        first_plan_rows=np.array(first_plan_rows, dtype=np.int64),
        state_columns=np.array(states, dtype=np.int64),
        output_states=np.array(
            [model.layout.output_state(i) for i in model.layout.ramp_generators], dtype=np.int64
        ),
        state_upper=domain @ model.layout.capacity_upper,
        exit_period=np.array([k for k, *_ in exits], dtype=np.int64),
        exit_scenario=np.array([w for _, w, _, _ in exits], dtype=np.int64),
        exit_weight=np.array([weight for _, _, weight, _ in exits], dtype=float),
        exit_child=np.array(
            [(event_families[w], k) for k, w, _, _ in exits], dtype=np.int64
        ).reshape(-1, 2),
        exit_child_if_gated=np.array(
            [(own_family, k + 1) if gate else (-1, -1) for k, _, _, gate in exits], dtype=np.int64
        ).reshape(-1, 2),
        value_upper=value_upper,
        columns=stack(periods),
        end_columns=end,
        nest=Nest(
            row_last=np.where(
                np.isin(np.arange(len(row_period)), first_plan_rows), 0, np.array(row_period)
            ),
            col_last=np.array(col_period),
            exit_last=np.array([k for k, *_ in exits], dtype=np.int64),
        ),
    )


def _plan_exits(
    model: FeederModel, clock: Clock, scenarios: tuple[Scenario, ...], event_families: list[int]
) -> list[tuple[int, int, float, tuple[int, ...]]]:
    """(period, scenario, weight, gate) of every exit of a plan."""
    exits = []
    for k in range(model.series.n_period):
        for w, scenario in enumerate(scenarios):
            chance = clock.survival[k] * clock.failure_chance[k] * clock.scenario_chance[k, w]
            if chance <= 0.0:
                continue
            for share, measures in slices(scenario):
                gate = tuple(model.layout.hardening(m) for m in measures)
                exits.append((k, w, float(chance * share), gate))
    return exits


def build_event_family(
    model: FeederModel,
    scenario: Scenario,
    plan_family: int,
    value_upper: FloatArray,
) -> EventFamily:
    """Events of one scenario.

    Parameters
    ----------
    model : FeederModel
    scenario : Scenario
    plan_family : int, position of the window's plans in the graph
    value_upper : array, shape (n_period,), bound of each member's value

    Returns
    -------
    EventFamily
    """
    n_window = model.series.n_period
    builder, numbers = ProgramBuilder(), ShiftingNumbers()
    capacities = add_capacities(builder, model.layout)
    zero = builder.add_column("zero", 0.0, 0.0)
    previous = _incoming(builder, model)
    into = _state_columns(model, previous, zero)
    periods = [
        add_period(builder, numbers, model, service, capacities, previous, j, 1.0, is_event=True)
        for j, service in enumerate(scenario.service)
    ]
    offset = _add_dead_loads(builder, numbers, model, scenario, periods)
    offset = offset + scenario.repair_cost + _add_carry_over(numbers, model, scenario, capacities)
    outlasts = np.arange(n_window) + 1 + scenario.n_period >= n_window
    end = _add_end(builder, model, capacities, previous)
    for i, column in enumerate(end):
        price = float(model.series.stored_energy_price_per_kwh[i])
        numbers.put("cost", int(column), np.where(outlasts, price, 0.0), MEMBER)
    child = np.full((n_window, 1, 2), -1, dtype=np.int64)
    inside = np.flatnonzero(~outlasts)
    child[inside, 0, 0] = plan_family
    child[inside, 0, 1] = inside + 1 + scenario.n_period
    table = numbers.table()
    return EventFamily(
        name=f"{scenario.name}, {model.series.window}",
        program=builder.build(),
        n_member=n_window,
        capacity_columns=capacities,
        out_columns=_state_columns(model, previous, zero).reshape(1, -1),
        exit_gate=((),),
        patch=table.entries["value"][0],
        is_expanded=True,
        table=table,
        in_columns=into,
        offset=offset,
        exit_child=child,
        value_upper=value_upper,
        columns=stack(periods),
        end_columns=end,
        n_event_period=scenario.n_period,
    )


def _add_dead_loads(
    builder: ProgramBuilder,
    numbers: ShiftingNumbers,
    model: FeederModel,
    scenario: Scenario,
    periods: list[PeriodColumns],
) -> FloatArray:
    """Cost of what is dead by member, and the charge on the largest kW unserved at once.

    Dead loads are data: their cost is a constant, and their kW a floor under the largest kW.
    """
    series, n_window = model.series, model.series.n_period
    rows = np.arange(n_window)
    offset = np.zeros(n_window)
    largest_dead = np.zeros((n_window, len(model.study.loads)))
    for j, (columns, service) in enumerate(zip(periods, scenario.service, strict=True)):
        dead = ~columns.load_live
        price = model.price_of_shed(service.clock_h, is_event=True) * dead
        load = series.load_kw[(rows + 1 + j) % n_window]
        offset += load @ price * series.period_h
        largest_dead = np.maximum(largest_dead, load * dead)
    first_moment = model.first_moment_price()
    has_remote: BoolArray = np.any(model.loads.remote_kw, axis=0)
    for i_group, group in enumerate(model.loads.groups):
        plain = [i for i in range(len(group.loads)) if not has_remote[group.loads[i]]]
        live = [int(c.group_kw[i_group]) for c in periods if c.group_kw[i_group] >= 0]
        price = sum(first_moment[group.loads[i]] * group.share[i] for i in plain)
        if not plain or price == 0.0:
            continue
        # Loads without a remote part are shed in fixed proportions: one largest kW for all.
        floor = largest_dead[:, group.loads[plain[0]]] / max(group.share[plain[0]], TINY_SHARE)
        if not live:
            offset += price * floor
            continue
        top = float(group.total_kw.max()) * ROUNDING_ROOM
        column = builder.add_column(f"largest shed of group {i_group}", 0.0, top, float(price))
        numbers.put("col_lower", column, floor, MEMBER)
        for shed in live:
            builder.add_row(f"largest {i_group}", [(column, 1.0), (shed, -1.0)], lower=0.0)
    for i_load in np.flatnonzero(has_remote & (first_moment > 0.0)).tolist():
        top = float(series.load_kw[:, i_load].max()) * ROUNDING_ROOM
        column = builder.add_column(f"largest shed {i_load}", 0.0, top, float(first_moment[i_load]))
        numbers.put("col_lower", column, largest_dead[:, i_load], MEMBER)
        for columns in periods:
            terms = [(column, 1.0)]
            for i_group, group in enumerate(model.loads.groups):
                if i_load in group.loads and columns.group_kw[i_group] >= 0:
                    share = group.share[group.loads.index(i_load)]
                    terms.append((int(columns.group_kw[i_group]), -share))
            if columns.remote_kw[i_load] >= 0:
                terms.append((int(columns.remote_kw[i_load]), -1.0))
            if len(terms) > 1:
                builder.add_row(f"largest {i_load}", terms, lower=0.0)
    return offset


ROUNDING_ROOM = 1.0 + 1e-9
"""A floor computed by division must not pass its box by a rounding error."""

TINY_SHARE = 1e-12
"""A load without kW has no share of its group; its dead kW is 0 as well."""


def _add_carry_over(
    numbers: ShiftingNumbers, model: FeederModel, scenario: Scenario, capacities: IntArray
) -> FloatArray:
    """Normal supply of the periods beyond the window, taken off; affine in solar and wind kW."""
    series, n_window = model.series, model.series.n_period
    offset = np.zeros(n_window)
    credit = np.zeros((n_window, len(model.study.generators)))
    for j in range(scenario.n_period):
        period = np.arange(n_window) + 1 + j
        beyond = period >= n_window
        price = series.price_per_kwh[period % n_window] * series.period_h * beyond
        offset -= price * series.load_kw[period % n_window].sum(axis=1)
        credit += price[:, None] * series.availability[period % n_window]
    for i, unit in enumerate(model.study.generators):
        if unit.technology is not Technology.DISPATCHABLE and credit[:, i].any():
            column = int(capacities[model.layout.generator_kw(i)])
            numbers.put("cost", column, credit[:, i], MEMBER)
    return offset
