"""Checks of outages: times that rounding moves, islands that nothing can form, too many failures.

Enters: a study, its scenarios or models by window. Leaves: findings.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Mapping, Sequence

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level, Origin
from xlplan.base.units import HOURS_PER_YEAR, minutes_from_hours, pct_from_frac
from xlplan.network.feeder import Feeder
from xlplan.outages.records import Scenario
from xlplan.outages.scenarios import REPAIR_SPREAD
from xlplan.outages.service import n_period_of
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import RateBasis, Study

ROUNDING_WARNING_FRAC = 0.05
"""A time that rounding to whole periods moves by more than this is a warning (model.md)."""

MOST_FAILURES, MOST_PER_PERIOD = 300.0, 20.0
"""Failures that the rates of one occurrence of a window, and of one of its periods, may add up to.
The chance of none is then 1e-130, and 2e-9; not far beyond they are 0 in floating point, and a plan
for that would have no value."""


def check_failure_counts(study: Study, windows: Sequence[WindowModel]) -> list[Finding]:
    """Faults at windows whose rates add up to more failures than can be planned for.

    Parameters
    ----------
    study : Study
    windows : WindowModel of each window of the study

    Returns
    -------
    list of Finding, at the window's ``failure_multiplier``
    """
    findings = []
    for record, window in zip(study.windows, windows, strict=True):
        clock = window.clock
        by_period = clock.rate_per_year.sum(axis=1) * clock.period_h / HOURS_PER_YEAR
        expected, highest = clock.poisson_mean(), float(by_period.max(initial=0.0))
        if expected > MOST_FAILURES:
            what, most = f"{expected:.4g} failures in one occurrence", MOST_FAILURES
        elif highest > MOST_PER_PERIOD:
            what, most = f"{highest:.4g} failures in one period", MOST_PER_PERIOD
        else:
            continue
        hint = "Give failures per year, and a multiplier of 1 where they are as usual."
        if study.settings.rate_basis is RateBasis.ALL_YEAR:
            hint += (
                " With rate_basis all year, all failures of a year fall into the windows listed:"
                " add windows for the rest of the year, or take fair weather."
            )
        findings.append(
            Finding(
                level=Level.FAULT,
                code=Code.FAILURES_TOO_MANY,
                sheet=record.origin.sheet,
                cell=record.origin.cell("failure_multiplier"),
                key="failure_multiplier",
                value=f"{record.failure_multiplier:g}",
                message=f"the failure rates add up to {what} of window {record.window}; more than "
                f"{most:g} cannot be planned for.",
                hint=hint,
            )
        )
    return findings


def check_rounded_times(study: Study) -> list[Finding]:
    """Warnings where whole periods move a repair, switching or start time by more than 5 %.

    Repair times of weather-exposed classes are looked at with each window's multiplier; one
    finding per cell, for the first window where it happens.
    """
    period_h = study.settings.period_h
    findings: list[Finding] = []

    def check(origin: Origin, key: str, typed: float, time_h: float, least: int, what: str) -> bool:
        if time_h <= 0.0:
            return False
        acts_h = max(n_period_of(time_h, period_h), least) * period_h
        if abs(acts_h - time_h) <= ROUNDING_WARNING_FRAC * time_h * (1.0 + 1e-9):
            return False
        moved = pct_from_frac(acts_h / time_h - 1.0)
        findings.append(
            Finding(
                level=Level.WARNING,
                code=Code.TIME_ROUNDED,
                sheet=origin.sheet,
                cell=origin.cell(key),
                key=key,
                value=f"{typed:g}",
                message=f"{what} of {time_h:.4g} h acts as {acts_h:.4g} h ({moved:+.0f} %), "
                f"whole periods of {minutes_from_hours(period_h):g} minutes.",
                hint="Use shorter periods, or accept the longer time.",
            )
        )
        return True

    for outage_class in study.outage_classes:
        if not outage_class.is_included:
            continue
        name = outage_class.outage_class
        switching_h = outage_class.switching_h
        check(
            outage_class.origin,
            "switching_minutes",
            minutes_from_hours(switching_h),
            switching_h,
            0,
            f"isolation of {name}",
        )
        least = max(n_period_of(switching_h, period_h), 1)
        multipliers = {1.0: ""}
        if outage_class.is_weather_exposed:
            multipliers = {w.repair_multiplier: f" in window {w.window}" for w in study.windows}
        spread = [factor for factor, _ in REPAIR_SPREAD[study.settings.repair_spread]]
        for (multiplier, where), factor in itertools.product(multipliers.items(), spread):
            repair_h = outage_class.repair_h * multiplier * factor
            what = f"a repair of {name}{where}"
            if check(
                outage_class.origin, "repair_hours", outage_class.repair_h, repair_h, least, what
            ):
                break
    for generator in study.generators:
        delay_h = generator.start_delay_h
        check(
            generator.origin,
            "start_delay_minutes",
            minutes_from_hours(delay_h),
            delay_h,
            0,
            f"a start delay of {generator.generator}",
        )
    return findings


def check_islands(
    study: Study, feeder: Feeder, scenarios_by_window: Mapping[str, Iterable[Scenario]]
) -> list[Finding]:
    """Warnings for units in islands that nothing could form, so that they stand still there.

    Returns
    -------
    list of Finding, one per unit that is in such an island and in none that is formed, at its
    ``grid_forming`` cell
    """
    formed: set[int] = set()
    unformed: dict[int, str] = {}
    for window, scenarios in scenarios_by_window.items():
        for scenario in scenarios:
            inside = {i for period in scenario.service for x in period.islands for i in x.buses}
            formed |= inside
            for stage in scenario.stages:
                for i_bus in (i for island in stage.islands for i in island):
                    if i_bus not in inside:
                        unformed.setdefault(i_bus, f'"{scenario.name}" ({window})')
    units = [
        (
            generator.generator,
            generator.bus,
            generator.existing_kw + generator.max_new_kw,
            generator.origin,
        )
        for generator in study.generators
    ] + [
        (unit.storage, unit.bus, unit.existing_kw + unit.max_new_kw, unit.origin)
        for unit in study.storage
    ]
    findings = []
    for ident, bus, kw, origin in units:
        i_bus = feeder.bus_ids.index(bus)
        if kw <= 0.0 or i_bus in formed or i_bus not in unformed:
            continue
        findings.append(
            Finding(
                level=Level.WARNING,
                code=Code.ISLAND_NOT_FORMED,
                sheet=origin.sheet,
                cell=origin.cell("grid_forming"),
                key="grid_forming",
                value="",
                message=f"{ident} at bus {bus} can carry nothing in an outage such as "
                f"{unformed[i_bus]}: no unit of its island can hold the voltage.",
                hint="Mark a unit of the island as grid-forming, if it is.",
            )
        )
    return findings
