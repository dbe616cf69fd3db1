"""Node counts against a plain enumeration, and hardening shares."""

from itertools import pairwise

import pytest

from tests.builders import (
    change_study,
    make_measure,
    make_outage_class,
    make_profiles,
    make_window,
    random_study,
    small_study,
)
from xlplan.model.tree_size import TreeSize, count_nodes, hardening_slices, judge_size
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import WindowModel, build_window_models


def windows_of(study) -> tuple[WindowModel, ...]:
    return build_window_models(study, build_feeder(study))


def walk(window: WindowModel, start: int) -> list[int]:
    """Lengths of all nodes from a plan on, by walking every branch with no memory."""
    n_period = window.series.n_period
    lengths = [n_period - start]
    for k in range(start, n_period):
        if window.clock.failure_chance[k] == 0:
            continue
        for i_scenario, scenario in enumerate(window.scenarios):
            if window.clock.scenario_chance[k, i_scenario] == 0:
                continue
            bounds = [0.0, *sorted({share for _, share in scenario.hardening}), 1.0]
            for low, high in pairwise(bounds):
                if high - low < 1e-9:
                    continue
                lengths.append(scenario.n_period)
                after = k + 1 + scenario.n_period
                if after < n_period:
                    lengths += walk(window, after)
                is_avoidable = any(share >= high for _, share in scenario.hardening)
                if is_avoidable and k + 1 < n_period:
                    lengths += walk(window, k + 1)
    return lengths


@pytest.mark.parametrize("seed", range(12))
def test_count_is_that_of_walking_the_tree(seed):
    windows = windows_of(random_study(seed))
    lengths = [length for window in windows for length in walk(window, 0)]
    assert count_nodes(windows) == TreeSize(len(lengths), sum(lengths))


def test_one_line_two_periods_by_hand():
    # One scenario of 2 h in a window of 2 h: the first plan (2 periods), and a failure in either
    # period (2 periods each) after which the window is over.
    study = small_study(windows=(make_window(n_period=2),))
    study = change_study(study, lines=study.lines[:1], buses=study.buses[:2], loads=study.loads[:1])
    assert count_nodes(windows_of(study)) == TreeSize(3, 6)


def test_a_plan_follows_where_the_repair_ends_inside_the_window():
    # Repair 1 h, 3 periods, one scenario. Plans: f(u) = 1 + sum_{k>=u} (1 + f(k + 2)),
    # f(3) = f(4) = 0: f(2) = 2, f(1) = 3, f(0) = 1 + (1 + f(2)) + 1 + 1 = 6 nodes.
    # Periods: g(2) = 1 + 1, g(0) = 3 + (1 + g(2)) + 1 + 1 = 8.
    study = small_study(
        windows=(make_window(n_period=3),),
        outage_classes=(make_outage_class("overhead", 1.0, repair_h=1.0),),
    )
    study = change_study(study, lines=study.lines[:1], buses=study.buses[:2], loads=study.loads[:1])
    assert count_nodes(windows_of(study)) == TreeSize(6, 8)


def test_counting_a_huge_tree_does_not_build_it():
    study = small_study(
        windows=(make_window(n_period=96),),
        outage_classes=(make_outage_class("overhead", 1.0, repair_h=1.0),),
    )
    study = change_study(
        study,
        profiles=make_profiles(96),
    )
    # Every second period or more between failures: far more than 10^15 paths.
    assert count_nodes(windows_of(study)).n_node > 10**15


def slices_of(*shares: float) -> list[tuple[float, tuple[int, ...]]]:
    """Slices of a line under measures with these shares, in the order of rows."""
    measures = tuple(
        make_measure(f"M{i}", ("SA",), failures_avoided_frac=share)
        for i, share in enumerate(shares)
    )
    scenarios = windows_of(small_study(measures=measures))[0].scenarios
    hardened = next(scenario for scenario in scenarios if scenario.hardening)
    return [(part.share, part.avoided_by) for part in hardening_slices(hardened)]


def test_slices_of_two_exclusive_measures():
    # 0.3 is avoided by either, 0.8 - 0.3 by the second row's measure only, 0.2 always happens.
    assert slices_of(0.8, 0.3) == [
        (pytest.approx(0.2), ()),
        (pytest.approx(0.3), (1, 0)),
        (pytest.approx(0.5), (0,)),
    ]


def test_a_measure_that_avoids_everything_leaves_no_other_slice():
    assert slices_of(1.0) == [(pytest.approx(1.0), (0,))]


def test_equal_measures_share_one_slice():
    assert slices_of(0.5, 0.5) == [(pytest.approx(0.5), ()), (pytest.approx(0.5), (0, 1))]


def test_a_large_tree_is_refused_with_its_size():
    study = small_study(
        windows=(make_window(n_period=96),),
        outage_classes=(make_outage_class("overhead", 1.0, repair_h=1.0),),
        profiles=make_profiles(96),
    )
    fit = judge_size(study, windows_of(study))
    assert not fit.fits
    assert "too large" in fit.reason
    assert "10^" in fit.reason


def test_columns_are_never_undercounted():
    for seed in (0, 6, 10):
        study = random_study(seed)
        feeder = build_feeder(study)
        windows = build_window_models(study, feeder)
        fit = judge_size(study, windows)
        assert fit.fits
        tree = build_whole_tree(study, feeder, windows)
        in_periods = [v for v in tree.problem.variables() if "_n" in v.name and "k" in v.name]
        kinds = ("missing", "largest", "theta")
        n_column = sum(not v.name.startswith(kinds) for v in in_periods)
        assert 0 < n_column <= fit.n_column
