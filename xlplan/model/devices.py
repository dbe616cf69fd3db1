"""Generators and storage of one period: their columns, limits and links to the period before.

One function per physical idea. ``capacity`` gives a unit's kW or kWh either as a number (nothing
can be bought) or as the capacity column, see ``Capacity``.
"""

from __future__ import annotations

from dataclasses import dataclass

from xlplan.model.columns import PeriodColumns
from xlplan.model.linear_program import ProgramBuilder
from xlplan.model.network_block import Terminal, Terms, add_polygon
from xlplan.study.study import Generator, Storage

FREE = -2
"""Stands for a previous output that does not exist: first period of a window, no ramp rows."""


@dataclass(frozen=True)
class Capacity:
    """A capacity in service: its largest value and, where it can be bought, its column."""

    column: int
    upper: float
    is_fixed: bool

    def terms(self, coefficient: float) -> Terms:
        """``coefficient * capacity`` as terms; only for what can be bought."""
        return [(self.column, coefficient)]

    @property
    def rating(self) -> Terms | float:
        """The rating of a polygon."""
        return self.upper if self.is_fixed else [(self.column, 1.0)]


def add_limit(
    builder: ProgramBuilder, name: str, terms: Terms, coefficient: float, capacity: Capacity
) -> None:
    """Adds ``terms <= coefficient * capacity``."""
    if capacity.is_fixed:
        builder.add_row(name, terms, upper=coefficient * capacity.upper)
    else:
        builder.add_row(name, terms + capacity.terms(-coefficient), upper=0.0)


def add_output(
    builder: ProgramBuilder,
    columns: PeriodColumns,
    tag: str,
    i: int,
    unit: Generator,
    bus: int,
    capacity: Capacity,
    may_run: bool,
) -> Terminal | None:
    """Output of a live generator: kW below its capacity, kVA within its rating.

    A unit that may not run still has an output column (0), to which ramp rows refer. The limit by
    capacity of solar and wind depends on the period and is added by the caller.
    """
    name = f"{unit.generator} {tag}"
    upper = capacity.upper if may_run else 0.0
    p = columns.generator_kw[i] = builder.add_column(f"kW {name}", 0.0, upper)
    if not may_run or capacity.upper == 0.0:
        return None
    q = columns.generator_kvar[i] = builder.add_column(f"kvar {name}", -upper, upper)
    add_polygon(builder, name, [(p, 1.0)], [(q, 1.0)], capacity.rating)
    return Terminal(bus, [(p, 1.0)], [(q, 1.0)])


def add_ramp(
    builder: ProgramBuilder,
    columns: PeriodColumns,
    tag: str,
    i: int,
    unit: Generator,
    capacity: Capacity,
    previous: int,
    trip_cost: float,
) -> None:
    """Ramp rows between the previous output's column and this period's.

    ``previous``: a column; -1 where the unit stood still, it then ramps up from 0; FREE for none.
    Tripping is always possible, at the price of surplus energy.
    """
    ramp = unit.ramp_frac_per_period
    if ramp is None or previous == FREE:
        return
    name = f"{unit.generator} {tag}"
    p = int(columns.generator_kw[i])
    before = [] if previous < 0 else [(previous, -1.0)]
    add_limit(builder, f"ramp up {name}", [(p, 1.0), *before], ramp, capacity)
    if before:
        trip = builder.add_column(f"trip {name}", 0.0, capacity.upper, trip_cost)
        columns.trip_kw[i] = trip
        terms = [(p, -1.0), (previous, 1.0), (trip, -1.0)]
        add_limit(builder, f"ramp down {name}", terms, ramp, capacity)


def add_tank(
    builder: ProgramBuilder,
    columns: PeriodColumns,
    tag: str,
    i: int,
    unit: Generator,
    capacity: Capacity,
    previous: int,
    refills: bool,
    period_h: float,
) -> None:
    """Fuel left after the period, in kWh of output; more fuel never costs more, so <= is exact."""
    assert unit.tank_h is not None
    name = f"{unit.generator} {tag}"
    fuel = builder.add_column(f"fuel {name}", 0.0, unit.tank_h * capacity.upper)
    columns.fuel_kwh[i] = fuel
    if not capacity.is_fixed:
        add_limit(builder, f"tank {name}", [(fuel, 1.0)], unit.tank_h, capacity)
    if refills and unit.refill_frac_per_h is None:
        return
    refill = unit.refill_frac_per_h * unit.tank_h * period_h if refills else 0.0  # type: ignore[operator]
    terms = [(fuel, 1.0), (previous, -1.0), (int(columns.generator_kw[i]), period_h)]
    if refill > 0.0:
        add_limit(builder, f"fuel use {name}", terms, refill, capacity)
    else:
        builder.add_row(f"fuel use {name}", terms, upper=0.0)


def add_storage(
    builder: ProgramBuilder,
    columns: PeriodColumns,
    tag: str,
    i: int,
    unit: Storage,
    bus: int,
    kw: Capacity,
    kwh: Capacity,
    previous: int,
    period_h: float,
) -> Terminal:
    """A live store: energy balance, loss curve, inverter and charge limits (model.md section 4)."""
    name = f"{unit.storage} {tag}"
    z_low, z_high = unit.curve[0][0], unit.curve[-1][0]
    b = columns.storage_kw[i] = builder.add_column(f"kW {name}", -kw.upper, kw.upper)
    q = columns.storage_kvar[i] = builder.add_column(f"kvar {name}", -kw.upper, kw.upper)
    z = builder.add_column(f"draw {name}", z_low * kw.upper, z_high * kw.upper)
    columns.draw_kw[i] = z
    floor = unit.min_soc_frac * kwh.upper if kwh.is_fixed else 0.0
    e = columns.energy_kwh[i] = builder.add_column(f"kWh {name}", floor, kwh.upper)
    builder.add_row(f"energy {name}", [(e, 1.0), (previous, -1.0), (z, period_h)], 0.0, 0.0)
    for j, (slope, intercept) in enumerate(unit.edges):
        terms = [(b, 1.0), (z, -slope)]
        if abs(intercept) < EDGE_TOLERANCE:
            builder.add_row(f"loss {j} {name}", terms, upper=0.0)
        else:
            add_limit(builder, f"loss {j} {name}", terms, intercept, kw)
    if not kw.is_fixed:
        add_limit(builder, f"discharge {name}", [(b, 1.0)], 1.0, kw)
        add_limit(builder, f"charge {name}", [(b, -1.0)], 1.0, kw)
        add_limit(builder, f"draw high {name}", [(z, 1.0)], z_high, kw)
        add_limit(builder, f"draw low {name}", [(z, -1.0)], -z_low, kw)
    if not kwh.is_fixed:
        add_limit(builder, f"full {name}", [(e, 1.0)], 1.0, kwh)
        if unit.min_soc_frac > 0.0:
            add_limit(builder, f"lowest charge {name}", [(e, -1.0)], -unit.min_soc_frac, kwh)
    add_polygon(builder, name, [(b, 1.0)], [(q, 1.0)], kw.rating)
    return Terminal(bus, [(b, 1.0)], [(q, 1.0)])


EDGE_TOLERANCE = 1e-12
"""An edge through the origin has no intercept but for rounding."""
