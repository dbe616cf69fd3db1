"""The whole tree on cases small enough to work out by hand, and hardening against all subsets."""

from dataclasses import replace
from itertools import product
from math import exp

import numpy as np
import pytest

from tests.builders import (
    change_study,
    make_customer_class,
    make_generator,
    make_load,
    make_measure,
    make_outage_class,
    make_profiles,
    make_storage,
    make_window,
    random_study,
    small_study,
)
from xlplan.model.dispatch import Purchases, SegmentKind
from xlplan.model.tree_size import count_nodes
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.solve.tree import TreeSolution, TreeTermination, solve_tree
from xlplan.study.economics import capital_recovery_factor
from xlplan.study.study import LoadControl, Study


def solve(study: Study, fixed_x: Purchases | None = None) -> TreeSolution:
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    solution = solve_tree(build_whole_tree(study, feeder, windows, fixed_x))
    assert solution.termination is TreeTermination.OPTIMAL
    return solution


def one_line_study(failures_per_year: float, n_period: int, **changes: object) -> Study:
    """Source, one line, one load of 100 kW; repair 1 h without isolation time; one occurrence."""
    study = small_study(
        windows=(make_window(n_period=n_period, occurrences_per_year=1.0),),
        outage_classes=(make_outage_class("overhead", failures_per_year, repair_h=1.0),),
    )
    study = change_study(study, buses=study.buses[:2], lines=study.lines[:1], loads=study.loads[:1])
    return change_study(study, **changes)


# ---- one line, nothing to buy -------------------------------------------------------------------

HALF = 8760.0 * 0.6931471805599453
"""Failures per year that make the chance in an hour 1 - exp(-ln 2) = 1/2."""


def test_one_line_three_hours_by_hand():
    """q = 1/2, repair 1 h, energy 0.1 per kWh, interruption 2 per kWh, 100 kW.

    An hour in service costs 10, an hour out inside the window 200. Beyond the window the supply
    of that hour (10) is taken off: 190.
    V_2 = 10 + 1/2 * 190                         = 105
    V_1 = 10 + 1/2 (200 + V_3 = 0) + 1/2 V_2     = 10 + 100 + 52.5 = 162.5
    V_0 = 10 + 1/2 (200 + V_2) + 1/2 V_1         = 10 + 152.5 + 81.25 = 243.75
    """
    assert solve(one_line_study(HALF, 3)).objective == pytest.approx(243.75, rel=1e-9)


def test_repair_cost_and_first_moment_are_charged_once_per_event():
    """As above with repair cost 7 and 2 h of repair, C_0 = 3 per kW and 2 per kWh on top.

    An event costs 7 + 300 + 2 * 200 inside; it leaves T = 2 in every case:
    from k = 0: hours 1 and 2 -> one beyond:  707 - 10 = 697
    from k = 1: hours 2 and 3 -> two beyond:  707 - 20 = 687
    V_0 = 10 + 1/2 * 697 + 1/2 (10 + 1/2 * 687) = 10 + 348.5 + 5 + 171.75 = 535.25
    """
    study = one_line_study(
        HALF,
        2,
        outage_classes=(
            make_outage_class("overhead", HALF, repair_h=2.0, repair_cost_per_failure=7.0),
        ),
        customer_classes=(
            make_customer_class(cost_0h_per_kw=3.0, cost_1h_per_kw=5.0, cost_4h_per_kw=11.0),
        ),
    )
    assert solve(study).objective == pytest.approx(535.25, rel=1e-9)


