"""What can fail, and how often in each period of a window.

Enters: a study and one window's series. Leaves: components with yearly rates by period:
``rate_c(k) = lambda_c mu_c(k)``, ``mu`` the window's failure multiplier times the failure shape
for weather-exposed classes, else 1 (model.md section 2).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.base.units import HOURS_PER_YEAR
from xlplan.study.study import OutageClass, RateBasis, Study
from xlplan.study.windows import WindowSeries, build_window_series

FloatArray = NDArray[np.float64]

LINE, GENERATOR, STORAGE, BULK_SUPPLY = "line", "generator", "storage", "bulk supply"


@dataclass(frozen=True)
class Component:
    """Something that can fail, at a yearly rate above 0 as typed.

    ``kind`` is one of the four words above, ``position`` its row among the study's records.
    """

    kind: str
    position: int
    ident: str
    outage_class: OutageClass
    failures_per_year: float


def rate_divisors(study: Study) -> dict[str, float]:
    """What each class's typed rate is divided by, so that a year adds up to it.

    Returns
    -------
    dict by outage class: ``sum_w n_w sum_k mu_c(w,k) dt / 8760`` where the rates hold for all the
    year, 1 where they are those of fair weather
    """
    if study.settings.rate_basis is RateBasis.FAIR_WEATHER:
        return {c.outage_class: 1.0 for c in study.outage_classes}
    exposed = sheltered = 0.0
    for window in study.windows:
        series = build_window_series(study, window)
        share = window.occurrences_per_year * series.period_h / HOURS_PER_YEAR
        sheltered += share * series.n_period
        exposed += share * float(_exposure(series).sum())
    return {
        c.outage_class: exposed if c.is_weather_exposed else sheltered for c in study.outage_classes
    }


def _exposure(series: WindowSeries) -> FloatArray:
    """``mu`` of weather-exposed classes, shape (n_period,)."""
    return series.failure_multiplier * series.failure_shape


def components(study: Study) -> Iterator[Component]:
    """All that can fail: closed lines, existing units, the bulk supply."""
    classes = {c.outage_class: c for c in study.outage_classes if c.is_included}

    def component(
        kind: str, position: int, ident: str, name: str | None, length: float = 0.0
    ) -> Iterator[Component]:
        outage_class = classes.get(name) if name is not None else None
        if outage_class is None:
            return
        rate = outage_class.failures_per_year + outage_class.failures_per_length_year * length
        if rate > 0.0:
            yield Component(kind, position, ident, outage_class, rate)

    for i, line in enumerate(study.lines):
        if not line.normally_open:
            yield from component(LINE, i, line.line, line.outage_class, line.length)
    for i, generator in enumerate(study.generators):
        if generator.existing_kw > 0.0:
            yield from component(GENERATOR, i, generator.generator, generator.outage_class)
    for i, unit in enumerate(study.storage):
        if unit.existing_kw > 0.0:
            yield from component(STORAGE, i, unit.storage, unit.outage_class)
    settings = study.settings
    yield from component(BULK_SUPPLY, 0, settings.source_bus, settings.bulk_supply_outage_class)


def rate_by_period(
    component: Component, series: WindowSeries, divisors: Mapping[str, float]
) -> FloatArray:
    """Failures per year in each period, shape (n_period,); 0 if the class can never strike."""
    divisor = divisors[component.outage_class.outage_class]
    if divisor <= 0.0:
        return np.zeros(series.n_period)
    is_exposed = component.outage_class.is_weather_exposed
    exposure = _exposure(series) if is_exposed else np.ones(series.n_period)
    return component.failures_per_year / divisor * exposure
