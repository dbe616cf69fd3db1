"""The whole scenario tree as one program in PuLP: the readable reference.

Enters: a study, its feeder, its windows with their scenarios and clocks. Leaves: a ``WholeTree``,
which ``xlplan.solve.tree`` solves and which then gives purchases and operation as named arrays.

A *node* is a plan (all in service from period ``u`` on, followed until something fails) or an
outage event (one scenario, from its first period to the end of its repair). With ``S`` the chance
that nothing has failed since ``u`` and ``q`` the chance of a failure in a period (model.md 3):

    cost of plan u   = sum_k S_k cost_k + sum_k S_k q_k sum_w p_kw (event w from k+1) + S_T end
    cost of an event = repair + its periods + plan t+tau, or end at or beyond the window's end

Every node has columns of its own; nothing is shared between nodes but purchases and the state at
which they branch. The decomposition (``subproblem.py``) folds the same nodes into value functions
and shares no code with this module: only so is their agreement evidence. Small cases only, see
``tree_size.py``. A weight on bad outcomes concerns the first plans alone (``tree_risk.py``).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import pulp
from pulp import LpAffineExpression as Expression

from xlplan.model.dispatch import Purchases, SegmentKind
from xlplan.model.risk_aim import aim_of
from xlplan.model.tree_account import Account, Arrival, Gate
from xlplan.model.tree_bounds import ValueBounds, bound_values
from xlplan.model.tree_columns import Case, OperatedPeriod, PlantState
from xlplan.model.tree_period import PeriodEquations
from xlplan.model.tree_purchases import PurchaseColumns, add_purchases, fix_purchases
from xlplan.model.tree_risk import Outcomes
from xlplan.model.tree_size import Slice, hardening_slices
from xlplan.network.feeder import Feeder
from xlplan.outages.damage import first_moment_cost
from xlplan.outages.records import Scenario
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study


@dataclass
class TreeNode:
    """One node with the columns of its periods, filled while building.

    ``period_chance``: per period, given that the node is reached. ``ends``: chances, given that
    the node is reached, that the window ends with its last state, each with the gates it needs.
    """

    i_window: int
    kind: SegmentKind
    i_scenario: int | None
    i_parent: int
    start_period: int
    chance: float
    gates: tuple[Gate, ...]
    periods: list[OperatedPeriod] = field(default_factory=list)
    period_chance: list[float] = field(default_factory=list)
    ends: list[tuple[float, tuple[Gate, ...]]] = field(default_factory=list)


@dataclass(frozen=True)
class WholeTree:
    """The program, its purchases and its nodes in the order they were built (parents first)."""

    problem: pulp.LpProblem
    purchases: PurchaseColumns
    nodes: tuple[TreeNode, ...]


def build_whole_tree(
    study: Study,
    feeder: Feeder,
    windows: Sequence[WindowModel],
    fixed_x: Purchases | None = None,
) -> WholeTree:
    """Every node of every window, one first stage.

    Parameters
    ----------
    study, feeder : of one study, checked
    windows : WindowModel of each window
    fixed_x : what is bought, if it is given; the demand paid for is still decided

    Returns
    -------
    WholeTree; minimises ``annual(x) + demand_charge D + sum_w n_w V_w``, money per year, where
    ``V_w`` is the window's expected cost, or the aim of mean and worst outcomes if one is set
    """
    problem = pulp.LpProblem("whole_tree", pulp.LpMinimize)
    if fixed_x is None:
        purchases = add_purchases(problem, study)
    else:
        purchases = fix_purchases(problem, study, fixed_x)
    account = Account()
    account.add(purchases.yearly_cost, 1.0)
    account.add(Expression(purchases.demand_kw), study.settings.demand_charge_per_kw_year)
    nodes: list[TreeNode] = []
    for i_window, window in enumerate(windows):
        tree = _WindowTree(problem, study, feeder, window, i_window, purchases, fixed_x, nodes)
        tree.add_first_plan(account)
    problem.setObjective(account.expression())
    return WholeTree(problem, purchases, tuple(nodes))


class _WindowTree:
    """Adds the nodes of one window, from its first plan down."""

    def __init__(
        self,
        problem: pulp.LpProblem,
        study: Study,
        feeder: Feeder,
        window: WindowModel,
        i_window: int,
        purchases: PurchaseColumns,
        fixed_x: Purchases | None,
        nodes: list[TreeNode],
    ) -> None:
        self.problem = problem
        self.study = study
        self.window = window
        self.i_window = i_window
        self.purchases = purchases
        self.fixed_x = fixed_x
        self.nodes = nodes
        self.n_period = window.series.n_period
        self.equations = PeriodEquations(problem, study, feeder, window.series, purchases.capacity)
        self.slices = [hardening_slices(scenario) for scenario in window.scenarios]
        needs_bounds = fixed_x is None and any(scenario.hardening for scenario in window.scenarios)
        self.bounds: ValueBounds | None = bound_values(study, window) if needs_bounds else None

    def add_first_plan(self, account: Account) -> None:
        """``V_0``: the plan before anything fails, the only one that the demand charge sees.

        It is also the only one with an aim beyond its expected cost.
        """
        occurrences = self.window.series.occurrences_per_year
        aim, outcomes = aim_of(self.study.settings), None
        weight = occurrences
        if aim is not None:
            outcomes = Outcomes(self.problem, self.i_window, aim, occurrences, account)
            weight *= 1.0 - aim.weight_frac
        arrival = Arrival(account, weight, 1.0, (), -1)
        node = self.add_plan(0, self.equations.start_state(), arrival, outcomes)
        if self.window.series.counts_for_demand:
            for k, period in enumerate(node.periods):
                self.problem += (
                    period.import_kw <= self.purchases.demand_kw,
                    f"demand_w{self.i_window}k{k}",
                )

    def add_plan(
        self, start: int, state: PlantState, arrival: Arrival, outcomes: Outcomes | None = None
    ) -> TreeNode:
        """``V_u``: all in service from a period on, and every failure on the way."""
        i_node, node = self._new_node(SegmentKind.PLAN, None, start, arrival)
        survival = 1.0
        for k in range(start, self.n_period):
            case = Case(f"n{i_node}k{k}", k, self.window.normal, is_event=False)
            period = self._add_period(node, case, state, survival)
            arrival.account.add(period.cost, arrival.weight * survival)
            if outcomes is not None:
                outcomes.pay(period.cost)
            state = period.state()
            failure = survival * float(self.window.clock.failure_chance[k])
            if failure > 0.0:
                branch = replace(arrival.times(failure), i_parent=i_node)
                self._add_failures(k, state, branch, node, failure, outcomes)
            survival *= 1.0 - float(self.window.clock.failure_chance[k])
        end = self._add_end(node, f"n{i_node}", state, arrival.times(survival), survival)
        if outcomes is not None:
            outcomes.pay(end)
            outcomes.finish(survival)
        return node

    def _add_failures(
        self,
        k: int,
        state: PlantState,
        arrival: Arrival,
        parent: TreeNode,
        failure: float,
        outcomes: Outcomes | None,
    ) -> None:
        """Everything that can fail in period ``k``; the arrival is that of some failure."""
        for i_scenario in range(len(self.window.scenarios)):
            chance = float(self.window.clock.scenario_chance[k, i_scenario])
            if chance <= 0.0:
                continue
            for part in self.slices[i_scenario]:
                arriving = arrival.times(chance * part.share)
                branch = arriving if outcomes is None else outcomes.begin(arriving)
                passed = failure * chance * part.share
                if not part.avoided_by:
                    self._add_event(k, i_scenario, state, branch)
                elif self.fixed_x is None:
                    self._add_gated(k, i_scenario, part, state, branch, parent, passed)
                elif any(self.fixed_x.is_hardened[i] for i in part.avoided_by):
                    self._add_no_event(k, state, branch, parent, passed)
                else:
                    self._add_event(k, i_scenario, state, branch)
                if outcomes is not None:
                    outcomes.close(arriving, branch, passed)

    def _add_event(self, k: int, i_scenario: int, state: PlantState, arrival: Arrival) -> None:
        """``D``: a failure in period ``k``, its outage event, and what follows the repair."""
        scenario = self.window.scenarios[i_scenario]
        start = k + 1
        i_node, node = self._new_node(SegmentKind.EVENT, i_scenario, start, arrival)
        account, weight = arrival.account, arrival.weight
        account.add(Expression(constant=float(scenario.repair_cost[k])), weight)
        for i, service in enumerate(scenario.service):
            row = (start + i) % self.n_period
            case = Case(f"n{i_node}k{start + i}", row, service, is_event=True)
            period = self._add_period(node, case, state, 1.0)
            account.add(period.cost, weight)
            if start + i >= self.n_period:
                # Beyond the window only what the outage costs is counted.
                account.add(self.equations.normal_supply_cost(row), -weight)
            state = period.state()
        account.add(self._first_moment_cost(f"n{i_node}", node.periods), weight)
        after = start + scenario.n_period
        if after < self.n_period:
            self.add_plan(after, state, replace(arrival, i_parent=i_node))
        else:
            self._add_end(node, f"n{i_node}", state, arrival, 1.0)

    def _add_no_event(
        self, k: int, state: PlantState, arrival: Arrival, parent: TreeNode, passed: float
    ) -> None:
        """A failure avoided: service goes on, ``V_{k+1}``, or the end of the window."""
        if k + 1 < self.n_period:
            self.add_plan(k + 1, state, arrival)
        else:
            name = f"n{arrival.i_parent}avoided{len(parent.ends)}"
            self._add_end(parent, name, state, arrival, passed)

    def _add_gated(
        self,
        k: int,
        i_scenario: int,
        part: Slice,
        state: PlantState,
        arrival: Arrival,
        parent: TreeNode,
        passed: float,
    ) -> None:
        """A failure that measures avoid: both subtrees, and ``Theta`` above the one that holds.

        ``Theta >= D - B h`` and ``Theta >= V_{k+1} - B' (1 - h)``, with ``h`` the sum over measures
        that exclude one another; ``B`` and ``B'`` bound the difference of the two values.
        """
        struck, spared = Account(), Account()
        gate = Gate(part.avoided_by, is_avoided=False)
        gates = (*arrival.gates, gate)
        self._add_event(
            k, i_scenario, state, replace(arrival, account=struck, weight=1.0, gates=gates)
        )
        gates = (*arrival.gates, replace(gate, is_avoided=True))
        self._add_no_event(
            k, state, replace(arrival, account=spared, weight=1.0, gates=gates), parent, passed
        )
        scenario = self.window.scenarios[i_scenario]
        lift_struck, lift_spared, low = self._lifts(scenario, i_scenario, k)
        name = f"theta_n{arrival.i_parent}k{k}s{i_scenario}m{part.avoided_by[0]}"
        theta = self.problem.add_variable(name, low)
        hardened = pulp.lpSum(self.purchases.hardened[i] for i in part.avoided_by)
        self.problem += theta >= struck.expression() - lift_struck * hardened, f"struck_{name}"
        self.problem += (
            theta >= spared.expression() - lift_spared * (1 - hardened),
            f"spared_{name}",
        )
        arrival.account.add(Expression(theta), arrival.weight)

    def _lifts(self, scenario: Scenario, i_scenario: int, k: int) -> tuple[float, float, float]:
        """``B``, ``B'`` and the lowest value of either subtree."""
        bounds = self.bounds
        assert bounds is not None
        repair_cost = float(scenario.repair_cost[k])
        event_low = repair_cost + float(bounds.event_low[i_scenario, k + 1])
        event_high = repair_cost + float(bounds.event_high[i_scenario, k + 1]) + bounds.trip
        plan_low = float(bounds.plan_low[k + 1])
        plan_high = float(bounds.plan_high[k + 1]) + bounds.trip
        return (
            max(0.0, event_high - plan_low),
            max(0.0, plan_high - event_low),
            min(event_low, plan_low),
        )

    def _first_moment_cost(self, name: str, periods: list[OperatedPeriod]) -> Expression:
        """Cost of being interrupted at all, on the largest kW of each load unserved at once."""
        cost = []
        for i, customers in enumerate(self.equations.class_of_load):
            price = first_moment_cost(customers)
            if price <= 0.0:
                continue
            largest = self.problem.add_variable(f"largest_shed_kw_{i}_{name}", 0)
            for j, period in enumerate(periods):
                self.problem += (
                    largest >= self.equations.sold_per_shed * period.shed_kw[i],
                    f"largest_shed_{i}_{name}_{j}",
                )
            cost.append(price * largest)
        return pulp.lpSum(cost)

    def _add_period(
        self, node: TreeNode, case: Case, state: PlantState, chance: float
    ) -> OperatedPeriod:
        """One period of a node."""
        period = self.equations.add_period(case, state)
        node.periods.append(period)
        node.period_chance.append(chance)
        return period

    def _add_end(
        self, node: TreeNode, name: str, state: PlantState, arrival: Arrival, chance: float
    ) -> Expression:
        """The window ends with this state; what that costs."""
        if chance <= 0.0:
            return Expression()
        cost = self.equations.add_end_cost(name, state)
        arrival.account.add(cost, arrival.weight)
        node.ends.append((chance, arrival.gates))
        return cost

    def _new_node(
        self, kind: SegmentKind, i_scenario: int | None, start: int, arrival: Arrival
    ) -> tuple[int, TreeNode]:
        """A node without periods yet, and its position."""
        node = TreeNode(
            self.i_window, kind, i_scenario, arrival.i_parent, start, arrival.chance, arrival.gates
        )
        self.nodes.append(node)
        return len(self.nodes) - 1, node
