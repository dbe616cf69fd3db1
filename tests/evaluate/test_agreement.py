"""Whole tree and decomposition, two statements of one model, on random small studies.

The tree (``model/whole_tree.py``) and the families (``model/subproblem.py``) share inputs but no
code that assembles equations, so their agreement is evidence. Seeds 0 to 29 together use every
feature of the model (``tests/test_builders.py`` proves that of the same seeds).
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.builders import random_study
from xlplan.evaluate import follow_plan
from xlplan.evaluate.audit import audit_dispatch
from xlplan.evaluate.audit_tree import audit_tree
from xlplan.evaluate.follow_plan import Follower
from xlplan.evaluate.follow_tree import follow_tree
from xlplan.evaluate.meters import attach_meters, read_dispatch
from xlplan.evaluate.purchases import price_purchases, read_purchases
from xlplan.evaluate.violations import capacities_in_service, start_of_window, state_after
from xlplan.model.study_graph import build_study_graph
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import build_feeder
from xlplan.outages.sections import build_sections
from xlplan.outages.window_model import build_window_models
from xlplan.solve.decomposition import Engine
from xlplan.solve.tree import solve_tree

AGREE = 1e-4
"""Relative difference allowed between the two methods."""

SEEDS = range(30)


class Solved:
    """One random study with its engine, run until the measured gap is closed."""

    def __init__(self, seed: int) -> None:
        self.study = random_study(seed)
        self.feeder = build_feeder(self.study)
        self.windows = build_window_models(self.study, self.feeder)
        self.graph = build_study_graph(self.study, self.feeder, self.windows)
        attach_meters(self.graph, self.windows)
        self.engine = Engine(self.graph.graph, seed=1)
        self.found = self.engine.run(0.2 * AGREE)

    def follower(self) -> Follower:
        def guide(i_window: int, member: int, state: np.ndarray) -> float:
            family = self.graph.windows[i_window].plan
            capacity = self.found.capacities[0]
            return float(self.engine.value_of(family, member, state[None, :], capacity)[0])

        return Follower(self.graph, self.windows, self.engine, guide)


def audited_violations(solved: Solved) -> list[str]:
    """Every first plan and first event, re-checked by code that takes no part in the model."""
    study, feeder = solved.study, solved.feeder
    bought = read_purchases(solved.graph.first_stage, solved.found.x)
    capacities = capacities_in_service(study, bought)
    section_of_bus = build_sections(feeder).section_of_bus
    follower, capacity = solved.follower(), solved.found.capacities[0]
    broken = []
    for i, window in enumerate(solved.windows):
        root = solved.graph.graph.roots[i]
        state = root.state_matrix @ capacity + root.state_offset
        request = follower.plan_request(i, 0, state, capacity)
        solution = solved.engine.solve_nodes([request], read_dispatch)[0]
        plan = solution.measured
        series = window.series
        charged = study.settings.demand_charge_per_kw_year > 0.0 and series.counts_for_demand
        demand = bought.demand_kw if charged else None
        normal = [window.normal] * series.n_period
        before = start_of_window(study, capacities, series.start_soc_frac)
        broken += audit_dispatch(
            study,
            feeder,
            section_of_bus,
            series,
            normal,
            plan,
            capacities,
            before,
            0,
            False,
            demand,
        )
        family = solved.graph.plan_family(i)
        after = {int(k): solution.out_states[e] for e, k in enumerate(family.exit_period)}
        for w, scenario in enumerate(window.scenarios):
            for k, state in after.items():
                if window.clock.scenario_chance[k, w] <= 0.0:
                    continue
                request = follower.event_request(i, w, k, state, capacity)
                event = solved.engine.solve_nodes([request], read_dispatch)[0].measured
                broken += audit_dispatch(
                    study,
                    feeder,
                    section_of_bus,
                    series,
                    scenario.service,
                    event,
                    capacities,
                    state_after(plan, k, window.normal),
                    k + 1,
                    True,
                )
    return [violation.text() for violation in broken]


@pytest.mark.slow
@pytest.mark.parametrize("seed", SEEDS)
def test_both_methods_give_the_same_cost_and_feasible_plans(seed: int) -> None:
    solved = Solved(seed)
    study, windows = solved.study, solved.windows
    tree = build_whole_tree(study, solved.feeder, windows)
    reference = solve_tree(tree)
    assert reference.has_plan
    assert reference.purchases is not None
    optimum = reference.objective
    room = AGREE * abs(optimum)

    assert solved.found.lower_bound <= optimum + 1e-7 * abs(optimum)
    assert solved.found.lower_bound == pytest.approx(optimum, abs=room)

    followed = solved.follower().follow(solved.found.capacities[0], 10, 1)
    assert followed.is_enumerated
    purchases = price_purchases(study, read_purchases(solved.graph.first_stage, solved.found.x))
    demand = solved.found.x[solved.graph.first_stage.demand_kw]
    yearly = sum(p.investment + p.fixed_om for p in purchases)
    yearly += study.settings.demand_charge_per_kw_year * demand
    cost = yearly + followed.running_cost
    assert cost == pytest.approx(optimum, abs=room)
    assert cost >= optimum - 1e-6 * abs(optimum)

    # The tree's own nodes, counted by the same metrics, give back its optimum.
    counted = follow_tree(study, solved.feeder, windows, reference.purchases, reference.segments)
    bought = price_purchases(study, reference.purchases)
    tree_yearly = sum(p.investment + p.fixed_om for p in bought)
    tree_yearly += study.settings.demand_charge_per_kw_year * reference.purchases.demand_kw
    assert tree_yearly + counted.running_cost == pytest.approx(optimum, rel=1e-7)

    assert audited_violations(solved) == []
    assert audit_tree(study, solved.feeder, windows, reference.purchases, reference.segments) == []


@pytest.mark.parametrize("seed", [1, 4, 7, 12, 18])
def test_sampled_cost_covers_the_enumerated_one(seed: int, monkeypatch: pytest.MonkeyPatch) -> None:
    solved = Solved(seed)
    capacity = solved.found.capacities[0]
    exact = solved.follower().follow(capacity, 10, 1)
    assert exact.is_enumerated
    monkeypatch.setattr(follow_plan, "ENUMERATION_LIMIT", 0)
    sampled = solved.follower().follow(capacity, 400, 1)
    assert not sampled.is_enumerated
    # Twice the 95 % interval, and a little for rounding: a wrong weight is off by far more.
    room = 2.0 * sampled.half_width + 1e-7 * abs(exact.running_cost)
    assert sampled.running_cost == pytest.approx(exact.running_cost, abs=room)
    parts = np.array([w.metrics for w in sampled.windows])
    costs = sampled.slots.cost(parts)
    assert float(sampled.occurrences @ costs) == pytest.approx(sampled.running_cost, rel=1e-12)


def test_same_seed_same_sample(monkeypatch: pytest.MonkeyPatch) -> None:
    solved = Solved(4)
    monkeypatch.setattr(follow_plan, "ENUMERATION_LIMIT", 0)
    capacity = solved.found.capacities[0]
    first = solved.follower().follow(capacity, 60, 5)
    again = solved.follower().follow(capacity, 60, 5)
    other = solved.follower().follow(capacity, 60, 6)
    assert first.running_cost == pytest.approx(again.running_cost, rel=1e-9)
    assert first.half_width > 0.0
    assert any(
        not np.allclose(a.sample_cost, b.sample_cost)
        for a, b in zip(first.windows, other.windows, strict=True)
    )