def test_interruptions_are_priced_by_the_clock_of_the_event_and_at_the_customer():
    """T = 1, q = 1/2, repair 2 h, loss allowance 25 %: 125 kW in the feeder, 100 at the customer.

    C_1 = 1, C_4 = 10: first hour 1 per kWh, second (10 - 1) / 3 = 3 per kWh.
    V_0 = 12.5 + 1/2 (100 * 1 + 100 * 3 - 2 * 12.5) = 12.5 + 187.5 = 200
    """
    study = one_line_study(
        HALF,
        1,
        loss_allowance_frac=0.25,
        outage_classes=(make_outage_class("overhead", HALF, repair_h=2.0),),
        customer_classes=(make_customer_class(cost_1h_per_kw=1.0, cost_4h_per_kw=10.0),),
    )
    assert solve(study).objective == pytest.approx(200.0, rel=1e-9)


def test_demand_is_charged_on_the_first_plan_and_windows_by_their_number():
    """No failures: 2 h of 100 kW at 0.1, 50 times a year, and 12 per kW of demand."""
    study = one_line_study(
        0.0,
        2,
        windows=(make_window(n_period=2, occurrences_per_year=50.0),),
        demand_charge_per_kw_year=12.0,
    )
    solution = solve(study)
    assert solution.objective == pytest.approx(50 * 20 + 12 * 100, rel=1e-9)
    assert solution.purchases is not None
    assert solution.purchases.demand_kw == pytest.approx(100.0)


def test_what_the_substation_cannot_carry_is_shed_at_the_first_hours_price():
    """Limit 60 kVA at unity power factor: 60 kW bought, 40 kW shed at C_1 - C_0 = 4 per kWh."""
    study = one_line_study(
        0.0,
        1,
        substation_limit_kva=60.0,
        customer_classes=(make_customer_class(cost_0h_per_kw=1.0, cost_1h_per_kw=5.0),),
    )
    assert solve(study).objective == pytest.approx(60 * 0.1 + 40 * 4, rel=1e-9)


def test_weights_of_the_segments_are_the_chances_of_the_clock():
    """q = 1 - exp(-1.2) per hour, T = 2, repair 1 h: plan 1, failure in 0 q, in 1 (1 - q) q."""
    q = 1.0 - exp(-1.2)
    solution = solve(one_line_study(8760.0 * 1.2, 2))
    plan = solution.segments[0]
    events = [item for item in solution.segments if item.kind is SegmentKind.EVENT]
    assert plan.period_weight == pytest.approx([1.0, 1.0 - q])
    assert sorted(item.weight for item in events) == pytest.approx(sorted([q, (1 - q) * q]))
    # The failure in 0 is repaired at 2 = T, so every path ends where its event ends, or the plan.
    assert sum(item.end_weight for item in solution.segments) == pytest.approx(1.0)
    assert all((item.dispatch.shed_kw == 100.0).all() for item in events)
    assert plan.dispatch.import_kw == pytest.approx([100.0, 100.0])


# ---- shedding in one share ----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("control", "remote_frac", "expected_shed"),
    [
        # Short of 60 kW of 200. In one share 30 kW of each load; freely all of it at the cheap one.
        (LoadControl.SECTION, 0.0, {"cheap": 30.0, "dear": 30.0}),
        (LoadControl.BUS, 0.0, {"cheap": 60.0, "dear": 0.0}),
        # 40 % of the cheap load alone (40 kW), the other 20 kW in one share of 60 + 100: 1/8.
        (LoadControl.SECTION, 0.4, {"cheap": 47.5, "dear": 12.5}),
    ],
)
def test_a_section_is_shed_in_one_share(control, remote_frac, expected_shed):
    study = one_line_study(
        0.0,
        1,
        load_control=control,
        substation_limit_kva=140.0,
        loads=(
            make_load("L1", "A", customer_class="cheap", remote_disconnect_frac=remote_frac),
            make_load("L2", "A", customer_class="dear"),
        ),
        customer_classes=(
            make_customer_class("cheap", cost_1h_per_kw=1.0),
            make_customer_class("dear", cost_1h_per_kw=10.0),
        ),
    )
    shed = solve(study).segments[0].dispatch.shed_kw[0]
    assert shed == pytest.approx(list(expected_shed.values()), abs=1e-6)


