"""The first stage: what to buy, once, before anything happens.

Columns: kW of every generator and store that can be bought, kWh of stores, whole steps, a binary
per site, a binary per hardening measure, and the demand limit ``D``. Rows: steps, sites, kWh per
kW, measures that exclude one another, the budget (on capital less grants).

``whole_tree.py`` states the same rows in its own words.

With ``Choices`` the program leaves open what one engine is asked again and again: how much may be
spent, and which of several price lists holds. Both are then set by bounds of columns
(``FirstStage.bounds``), so that the cuts, which know nothing of money, serve every question.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.dispatch import Purchases
from xlplan.model.layout import Layout
from xlplan.model.linear_program import INF, LinearProgram, ProgramBuilder
from xlplan.study.economics import capital_recovery_factor
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Choices:
    """What the first stage leaves open: the budget always, and one of these price lists.

    ``price_studies``: the study with other prices or discount rate, the same assets for sale.
    """

    price_studies: tuple[Study, ...] = ()


@dataclass(frozen=True)
class PriceColumns:
    """Columns of one price list: what it adds to the yearly cost while it holds, and the rest.

    ``change - added - idle = 0``, where ``change`` is the yearly cost of the purchases at these
    prices less that at the study's. Only ``added`` costs anything; the list holds where ``idle``
    is held at 0, and does not where ``added`` is. ``limit`` and ``capital_most`` are those of
    ``FirstStage`` at these prices.
    """

    added: int
    idle: int
    limit: int
    capital_most: float


@dataclass(frozen=True)
class FirstStage:
    """The program, its map to capacities in service, and the meaning of its columns (-1: none).

    ``capital_limit``: column of the capital less grants that may be spent, ``capital_most`` at
    most; -1 where the budget is a row of its own.
    """

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
    generator_steps: tuple[int, ...] = ()
    storage_steps: tuple[int, ...] = ()
    capital_limit: int = -1
    capital_most: float = 0.0
    prices: tuple[PriceColumns, ...] = ()

    def bounds(
        self, capital_budget: float | None = None, price_list: int = -1
    ) -> tuple[FloatArray, FloatArray]:
        """Bounds of ``x`` for one question.

        Parameters
        ----------
        capital_budget : float or None, most capital less grants; None: no limit beyond the row's
        price_list : int, which list of ``Choices`` holds; -1: the study's own prices

        Returns
        -------
        lower, upper : arrays, shape (n_x,)
        """
        lower, upper = self.program.col_lower.copy(), self.program.col_upper.copy()
        limit, most = self.capital_limit, self.capital_most
        if price_list >= 0:
            limit, most = self.prices[price_list].limit, self.prices[price_list].capital_most
        if limit >= 0 and capital_budget is not None:
            upper[limit] = min(max(capital_budget, 0.0), most)
        for i, one in enumerate(self.prices):
            column = one.idle if i == price_list else one.added
            lower[column] = upper[column] = 0.0
        return lower, upper

    def fixed(
        self, bounds: tuple[FloatArray, FloatArray], study: Study, bought: Purchases
    ) -> tuple[FloatArray, FloatArray]:
        """The same bounds with the purchases given; demand, money spent and prices stay open."""
        lower, upper = bounds[0].copy(), bounds[1].copy()

        def give(column: int, value: float) -> None:
            if column >= 0:
                lower[column] = upper[column] = value

        for i, unit in enumerate(study.generators):
            kw = float(bought.generator_kw[i])
            give(self.generator_kw[i], kw)
            give(self.generator_site[i], float(kw > 0.0))
            if unit.step_kw is not None and self.generator_steps:
                give(self.generator_steps[i], float(round(kw / unit.step_kw)))
        for i, store in enumerate(study.storage):
            kw, kwh = float(bought.storage_kw[i]), float(bought.storage_kwh[i])
            give(self.storage_kw[i], kw)
            give(self.storage_kwh[i], kwh)
            give(self.storage_site[i], float(kw > 0.0 or kwh > 0.0))
            if store.step_kw is not None and self.storage_steps:
                give(self.storage_steps[i], float(round(kw / store.step_kw)))
        for i, column in enumerate(self.hardening):
            give(column, float(bought.is_hardened[i]))
        return lower, upper


def exclusive_groups(study: Study) -> list[list[int]]:
    """Measures that share a line, line by line; at most one of each group is bought."""
    groups = []
    for line in study.lines:
        covering = [i for i, m in enumerate(study.measures) if line.line in m.lines]
        if len(covering) > 1 and covering not in groups:
            groups.append(covering)
    return groups


def build_first_stage(study: Study, layout: Layout, choices: Choices | None = None) -> FirstStage:
    """The purchases of a study.

    Parameters
    ----------
    study : Study
    layout : Layout
    choices : Choices or None, what is left open to bounds of columns; None: the study as it is

    Returns
    -------
    FirstStage; costs per year, rows on capital

    Raises ValueError for a price list that has other assets for sale than the study.
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

    def add_steps(name: str, kw: int, step: float | None, most: float) -> int:
        count = -1
        if step is not None:
            count = builder.add_column(
                f"steps {name}", 0.0, np.floor(most / step + 1e-9), 0.0, True
            )
            builder.add_row(f"steps {name}", [(kw, 1.0), (count, -step)], 0.0, 0.0)
        return count

    generator_kw: list[int] = []
    generator_site: list[int] = []
    generator_steps: list[int] = []
    for i, unit in enumerate(study.generators):
        if unit.max_new_kw <= 0.0:
            for columns in (generator_kw, generator_site, generator_steps):
                columns.append(-1)
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
        generator_steps.append(add_steps(unit.generator, kw, unit.step_kw, unit.max_new_kw))
        matrix.append((layout.generator_kw(i), kw))
        generator_kw.append(kw)
        generator_site.append(site)
    storage_kw: list[int] = []
    storage_kwh: list[int] = []
    storage_site: list[int] = []
    storage_steps: list[int] = []
    for i, store in enumerate(study.storage):
        if store.max_new_kw <= 0.0 and store.max_new_kwh <= 0.0:
            for columns in (storage_kw, storage_kwh, storage_site, storage_steps):
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
        storage_steps.append(add_steps(name, kw, store.step_kw, store.max_new_kw))
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
    limit, most_capital = -1, 0.0
    if choices is not None:
        most_capital = sum(builder.col_upper[column] * capital for column, capital in budget)
        limit = builder.add_column("capital that may be spent", 0.0, most_capital)
        builder.add_row("budget", [*budget, (limit, -1.0)], upper=0.0)
    elif study.settings.capital_budget is not None:
        builder.add_row("budget", budget, upper=study.settings.capital_budget)
    prices = [
        _add_prices(builder, build_first_stage(other, layout, Choices()), demand + 1)
        for other in (choices.price_studies if choices is not None else ())
    ]
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
        generator_steps=tuple(generator_steps),
        storage_steps=tuple(storage_steps),
        capital_limit=limit,
        capital_most=most_capital,
        prices=tuple(prices),
    )


