"""Columns of one period of the whole tree, and the state that one period hands to the next."""

from __future__ import annotations

from dataclasses import dataclass, field

from pulp import LpAffineExpression as Expression

from xlplan.network.feeder import Feeder
from xlplan.outages.records import ServicePeriod
from xlplan.study.study import Study


@dataclass(frozen=True)
class PlantState:
    """What one period hands to the next.

    ``generator_kw``: previous output, None where free (start of a window), 0 where it was dead.
    ``fuel_kwh``: None where there is no tank.
    """

    energy_kwh: tuple[Expression, ...]
    generator_kw: tuple[Expression | None, ...]
    fuel_kwh: tuple[Expression | None, ...]


@dataclass(frozen=True)
class Case:
    """Which period: a unique name for its columns, the row of the window it reads, service."""

    name: str
    row: int
    service: ServicePeriod
    is_event: bool


def nothing(n_item: int) -> list[Expression]:
    """Zeros, one per asset: stays so for what cannot run."""
    return [Expression() for _ in range(n_item)]


@dataclass
class OperatedPeriod:
    """Columns of one period, one expression per asset (0 where it cannot run), and its cost.

    The names are those of ``dispatch.Dispatch``. ``fuel_kwh`` and ``v_sq_pu`` are None where there
    is no tank and where the bus is dead. ``cost`` leaves out what is charged per event.
    """

    import_kw: Expression
    export_kw: Expression
    source_kvar: Expression
    supply_kw: list[Expression]
    supply_kvar: list[Expression]
    generator_kw: list[Expression]
    generator_kvar: list[Expression]
    storage_kw: list[Expression]
    storage_draw_kw: list[Expression]
    storage_kvar: list[Expression]
    energy_kwh: list[Expression]
    fuel_kwh: list[Expression | None]
    trip_kw: list[Expression]
    shed_kw: list[Expression]
    surplus_kw: list[Expression]
    capacitor_kvar: list[Expression]
    line_kw: list[Expression]
    line_kvar: list[Expression]
    v_sq_pu: list[Expression | None]
    cost: Expression = field(default_factory=Expression)

    def state(self) -> PlantState:
        """State at the end of the period; a unit that stood still has a previous output of 0."""
        return PlantState(
            energy_kwh=tuple(self.energy_kwh),
            generator_kw=tuple(self.generator_kw),
            fuel_kwh=tuple(self.fuel_kwh),
        )


def idle_period(study: Study, feeder: Feeder, before: PlantState) -> OperatedPeriod:
    """Everything at 0 and stores as they were, before the rules add columns."""
    n_generator, n_storage = len(study.generators), len(study.storage)
    n_supply, n_bus = len(study.supplies), feeder.n_bus
    return OperatedPeriod(
        import_kw=Expression(),
        export_kw=Expression(),
        source_kvar=Expression(),
        supply_kw=nothing(n_supply),
        supply_kvar=nothing(n_supply),
        generator_kw=nothing(n_generator),
        generator_kvar=nothing(n_generator),
        storage_kw=nothing(n_storage),
        storage_draw_kw=nothing(n_storage),
        storage_kvar=nothing(n_storage),
        energy_kwh=list(before.energy_kwh),
        fuel_kwh=list(before.fuel_kwh),
        trip_kw=nothing(n_generator),
        shed_kw=nothing(len(study.loads)),
        surplus_kw=nothing(n_bus),
        capacitor_kvar=nothing(n_bus),
        line_kw=nothing(feeder.n_line),
        line_kvar=nothing(feeder.n_line),
        v_sq_pu=[None] * n_bus,
    )