# ---- generators ---------------------------------------------------------------------------------


def island_study(n_period: int, repair_h: float, **changes: object) -> Study:
    """The line fails, a generator of 100 kW that can hold the island serves the load behind it.

    Breakers at both ends of the line: the load's section stays live.
    """
    study = one_line_study(
        HALF, n_period, outage_classes=(make_outage_class("overhead", HALF, repair_h=repair_h),)
    )
    line = replace(study.lines[0], to_device=study.lines[0].from_device)
    return change_study(
        study,
        lines=(line,),
        generators=(
            make_generator(
                "G", "A", existing_kw=100.0, max_new_kw=0.0, is_outage_only=True, **changes
            ),
        ),
    )


def test_a_generator_that_forms_the_island_replaces_the_interruption_by_fuel():
    """T = 1, repair 1 h: 10 + 1/2 (100 kWh of fuel at 0.3 - 10) = 10 + 1/2 * 20."""
    assert solve(island_study(1, 1.0)).objective == pytest.approx(20.0, rel=1e-9)


def test_a_tank_of_half_an_hour_serves_half_the_energy_of_an_hour():
    """50 kWh of fuel at 0.3, 50 kWh lost at 2: 10 + 1/2 (15 + 100 - 10)."""
    study = island_study(1, 1.0, tank_h=0.5)
    assert solve(study).objective == pytest.approx(62.5, rel=1e-9)


def test_output_ramps_up_from_zero():
    """Outage-only, so it was at 0; 40 % of 100 kW per hour: 40 kW, then 80 kW of 100.

    T = 1, repair 2 h: 10 + 1/2 (120 * 0.3 + (60 + 20) * 2 - 20) = 10 + 1/2 * 176.
    """
    study = island_study(1, 2.0, ramp_frac_per_period=0.4)
    assert solve(study).objective == pytest.approx(98.0, rel=1e-9)


def test_headroom_of_the_forming_unit_limits_what_is_served():
    """25 % of the served load in reserve: served s <= 100 - 0.25 s, s = 80.

    10 + 1/2 (80 * 0.3 + 20 * 2 - 10) = 10 + 1/2 * 54.
    """
    study = change_study(island_study(1, 1.0), island_headroom_frac=0.25)
    assert solve(study).objective == pytest.approx(37.0, rel=1e-9)


# ---- storage ------------------------------------------------------------------------------------


def arbitrage_study(spread_factor: float) -> tuple[Study, float]:
    """Cheap hour, dear hour, no failures; the price of storage is set off its closed form.

    1 kW with h = 1 kWh: charged in hour 0 at p0 through one-way efficiency e, discharged in hour 1
    at p1. Power and energy are bought together: kWh = kW * e would do, as e kWh are stored per
    hour of charging at full power, and e * e come out. Per kW of inverter and year
        n * (e * e * p1 - p0)
    is earned for CRF * (cost_kw + e * cost_kwh). ``spread_factor`` scales what is earned to what
    is paid.
    """
    e, p0, p1, n, rate, life = 0.9, 0.1, 0.3, 365.0, 0.06, 12.0
    earned = n * (e * e * p1 - p0)
    cost_kwh = 100.0
    cost_kw = earned / spread_factor / capital_recovery_factor(rate, life) - e * cost_kwh
    assert cost_kw > 0
    study = one_line_study(
        0.0,
        2,
        real_discount_rate_frac=rate,
        energy_price_per_kwh=1.0,
        profiles=make_profiles(2, price=[p0, p1]),
        windows=(make_window(n_period=2, occurrences_per_year=n, price_profile="price"),),
        storage=(
            make_storage(
                "B",
                "A",
                max_new_kw=50.0,
                max_new_kwh=1000.0,
                capital_cost_per_kw=cost_kw,
                capital_cost_per_kwh=cost_kwh,
                fixed_om_per_kw=0.0,
                life_years=life,
                start_soc_frac=0.0,
                min_soc_frac=0.0,
            ),
        ),
    )
    return study, earned


