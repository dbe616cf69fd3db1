"""The first stage: what to buy, once, before anything happens.

Columns: kW of every generator and store that can be bought, kWh of stores, whole steps, a binary
per site, a binary per hardening measure, and the demand limit ``D``. Rows: steps, sites, kWh per
kW, measures that exclude one another, the budget (on capital less grants).

``whole_tree.py`` states the same rows in its own words.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.layout import Layout
from xlplan.model.linear_program import INF, LinearProgram, ProgramBuilder
from xlplan.study.economics import capital_recovery_factor
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class FirstStage:
    """The program, its map to capacities in service, and the meaning of its columns (-1: none)."""

    program: LinearProgram
    capacity_matrix: FloatArray
    capacity_offset: FloatArray
    generator_kw: tuple[int, ...]
    storage_kw: tuple[int, ...]
    storage_kwh: tuple[int, ...]
    generator_site: tuple[int, ...]
    storage_site: tuple[int, ...]
    hardening: tuple[int, ...]
    demand_kw: int


def exclusive_groups(study: Study) -> list[list[int]]:
    """Measures that share a line, line by line; at most one of each group is bought."""
    groups = []
    for line in study.lines:
        covering = [i for i, m in enumerate(study.measures) if line.line in m.lines]
        if len(covering) > 1 and covering not in groups:
            groups.append(covering)
    return groups


def build_first_stage(study: Study, layout: Layout) -> FirstStage:
    """The purchases of a study.

    Parameters
    ----------
    study : Study
    layout : Layout

    Returns
    -------
    FirstStage; costs per year, rows on capital
    """
    rate = study.settings.real_discount_rate_frac
    builder = ProgramBuilder()
    budget: list[tuple[int, float]] = []
    matrix: list[tuple[int, int]] = []

    def add_bought(
        name: str, most: float, capital: float, net: float, factor: float, yearly: float
    ) -> int:
        column = builder.add_column(name, 0.0, most, capital * net * factor + yearly)
        budget.append((column, capital * net))
        return column

    def add_site(name: str, capital: float, net: float, factor: float) -> int:
        if capital <= 0.0:
            return -1
        column = builder.add_column(f"site {name}", 0.0, 1.0, capital * net * factor, True)
        budget.append((column, capital * net))
        return column

    def add_steps(name: str, kw: int, step: float | None, most: float) -> None:
        if step is not None:
            count = builder.add_column(
                f"steps {name}", 0.0, np.floor(most / step + 1e-9), 0.0, True
            )
            builder.add_row(f"steps {name}", [(kw, 1.0), (count, -step)], 0.0, 0.0)

    generator_kw, generator_site = [], []
    for i, unit in enumerate(study.generators):
        if unit.max_new_kw <= 0.0:
            generator_kw.append(-1)
            generator_site.append(-1)
            continue
        net, factor = 1.0 - unit.grant_frac, capital_recovery_factor(rate, unit.life_years)
        kw = add_bought(
            f"{unit.generator} kW",
            unit.max_new_kw,
            unit.capital_cost_per_kw,
            net,
            factor,
            unit.fixed_om_per_kw,
        )
        site = add_site(unit.generator, unit.capital_site_cost, net, factor)
        if site >= 0:
            builder.add_row(
                f"site {unit.generator}", [(kw, 1.0), (site, -unit.max_new_kw)], -INF, 0
            )
        add_steps(unit.generator, kw, unit.step_kw, unit.max_new_kw)
        matrix.append((layout.generator_kw(i), kw))
        generator_kw.append(kw)
        generator_site.append(site)
    storage_kw, storage_kwh, storage_site = [], [], []
    for i, store in enumerate(study.storage):
        if store.max_new_kw <= 0.0 and store.max_new_kwh <= 0.0:
            for columns in (storage_kw, storage_kwh, storage_site):
                columns.append(-1)
            continue
        net, factor = 1.0 - store.grant_frac, capital_recovery_factor(rate, store.life_years)
        name = store.storage
        kw = add_bought(
            f"{name} kW",
            store.max_new_kw,
            store.capital_cost_per_kw,
            net,
            factor,
            store.fixed_om_per_kw,
        )
        per_kwh = store.capital_cost_per_kwh
        kwh = add_bought(f"{name} kWh", store.max_new_kwh, per_kwh, net, factor, 0.0)
        site = add_site(name, store.capital_site_cost, net, factor)
        if site >= 0:
            builder.add_row(f"site kW {name}", [(kw, 1.0), (site, -store.max_new_kw)], -INF, 0.0)
            builder.add_row(f"site kWh {name}", [(kwh, 1.0), (site, -store.max_new_kwh)], -INF, 0.0)
        if store.longest_h is not None:
            builder.add_row(f"longest {name}", [(kwh, 1.0), (kw, -store.longest_h)], -INF, 0.0)
        add_steps(name, kw, store.step_kw, store.max_new_kw)
        matrix.append((layout.storage_kw(i), kw))
        matrix.append((layout.storage_kwh(i), kwh))
        storage_kw.append(kw)
        storage_kwh.append(kwh)
        storage_site.append(site)
    hardening = []
    for i, measure in enumerate(study.measures):
        capital = measure.capital_cost * (1.0 - measure.grant_frac)
        yearly = capital * capital_recovery_factor(rate, measure.life_years) + measure.fixed_om
        column = builder.add_column(measure.measure, 0.0, 1.0, yearly, True)
        budget.append((column, capital))
        matrix.append((layout.hardening(i), column))
        hardening.append(column)
    for group in exclusive_groups(study):
        builder.add_row("one measure per line", [(hardening[i], 1.0) for i in group], upper=1.0)
    most_demand = float(layout.capacity_upper[layout.demand_kw])
    charge = study.settings.demand_charge_per_kw_year
    demand = builder.add_column("demand limit kW", 0.0, most_demand, charge)
    matrix.append((layout.demand_kw, demand))
    if study.settings.capital_budget is not None:
        builder.add_row("budget", budget, upper=study.settings.capital_budget)
    capacity_matrix = np.zeros((layout.n_capacity, len(builder.cost)))
    for capacity, column in matrix:
        capacity_matrix[capacity, column] = 1.0
    return FirstStage(
        program=builder.build(),
        capacity_matrix=capacity_matrix,
        capacity_offset=np.where(
            np.arange(layout.n_capacity) == layout.demand_kw, 0.0, layout.capacity_lower
        ),
        generator_kw=tuple(generator_kw),
        storage_kw=tuple(storage_kw),
        storage_kwh=tuple(storage_kwh),
        generator_site=tuple(generator_site),
        storage_site=tuple(storage_site),
        hardening=tuple(hardening),
        demand_kw=demand,
    )
