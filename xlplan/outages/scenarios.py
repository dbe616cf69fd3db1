"""What fails, how often: components and their classes made into merged scenarios.

Enters: a study, its feeder and one window's series. Leaves: the window's ``Scenario`` records.
Faults with the same dead section, stages, times and hardening are one scenario with the sum of
their rates: merging is exact (model.md section 2), and large feeders depend on it. The times are
those that act: whole periods of isolation and of the event, and the true switching time.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.network.feeder import Feeder
from xlplan.outages.faults import bulk_supply_stages, failed_unit_stages, isolation_and_repair
from xlplan.outages.rates import (
    BULK_SUPPLY,
    GENERATOR,
    LINE,
    STORAGE,
    Component,
    components,
    rate_by_period,
    rate_divisors,
)
from xlplan.outages.records import Cause, Scenario, ServicePeriod, Stage
from xlplan.outages.sections import Sections, build_sections
from xlplan.outages.service import n_period_of, normal_service, service_periods
from xlplan.study.study import RepairSpread, Study
from xlplan.study.windows import WindowSeries

FloatArray = NDArray[np.float64]

__all__ = ["build_scenarios", "normal_service", "rate_divisors", "service_periods"]

REPAIR_SPREAD = {
    RepairSpread.NONE: ((1.0, 1.0),),
    RepairSpread.THREE_POINT: ((0.5, 0.4), (1.0, 0.4), (2.0, 0.2)),
}
"""(multiple of the repair time, chance); the three points are those of model.md section 2."""


@dataclass(frozen=True)
class _Event:
    """What one failure leads to, before equal ones are merged.

    ``where`` and ``detail`` become part of the scenario's name.
    """

    where: str
    detail: str
    section: str
    n_isolation: int
    n_period: int
    switching_h: float
    repair_h: float
    stages: tuple[Stage, ...]
    service: tuple[ServicePeriod, ...]
    hardening: tuple[tuple[int, float], ...]
    cause: Cause

    @property
    def key(self) -> tuple[object, ...]:
        """Equal for events that may be merged."""
        return (
            self.cause.kind == BULK_SUPPLY,
            self.section,
            self.n_isolation,
            self.n_period,
            self.switching_h,
            self.hardening,
            tuple(_stage_key(stage) for stage in self.stages),
        )


def _stage_key(stage: Stage) -> tuple[object, ...]:
    """All that a stage says, in a form that can be compared."""
    return (
        stage.name,
        stage.n_period,
        stage.line_live.tobytes(),
        stage.closed_ties,
        stage.closed_supplies,
        stage.source_live,
        stage.bus_live.tobytes(),
        stage.islands,
        stage.generator_live.tobytes(),
        stage.storage_live.tobytes(),
    )


def build_scenarios(
    study: Study,
    feeder: Feeder,
    series: WindowSeries,
    divisors: Mapping[str, float] | None = None,
    sections: Sections | None = None,
) -> tuple[Scenario, ...]:
    """Everything that can fail in one window, merged.

    Parameters
    ----------
    study, feeder : of one study, radial
    series : the window's numbers
    divisors : of ``rate_divisors``, worked out here if not given
    sections : of ``build_sections``, likewise

    Returns
    -------
    tuple of Scenario in the order of lines, generators, storage, bulk supply; none whose rate is 0
    in every period. Their rates sum to those of the components.
    """
    divisors = rate_divisors(study) if divisors is None else divisors
    builder = _EventBuilder(study, feeder, build_sections(feeder) if sections is None else sections)
    merged: dict[tuple[object, ...], list[_Event]] = {}
    for component in components(study):
        rate = rate_by_period(component, series, divisors)
        if not rate.any():
            continue
        for event in builder.events(component, rate, series.repair_multiplier):
            merged.setdefault(event.key, []).append(event)
    return _with_unique_names([_merge(events) for events in merged.values()])


class _EventBuilder:
    """Turns failures into events; stages of one section and timing are worked out once."""

    def __init__(self, study: Study, feeder: Feeder, sections: Sections) -> None:
        self.study = study
        self.feeder = feeder
        self.sections = sections
        self._topologies: dict[tuple[str, int], tuple[Stage, ...]] = {}
        self._cache: dict[
            tuple[object, ...], tuple[tuple[Stage, ...], tuple[ServicePeriod, ...]]
        ] = {}

    def events(
        self, component: Component, rate: FloatArray, repair_multiplier: float
    ) -> Iterator[_Event]:
        """Events of one component, with their shares of its rate.

        Spread of the repair time and start failures split the rate; shares sum to 1.
        """
        outage_class = component.outage_class
        multiplier = repair_multiplier if outage_class.is_weather_exposed else 1.0
        for factor, chance in REPAIR_SPREAD[self.study.settings.repair_spread]:
            repair_h = outage_class.repair_h * multiplier * factor
            event = self._event(component, rate * chance, repair_h)
            copies = list(self._start_failures(event))
            kept = 1.0 - sum(share for _, share in copies)
            if kept > 0.0:
                yield _scaled(event, kept)
            for copy, share in copies:
                yield _scaled(copy, share)

    def _event(self, component: Component, rate: FloatArray, repair_h: float) -> _Event:
        """The event in which every unit starts."""
        outage_class = component.outage_class
        period_h = self.study.settings.period_h
        n_isolation = n_period_of(outage_class.switching_h, period_h)
        n_period = max(n_period_of(repair_h, period_h), n_isolation, 1)
        switching_h = outage_class.switching_h
        section = ""
        if component.kind in (GENERATOR, STORAGE):
            # Nothing has to be isolated: the event lasts as long, without an isolation stage.
            n_isolation, switching_h = 0, 0.0
            where = f"{component.kind.capitalize()} {component.ident}"
        elif component.kind == BULK_SUPPLY:
            where = "Bulk supply"
        else:
            section = self.sections.labels[self.sections.section_of_line[component.position]]
            where = section
        stages, service = self._stages(component, n_isolation, n_period)
        return _Event(
            where=where,
            detail="",
            section=section,
            n_isolation=n_isolation,
            n_period=n_period,
            switching_h=switching_h,
            repair_h=repair_h,
            stages=stages,
            service=service,
            hardening=self._hardening(component),
            cause=Cause(
                kind=component.kind,
                ident=component.ident,
                outage_class=outage_class.outage_class,
                rate_per_year=rate,
                repair_cost_per_failure=outage_class.repair_cost_per_failure,
            ),
        )

    def _stages(
        self, component: Component, n_isolation: int, n_period: int
    ) -> tuple[tuple[Stage, ...], tuple[ServicePeriod, ...]]:
        """Stages and service of a failure."""
        place = component.position
        if component.kind == LINE:
            place = int(self.sections.section_of_line[component.position])
        key = (component.kind, place, n_isolation, n_period)
        if key not in self._cache:
            stages = self._topology(component.kind, place)
            lasting = [n_isolation, n_period - n_isolation] if len(stages) == 2 else [n_period]
            stages = tuple(
                replace(stage, n_period=n)
                for stage, n in zip(stages, lasting, strict=True)
                if n > 0
            )
            service = service_periods(self.study, self.feeder, stages, n_isolation)
            self._cache[key] = (stages, service)
        return self._cache[key]

    def _topology(self, kind: str, place: int) -> tuple[Stage, ...]:
        """Isolation and repair, or a failed unit's one stage, of one period each."""
        if (kind, place) not in self._topologies:
            of = (self.study, self.feeder, self.sections)
            if kind == LINE:
                stages = isolation_and_repair(*of, place, 1, 2)
            elif kind == BULK_SUPPLY:
                stages = bulk_supply_stages(*of, 1, 2)
            elif kind == GENERATOR:
                stages = failed_unit_stages(*of, 1, generator=place)
            else:
                stages = failed_unit_stages(*of, 1, storage=place)
            self._topologies[kind, place] = stages
        return self._topologies[kind, place]

    def _hardening(self, component: Component) -> tuple[tuple[int, float], ...]:
        """(measure, share of failures avoided) of a line, ascending by share."""
        if component.kind != LINE:
            return ()
        covering = [
            (measure.failures_avoided_frac, i)
            for i, measure in enumerate(self.study.measures)
            if component.ident in measure.lines and measure.failures_avoided_frac > 0.0
        ]
        return tuple((i, share) for share, i in sorted(covering))

    def _start_failures(self, event: _Event) -> Iterator[tuple[_Event, float]]:
        """Copies of an event in which one generator fails to start, with their shares.

        At most one unit fails to start. Shares that sum to more than 1 are scaled to 1.
        """
        must_start = [
            i
            for i, generator in enumerate(self.study.generators)
            if generator.start_failure_frac > 0.0
            and generator.existing_kw + generator.max_new_kw > 0.0
            and _must_start(event.service, self.feeder, i, generator.is_outage_only)
        ]
        total = sum(self.study.generators[i].start_failure_frac for i in must_start)
        for i in must_start:
            generator = self.study.generators[i]
            key = (tuple(_stage_key(stage) for stage in event.stages), "out", i)
            if key not in self._cache:
                out = np.arange(len(self.study.generators)) == i
                stages = tuple(
                    replace(stage, generator_live=stage.generator_live & ~out)
                    for stage in event.stages
                )
                service = service_periods(self.study, self.feeder, stages, event.n_isolation)
                self._cache[key] = (stages, service)
            stages, service = self._cache[key]
            copy = replace(
                event,
                detail=f", {generator.generator} does not start",
                stages=stages,
                service=service,
            )
            yield copy, generator.start_failure_frac / max(1.0, total)