def test_storage_is_bought_just_above_the_break_even_spread():
    study, earned = arbitrage_study(1.01)
    solution = solve(study)
    assert solution.purchases is not None
    assert solution.purchases.storage_kw == pytest.approx([50.0])
    assert solution.purchases.storage_kwh == pytest.approx([45.0])
    without = 365 * 100 * (0.1 + 0.3)
    profit = 50 * earned * (1 - 1 / 1.01)
    assert solution.objective == pytest.approx(without - profit, rel=1e-9)


def test_storage_is_not_bought_just_below_the_break_even_spread():
    study, _ = arbitrage_study(0.99)
    solution = solve(study)
    assert solution.purchases is not None
    assert solution.purchases.storage_kw == pytest.approx([0.0], abs=1e-7)
    assert solution.objective == pytest.approx(365 * 100 * (0.1 + 0.3), rel=1e-9)


def test_energy_missing_at_the_end_costs_its_price():
    """10 kWh stored at the start, lossless; worth 0.3 in the only hour, 0.2 at the end.

    All of it is used: 100 - 10 kWh bought at 0.3, 10 kWh missing at 0.2.
    """
    study = one_line_study(
        0.0,
        1,
        energy_price_per_kwh=0.3,
        stored_energy_price_per_kwh=0.2,
        storage=(
            make_storage(
                "B",
                "A",
                existing_kw=10.0,
                existing_kwh=10.0,
                max_new_kw=0.0,
                max_new_kwh=0.0,
                curve=((-1.0, -1.0), (0.0, 0.0), (1.0, 1.0)),
                start_soc_frac=1.0,
                min_soc_frac=0.0,
            ),
        ),
    )
    solution = solve(study)
    assert solution.objective == pytest.approx(90 * 0.3 + 10 * 0.2, rel=1e-9)
    assert solution.segments[0].dispatch.energy_kwh[-1] == pytest.approx([0.0], abs=1e-7)


# ---- purchases ----------------------------------------------------------------------------------


def test_steps_site_cost_and_grant_by_hand():
    """A generator at 0.05 per kWh against 0.1 saves 0.05 * 8760 h = 438 per kW and year.

    Steps of 30 kW, at most 100 kW: 90 kW. Net capital (90 * 500 + 4000) * 0.6 = 29,400 over 20
    years without interest: 1,470; O&M 5 * 90 = 450.
    """
    study = one_line_study(
        0.0,
        1,
        real_discount_rate_frac=0.0,
        windows=(make_window(n_period=1, occurrences_per_year=8760.0),),
        generators=(
            make_generator(
                "G",
                "A",
                step_kw=30.0,
                capital_site_cost=4000.0,
                grant_frac=0.4,
                running_cost_per_kwh=0.05,
            ),
        ),
    )
    solution = solve(study)
    assert solution.purchases is not None
    assert solution.purchases.generator_kw == pytest.approx([90.0])
    expected = 8760 * (90 * 0.05 + 10 * 0.1) + 1470 + 450
    assert solution.objective == pytest.approx(expected, rel=1e-9)
    budgeted = change_study(study, capital_budget=29_399.0)
    purchases = solve(budgeted).purchases
    assert purchases is not None
    assert purchases.generator_kw == pytest.approx([60.0])


@pytest.mark.parametrize("seed", [0, 3, 6, 10])
def test_given_purchases_cost_what_the_best_plan_costs(seed):
    study = random_study(seed)
    best = solve(study)
    assert best.bound == pytest.approx(best.objective, rel=2e-6)
    assert solve(study, best.purchases).objective == pytest.approx(best.objective, rel=1e-7)


