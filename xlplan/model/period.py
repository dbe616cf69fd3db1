"""One period of the feeder: source, loads, units, islands and network put together.

The plan of a window (``subproblem.PlanFamily``) and an outage event (``EventFamily``) are made of
these. ``whole_tree.py`` states the same equations a second time, on purpose, without this module:
only then is the agreement of the two methods evidence.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from xlplan.model.columns import PeriodColumns
from xlplan.model.devices import (
    FREE,
    Capacity,
    add_limit,
    add_output,
    add_ramp,
    add_storage,
    add_tank,
)
from xlplan.model.layout import Layout, largest_flow_kw
from xlplan.model.linear_program import ProgramBuilder
from xlplan.model.loads import Loads
from xlplan.model.network_block import Terminal, Terms, add_network, add_polygon
from xlplan.model.numbers import Numbers
from xlplan.network.feeder import Feeder
from xlplan.outages.damage import normal_service_price_per_kwh, price_per_kwh
from xlplan.outages.records import ServicePeriod
from xlplan.study.study import Study, Technology
from xlplan.study.windows import WindowSeries

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class FeederModel:
    """What every period of one window shares."""

    study: Study
    feeder: Feeder
    series: WindowSeries
    layout: Layout
    loads: Loads
    flow_limit_kw: float

    @cached_property
    def bus_loads(self) -> dict[int, tuple[FloatArray, FloatArray]]:
        """Load in kW and in kvar by period, (n_period,) each, of every bus that has any."""
        at, series = self.feeder.load_bus, self.series
        return {
            bus: (
                series.load_kw[:, at == bus].sum(axis=1),
                series.load_kvar[:, at == bus].sum(axis=1),
            )
            for bus in np.unique(at).tolist()
        }

    def price_of_shed(self, clock_h: float, is_event: bool) -> FloatArray:
        """Cost of a kW of each load shed for one hour, (n_load,); losses are no energy missed."""
        keep = 1.0 / (1.0 + self.study.settings.loss_allowance_frac)
        prices = {
            c.customer_class: float(
                price_per_kwh(c, clock_h) if is_event else normal_service_price_per_kwh(c)
            )
            for c in self.study.customer_classes
        }
        return np.array([prices[load.customer_class] for load in self.study.loads]) * keep

    def first_moment_price(self) -> FloatArray:
        """Cost of the largest kW shed of each load in an event, (n_load,)."""
        classes = {c.customer_class: c for c in self.study.customer_classes}
        keep = 1.0 / (1.0 + self.study.settings.loss_allowance_frac)
        return np.array(
            [classes[load.customer_class].cost_0h_per_kw * keep for load in self.study.loads]
        )

    def generator_kw(self, columns: IntArray, i: int) -> Capacity:
        """Capacity of a generator; ``columns`` holds the program's capacity columns."""
        return self._capacity(columns, self.layout.generator_kw(i))

    def storage_kw(self, columns: IntArray, i: int) -> Capacity:
        """Power of a store."""
        return self._capacity(columns, self.layout.storage_kw(i))

    def storage_kwh(self, columns: IntArray, i: int) -> Capacity:
        """Energy of a store."""
        return self._capacity(columns, self.layout.storage_kwh(i))

    def _capacity(self, columns: IntArray, position: int) -> Capacity:
        low = float(self.layout.capacity_lower[position])
        high = float(self.layout.capacity_upper[position])
        return Capacity(column=int(columns[position]), upper=high, is_fixed=low == high)


@dataclass
class Previous:
    """Columns that hold the state before a period (see ``devices`` for FREE and -1)."""

    energy: IntArray
    output: IntArray
    fuel: IntArray


def build_feeder_model(
    study: Study,
    feeder: Feeder,
    series: WindowSeries,
    all_series: list[WindowSeries],
    layout: Layout,
    loads: Loads,
) -> FeederModel:
    """What every period of one window shares."""
    limit = largest_flow_kw(study, all_series)
    return FeederModel(study, feeder, series, layout, loads, limit)


def add_capacities(builder: ProgramBuilder, layout: Layout) -> IntArray:
    """One column per capacity, in its box."""
    return np.array(
        [
            builder.add_column(f"capacity {name}", low, high)
            for name, low, high in zip(
                layout.capacity_names, layout.capacity_lower, layout.capacity_upper, strict=True
            )
        ],
        dtype=np.int64,
    )


def empty_columns(model: FeederModel) -> PeriodColumns:
    """Period columns of the study's size, every device absent."""
    return PeriodColumns(
        n_bus=model.feeder.n_bus,
        n_line=model.feeder.n_line,
        n_load=len(model.study.loads),
        n_group=len(model.loads.groups),
        n_generator=len(model.study.generators),
        n_storage=len(model.study.storage),
        n_supply=len(model.study.supplies),
    )


