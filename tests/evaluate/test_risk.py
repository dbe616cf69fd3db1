"""Spread of single events, worst scenarios and chosen events, worked out by hand.

``small_study``: SA fails and 200 kW are dark for two hours, AB fails and 100 kW are.
"""

from __future__ import annotations

import numpy as np
import pytest

from tests.builders import make_line, make_outage_class, small_study
from xlplan.compare.drawing import draw_feeder
from xlplan.compare.plan_solver import PlanSolver, SolvedPlan, SolveOptions, Wish
from xlplan.evaluate.operation import chosen_events
from xlplan.evaluate.risk import _spread
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import WindowModel, build_window_models
from xlplan.study.study import Device, Study


def solved(study: Study, method: str = "decomposed") -> tuple[SolvedPlan, tuple[WindowModel, ...]]:
    """The feeder as it is."""
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    options = SolveOptions(method=method, gap_target_frac=1e-6)
    with PlanSolver(study, feeder, windows, options) as one:
        return one.solve_wish(Wish("as it is", fixed=one.nothing_bought())), windows


def test_spread_of_equal_weights():
    spread = _spread(np.array([3.0, 1.0, 4.0, 2.0]), np.full(4, 0.25))
    assert spread.mean == 2.5
    assert dict(spread.percentiles)[50.0] == 2.0
    assert dict(spread.percentiles)[75.0] == 3.0
    assert spread.largest == spread.cvar95 == 4.0
    assert sum(weight for _, _, weight in spread.bins) == pytest.approx(1.0)


def test_tail_holds_exactly_five_percent():
    """2 % of 100 and 3 % of 10 make up the worst 5 %: (2 * 100 + 3 * 10) / 5 = 46."""
    spread = _spread(np.array([1.0, 10.0, 100.0]), np.array([9.4, 0.4, 0.2]))
    assert spread.cvar95 == pytest.approx(46.0)
    assert spread.mean == pytest.approx(0.94 + 0.4 + 2.0)
    assert dict(spread.percentiles)[90.0] == 1.0
    assert dict(spread.percentiles)[95.0] == 10.0


def test_an_event_that_never_happens_counts_for_nothing():
    spread = _spread(np.array([1.0, 1e9]), np.array([2.0, 0.0]))
    assert spread.largest == spread.mean == 1.0
    assert spread.bins == ((1.0, 1.0, 2.0),)


@pytest.mark.parametrize("method", ["decomposed", "tree"])
def test_events_of_the_small_study(method):
    plan, _ = solved(small_study(), method)
    eens, cost = plan.result.risk.event_eens, plan.result.risk.event_cost
    assert eens is not None
    assert cost is not None
    # Both lines fail as often: half the events leave 400 kWh, half 200; each kWh costs 2.
    assert (eens.mean, eens.largest, eens.cvar95) == pytest.approx((300.0, 400.0, 400.0))
    assert (cost.mean, cost.largest) == pytest.approx((600.0, 800.0))
    worst = plan.result.worst_events
    assert [one.causes for one in worst] == ["SA", "AB"]
    assert [one.eens_kwh for one in worst] == pytest.approx([400.0, 200.0])
    assert worst[0].lost == "LA 200.0 kWh; LB 200.0 kWh"
    assert worst[1].lost == "LB 200.0 kWh"
    assert worst[0].hours == 2.0
    assert sum(one.per_year for one in worst) == pytest.approx(
        sum(one.events_per_year for one in plan.result.causes)
    )


def three_lines() -> Study:
    """SA is worst; AB fails most often; CD, at the end, takes longest."""
    return small_study(
        buses=tuple(small_study().buses),
        lines=(
            make_line("SA", "S", "A", outage_class="worst"),
            make_line("AB", "A", "B", outage_class="often", from_device=Device.FUSE),
        ),
        outage_classes=(
            make_outage_class("worst", 1.0),
            make_outage_class("often", 9.0, repair_h=1.0),
        ),
    )


def test_chosen_events_and_their_names():
    """SA is both the worst and the longest of the two; AB is the most frequent."""
    plan, windows = solved(three_lines())
    chosen = chosen_events(plan.follow)
    names = {windows[i].scenarios[w].causes[0].ident: words for (i, w, _), words in chosen.items()}
    assert names == {"SA": ["worst", "longest"], "AB": ["most frequent"]}
    titles = [trace.title for trace in plan.result.traces]
    assert titles[0].startswith("Normal service")
    assert titles[1].startswith("Worst and longest outage event")
    assert titles[2].startswith("Most frequent outage event")
    unserved = [float(trace.unserved_kw.sum()) for trace in plan.result.traces]
    assert unserved == pytest.approx([0.0, 400.0, 100.0])


@pytest.mark.parametrize("method", ["decomposed", "tree"])
def test_drawing_says_who_is_dead(method):
    """SA out: A and B are dead, S lives; AB out: B alone is dead."""
    study = three_lines()
    plan, windows = solved(study, method)
    drawing = draw_feeder(study, build_feeder(study), windows, plan.result)
    assert drawing.is_computed
    assert len(drawing.stages) == 3
    states = {bus.bus: bus.states for bus in drawing.buses}
    assert states["S"] == ("live", "live", "live")
    assert states["A"] == ("live", "dead", "live")
    assert states["B"][0] == "live"
    assert states["B"][2] == "dead"
    assert states["B"][1] in ("dead", "island")
    places = [(bus.x, bus.y) for bus in drawing.buses]
    assert places == [(0.0, 0.0), (1.0, 0.0), (2.0, 0.0)]
