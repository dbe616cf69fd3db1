"""The JSON twin: the same results for programs and tests, under stable keys.

Money is per year in the study's currency unless the key says capital. A number that is not known
is ``null``; there is no NaN. Lists of results that a run does not compute are empty. Where bad
outcomes have a weight, ``objective`` is what the plan minimises, ``(1 - weight) expected_cost +
weight cvar``; ``lower_bound``, ``bound_upper`` and ``gap_pct`` are then those of the objective, and
every other cost is an expected one as always. Without a weight there is no ``objective``, nor a
``cvar`` of windows.
"""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

from xlplan.base.units import pct_from_frac
from xlplan.compare.pack_result import (
    BudgetPoint,
    HardeningValue,
    RepairPoint,
    SensitivityCase,
    Worth,
)
from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import AimResult, PlanResult
from xlplan.report.target import replace_whole

SCHEMA = 1
COST_PARTS = (
    "investment",
    "fixed_om",
    "energy",
    "fuel",
    "demand",
    "repair",
    "interruption",
    "normal_shedding",
    "surplus",
    "end_of_window",
)

PURCHASE_TYPES = ("storage", "generator", "hardening")
"""Kinds that the twin lists; device changes are in the capital and yearly cost alone."""


def json_document(result: StudyResult) -> dict[str, Any]:
    """The whole document, ready for ``json.dumps``."""
    return {
        "schema": SCHEMA,
        "study": result.study_name,
        "status": result.status,
        "method": result.method,
        "seed": int(result.seed),
        "fingerprint": result.fingerprint,
        "recommended": result.recommended,
        "alternatives": [_alternative(plan) for plan in result.plans],
        "method_reason": result.method_reason,
        "hardening": [_hardening(row) for row in result.pack.hardening],
        "repair_time": [_repair_point(point) for point in result.pack.repair_time],
        "budget": [_budget_point(point) for point in result.pack.budget],
        "sensitivities": [_sensitivity(case) for case in result.pack.sensitivities],
        "voltages": [row for plan in result.plans for row in _voltages(plan)],
        "value_of_outage_planning": _number(result.value_of_outage_planning),
        "scenarios": int(result.scenarios),
        "findings": [
            {
                "level": finding.level.value,
                "sheet": finding.sheet,
                "cell": finding.cell,
                "key": finding.key,
                "value": finding.value,
                "message": f"{finding.message} {finding.hint}".strip(),
            }
            for finding in result.findings
        ],
        "seconds": {
            "read": _number(result.read_seconds),
            "solve": _number(result.solve_seconds),
            "write": _number(result.write_seconds),
        },
    }


def write_json(result: StudyResult, path: Path) -> None:
    """Writes the document whole or not at all; a file of that name is replaced.

    Raises ResultFileError if the folder does not take it.
    """
    text = json.dumps(json_document(result), indent=2, ensure_ascii=False, allow_nan=False)
    replace_whole(path, text + "\n")


def _number(value: float | None) -> float | None:
    """A finite number as a plain float; ``null`` otherwise."""
    if value is None or not math.isfinite(value):
        return None
    return float(value)


def _pair(interval: tuple[float, float]) -> list[float | None]:
    return [_number(interval[0]), _number(interval[1])]


def _voltages(plan: PlanResult) -> list[dict[str, Any]]:
    """One row per bus and kind of operation; null where a voltage is not known."""
    return [
        {
            "alternative": plan.name,
            "bus": bus.bus,
            "operation": "outage events" if bus.is_event else "normal service",
            "lowest_linear_pu": _number(bus.low_linear_pu),
            "lowest_ac_pu": _number(bus.low_ac_pu),
            "lowest_when": bus.low_when,
            "highest_linear_pu": _number(bus.high_linear_pu),
            "highest_ac_pu": _number(bus.high_ac_pu),
            "highest_when": bus.high_when,
            "lowest_limit_pu": _number(bus.low_limit_pu),
            "highest_limit_pu": _number(bus.high_limit_pu),
            "within_limits": not bus.breaks_limits,
            "outside_range_a": bus.is_outside_range_a,
            "periods": bus.n_period,
            "periods_not_converged": bus.n_not_converged,
        }
        for bus in (plan.ac.buses if plan.ac is not None else ())
    ]