def add_period(
    builder: ProgramBuilder,
    numbers: Numbers,
    model: FeederModel,
    service: ServicePeriod,
    capacities: IntArray,
    previous: Previous,
    offset: int,
    weight: float,
    is_event: bool,
) -> PeriodColumns:
    """Adds one period.

    Parameters
    ----------
    builder : ProgramBuilder
    numbers : Numbers, takes what follows the window's rows
    model : FeederModel
    service : ServicePeriod
    capacities : array, shape (n_capacity,), capacity columns
    previous : Previous, state columns before the period; updated to those after it
    offset : int, the period's row in ``numbers``
    weight : float, multiplies every cost (chance that the period is reached)
    is_event : bool, outage event (its band, its prices) or normal service

    Returns
    -------
    PeriodColumns
    """
    settings = model.study.settings
    columns = empty_columns(model)
    tag = f"[{offset}]"
    cost = weight * settings.period_h
    terminals: list[Terminal] = []
    _add_supply(builder, numbers, model, service, columns, terminals, offset, cost)
    _add_generators(
        builder, numbers, model, service, capacities, previous, columns, terminals, offset, cost
    )
    _add_stores(builder, model, service, capacities, previous, columns, terminals, offset)
    _add_loads(builder, numbers, model, service, columns, terminals, offset, cost, is_event)
    _add_bus_terms(builder, model, service, columns, terminals, offset, cost)
    band = (settings.vmin_event_pu, settings.vmax_event_pu)
    if not is_event:
        band = (settings.vmin_pu, settings.vmax_pu)
    sources = [model.feeder.source] if service.source_live else []
    sources += [int(model.feeder.supply_bus[i]) for i in np.flatnonzero(service.supply_closed)]
    network = add_network(
        builder, tag, model.feeder, service, terminals, band, model.flow_limit_kw, sources
    )
    columns.flow_kw, columns.flow_kvar = network.flow_kw, network.flow_kvar
    columns.v_sq = network.v_sq
    for bus, totals in model.bus_loads.items():
        if network.kw_row[bus] < 0:
            continue
        for row, total in zip((network.kw_row[bus], network.kvar_row[bus]), totals, strict=True):
            numbers.put("row_lower", int(row), total, offset)
            numbers.put("row_upper", int(row), total, offset)
    _add_islands(builder, numbers, model, service, capacities, columns, offset)
    return columns


def _add_supply(
    builder: ProgramBuilder,
    numbers: Numbers,
    model: FeederModel,
    service: ServicePeriod,
    columns: PeriodColumns,
    terminals: list[Terminal],
    offset: int,
    cost: float,
) -> None:
    """Purchase and sale at the source, and closed neighbour supplies."""
    settings, series, tag = model.study.settings, model.series, f"[{offset}]"
    price = series.price_per_kwh * cost
    if service.source_live:
        limit = float(settings.substation_limit_kva)
        box = min(limit, model.flow_limit_kw)
        p = columns.import_kw = builder.add_column(f"purchase {tag}", 0.0, box)
        numbers.put("cost", p, price, offset)
        kw: Terms = [(p, 1.0)]
        if series.export_price_per_kwh is not None:
            income = -series.export_price_per_kwh * cost
            columns.export_kw = builder.add_column(f"sale {tag}", 0.0, box, income)
            kw.append((columns.export_kw, -1.0))
        q = columns.import_kvar = builder.add_column(f"source kvar {tag}", -box, box)
        add_polygon(builder, f"substation {tag}", kw, [(q, 1.0)], limit)
        terminals.append(Terminal(model.feeder.source, kw, [(q, 1.0)]))
    for i in np.flatnonzero(service.supply_closed):
        name = f"{model.feeder.supply_ids[i]} {tag}"
        spare = series.supply_kw[:, i]
        p = columns.supply_kw[i] = builder.add_column(f"kW {name}", 0.0, float(spare.max()))
        numbers.put("col_upper", p, spare, offset)
        numbers.put("cost", p, price, offset)
        box = model.flow_limit_kw
        q = columns.supply_kvar[i] = builder.add_column(f"kvar {name}", -box, box)
        terminals.append(Terminal(int(model.feeder.supply_bus[i]), [(p, 1.0)], [(q, 1.0)]))


