"""The user's own alternatives, beside the standing ones on the same windows and random numbers.

Optimised under a budget of their own, with purchases given, buying nothing, ignoring outages, and
each of these with other devices on some lines. Where feeder and prices are the study's, the engine
of the standing alternatives serves; other devices need sections, faults and a graph of their own.
An alternative that cannot be solved becomes a finding; the others go on.
"""

from __future__ import annotations

import logging
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level, NoPlanError, XlplanError
from xlplan.compare.plan_solver import PlanSolver, SolvedPlan, Wish
from xlplan.evaluate.purchases import BOUGHT_TOLERANCE
from xlplan.model.dispatch import Purchases
from xlplan.network.feeder import build_feeder
from xlplan.network.topology import check_no_load_voltage
from xlplan.outages.window_model import build_window_models
from xlplan.study.alternatives import device_changes_of, with_devices
from xlplan.study.study import Alternative, Study

_LOG = logging.getLogger(__name__)

FIXED, EXISTING_KIND = "fixed", "existing"


@dataclass(frozen=True)
class OwnAlternatives:
    """What became of the user's alternatives, in the order of the sheet."""

    plans: tuple[SolvedPlan, ...]
    findings: tuple[Finding, ...]


def solve_own(solver: PlanSolver) -> OwnAlternatives:
    """Solves every row of the Alternatives sheet.

    Parameters
    ----------
    solver : PlanSolver of the study as it is; its cuts are used and added to

    Returns
    -------
    OwnAlternatives; a finding for each that could not be solved or was not begun
    """
    plans, findings = [], []
    for alternative in solver.study.alternatives:
        if solver.should_stop():
            findings.append(_not_solved(alternative, "the run was stopped before its turn."))
            continue
        try:
            plan, found = solve_alternative(solver, alternative)
        except XlplanError as error:
            _LOG.warning("alternative '%s': %s", alternative.alternative, error)
            findings.append(_not_solved(alternative, str(error)))
        except Exception as error:
            # A fault of ours in one alternative must not lose hours of work on the others.
            _LOG.exception("alternative '%s'", alternative.alternative)
            text = f"something went wrong inside xlplan ({type(error).__name__}); see the log."
            findings.append(_not_solved(alternative, text))
        else:
            plans.append(plan)
            findings += found
    return OwnAlternatives(tuple(plans), tuple(findings))


def solve_alternative(
    solver: PlanSolver, alternative: Alternative
) -> tuple[SolvedPlan, list[Finding]]:
    """One alternative; raises NoPlanError where there is no plan."""
    study, name = solver.study, alternative.alternative
    changes = device_changes_of(study, name)
    capital = sum(change.capital_cost for change in changes)
    budget = alternative.capital_budget
    if budget is None:
        budget = study.settings.capital_budget
    findings = []
    if budget is not None and capital > budget:
        findings.append(_devices_over_budget(alternative, capital, budget))
    fixed = None
    if alternative.kind == EXISTING_KIND:
        fixed = solver.nothing_bought()
    elif alternative.kind == FIXED:
        fixed = given_purchases(study, name)
    wish = Wish(
        name=name,
        kind=alternative.kind,
        description=alternative.description,
        capital_budget=None if budget is None else max(0.0, budget - capital),
        fixed=fixed,
        ignores_outages=alternative.ignores_outages,
        whole_budget=budget,
    )
    if not changes:
        return solver.solve_wish(wish), findings
    changed = with_devices(study, changes)
    feeder = build_feeder(changed)
    windows = build_window_models(changed, feeder)
    scenarios = {w.series.window: w.scenarios for w in windows}
    faults = [
        f for f in check_no_load_voltage(changed, feeder, scenarios) if f.level is Level.FAULT
    ]
    if faults:
        raise NoPlanError(f"with its devices the feeder breaks a rule: {faults[0].message}")
    with PlanSolver(
        changed,
        feeder,
        windows,
        solver.options,
        solver.on_progress,
        solver.should_stop,
        device_changes=changes,
    ) as other:
        return other.solve_wish(wish), findings


def given_purchases(study: Study, alternative: str) -> Purchases:
    """What Fixed purchases lists for an alternative; rows that say "no" buy nothing."""
    rows = {
        row.asset: row
        for row in study.fixed_purchases
        if row.alternative == alternative and row.is_bought
    }

    def size(assets: Sequence[str], key: str) -> list[float]:
        values = (getattr(rows[one], key) if one in rows else 0.0 for one in assets)
        return [value if value > BOUGHT_TOLERANCE else 0.0 for value in values]

    stores = [one.storage for one in study.storage]
    return Purchases(
        generator_kw=np.array(size([one.generator for one in study.generators], "kw"), dtype=float),
        storage_kw=np.array(size(stores, "kw"), dtype=float),
        storage_kwh=np.array(size(stores, "kwh"), dtype=float),
        is_hardened=np.array([one.measure in rows for one in study.measures], dtype=bool),
    )


def _not_solved(alternative: Alternative, why: str) -> Finding:
    origin = alternative.origin
    return Finding(
        level=Level.WARNING,
        code=Code.NOT_SOLVED,
        sheet=origin.sheet,
        cell=origin.cell("alternative"),
        key="alternative",
        value=alternative.alternative,
        message=f"this alternative has no result: {why}",
        hint="The other alternatives are not touched by it.",
    )


def _devices_over_budget(alternative: Alternative, capital: float, budget: float) -> Finding:
    origin = alternative.origin
    return Finding(
        level=Level.WARNING,
        code=Code.OVER_BUDGET,
        sheet=origin.sheet,
        cell=origin.cell("budget"),
        key="budget",
        value=f"{budget:g}",
        message=f"its device changes alone cost {capital:.0f}, more than its budget of "
        f"{budget:g}: nothing else is bought.",
        hint="Raise the budget or change fewer devices.",
    )