def _alternative(plan: PlanResult) -> dict[str, Any]:
    costs, indices, risk = plan.costs, plan.indices, plan.risk
    gap = None if plan.gap_frac is None else pct_from_frac(plan.gap_frac)
    return {
        "name": plan.name,
        "kind": plan.kind,
        "annual_cost": {
            "total": _number(costs.total),
            **{part: _number(getattr(costs, part)) for part in COST_PARTS},
        },
        "capital_cost": _number(plan.capital_cost),
        "lower_bound": _number(plan.lower_bound),
        "cost_interval": _pair(plan.cost_interval),
        "gap_pct": _number(gap),
        **({} if plan.aim is None else {"objective": _objective(plan.aim)}),
        "purchases": [
            {
                "asset": asset.asset,
                "type": asset.kind,
                "kw": _number(asset.kw),
                "kwh": _number(asset.kwh),
                "bought": bool(asset.is_bought),
            }
            for asset in plan.purchases
            if asset.kind in PURCHASE_TYPES
        ],
        "reliability": {
            "eens_kwh_per_year": _number(indices.eens_kwh),
            "saifi": _number(indices.saifi),
            "maifi": _number(indices.maifi),
            "saidi_h": _number(indices.saidi_h),
            "caidi_h": _number(indices.caidi_h),
            "asai": _number(indices.asai),
        },
        "windows": [
            {
                "window": window.window,
                "expected_cost": _number(window.expected_cost),
                "expected_events": _number(window.expected_events),
                "eens_kwh": _number(window.eens_kwh),
                **({} if window.tail_cost is None else {"cvar": _number(window.tail_cost)}),
            }
            for window in plan.windows
        ],
        "buses": [
            {
                "bus": bus.bus,
                "eens_kwh_per_year": _number(bus.eens_kwh),
                "interruptions_per_year": _number(bus.interruptions),
                "outage_h_per_year": _number(bus.outage_h),
            }
            for bus in plan.buses
        ],
        "classes": [
            {"customer_class": one.customer_class, "eens_kwh_per_year": _number(one.eens_kwh)}
            for one in plan.classes
        ],
        "bound_upper": _number(plan.bound_upper),
        "risk": {
            "mean": _number(risk.mean),
            "p50": _number(risk.p50),
            "p95": _number(risk.p95),
            "cvar95": _number(risk.cvar95),
        },
        "against_existing": {
            "difference": _number(plan.difference),
            "interval": _pair(plan.difference_interval),
        },
    }


def _objective(aim: AimResult) -> dict[str, Any]:
    """What the plan minimises where bad outcomes have a weight."""
    return {
        "total": _number(aim.total),
        "interval": _pair(aim.interval),
        "expected_cost": _number(aim.expected),
        "cvar": _number(aim.tail),
        "weight_pct": _number(pct_from_frac(aim.weight_frac)),
        "tail_pct": _number(pct_from_frac(aim.tail_frac)),
    }


def _worth(worth: Worth, yearly_cost: float) -> dict[str, Any]:
    return {
        "value": _number(worth.value),
        "utility_value": _number(worth.utility),
        "customers_value": _number(worth.customers),
        "interval": _pair(worth.interval),
        "net_value": _number(worth.value - yearly_cost),
        "eens_saved_kwh_per_year": _number(worth.eens_saved_kwh),
        "annual_cost_without": _number(worth.total_without),
        "annual_cost_with": _number(worth.total_with),
    }


def _hardening(row: HardeningValue) -> dict[str, Any]:
    saved = row.in_plan.value - row.fixed_om
    return {
        "measure": row.measure,
        "lines": list(row.lines),
        "bought": bool(row.is_in_plan),
        "capital_cost": _number(row.capital_net),
        "yearly_cost": _number(row.yearly_cost),
        "alone": _worth(row.alone, row.yearly_cost),
        "in_plan": _worth(row.in_plan, row.yearly_cost),
        "payback_years": _number(row.capital_net / saved if saved > 0.0 else None),
    }


def _bought(plan: PlanResult) -> list[dict[str, Any]]:
    return [
        {"asset": asset.asset, "kw": _number(asset.kw), "kwh": _number(asset.kwh)}
        for asset in plan.purchases
        if asset.is_bought
    ]


def _figures(plan: PlanResult) -> dict[str, Any]:
    """Cost and unserved energy of one point."""
    return {
        "annual_cost": _number(plan.costs.total),
        "utility_cost": _number(plan.costs.utility),
        "customers_cost": _number(plan.costs.customers),
        "capital_cost": _number(plan.capital_cost),
        "eens_kwh_per_year": _number(plan.indices.eens_kwh),
        "saidi_h": _number(plan.indices.saidi_h),
        "lower_bound": _number(plan.lower_bound),
        "purchases": _bought(plan),
    }


def _repair_point(point: RepairPoint) -> dict[str, Any]:
    return {
        "factor": _number(point.factor),
        "mean_event_h": _number(point.mean_event_h),
        "events_per_year": _number(point.events_per_year),
        "plan_kept": _figures(point.kept),
        "plan_made_anew": _figures(point.anew),
        "loss": _number(point.loss),
        "loss_interval": _pair(point.loss_interval),
    }


def _budget_point(point: BudgetPoint) -> dict[str, Any]:
    return {
        "budget": _number(point.budget),
        **_figures(point.plan),
        "saving": _number(point.saving),
        "saving_interval": _pair(point.interval),
    }


def _sensitivity(case: SensitivityCase) -> dict[str, Any]:
    return {
        "parameter": case.parameter,
        "side": "high" if case.is_high else "low",
        "value": _number(case.value),
        "plan_kept": _figures(case.kept),
        "plan_made_anew": _figures(case.anew),
        "plan_changes": bool(case.does_change),
        "loss": _number(case.loss),
        "loss_interval": _pair(case.loss_interval),
        "alternatives": [
            {"name": name, "annual_cost": _number(total)} for name, total in case.totals
        ],
    }