def _add_generators(
    builder: ProgramBuilder,
    numbers: Numbers,
    model: FeederModel,
    service: ServicePeriod,
    capacities: IntArray,
    previous: Previous,
    columns: PeriodColumns,
    terminals: list[Terminal],
    offset: int,
    cost: float,
) -> None:
    """Output, availability, ramps and tanks of every generator."""
    settings, tag = model.study.settings, f"[{offset}]"
    for i, unit in enumerate(model.study.generators):
        if not service.generator_live[i]:
            previous.output[i] = -1
            columns.fuel_kwh[i] = previous.fuel[i]
            continue
        capacity = model.generator_kw(capacities, i)
        may_run = bool(service.generator_may_run[i])
        bus = int(model.feeder.generator_bus[i])
        terminal = add_output(builder, columns, tag, i, unit, bus, capacity, may_run)
        p = int(columns.generator_kw[i])
        if terminal is not None:
            terminals.append(terminal)
            builder.cost[p] = unit.running_cost_per_kwh * cost
            share = model.series.availability[:, i]
            if unit.technology is not Technology.DISPATCHABLE and capacity.is_fixed:
                numbers.put("col_upper", p, share * capacity.upper, offset)
            elif not capacity.is_fixed:
                builder.add_row(
                    f"output {unit.generator} {tag}",
                    [(p, 1.0), (capacity.column, -1.0)],
                    upper=0.0,
                )
                if unit.technology is not Technology.DISPATCHABLE:
                    numbers.put("value", len(builder.value) - 1, -share, offset)
        trip_cost = settings.surplus_cost_per_kwh * cost
        before = int(previous.output[i])
        add_ramp(builder, columns, tag, i, unit, capacity, before, trip_cost)
        previous.output[i] = p
        if unit.tank_h is not None:
            refills = bool(service.generator_refills[i])
            fuel = int(previous.fuel[i])
            dt = settings.period_h
            add_tank(builder, columns, tag, i, unit, capacity, fuel, refills, dt)
            previous.fuel[i] = columns.fuel_kwh[i]


def _add_stores(
    builder: ProgramBuilder,
    model: FeederModel,
    service: ServicePeriod,
    capacities: IntArray,
    previous: Previous,
    columns: PeriodColumns,
    terminals: list[Terminal],
    offset: int,
) -> None:
    """Every live store; one that stands still hands its energy on."""
    for i, unit in enumerate(model.study.storage):
        if not service.storage_live[i]:
            columns.energy_kwh[i] = previous.energy[i]
            continue
        terminals.append(
            add_storage(
                builder,
                columns,
                f"[{offset}]",
                i,
                unit,
                int(model.feeder.storage_bus[i]),
                model.storage_kw(capacities, i),
                model.storage_kwh(capacities, i),
                int(previous.energy[i]),
                model.study.settings.period_h,
            )
        )
        previous.energy[i] = columns.energy_kwh[i]


def _add_loads(
    builder: ProgramBuilder,
    numbers: Numbers,
    model: FeederModel,
    service: ServicePeriod,
    columns: PeriodColumns,
    terminals: list[Terminal],
    offset: int,
    cost: float,
    is_event: bool,
) -> None:
    """Shedding of live loads; what is shed is offered to the bus, so that balances read load."""
    feeder, tag = model.feeder, f"[{offset}]"
    price = model.price_of_shed(service.clock_h, is_event)
    columns.load_live = service.bus_live[feeder.load_bus]
    kvar_per_kw = np.array([np.tan(np.arccos(x.power_factor)) for x in model.study.loads])

    def offer(load: int, column: int, share: float) -> None:
        bus = int(feeder.load_bus[load])
        kvar = share * float(kvar_per_kw[load])
        terminals.append(Terminal(bus, [(column, share)], [(column, kvar)]))

    first_of_section: dict[int, int] = {}
    for i_group, group in enumerate(model.loads.groups):
        if not columns.load_live[list(group.loads)].all():
            continue
        column = builder.add_column(f"shed group {i_group} {tag}", 0.0, float(group.total_kw.max()))
        columns.group_kw[i_group] = column
        numbers.put("col_upper", column, group.total_kw, offset)
        builder.cost[column] = cost * float(price[list(group.loads)] @ np.array(group.share))
        for load, share in zip(group.loads, group.share, strict=True):
            offer(load, column, share)
        if group.section < 0:
            continue
        first = first_of_section.setdefault(group.section, i_group)
        if first != i_group:
            # Equal shares, kW_1 / total_1 = kW_2 / total_2, written without a division by zero.
            other = model.loads.groups[first].total_kw
            total = np.maximum(other + group.total_kw, TINY_KW)
            terms = [(int(columns.group_kw[first]), 1.0), (column, -1.0)]
            builder.add_row(f"same share {group.section} {i_group} {tag}", terms, 0.0, 0.0)
            position = len(builder.value) - 2
            numbers.put("value", position, group.total_kw / total, offset)
            numbers.put("value", position + 1, -other / total, offset)
    for load in range(len(model.study.loads)):
        remote = model.loads.remote_kw[:, load]
        if not columns.load_live[load] or not remote.any():
            continue
        column = builder.add_column(f"shed remote {load} {tag}", 0.0, float(remote.max()))
        columns.remote_kw[load] = column
        numbers.put("col_upper", column, remote, offset)
        builder.cost[column] = cost * float(price[load])
        offer(load, column, 1.0)


