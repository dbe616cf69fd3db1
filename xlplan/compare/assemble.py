"""The whole answer put together from the plans, the findings and the inputs."""

from __future__ import annotations

import importlib.metadata
import platform
from collections.abc import Sequence

import xlplan
from xlplan.base.errors import Finding
from xlplan.base.names import EXISTING, IGNORING_OUTAGES, LEAST_COST
from xlplan.compare.echo import echo_inputs
from xlplan.compare.history import history_checks, peak_kw
from xlplan.compare.standing import SolvedPlan, SolveOptions
from xlplan.compare.study_result import StudyResult
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study
from xlplan.workbook.tables import RawStudy

LIBRARIES = ("highspy", "pulp", "numpy", "pandas", "openpyxl", "xlsxwriter")
"""Whose versions a result rests on."""


def assemble(
    study: Study,
    raw: RawStudy,
    windows: Sequence[WindowModel],
    options: SolveOptions,
    plans: Sequence[SolvedPlan],
    findings: Sequence[Finding],
    started_at: str,
    read_seconds: float,
    solve_seconds: float,
) -> StudyResult:
    """The ``StudyResult`` of a solved study.

    Parameters
    ----------
    study, raw, windows : what was solved, and as typed
    options : SolveOptions in force
    plans : sequence of SolvedPlan; the standing alternatives first
    findings : sequence of Finding, of reading and checking
    started_at : local time as text
    read_seconds, solve_seconds : float

    Returns
    -------
    StudyResult
    """
    by_name = {plan.result.name: plan for plan in plans}
    best, blind = by_name[LEAST_COST], by_name[IGNORING_OUTAGES]
    value = blind.result.costs.total - best.result.costs.total
    half = blind.follow.difference_half_width(best.follow)
    versions = [("xlplan", xlplan.__version__), ("Python", platform.python_version())]
    versions += [(name, importlib.metadata.version(name)) for name in LIBRARIES]
    return StudyResult(
        study_name=study.settings.study_name,
        prepared_by=study.settings.prepared_by,
        currency=study.settings.currency,
        price_year=study.settings.price_year,
        study_file=raw.file_name,
        fingerprint=study.fingerprint,
        seed=options.seed,
        method=best.result.method,
        method_reason=best.result.method_reason,
        status=best.result.status,
        gap_target_frac=options.gap_target_frac,
        recommended=LEAST_COST,
        plans=tuple(plan.result for plan in plans),
        value_of_outage_planning=value,
        value_of_outage_planning_interval=(value - half, value + half),
        scenarios=sum(len(window.scenarios) for window in windows),
        findings=tuple(findings),
        checks=history_checks(study, windows, by_name[EXISTING].result),
        inputs=echo_inputs(raw, study),
        real_discount_rate_frac=study.settings.real_discount_rate_frac,
        capital_budget=study.settings.capital_budget,
        demand_charge_per_kw_year=study.settings.demand_charge_per_kw_year,
        peak_kw=peak_kw(study, windows),
        customers=float(sum(load.customers for load in study.loads)),
        versions=tuple(versions),
        started_at=started_at,
        read_seconds=read_seconds,
        solve_seconds=solve_seconds,
    )