@pytest.mark.parametrize("seed", [3, 6, 10])
def test_the_tree_that_is_built_is_the_tree_that_was_counted(seed):
    study = random_study(seed)
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    tree = build_whole_tree(study, feeder, windows)
    size = count_nodes(windows)
    assert len(tree.nodes) == size.n_node
    assert sum(len(node.periods) for node in tree.nodes) == size.n_period_copies


# ---- hardening ----------------------------------------------------------------------------------


def hardening_study(seed: int) -> Study:
    """Two lines in a row, two or three measures at random, one battery; rates of tens per cent."""
    rng = np.random.default_rng(seed)
    n_measure = 2 + seed % 2
    lines = [("SA",), ("AB",), ("SA",) if seed % 4 == 1 else ("SA", "AB")][:n_measure]
    measures = tuple(
        make_measure(
            f"M{i}",
            of,
            capital_cost=float(rng.uniform(500, 6000)),
            failures_avoided_frac=float(rng.choice([0.4, 0.7, 1.0])),
        )
        for i, of in enumerate(lines)
    )
    return small_study(
        real_discount_rate_frac=0.05,
        windows=(
            make_window(
                n_period=3,
                occurrences_per_year=1.0 + seed % 3,
                counts_for_demand=False,
            ),
        ),
        outage_classes=(
            make_outage_class(
                "overhead",
                8760.0 * float(rng.uniform(0.05, 0.3)),
                repair_h=1.0 + seed % 2,
                repair_cost_per_failure=50.0,
            ),
        ),
        storage=(
            make_storage(
                "B", "B", capital_cost_per_kw=50.0, capital_cost_per_kwh=float(rng.uniform(10, 200))
            ),
        ),
        measures=measures,
    )


def cost_of_subset(study: Study, subset: tuple[bool, ...]) -> float:
    """Best cost with these measures and no others, failures thinned, no measure in the model."""
    feeder = build_feeder(study)
    windows = []
    for window in build_window_models(study, feeder):
        avoided = [
            max([share for i, share in scenario.hardening if subset[i]], default=0.0)
            for scenario in window.scenarios
        ]
        plain = tuple(replace(scenario, hardening=()) for scenario in window.scenarios)
        windows.append(replace(window, scenarios=plain, clock=window.clock.thinned(avoided)))
    solution = solve_tree(
        build_whole_tree(replace(study, measures=()), feeder, windows), reads_segments=False
    )
    assert solution.termination is TreeTermination.OPTIMAL
    yearly = sum(
        m.capital_cost * capital_recovery_factor(0.05, m.life_years)
        for m, is_bought in zip(study.measures, subset, strict=True)
        if is_bought
    )
    return solution.objective + yearly


def allowed_subsets(study: Study) -> list[tuple[bool, ...]]:
    """All subsets of measures without two on one line."""
    subsets = []
    for subset in product([False, True], repeat=len(study.measures)):
        chosen = [m for m, is_bought in zip(study.measures, subset, strict=True) if is_bought]
        lines = [line for measure in chosen for line in measure.lines]
        if len(lines) == len(set(lines)):
            subsets.append(subset)
    return subsets


@pytest.mark.parametrize("seed", range(12))
def test_hardening_is_the_best_subset_with_thinned_failures(seed):
    study = hardening_study(seed)
    cost = {subset: cost_of_subset(study, subset) for subset in allowed_subsets(study)}
    solution = solve(study)
    assert solution.objective == pytest.approx(min(cost.values()), rel=1e-7)
    assert solution.purchases is not None
    chosen = tuple(bool(is_bought) for is_bought in solution.purchases.is_hardened)
    assert cost[chosen] == pytest.approx(solution.objective, rel=1e-7)


def test_the_random_hardening_studies_choose_different_subsets():
    """Otherwise the test above would show little."""
    chosen = set()
    for seed in range(12):
        study = hardening_study(seed)
        chosen.add(min(allowed_subsets(study), key=lambda subset: cost_of_subset(study, subset)))
    assert len(chosen) >= 3
