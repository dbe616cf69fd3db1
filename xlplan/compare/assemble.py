"""The whole answer put together from the plans, the findings and the inputs."""

from __future__ import annotations

import importlib.metadata
import platform
from collections.abc import Sequence
from dataclasses import replace

import xlplan
from xlplan.base.errors import Finding
from xlplan.base.names import EXISTING, IGNORING_OUTAGES, LEAST_COST
from xlplan.compare.drawing import draw_feeder
from xlplan.compare.echo import echo_inputs
from xlplan.compare.history import history_checks, peak_kw
from xlplan.compare.pack_result import Pack
from xlplan.compare.plan_solver import SolvedPlan, SolveOptions
from xlplan.compare.standing import CENT
from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import PlanResult
from xlplan.network.feeder import Feeder
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study
from xlplan.workbook.tables import RawStudy

LIBRARIES = ("highspy", "pulp", "numpy", "pandas", "openpyxl", "xlsxwriter")
"""Whose versions a result rests on."""


def assemble(
    study: Study,
    raw: RawStudy,
    feeder: Feeder,
    windows: Sequence[WindowModel],
    options: SolveOptions,
    plans: Sequence[SolvedPlan],
    pack: Pack,
    findings: Sequence[Finding],
    started_at: str,
    read_seconds: float,
    solve_seconds: float,
) -> StudyResult:
    """The ``StudyResult`` of a solved study.

    Parameters
    ----------
    study, raw, feeder, windows : what was solved, and as typed
    options : SolveOptions in force
    plans : sequence of SolvedPlan; the standing alternatives first
    pack : Pack, what would change the least-cost plan
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
    recommended = cheapest(plans, best, study.settings.capital_budget).result.name
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
        recommended=recommended,
        plans=tuple(_against_recommended(plan, by_name[recommended]) for plan in plans),
        pack=pack,
        feeder=draw_feeder(study, feeder, windows, best.result),
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


def cheapest(
    plans: Sequence[SolvedPlan], best: SolvedPlan, capital_budget: float | None
) -> SolvedPlan:
    """The least-cost plan, or an alternative of the user's that is cheaper beyond its interval.

    Other devices are no part of the search, so an alternative that has some may cost less. One
    that spends more than the study's budget is not recommended.
    """
    found = best
    for plan in plans:
        within = capital_budget is None or plan.result.capital_cost <= capital_budget + CENT
        half = plan.follow.difference_half_width(best.follow)
        if plan.result.aim is not None and best.result.aim is not None:
            half = plan.result.aim.half_width + best.result.aim.half_width
        is_clear = plan.result.aimed_total < best.result.aimed_total - half - CENT
        if within and is_clear and plan.result.aimed_total < found.result.aimed_total:
            found = plan
    return found


def _against_recommended(plan: SolvedPlan, best: SolvedPlan) -> PlanResult:
    """The plan with its paired difference to the recommended one."""
    difference = plan.result.costs.total - best.result.costs.total
    half = 0.0 if plan is best else plan.follow.difference_half_width(best.follow)
    return replace(
        plan.result,
        difference_to_best=difference,
        difference_to_best_interval=(difference - half, difference + half),
    )
