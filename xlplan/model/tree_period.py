"""Operation in one period of the whole tree, in PuLP: model.md section 4, one rule per function.

Enters: what is in service (``ServicePeriod``), the state before, capacities. Leaves: the columns
of the period, its cost, the state after. The decomposition assembles the same rules apart from
this module, in ``subproblem.py`` and what that uses; agreement of the two is a test.
"""

from __future__ import annotations

from math import cos, pi, sin

import pulp
from pulp import LpAffineExpression as Expression

from xlplan.base.units import v_sq_drop_per_kw
from xlplan.model.tree_columns import Case, OperatedPeriod, PlantState, idle_period
from xlplan.model.tree_purchases import Capacity
from xlplan.network.feeder import Feeder
from xlplan.outages.damage import normal_service_price_per_kwh, price_per_kwh
from xlplan.outages.records import Island
from xlplan.outages.sections import build_sections
from xlplan.study.study import LoadControl, Study, Technology
from xlplan.study.windows import WindowSeries

N_SIDE = 12
"""Sides of the polygon inside the circle of a rating; its corners lie on the axes."""


class PeriodEquations:
    """Adds periods of one window to a problem."""

    def __init__(
        self,
        problem: pulp.LpProblem,
        study: Study,
        feeder: Feeder,
        series: WindowSeries,
        capacity: Capacity,
    ) -> None:
        self.problem = problem
        self.study = study
        self.feeder = feeder
        self.series = series
        self.capacity = capacity
        self.section_of_bus = build_sections(feeder).section_of_bus
        class_of = {record.customer_class: record for record in study.customer_classes}
        self.class_of_load = [class_of[load.customer_class] for load in study.loads]
        self.sold_per_shed = 1.0 / (1.0 + study.settings.loss_allowance_frac)
        # Plain floats: NumPy's own would try to turn expressions into arrays.
        self.load_kw: list[list[float]] = series.load_kw.tolist()
        self.load_kvar: list[list[float]] = series.load_kvar.tolist()
        self.price_per_kwh: list[float] = series.price_per_kwh.tolist()
        self.availability: list[list[float]] = series.availability.tolist()
        self.start_soc_frac: list[float] = series.start_soc_frac.tolist()

    def start_state(self) -> PlantState:
        """Stores at their start charge, tanks full, previous output free."""
        soc = self.start_soc_frac
        return PlantState(
            energy_kwh=tuple(soc[i] * kwh for i, kwh in enumerate(self.capacity.storage_kwh)),
            generator_kw=tuple(None for _ in self.study.generators),
            fuel_kwh=tuple(self._tank_kwh(i) for i in range(len(self.study.generators))),
        )

    def add_period(self, case: Case, before: PlantState) -> OperatedPeriod:
        """All columns, rows and costs of one period.

        Parameters
        ----------
        case : Case
        before : PlantState at the end of the previous period

        Returns
        -------
        OperatedPeriod
        """
        period = idle_period(self.study, self.feeder, before)
        self._add_source(case, period)
        self._add_supplies(case, period)
        for i in range(len(self.study.generators)):
            self._add_generator(case, period, before, i)
        for i in range(len(self.study.storage)):
            self._add_storage(case, period, before, i)
        self._add_shedding(case, period)
        self._add_buses(case, period)
        self._add_lines(case, period)
        self._add_balance(case, period)
        for island in case.service.islands:
            self._add_island(case, period, island)
        period.cost = self._cost(case, period)
        return period

    def add_end_cost(self, name: str, state: PlantState) -> Expression:
        """Price of the energy missing at the end of a window against its start."""
        cost = []
        for i, energy_kwh in enumerate(state.energy_kwh):
            missing = self._column(f"missing_kwh_{i}_{name}", 0)
            start_kwh = self.start_soc_frac[i] * self.capacity.storage_kwh[i]
            self._row(missing >= start_kwh - energy_kwh, f"missing_{i}_{name}")
            cost.append(float(self.series.stored_energy_price_per_kwh[i]) * missing)
        return pulp.lpSum(cost)

    def normal_supply_cost(self, row: int) -> Expression:
        """What the load less solar and wind would cost if everything were in service."""
        renewable_kw = pulp.lpSum(
            self.availability[row][i] * self.capacity.generator_kw[i]
            for i, unit in enumerate(self.study.generators)
            if unit.technology is not Technology.DISPATCHABLE
        )
        bought_kw = sum(self.load_kw[row]) - renewable_kw
        return self.price_per_kwh[row] * self.series.period_h * bought_kw

    # ---- one rule each ----------------------------------------------------------------------

    def _add_source(self, case: Case, period: OperatedPeriod) -> None:
        """Purchase and sale within the substation limit."""
        if not self._source_feeds(case):
            return
        period.import_kw = self._column(f"import_kw_{case.name}", 0)
        if self.series.export_price_per_kwh is not None:
            period.export_kw = self._column(f"export_kw_{case.name}", 0)
        period.source_kvar = self._column(f"source_kvar_{case.name}")
        self._add_rating(
            period.import_kw - period.export_kw,
            period.source_kvar,
            Expression(constant=self.study.settings.substation_limit_kva),
            f"substation_{case.name}",
        )

    def _add_supplies(self, case: Case, period: OperatedPeriod) -> None:
        """Neighbour supplies that are closed, up to their spare power."""
        for i in range(len(self.study.supplies)):
            if self._supply_feeds(case, i):
                spare_kw = float(self.series.supply_kw[case.row, i])
                period.supply_kw[i] = self._column(f"supply_kw_{i}_{case.name}", 0, spare_kw)
                period.supply_kvar[i] = self._column(f"supply_kvar_{i}_{case.name}")

    def _add_generator(
        self, case: Case, period: OperatedPeriod, before: PlantState, i: int
    ) -> None:
        """Output, ramp and tank of one generator."""
        unit, name = self.study.generators[i], f"generator_{i}_{case.name}"
        kw = self.capacity.generator_kw[i]
        if not case.service.generator_live[i]:
            period.fuel_kwh[i] = before.fuel_kwh[i]
            return
        if case.service.generator_may_run[i]:
            output = period.generator_kw[i] = self._column(f"kw_{name}", 0)
            period.generator_kvar[i] = self._column(f"kvar_{name}")
            self._row(output <= self.availability[case.row][i] * kw, f"available_{name}")
            self._add_rating(output, period.generator_kvar[i], kw, name)
        output, previous = period.generator_kw[i], before.generator_kw[i]
        if unit.ramp_frac_per_period is not None and previous is not None:
            step_kw = unit.ramp_frac_per_period * kw
            period.trip_kw[i] = self._column(f"trip_kw_{name}", 0)
            self._row(output <= previous + step_kw, f"ramp_up_{name}")
            self._row(output >= previous - step_kw - period.trip_kw[i], f"ramp_down_{name}")
        tank_kwh, fuel_before = self._tank_kwh(i), before.fuel_kwh[i]
        if tank_kwh is None or fuel_before is None:
            return
        fuel = period.fuel_kwh[i] = self._column(f"fuel_kwh_{name}", 0)
        self._row(fuel <= tank_kwh, f"tank_{name}")
        burnt_kwh = self.series.period_h * output
        if not case.service.generator_refills[i]:
            self._row(fuel <= fuel_before - burnt_kwh, f"fuel_{name}")
        elif unit.refill_frac_per_h is not None:
            refill_kwh = unit.refill_frac_per_h * self.series.period_h * tank_kwh
            self._row(fuel <= fuel_before - burnt_kwh + refill_kwh, f"fuel_{name}")

    def _add_storage(self, case: Case, period: OperatedPeriod, before: PlantState, i: int) -> None:
        """Charge and discharge of one store under its loss curve."""
        unit, name = self.study.storage[i], f"storage_{i}_{case.name}"
        kw, kwh = self.capacity.storage_kw[i], self.capacity.storage_kwh[i]
        if not case.service.storage_live[i]:
            period.energy_kwh[i] = before.energy_kwh[i]
            return
        terminal = period.storage_kw[i] = self._column(f"kw_{name}")
        draw = period.storage_draw_kw[i] = self._column(f"draw_kw_{name}")
        period.storage_kvar[i] = self._column(f"kvar_{name}")
        energy = period.energy_kwh[i] = self._column(f"energy_kwh_{name}", 0)
        # The corners of the polygon lie on the axes, so it also keeps |terminal| <= kW.
        self._add_rating(terminal, period.storage_kvar[i], kw, name)
        self._row(draw >= unit.curve[0][0] * kw, f"most_charge_{name}")
        self._row(draw <= unit.curve[-1][0] * kw, f"most_draw_{name}")
        for j, (slope, share) in enumerate(unit.edges):
            self._row(terminal <= slope * draw + share * kw, f"curve_{j}_{name}")
        self._row(energy == before.energy_kwh[i] - self.series.period_h * draw, f"energy_{name}")
        self._row(energy >= unit.min_soc_frac * kwh, f"lowest_charge_{name}")
        self._row(energy <= kwh, f"full_{name}")

    def _add_shedding(self, case: Case, period: OperatedPeriod) -> None:
        """Load shed: all at a dead bus; elsewhere in one share per section, or by bus."""
        by_section = self.study.settings.load_control is LoadControl.SECTION
        share_of_section: dict[int, Expression] = {}
        for i, load in enumerate(self.study.loads):
            bus, load_kw = self.feeder.load_bus[i], self.load_kw[case.row][i]
            name = f"{i}_{case.name}"
            if not case.service.bus_live[bus]:
                period.shed_kw[i] = Expression(constant=load_kw)
            elif by_section:
                section = int(self.section_of_bus[bus])
                if section not in share_of_section:
                    column = self._column(f"shed_share_{section}_{case.name}", 0, 1)
                    share_of_section[section] = column
                remote_kw = load.remote_disconnect_frac * load_kw
                alone = self._column(f"shed_alone_kw_{name}", 0, remote_kw)
                period.shed_kw[i] = (load_kw - remote_kw) * share_of_section[section] + alone
            else:
                period.shed_kw[i] = self._column(f"shed_kw_{name}", 0, load_kw)

    def _add_buses(self, case: Case, period: OperatedPeriod) -> None:
        """Voltage, surplus and capacitor of every live bus."""
        settings = self.study.settings
        low = settings.vmin_event_pu if case.is_event else settings.vmin_pu
        high = settings.vmax_event_pu if case.is_event else settings.vmax_pu
        given = {self.feeder.source} if self._source_feeds(case) else set()
        for i, bus in enumerate(self.feeder.supply_bus):
            if self._supply_feeds(case, i):
                given.add(int(bus))
        for bus in range(self.feeder.n_bus):
            if not case.service.bus_live[bus]:
                continue
            limits = (low**2, high**2)
            if bus in given:
                limits = (self.feeder.source_v_sq_pu, self.feeder.source_v_sq_pu)
            period.v_sq_pu[bus] = self._column(f"v_sq_pu_{bus}_{case.name}", *limits)
            period.surplus_kw[bus] = self._column(f"surplus_kw_{bus}_{case.name}", 0)
            kvar = float(self.feeder.capacitor_kvar[bus])
            if kvar > 0:
                column = self._column(f"capacitor_kvar_{bus}_{case.name}", 0, kvar)
                period.capacitor_kvar[bus] = column

    def _add_lines(self, case: Case, period: OperatedPeriod) -> None:
        """Flow, rating and voltage drop of every live line; a boost acts at its from end."""
        for i in range(self.feeder.n_line):
            v_from = period.v_sq_pu[self.feeder.from_bus[i]]
            v_to = period.v_sq_pu[self.feeder.to_bus[i]]
            if not case.service.line_live[i] or v_from is None or v_to is None:
                continue
            name = f"line_{i}_{case.name}"
            p = period.line_kw[i] = self._column(f"kw_{name}")
            q = period.line_kvar[i] = self._column(f"kvar_{name}")
            if self.feeder.rating_kva[i] < float("inf"):
                self._add_rating(p, q, Expression(constant=float(self.feeder.rating_kva[i])), name)
            ratio_sq = float((1.0 + self.feeder.boost_frac[i]) ** 2)
            drop_p = v_sq_drop_per_kw(float(self.feeder.r_ohm[i]), self.feeder.base_kv) * p
            drop_q = v_sq_drop_per_kw(float(self.feeder.x_ohm[i]), self.feeder.base_kv) * q
            self._row(v_to == ratio_sq * v_from - drop_p - drop_q, f"drop_{name}")

    def _add_balance(self, case: Case, period: OperatedPeriod) -> None:
        """At every live bus what flows in equals what is used, in kW and in kvar."""
        feeder = self.feeder
        kw: list[list[Expression]] = [[] for _ in range(feeder.n_bus)]
        kvar: list[list[Expression]] = [[] for _ in range(feeder.n_bus)]
        for i, (start, end) in enumerate(zip(feeder.from_bus, feeder.to_bus, strict=True)):
            kw[start].append(-period.line_kw[i])
            kvar[start].append(-period.line_kvar[i])
            kw[end].append(period.line_kw[i])
            kvar[end].append(period.line_kvar[i])
        kw[feeder.source].append(period.import_kw - period.export_kw)
        kvar[feeder.source].append(period.source_kvar)
        for buses, p, q in (
            (feeder.supply_bus, period.supply_kw, period.supply_kvar),
            (feeder.generator_bus, period.generator_kw, period.generator_kvar),
            (feeder.storage_bus, period.storage_kw, period.storage_kvar),
        ):
            for bus, item_kw, item_kvar in zip(buses, p, q, strict=True):
                kw[bus].append(item_kw)
                kvar[bus].append(item_kvar)
        for i, bus in enumerate(feeder.load_bus):
            load_kw, load_kvar = self.load_kw[case.row][i], self.load_kvar[case.row][i]
            kvar_per_kw = load_kvar / load_kw if load_kw > 0 else 0.0
            kw[bus].append(period.shed_kw[i] - load_kw)
            kvar[bus].append(kvar_per_kw * period.shed_kw[i] - load_kvar)
        for bus in range(feeder.n_bus):
            if case.service.bus_live[bus]:
                net_kw = pulp.lpSum(kw[bus]) - period.surplus_kw[bus]
                net_kvar = pulp.lpSum(kvar[bus]) + period.capacitor_kvar[bus]
                self._row(net_kw == 0, f"balance_kw_{bus}_{case.name}")
                self._row(net_kvar == 0, f"balance_kvar_{bus}_{case.name}")

    def _add_island(self, case: Case, period: OperatedPeriod, island: Island) -> None:
        """Units that follow stay within a ratio of those that form; these keep headroom."""
        settings, name = self.study.settings, f"island_{island.buses[0]}_{case.name}"
        forming_kw, forming_output, following_output = [], [], []
        for buses, forming, capacity, output in (
            (
                self.feeder.generator_bus,
                island.forming_generators,
                self.capacity.generator_kw,
                period.generator_kw,
            ),
            (
                self.feeder.storage_bus,
                island.forming_storage,
                self.capacity.storage_kw,
                period.storage_kw,
            ),
        ):
            for i, bus in enumerate(buses):
                if i in forming:
                    forming_kw.append(capacity[i])
                    forming_output.append(output[i])
                elif bus in island.buses:
                    following_output.append(output[i])
        rated_kw = pulp.lpSum(forming_kw)
        self._row(pulp.lpSum(following_output) <= settings.island_ratio * rated_kw, f"ratio_{name}")
        served = pulp.lpSum(
            self.load_kw[case.row][i] - period.shed_kw[i]
            for i, bus in enumerate(self.feeder.load_bus)
            if bus in island.buses
        )
        spare = rated_kw - pulp.lpSum(forming_output)
        self._row(spare >= settings.island_headroom_frac * served, f"headroom_{name}")

    def _cost(self, case: Case, period: OperatedPeriod) -> Expression:
        """Energy bought less sold, fuel, surplus and trips, and load shed by its price now."""
        settings, series = self.study.settings, self.series
        price = self.price_per_kwh[case.row]
        cost = [price * period.import_kw]
        cost += [price * kw for kw in period.supply_kw]
        if series.export_price_per_kwh is not None:
            cost.append(-series.export_price_per_kwh * period.export_kw)
        for unit, kw in zip(self.study.generators, period.generator_kw, strict=True):
            cost.append(unit.running_cost_per_kwh * kw)
        cost += [settings.surplus_cost_per_kwh * kw for kw in period.surplus_kw + period.trip_kw]
        for customers, kw in zip(self.class_of_load, period.shed_kw, strict=True):
            if case.is_event:
                per_kwh = float(price_per_kwh(customers, case.service.clock_h))
            else:
                per_kwh = normal_service_price_per_kwh(customers)
            cost.append(per_kwh * self.sold_per_shed * kw)
        return series.period_h * pulp.lpSum(cost)

    # ---- small parts ------------------------------------------------------------------------

    def _source_feeds(self, case: Case) -> bool:
        """Whether the source is live, and its bus."""
        return bool(case.service.source_live and case.service.bus_live[self.feeder.source])

    def _supply_feeds(self, case: Case, i: int) -> bool:
        """Whether a neighbour supply is closed on a live bus."""
        bus = self.feeder.supply_bus[i]
        return bool(case.service.supply_closed[i] and case.service.bus_live[bus])

    def _tank_kwh(self, i: int) -> Expression | None:
        """Size of a generator's tank in kWh of output; None without one."""
        tank_h = self.study.generators[i].tank_h
        return None if tank_h is None else tank_h * self.capacity.generator_kw[i]

    def _add_rating(self, p: Expression, q: Expression, rating: Expression, name: str) -> None:
        """(P, Q) inside the regular polygon inscribed in the circle of the rating."""
        for side in range(N_SIDE):
            angle = (2 * side + 1) * pi / N_SIDE
            self._row(
                cos(angle) * p + sin(angle) * q <= cos(pi / N_SIDE) * rating,
                f"rating_{side}_{name}",
            )

    def _column(self, name: str, low: float | None = None, high: float | None = None) -> Expression:
        """A new column."""
        return Expression(self.problem.add_variable(name, low, high))

    def _row(self, constraint: pulp.LpConstraint, name: str) -> None:
        """A new row."""
        self.problem += constraint, name
