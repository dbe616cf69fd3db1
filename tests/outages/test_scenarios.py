"""What fails and how often: rates, times, merging, hardening, start failures."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.builders import (
    change_study,
    make_generator,
    make_line,
    make_measure,
    make_outage_class,
    make_profiles,
    make_storage,
    make_supply,
    make_window,
)
from tests.outages.hand_feeders import dead_buses, scenarios_of, study_of, tie, town
from xlplan.base.units import HOURS_PER_YEAR
from xlplan.network.feeder import build_feeder
from xlplan.outages.rates import rate_divisors
from xlplan.outages.scenarios import build_scenarios
from xlplan.study.study import Device, RateBasis, RepairSpread, Study
from xlplan.study.windows import build_window_series


def by_name(study: Study) -> dict:
    """Scenarios of the first window by name."""
    return {scenario.name: scenario for scenario in scenarios_of(study)}


def mean_rates(study: Study) -> dict[str, float]:
    """Mean rate of each scenario."""
    return {name: float(s.rate_per_year.mean()) for name, s in by_name(study).items()}


def test_one_scenario_per_section_with_readable_names():
    assert mean_rates(town()) == {
        "Section of bus A: overhead fault, 2 h": 1.0,
        "Section of bus B: overhead fault, 2 h": 1.0,
        "Section of bus C: overhead fault, 2 h": 1.0,
        "Section of bus D: overhead fault, 2 h": 1.0,
    }


def test_rate_of_a_line_is_fixed_plus_by_length():
    study = study_of(
        [make_line("L", "S", "A", length=2.5)],
        outage_classes=(make_outage_class("overhead", 0.3, failures_per_length_year=0.2),),
    )
    assert list(mean_rates(study).values()) == pytest.approx([0.8])


def test_what_does_not_fail():
    spare = make_outage_class("spare", 9.0, is_included=False)
    never = make_outage_class("never", 0.0)
    study = study_of(
        [
            make_line("L1", "S", "A"),
            make_line("L2", "S", "B", outage_class=None),
            make_line("L3", "S", "C", outage_class="spare"),
            make_line("L4", "S", "D", outage_class="never"),
            tie("T", "A", "B"),
        ],
        outage_classes=(make_outage_class("overhead", 1.0), spare, never),
        generators=(make_generator("G1", "A", outage_class="overhead"),),  # a candidate only
        bulk_supply_outage_class="spare",
    )
    assert list(mean_rates(study)) == ["Section of bus A: overhead fault, 2 h"]


def test_existing_units_and_the_bulk_supply_fail():
    study = town(
        outage_classes=(
            make_outage_class("unit", 3.0, repair_h=30.0, switching_h=1.0),
            make_outage_class("bulk", 0.5, switching_h=1.0),
        ),
        generators=(make_generator("G1", "A", existing_kw=10.0, outage_class="unit"),),
        storage=(make_storage("E1", "B", existing_kw=5.0, existing_kwh=9.0, outage_class="unit"),),
        bulk_supply_outage_class="bulk",
    )
    scenarios = by_name(study)
    assert {name: s.rate_per_year[0] for name, s in scenarios.items()} == {
        "Generator G1: unit failure, 30 h": 3.0,
        "Storage E1: unit failure, 30 h": 3.0,
        "Bulk supply: bulk failure, 2 h": 0.5,
    }
    unit, store, bulk = scenarios.values()
    assert (unit.n_isolation, unit.n_period, len(unit.service)) == (0, 30, 30)
    assert not any(period.generator_live[0] for period in unit.service)
    assert all(period.bus_live.all() and period.storage_live[0] for period in unit.service)
    assert not any(period.storage_live[0] for period in store.service)
    assert (bulk.n_isolation, bulk.n_period, bulk.section) == (1, 2, "")
    assert [s.is_bulk_supply for s in scenarios.values()] == [False, False, True]
    assert [c.kind for s in scenarios.values() for c in s.causes] == [
        "generator",
        "storage",
        "bulk supply",
    ]


@pytest.mark.parametrize(
    ("repair_h", "switching_h", "period_h", "n_isolation", "n_period"),
    [
        (4.0, 0.5, 0.5, 1, 8),
        (4.1, 0.6, 0.5, 2, 9),
        (0.2, 1.5, 0.5, 3, 3),  # no shorter than the isolation
        (0.0, 0.0, 0.5, 0, 1),  # at least one period
        (1.0, 0.0, 5.0 / 60.0, 0, 12),  # 1 / (5/60) may round up: still 12
    ],
)
def test_times_in_periods(repair_h, switching_h, period_h, n_isolation, n_period):
    outage_class = make_outage_class("overhead", 1.0, repair_h=repair_h, switching_h=switching_h)
    study = town(outage_classes=(outage_class,), period_h=period_h)
    scenario = scenarios_of(study)[0]
    assert (scenario.n_isolation, scenario.n_period) == (n_isolation, n_period)
    assert sum(stage.n_period for stage in scenario.stages) == len(scenario.service) == n_period


def test_faults_of_one_section_are_merged_with_the_sum_of_their_rates():
    # L2 and L3 hang bare from A: one section with L1. L4 has its own fuse.
    lines = [
        make_line("L1", "S", "A", length=1.0),
        make_line("L2", "A", "B", length=2.0, from_device=Device.NONE),
        make_line("L3", "A", "C", length=4.0, from_device=Device.NONE, outage_class="cable"),
        make_line("L4", "A", "D", length=8.0, from_device=Device.FUSE),
    ]
    classes = (
        make_outage_class(
            "overhead", 0.0, failures_per_length_year=0.1, repair_cost_per_failure=100.0
        ),
        make_outage_class(
            "cable", 0.0, failures_per_length_year=0.1, repair_cost_per_failure=800.0
        ),
    )
    merged, alone = scenarios_of(study_of(lines, outage_classes=classes))
    assert merged.name == "Section of bus A: overhead or cable fault, 2 h"
    assert merged.rate_per_year == pytest.approx(np.full(4, 0.7))
    assert [cause.ident for cause in merged.causes] == ["L1", "L2", "L3"]
    # Repair cost: (0.1 + 0.2) of overhead at 100 and 0.4 of cable at 800, over 0.7.
    assert merged.repair_cost == pytest.approx(np.full(4, (0.3 * 100 + 0.4 * 800) / 0.7))
    assert alone.rate_per_year == pytest.approx(np.full(4, 0.8))
    assert alone.repair_cost == pytest.approx(np.full(4, 100.0))


def test_repair_cost_follows_the_shares_by_period():
    # Exposed overhead: rate 1 times shape (0, 2, 0, 2); cable: rate 1 in every period.
    lines = [
        make_line("L1", "S", "A"),
        make_line("L2", "A", "B", from_device=Device.NONE, outage_class="cable"),
    ]
    study = study_of(
        lines,
        outage_classes=(
            make_outage_class(
                "overhead", 1.0, is_weather_exposed=True, repair_cost_per_failure=300.0
            ),
            make_outage_class("cable", 1.0, repair_cost_per_failure=900.0),
        ),
        profiles=make_profiles(4, storm=[0.0, 5.0, 0.0, 5.0]),
        windows=(make_window(failure_profile="storm"),),
    )
    (scenario,) = scenarios_of(study)
    assert scenario.rate_per_year == pytest.approx([1.0, 3.0, 1.0, 3.0])
    assert scenario.repair_cost == pytest.approx([900.0, 500.0, 900.0, 500.0])


def test_different_times_are_not_merged():
    lines = [
        make_line("L1", "S", "A"),
        make_line("L2", "A", "B", from_device=Device.NONE, outage_class="cable"),
    ]
    for changes, n_scenario in (
        ({"repair_h": 8.0}, 2),
        ({"switching_h": 0.5}, 2),
        ({}, 1),
        ({"repair_h": 1.6}, 1),
    ):  # 2 periods of an hour like 2 h
        classes = (make_outage_class("overhead", 1.0), make_outage_class("cable", 1.0, **changes))
        assert len(scenarios_of(study_of(lines, outage_classes=classes))) == n_scenario


def test_weather_multiplies_rates_and_repairs_of_exposed_classes_alone():
    study = town(
        outage_classes=(
            make_outage_class("overhead", 2.0, is_weather_exposed=True, repair_h=2.0),
            make_outage_class("bulk", 1.0, repair_h=2.0),
        ),
        bulk_supply_outage_class="bulk",
        profiles=make_profiles(4, wind=[0.0, 1.0, 1.0, 6.0]),
        windows=(
            make_window(failure_multiplier=10.0, repair_multiplier=1.5, failure_profile="wind"),
        ),
    )
    scenarios = by_name(study)
    storm = scenarios["Section of bus D: overhead fault, 3 h"]
    # The shape is the profile over its mean 2: 2 * 10 * (0, 0.5, 0.5, 3).
    assert storm.rate_per_year == pytest.approx([0.0, 10.0, 10.0, 60.0])
    assert storm.n_period == 3
    bulk = scenarios["Bulk supply: bulk failure, 2 h"]
    assert bulk.rate_per_year == pytest.approx(np.ones(4))
    assert bulk.n_period == 2


def _year(basis: RateBasis) -> Study:
    """A calm window and a storm that together are not a whole year."""
    return town(
        outage_classes=(
            make_outage_class("overhead", 2.0, is_weather_exposed=True),
            make_outage_class("bulk", 0.5),
        ),
        bulk_supply_outage_class="bulk",
        rate_basis=basis,
        profiles=make_profiles(10, wind=[1, 1, 1, 1, 1, 2, 3, 4, 5, 6]),
        windows=(
            make_window("calm", 4, occurrences_per_year=1500.0, failure_multiplier=0.5),
            make_window(
                "storm",
                6,
                occurrences_per_year=20.0,
                start_row=4,
                failure_multiplier=30.0,
                failure_profile="wind",
            ),
        ),
    )


def test_divisors_by_hand():
    # Exposed: (1500 * 4 * 0.5 + 20 * 6 * 30) / 8760; sheltered: (1500 * 4 + 20 * 6) / 8760.
    assert rate_divisors(_year(RateBasis.ALL_YEAR)) == pytest.approx(
        {"overhead": 6600 / HOURS_PER_YEAR, "bulk": 6120 / HOURS_PER_YEAR}
    )
    assert rate_divisors(_year(RateBasis.FAIR_WEATHER)) == {"overhead": 1.0, "bulk": 1.0}


def test_all_year_rates_add_up_to_the_typed_ones():
    study = _year(RateBasis.ALL_YEAR)
    feeder = build_feeder(study)
    failures = {"line": 0.0, "bulk supply": 0.0}
    for window in study.windows:
        series = build_window_series(study, window)
        for scenario in build_scenarios(study, feeder, series):
            per_window = scenario.rate_per_year.sum() * series.period_h / HOURS_PER_YEAR
            failures[scenario.causes[0].kind] += window.occurrences_per_year * per_window
    assert failures == pytest.approx({"line": 4 * 2.0, "bulk supply": 0.5})


def test_a_class_that_cannot_strike_in_a_window_has_no_scenario_there():
    study = town(
        outage_classes=(make_outage_class("overhead", 2.0, is_weather_exposed=True),),
        windows=(make_window(failure_multiplier=0.0),),
        rate_basis=RateBasis.ALL_YEAR,
    )
    assert scenarios_of(study) == ()


def test_three_point_repair():
    outage_class = make_outage_class("overhead", 10.0, repair_h=4.0, switching_h=1.0)
    study = town(outage_classes=(outage_class,), repair_spread=RepairSpread.THREE_POINT)
    rates = {s.n_period: float(s.rate_per_year[0]) for s in scenarios_of(study)[:3]}
    assert rates == pytest.approx({2: 4.0, 4: 4.0, 8: 2.0})


def test_points_of_the_repair_spread_that_round_to_one_time_are_merged():
    outage_class = make_outage_class("overhead", 10.0, repair_h=1.0)
    study = town(outage_classes=(outage_class,), repair_spread=RepairSpread.THREE_POINT)
    scenarios = [s for s in scenarios_of(study) if s.section == "Section of bus D"]
    assert [(s.n_period, float(s.rate_per_year[0])) for s in scenarios] == [(1, 8.0), (2, 2.0)]
    assert scenarios[0].repair_h == pytest.approx(0.75)  # half of the failures each: 0.5 h and 1 h
    assert [cause.ident for cause in scenarios[0].causes] == ["F1"]


def test_hardening_keeps_lines_apart_and_ascends_by_share():
    lines = [make_line("L1", "S", "A")] + [
        make_line(f"L{i}", "A", f"B{i}", from_device=Device.NONE) for i in (2, 3, 4)
    ]
    measures = (
        make_measure("cable", ("L2", "L3"), failures_avoided_frac=0.9),
        make_measure("trim", ("L2", "L3", "L4"), failures_avoided_frac=0.3),
        make_measure("paint", ("L1",), failures_avoided_frac=0.0),
    )
    scenarios = scenarios_of(study_of(lines, measures=measures))
    assert [([c.ident for c in s.causes], s.hardening) for s in scenarios] == [
        (["L1"], ()),  # a measure that avoids nothing does not split
        (["L2", "L3"], ((1, 0.3), (0, 0.9))),
        (["L4"], ((1, 0.3),)),
    ]
    assert len({s.name for s in scenarios}) == 3


def test_a_generator_that_fails_to_start_has_its_own_copy():
    # In the island of C after a fault on M2 the diesel has to start; after others it has not.
    study = town(generators=(make_generator("G", "C", start_failure_frac=0.1),))
    rates = mean_rates(study)
    assert rates["Section of bus B: overhead fault, 2 h"] == pytest.approx(0.9)
    assert rates["Section of bus B: overhead fault, 2 h, G does not start"] == pytest.approx(0.1)
    assert rates["Section of bus D: overhead fault, 2 h"] == pytest.approx(1.0)
    # M1 also leaves it in an island; M3 leaves it dead.
    assert sorted(name for name in rates if "start" in name) == [
        "Section of bus A: overhead fault, 2 h, G does not start",
        "Section of bus B: overhead fault, 2 h, G does not start",
    ]
    feeder = build_feeder(study)
    failed = by_name(study)["Section of bus B: overhead fault, 2 h, G does not start"]
    assert not any(period.generator_live[0] for period in failed.service)
    started = by_name(study)["Section of bus B: overhead fault, 2 h"]
    assert failed.what_fails == f"{started.what_fails}, G does not start"
    assert not any(period.bus_live[feeder.bus_ids.index("C")] for period in failed.service)
    assert dead_buses(feeder, failed.stages[0]) == "B"  # dead by the fault itself: B alone


def test_an_outage_only_unit_has_to_start_wherever_it_is_live():
    study = town(
        generators=(make_generator("G", "A", start_failure_frac=0.2, is_outage_only=True),)
    )
    copies = [name for name in mean_rates(study) if name.endswith("does not start")]
    # Dead only where its own section is (fault on M1).
    assert [name[len("Section of bus ")] for name in copies] == ["B", "C", "D"]


def test_at_most_one_unit_fails_to_start():
    units = (
        make_generator("G1", "C", start_failure_frac=0.1),
        make_generator("G2", "C", start_failure_frac=0.3),
        make_generator("G3", "C", start_failure_frac=0.5, is_grid_forming=False, max_new_kw=0.0),
    )
    study = town(generators=units)
    rates = {name: rate for name, rate in mean_rates(study).items() if "bus B" in name}
    assert rates == pytest.approx(
        {
            "Section of bus B: overhead fault, 2 h": 0.6,
            "Section of bus B: overhead fault, 2 h, G1 does not start": 0.1,
            "Section of bus B: overhead fault, 2 h, G2 does not start": 0.3,
        }
    )


def test_rates_of_all_scenarios_sum_to_those_of_the_components():
    study = town(
        tie("T", "C", "D"),
        supplies=(make_supply("N", "C"),),
        generators=(
            make_generator(
                "G",
                "C",
                start_failure_frac=0.1,
                is_outage_only=True,
                existing_kw=5.0,
                outage_class="unit",
            ),
        ),
        measures=(make_measure("m", ("M1", "M2")),),
        outage_classes=(
            make_outage_class("overhead", 1.5, switching_h=0.5),
            make_outage_class("unit", 4.0),
            make_outage_class("bulk", 0.25),
        ),
        bulk_supply_outage_class="bulk",
        repair_spread=RepairSpread.THREE_POINT,
    )
    scenarios = scenarios_of(study)
    assert sum(s.rate_per_year for s in scenarios) == pytest.approx(np.full(4, 4 * 1.5 + 4 + 0.25))
    by_component: dict[str, float] = {}
    for scenario in scenarios:
        assert sum(c.rate_per_year for c in scenario.causes) == pytest.approx(
            scenario.rate_per_year
        )
        for cause in scenario.causes:
            by_component[cause.ident] = by_component.get(cause.ident, 0.0) + cause.rate_per_year[0]
    assert by_component == pytest.approx(
        {"M1": 1.5, "M2": 1.5, "M3": 1.5, "F1": 1.5, "G": 4.0, "S": 0.25}
    )


def test_merging_is_exact_against_lines_kept_apart():
    """Splitting one line into two of half the length changes no scenario."""
    whole = town()
    half = [replace(whole.lines[0], length=0.5)]
    half.append(make_line("M1b", "S2", "A", length=0.5, from_device=Device.NONE))
    half[0] = replace(half[0], to_bus="S2")
    split = study_of([*half, *whole.lines[1:]])
    classes = (make_outage_class("overhead", 0.0, failures_per_length_year=0.8),)
    one = scenarios_of(change_study(whole, outage_classes=classes))
    two = scenarios_of(change_study(split, outage_classes=classes))
    assert [s.rate_per_year[0] for s in one] == pytest.approx([s.rate_per_year[0] for s in two])
    assert len(two[0].causes) == 2
