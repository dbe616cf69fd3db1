"""Everything known about one window before the model is built.

Both formulations of the model (whole tree and decomposition) start from these records.
"""

from __future__ import annotations

from dataclasses import dataclass

from xlplan.network.feeder import Feeder
from xlplan.outages.clock import Clock
from xlplan.outages.records import Scenario, ServicePeriod
from xlplan.outages.scenarios import build_scenarios, rate_divisors
from xlplan.outages.sections import build_sections
from xlplan.outages.service import normal_service
from xlplan.study.study import Study
from xlplan.study.windows import WindowSeries, build_window_series


@dataclass(frozen=True)
class WindowModel:
    """Numbers of one window, what can fail in it and when, and normal service."""

    series: WindowSeries
    scenarios: tuple[Scenario, ...]
    clock: Clock
    normal: ServicePeriod


def build_window_models(study: Study, feeder: Feeder) -> tuple[WindowModel, ...]:
    """One record per window, in the order of the study.

    Parameters
    ----------
    study : Study, checked
    feeder : Feeder of the same study, radial

    Returns
    -------
    tuple of WindowModel
    """
    divisors = rate_divisors(study)
    sections = build_sections(feeder)
    normal = normal_service(study, feeder)
    models = []
    for window in study.windows:
        series = build_window_series(study, window)
        scenarios = build_scenarios(study, feeder, series, divisors, sections)
        clock = Clock.of(scenarios, series)
        models.append(WindowModel(series, scenarios, clock, normal))
    return tuple(models)
