"""What can run in each period, of normal service and of an outage event.

Enters: stages of an event. Leaves: one ``ServicePeriod`` per period. Rules (model.md section 4):
an island is formed by its grid-forming units that are past their delay; a period in which no
forming unit counts is dead for the whole island. The delay of a generator, of any technology, is
``max(isolation, ceil(start delay / dt))`` periods from the start of the event, of storage the
isolation alone. A unit connected to the bulk supply or to a neighbour supply has no delay.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.network.feeder import Feeder
from xlplan.outages.records import Island, ServicePeriod, Stage
from xlplan.study.study import Study

IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

ROUNDING_PERIODS = 1e-9
"""Keeps 1 h at 5 minutes 12 periods although 1 / (5 / 60) may round up (model.md section 2)."""


def n_period_of(hours: float, period_h: float) -> int:
    """Whole periods that cover a time: ``ceil(hours / period_h - 1e-9)``, at least 0.

    >>> n_period_of(4.0, 0.5), n_period_of(0.1, 0.25), n_period_of(0.0, 0.25)
    (8, 1, 0)
    """
    return max(0, math.ceil(hours / period_h - ROUNDING_PERIODS))


def normal_service(study: Study, feeder: Feeder) -> ServicePeriod:
    """Everything in service: ties and neighbour supplies open, outage-only generators idle."""
    return ServicePeriod(
        clock_h=0.0,
        line_live=~feeder.normally_open,
        bus_live=np.ones(feeder.n_bus, dtype=bool),
        source_live=True,
        supply_closed=np.zeros(len(study.supplies), dtype=bool),
        generator_live=np.ones(len(study.generators), dtype=bool),
        generator_may_run=np.array([not g.is_outage_only for g in study.generators], dtype=bool),
        generator_refills=np.ones(len(study.generators), dtype=bool),
        storage_live=np.ones(len(study.storage), dtype=bool),
        islands=(),
    )


@dataclass(frozen=True)
class _Units:
    """What the rules need to know of the units, by position."""

    generator_delay: IntArray
    generator_forms: BoolArray
    storage_forms: BoolArray


def _units(study: Study, n_isolation: int) -> _Units:
    """Delays in periods, and which units can hold an island's voltage at all."""
    period_h = study.settings.period_h
    return _Units(
        generator_delay=np.array(
            [max(n_isolation, n_period_of(g.start_delay_h, period_h)) for g in study.generators],
            dtype=np.int64,
        ),
        generator_forms=np.array(
            [g.is_grid_forming and g.existing_kw + g.max_new_kw > 0.0 for g in study.generators],
            dtype=bool,
        ),
        storage_forms=np.array(
            [s.is_grid_forming and s.existing_kw + s.max_new_kw > 0.0 for s in study.storage],
            dtype=bool,
        ),
    )


def service_periods(
    study: Study, feeder: Feeder, stages: tuple[Stage, ...], n_isolation: int
) -> tuple[ServicePeriod, ...]:
    """What can run in each period of an outage event.

    Parameters
    ----------
    study, feeder : of one study
    stages : of the event, in order; units that are out are not live in them
    n_isolation : periods of isolation

    Returns
    -------
    tuple of ServicePeriod, one per period of the event; arrays may be shared between periods
    """
    units = _units(study, n_isolation)
    period_h = study.settings.period_h
    refill_from = np.array(
        [n_period_of(g.refill_delay_h, period_h) for g in study.generators], dtype=np.int64
    )
    periods: list[ServicePeriod] = []
    for stage in stages:
        built: dict[bytes, ServicePeriod] = {}
        is_fed = _fed_by_bulk(feeder, stage)[feeder.generator_bus]
        for _ in range(stage.n_period):
            j = len(periods)
            is_past = units.generator_delay <= j
            may_refill = is_fed & (refill_from <= j)
            key = is_past.tobytes() + may_refill.tobytes()
            if key not in built:
                built[key] = _service_period(
                    feeder, stage, units, is_past, n_isolation <= j, may_refill
                )
            periods.append(replace(built[key], clock_h=j * period_h))
    return tuple(periods)


def _fed_by_bulk(feeder: Feeder, stage: Stage) -> BoolArray:
    """(n_bus,), True where the bulk supply reaches the bus."""
    if not stage.source_live:
        return np.zeros(feeder.n_bus, dtype=bool)
    is_fed: BoolArray = stage.bus_live & (stage.part_of_bus == stage.part_of_bus[feeder.source])
    return is_fed


def _service_period(
    feeder: Feeder,
    stage: Stage,
    units: _Units,
    is_past: BoolArray,
    is_isolated: bool,
    may_refill: BoolArray,
) -> ServicePeriod:
    """One period of a stage; its clock is set by the caller."""
    bus_live = stage.bus_live.copy()
    in_island = np.zeros(feeder.n_bus, dtype=bool)
    islands = []
    for buses in stage.islands:
        inside = np.zeros(feeder.n_bus, dtype=bool)
        inside[list(buses)] = True
        generators = np.flatnonzero(
            inside[feeder.generator_bus] & stage.generator_live & units.generator_forms & is_past
        )
        storage = np.flatnonzero(
            inside[feeder.storage_bus] & stage.storage_live & units.storage_forms & is_isolated
        )
        if len(generators) + len(storage) == 0:
            bus_live &= ~inside
            continue
        in_island |= inside
        islands.append(
            Island(
                buses=buses,
                forming_generators=tuple(int(i) for i in generators),
                forming_storage=tuple(int(i) for i in storage),
            )
        )
    supply_closed = np.zeros(len(feeder.supply_ids), dtype=bool)
    supply_closed[list(stage.closed_supplies)] = True
    generator_live = stage.generator_live & bus_live[feeder.generator_bus]
    return ServicePeriod(
        clock_h=0.0,
        line_live=stage.line_live & bus_live[feeder.from_bus] & bus_live[feeder.to_bus],
        bus_live=bus_live,
        source_live=stage.source_live,
        supply_closed=supply_closed,
        generator_live=generator_live,
        generator_may_run=generator_live & (is_past | ~in_island[feeder.generator_bus]),
        generator_refills=generator_live & may_refill,
        storage_live=stage.storage_live & bus_live[feeder.storage_bus],
        islands=tuple(islands),
    )