def _must_start(
    service: tuple[ServicePeriod, ...], feeder: Feeder, i_generator: int, is_outage_only: bool
) -> bool:
    """Whether a generator has to start in an event.

    It may run in some period, and there is outage-only or stands in an island.
    """
    bus = feeder.generator_bus[i_generator]
    return any(
        period.generator_may_run[i_generator]
        and (is_outage_only or any(bus in island.buses for island in period.islands))
        for period in service
    )


def _scaled(event: _Event, share: float) -> _Event:
    """The event with a share of its rate."""
    cause = replace(event.cause, rate_per_year=event.cause.rate_per_year * share)
    return replace(event, cause=cause)


def _merge(events: list[_Event]) -> Scenario:
    """One scenario of equal events: rates add, repair cost and repair time are averaged by rate."""
    first = events[0]
    rates = np.array([event.cause.rate_per_year for event in events])
    costs = np.array([event.cause.repair_cost_per_failure for event in events])
    total = rates.sum(axis=0)
    repair_cost = np.divide(costs @ rates, total, out=np.zeros_like(total), where=total > 0.0)
    repair_h = float(np.average([event.repair_h for event in events], weights=rates.sum(axis=1)))
    classes = " or ".join(dict.fromkeys(event.cause.outage_class for event in events))
    what = "fault" if first.cause.kind == LINE else "failure"
    return Scenario(
        name=f"{first.where}: {classes} {what}, {repair_h:.3g} h{first.detail}",
        detail=first.detail,
        section=first.section,
        causes=_joined_causes(events),
        n_isolation=first.n_isolation,
        n_period=first.n_period,
        switching_h=first.switching_h,
        repair_h=repair_h,
        stages=first.stages,
        service=first.service,
        hardening=first.hardening,
        is_bulk_supply=first.cause.kind == BULK_SUPPLY,
        rate_per_year=total,
        repair_cost=repair_cost,
    )


def _joined_causes(events: list[_Event]) -> tuple[Cause, ...]:
    """One cause per component: two points of its repair spread may round to one time."""
    causes: dict[tuple[str, str], Cause] = {}
    for event in events:
        key = (event.cause.kind, event.cause.ident)
        if key in causes:
            rate = causes[key].rate_per_year + event.cause.rate_per_year
            causes[key] = replace(causes[key], rate_per_year=rate)
        else:
            causes[key] = event.cause
    return tuple(causes.values())


def _with_unique_names(scenarios: list[Scenario]) -> tuple[Scenario, ...]:
    """Names that differ: where needed, the causes are named, and a number added."""
    count = Counter(scenario.name for scenario in scenarios)
    result: list[Scenario] = []
    taken: set[str] = set()
    for scenario in scenarios:
        name = scenario.name
        if count[name] > 1:
            idents = [cause.ident for cause in scenario.causes]
            listed = ", ".join(idents[:3]) + (" and others" if len(idents) > 3 else "")
            name = f"{name} ({listed})"
        unique, number = name, 2
        while unique in taken:
            unique, number = f"{name} [{number}]", number + 1
        taken.add(unique)
        result.append(replace(scenario, name=unique))
    return tuple(result)