def _add_prices(builder: ProgramBuilder, other: FirstStage, n_own: int) -> PriceColumns:
    """Columns and rows of a price list; ``other``: the first stage at its prices.

    ``n_own`` : columns that both share, up to the demand
    """
    program = other.program
    if program.col_names[:n_own] != tuple(builder.col_names[:n_own]):
        raise ValueError("a price list has other assets for sale than the study")
    change = program.cost[:n_own] - np.array(builder.cost[:n_own])
    most = float(np.abs(change) @ np.array(builder.col_upper[:n_own]))
    added = builder.add_column("added by a price list", -most, most, 1.0)
    idle = builder.add_column("not added by a price list", -most, most)
    limit = builder.add_column("capital that may be spent at a price list", 0.0, other.capital_most)
    terms = [(int(i), float(change[i])) for i in np.flatnonzero(change)]
    builder.add_row("price list", [*terms, (added, -1.0), (idle, -1.0)], 0.0, 0.0)
    last = slice(int(program.start[-2]), int(program.start[-1]))
    budget = [
        (int(i), float(value))
        for i, value in zip(program.index[last], program.value[last], strict=True)
        if i != other.capital_limit
    ]
    builder.add_row("budget at a price list", [*budget, (limit, -1.0)], upper=0.0)
    return PriceColumns(added, idle, limit, other.capital_most)
