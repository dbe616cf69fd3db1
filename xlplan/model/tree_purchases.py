"""First stage of the whole tree in PuLP: what may be bought, what it costs, what is in service.

Shares no code with the arrays of the decomposition: their agreement is a test.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pulp
from pulp import LpAffineExpression as Expression

from xlplan.model.dispatch import FloatArray, Purchases
from xlplan.study.economics import capital_recovery_factor
from xlplan.study.study import Generator, Storage, Study


@dataclass(frozen=True)
class Capacity:
    """kW and kWh in service, existing and new, as expressions in what is bought."""

    generator_kw: tuple[Expression, ...]
    storage_kw: tuple[Expression, ...]
    storage_kwh: tuple[Expression, ...]


@dataclass(frozen=True)
class PurchaseColumns:
    """New capacity by unit, hardening by measure, demand ``D``; cost per year without ``D``."""

    generator_kw: tuple[Expression, ...]
    storage_kw: tuple[Expression, ...]
    storage_kwh: tuple[Expression, ...]
    hardened: tuple[Expression, ...]
    demand_kw: pulp.LpVariable
    capacity: Capacity
    yearly_cost: Expression
    capital: Expression

    def read(self) -> Purchases:
        """Values after solving; what the solver leaves a rounding below 0 is 0."""
        return Purchases(
            generator_kw=_values(self.generator_kw),
            storage_kw=_values(self.storage_kw),
            storage_kwh=_values(self.storage_kwh),
            is_hardened=_values(self.hardened) > 0.5,
            demand_kw=max(0.0, value_of(Expression(self.demand_kw))),
        )


def value_of(expression: Expression) -> float:
    """Value after solving.

    A column that no row and no cost uses never reaches the solver: any value within its bounds
    will do, so it takes the one nearest to 0.
    """
    total = float(expression.constant)
    for variable, coefficient in expression.items():
        value = variable.varValue
        if value is None:
            low = float("-inf") if variable.lowBound is None else variable.lowBound
            high = float("inf") if variable.upBound is None else variable.upBound
            value = min(max(0.0, low), high)
        total += coefficient * value
    return total


def _values(expressions: tuple[Expression, ...]) -> FloatArray:
    """Values of expressions, not below 0."""
    return np.array([max(0.0, value_of(item)) for item in expressions], dtype=float)


def add_purchases(problem: pulp.LpProblem, study: Study) -> PurchaseColumns:
    """Everything that may be bought, within its limits, the budget and exclusive measures.

    Parameters
    ----------
    problem : LpProblem, gets columns and rows
    study : Study

    Returns
    -------
    PurchaseColumns
    """
    rate = study.settings.real_discount_rate_frac
    bought = _Bought()
    for i, unit in enumerate(study.generators):
        kw = _power(problem, unit, f"generator_{i}")
        site = _site(problem, unit, f"generator_{i}", {"kw": (kw, unit.max_new_kw)})
        bought.generator_kw.append(kw)
        capital = unit.capital_cost_per_kw * kw + unit.capital_site_cost * site
        bought.add_cost(capital, unit.grant_frac, rate, unit.life_years)
        bought.yearly.append(unit.fixed_om_per_kw * kw)
    for i, store in enumerate(study.storage):
        kw = _power(problem, store, f"storage_{i}")
        kwh = Expression(problem.add_variable(f"storage_{i}_new_kwh", 0, store.max_new_kwh))
        limits = {"kw": (kw, store.max_new_kw), "kwh": (kwh, store.max_new_kwh)}
        site = _site(problem, store, f"storage_{i}", limits)
        if store.longest_h is not None:
            problem += kwh <= store.longest_h * kw, f"storage_{i}_longest"
        bought.storage_kw.append(kw)
        bought.storage_kwh.append(kwh)
        capital = store.capital_cost_per_kw * kw + store.capital_cost_per_kwh * kwh
        bought.add_cost(
            capital + store.capital_site_cost * site, store.grant_frac, rate, store.life_years
        )
        bought.yearly.append(store.fixed_om_per_kw * kw)
    for i, measure in enumerate(study.measures):
        h = Expression(problem.add_variable(f"hardened_{i}", cat=pulp.LpBinary))
        bought.hardened.append(h)
        bought.add_cost(measure.capital_cost * h, measure.grant_frac, rate, measure.life_years)
        bought.yearly.append(measure.fixed_om * h)
    _add_exclusive_measures(problem, study, bought.hardened)
    columns = bought.columns(problem, study)
    if study.settings.capital_budget is not None:
        problem += columns.capital <= study.settings.capital_budget, "budget"
    return columns


def fix_purchases(problem: pulp.LpProblem, study: Study, fixed: Purchases) -> PurchaseColumns:
    """The same columns where ``x`` is given; only ``D`` is left to decide.

    Parameters
    ----------
    problem : LpProblem, gets the column of ``D``
    study : Study
    fixed : Purchases; a site is paid for where anything is bought on it

    Returns
    -------
    PurchaseColumns; no limit on purchases, nor the budget, is applied to what is given
    """
    rate = study.settings.real_discount_rate_frac
    bought = _Bought()
    for unit, kw in zip(study.generators, fixed.generator_kw, strict=True):
        bought.generator_kw.append(Expression(constant=float(kw)))
        capital = unit.capital_cost_per_kw * float(kw) + unit.capital_site_cost * (kw > 0)
        bought.add_cost(Expression(constant=capital), unit.grant_frac, rate, unit.life_years)
        bought.yearly.append(Expression(constant=unit.fixed_om_per_kw * float(kw)))
    for store, kw, kwh in zip(study.storage, fixed.storage_kw, fixed.storage_kwh, strict=True):
        bought.storage_kw.append(Expression(constant=float(kw)))
        bought.storage_kwh.append(Expression(constant=float(kwh)))
        capital = store.capital_cost_per_kw * float(kw) + store.capital_cost_per_kwh * float(kwh)
        capital += store.capital_site_cost * (kw > 0 or kwh > 0)
        bought.add_cost(Expression(constant=capital), store.grant_frac, rate, store.life_years)
        bought.yearly.append(Expression(constant=store.fixed_om_per_kw * float(kw)))
    for measure, is_hardened in zip(study.measures, fixed.is_hardened, strict=True):
        h = Expression(constant=float(is_hardened))
        bought.hardened.append(h)
        bought.add_cost(measure.capital_cost * h, measure.grant_frac, rate, measure.life_years)
        bought.yearly.append(measure.fixed_om * h)
    return bought.columns(problem, study)


class _Bought:
    """Collects columns and costs, unit by unit."""

    def __init__(self) -> None:
        self.generator_kw: list[Expression] = []
        self.storage_kw: list[Expression] = []
        self.storage_kwh: list[Expression] = []
        self.hardened: list[Expression] = []
        self.capital: list[Expression] = []
        self.yearly: list[Expression] = []

    def add_cost(
        self, capital: Expression, grant_frac: float, rate_frac: float, life_years: float
    ) -> None:
        """Capital less its grant, and its yearly share over the life."""
        net = (1.0 - grant_frac) * capital
        self.capital.append(net)
        self.yearly.append(capital_recovery_factor(rate_frac, life_years) * net)

    def columns(self, problem: pulp.LpProblem, study: Study) -> PurchaseColumns:
        """Frozen, with existing capacity added to what is new."""
        capacity = Capacity(
            tuple(
                u.existing_kw + x for u, x in zip(study.generators, self.generator_kw, strict=True)
            ),
            tuple(u.existing_kw + x for u, x in zip(study.storage, self.storage_kw, strict=True)),
            tuple(u.existing_kwh + x for u, x in zip(study.storage, self.storage_kwh, strict=True)),
        )
        # Imports cannot exceed the substation limit, so neither need D.
        demand_kw = problem.add_variable("demand_kw", 0, study.settings.substation_limit_kva)
        return PurchaseColumns(
            generator_kw=tuple(self.generator_kw),
            storage_kw=tuple(self.storage_kw),
            storage_kwh=tuple(self.storage_kwh),
            hardened=tuple(self.hardened),
            demand_kw=demand_kw,
            capacity=capacity,
            yearly_cost=pulp.lpSum(self.yearly),
            capital=pulp.lpSum(self.capital),
        )


def _power(problem: pulp.LpProblem, unit: Generator | Storage, name: str) -> Expression:
    """New kW of one unit, in whole steps where it comes in steps."""
    kw = problem.add_variable(f"{name}_new_kw", 0, unit.max_new_kw)
    if unit.step_kw is not None:
        n_step = problem.add_variable(f"{name}_steps", 0, cat=pulp.LpInteger)
        problem += kw == unit.step_kw * n_step, f"{name}_in_steps"
    return Expression(kw)


def _site(
    problem: pulp.LpProblem,
    unit: Generator | Storage,
    name: str,
    limits: dict[str, tuple[Expression, float]],
) -> Expression:
    """1 where anything is bought on a site that costs money; 0 without a column elsewhere."""
    if unit.capital_site_cost <= 0:
        return Expression()
    is_used = problem.add_variable(f"{name}_site", cat=pulp.LpBinary)
    for what, (amount, most) in limits.items():
        problem += amount <= most * is_used, f"{name}_site_{what}"
    return Expression(is_used)


def _add_exclusive_measures(
    problem: pulp.LpProblem, study: Study, hardened: list[Expression]
) -> None:
    """At most one measure on each line."""
    for line in study.lines:
        on_line = [h for m, h in zip(study.measures, hardened, strict=True) if line.line in m.lines]
        if len(on_line) > 1:
            problem += pulp.lpSum(on_line) <= 1, f"one_measure_on_{line.line}"