TINY_KW = 1e-9
"""Keeps the share row finite where two groups have no load at all."""


def _add_bus_terms(
    builder: ProgramBuilder,
    model: FeederModel,
    service: ServicePeriod,
    columns: PeriodColumns,
    terminals: list[Terminal],
    offset: int,
    cost: float,
) -> None:
    """Capacitors, and surplus where a unit stands (elsewhere it could only cost)."""
    feeder, tag = model.feeder, f"[{offset}]"
    units = sum(float(u.existing_kw + u.max_new_kw) for u in model.study.generators)
    units += sum(float(u.existing_kw + u.max_new_kw) for u in model.study.storage)
    with_unit = set(feeder.generator_bus.tolist()) | set(feeder.storage_bus.tolist())
    for bus in np.flatnonzero(service.bus_live):
        name = f"{feeder.bus_ids[bus]} {tag}"
        kvar = float(feeder.capacitor_kvar[bus])
        if kvar > 0.0:
            column = builder.add_column(f"capacitor {name}", 0.0, kvar)
            columns.capacitor_kvar[bus] = column
            terminals.append(Terminal(int(bus), [], [(column, 1.0)]))
        if int(bus) in with_unit:
            price = model.study.settings.surplus_cost_per_kwh * cost
            column = builder.add_column(f"surplus {name}", 0.0, units, price)
            columns.surplus_kw[bus] = column
            terminals.append(Terminal(int(bus), [(column, -1.0)], []))


def _add_islands(
    builder: ProgramBuilder,
    numbers: Numbers,
    model: FeederModel,
    service: ServicePeriod,
    capacities: IntArray,
    columns: PeriodColumns,
    offset: int,
) -> None:
    """Island rules: others' output within a ratio of the forming units', and headroom."""
    settings, feeder, tag = model.study.settings, model.feeder, f"[{offset}]"
    for island in service.islands:
        buses = set(island.buses)
        name = f"island of {feeder.bus_ids[island.buses[0]]} {tag}"
        forming = [
            (int(columns.generator_kw[i]), model.generator_kw(capacities, i))
            for i in island.forming_generators
        ]
        forming += [
            (int(columns.storage_kw[i]), model.storage_kw(capacities, i))
            for i in island.forming_storage
        ]
        forming_columns = {column for column, _ in forming}
        outputs = [
            int(columns.generator_kw[i])
            for i, bus in enumerate(feeder.generator_bus)
            if int(bus) in buses and columns.generator_kw[i] >= 0
        ]
        outputs += [
            int(columns.storage_kw[i])
            for i, bus in enumerate(feeder.storage_bus)
            if int(bus) in buses and columns.storage_kw[i] >= 0
        ]
        others: Terms = [(c, 1.0) for c in outputs if c not in forming_columns]
        fixed_kw = sum(capacity.upper for _, capacity in forming if capacity.is_fixed)
        bought = [capacity for _, capacity in forming if not capacity.is_fixed]
        ratio = settings.island_ratio
        if others:
            terms = others + [t for capacity in bought for t in capacity.terms(-ratio)]
            builder.add_row(f"ratio {name}", terms, upper=ratio * fixed_kw)
        headroom = settings.island_headroom_frac
        terms = [t for capacity in bought for t in capacity.terms(1.0)]
        terms += [(column, -1.0) for column, _ in forming]
        loads = [i for i, bus in enumerate(feeder.load_bus) if int(bus) in buses]
        for i_group, group in enumerate(model.loads.groups):
            if columns.group_kw[i_group] >= 0:
                share = sum(s for i, s in zip(group.loads, group.share, strict=True) if i in loads)
                terms.append((int(columns.group_kw[i_group]), headroom * share))
        terms += [(int(columns.remote_kw[i]), headroom) for i in loads if columns.remote_kw[i] >= 0]
        row = builder.add_row(f"headroom {name}", terms)
        total = model.series.load_kw[:, loads].sum(axis=1)
        numbers.put("row_lower", row, headroom * total - fixed_kw, offset)


__all__ = ["FREE", "FeederModel", "Previous", "add_capacities", "add_limit", "add_period"]
