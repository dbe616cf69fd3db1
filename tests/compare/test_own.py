"""The user's own alternatives: against single runs by the whole tree, and by hand."""

from __future__ import annotations

import pytest

from tests.compare.pack_study import alternative, by_tree, own_rows, pack_study, solver
from xlplan.base.codes import Code
from xlplan.base.errors import Level, NoPlanError
from xlplan.base.names import EXISTING, IGNORING_OUTAGES
from xlplan.compare.own import given_purchases, solve_own
from xlplan.compare.plan_solver import PlanSolver, SolvedPlan, Wish
from xlplan.compare.standing import against
from xlplan.study.alternatives import with_devices
from xlplan.study.study import Device, DeviceChange, Study

CLOSE = 1e-4


@pytest.fixture(scope="module")
def study() -> Study:
    return pack_study(**own_rows())


@pytest.fixture(scope="module")
def plans(study: Study) -> dict[str, SolvedPlan]:
    with solver(study) as one:
        standing = one.solve()
        own = solve_own(one)
    assert own.findings == ()
    existing = standing[0]
    return {p.result.name: against(p, existing) for p in (*standing, *own.plans)}


def test_all_are_there_in_the_order_of_the_sheet(study, plans):
    assert list(plans)[3:] == [one.alternative for one in study.alternatives]


def test_own_budget(study, plans):
    """The same question as one run by another method, without the cuts of the others."""
    plan = plans["Small money"].result
    assert plan.capital_cost <= 6000.0 + 0.01
    assert plan.capital_cost > 0.0
    assert plan.costs.total == pytest.approx(by_tree(study, 6000.0), rel=CLOSE)


def test_fixed_purchases(study, plans):
    plan = plans["Battery only"].result
    bought = {p.asset: (p.kw, p.kwh) for p in plan.purchases if p.is_bought}
    assert bought == {"battery": (50.0, 100.0), "trees SA": (0.0, 0.0)}
    # 50 kW at 60, 100 kWh at 40, the site at 2000, the trees at 2500.
    assert plan.capital_cost == pytest.approx(3000.0 + 4000.0 + 2000.0 + 2500.0)
    fixed = given_purchases(study, "Battery only")
    assert plan.costs.total == pytest.approx(by_tree(study, fixed=fixed), rel=CLOSE)


def test_existing_and_ignoring_outages(plans):
    for name, standing in (("Leave it", EXISTING), ("Fair weather", IGNORING_OUTAGES)):
        own, known = plans[name].result, plans[standing].result
        assert own.costs.total == pytest.approx(known.costs.total, rel=1e-9)
        assert own.difference == pytest.approx(known.difference, abs=1e-6)
        assert own.indices == known.indices


def test_other_devices_by_hand(plans):
    """Without the fuse a fault on AB leaves A dead as well.

    Both lines fail as often and as long; SA leaves 200 kW unserved, AB 100 kW with the fuse and 200
    without: 400 against 300 of every 300. The change costs 4000 over 25 years at 5 %.
    """
    before, after = plans[EXISTING].result, plans["No fuse"].result
    assert after.indices.eens_kwh == pytest.approx(before.indices.eens_kwh * 4.0 / 3.0)
    assert after.costs.investment == pytest.approx(4000.0 * 0.05 / (1.0 - 1.05**-25))
    assert after.capital_cost == pytest.approx(4000.0)
    (device,) = [p for p in after.purchases if p.is_bought]
    assert (device.kind, device.place) == ("device", "AB")
    assert after.difference == pytest.approx(after.costs.total - before.costs.total)
    # The bound speaks of the same cost: that of the change is in it.
    assert after.lower_bound == pytest.approx(after.costs.total, rel=CLOSE)


def test_switching_time_of_one_line():
    """The line gets an outage class of its own; the other line keeps the old one."""
    study = pack_study()
    change = DeviceChange("x", "AB", None, Device.SWITCH, 0.25, 0.0, 25.0)
    changed = with_devices(study, (change,))
    line = next(one for one in changed.lines if one.line == "AB")
    classes = {one.outage_class: one for one in changed.outage_classes}
    assert line.to_device is Device.SWITCH
    assert line.from_device is study.lines[1].from_device
    assert classes[line.outage_class].switching_h == 0.25
    assert classes[changed.lines[0].outage_class] == study.outage_classes[0]
    assert study.lines[1].to_device is Device.NONE


def test_devices_take_their_part_of_the_budget():
    rows = {
        "alternatives": (alternative("Fuse and more", capital_budget=5000.0),),
        "device_changes": (
            DeviceChange("Fuse and more", "AB", Device.RECLOSER, None, None, 2000.0, 25.0),
        ),
    }
    study = pack_study(**rows)
    with solver(study) as one:
        (plan,) = solve_own(one).plans
    assert 2000.0 < plan.result.capital_cost <= 5000.0 + 0.01
    line = next(c for c in plan.result.checks if c.name == "Within the budget")
    assert line.passes
    # A recloser in place of the fuse changes nothing but the money left for the rest.
    rest = by_tree(pack_study(), 3000.0)
    own = 2000.0 * 0.05 / (1.0 - 1.05**-25)
    assert plan.result.costs.total == pytest.approx(rest + own, rel=CLOSE)


def test_devices_above_the_budget_are_said():
    rows = {
        "alternatives": (alternative("Dear", capital_budget=100.0),),
        "device_changes": (DeviceChange("Dear", "AB", Device.RECLOSER, None, None, 2000.0, 25.0),),
    }
    with solver(pack_study(**rows)) as one:
        own = solve_own(one)
    assert [f.code for f in own.findings] == [Code.OVER_BUDGET]
    assert own.plans[0].result.capital_cost == pytest.approx(2000.0)
    line = next(c for c in own.plans[0].result.checks if c.name == "Within the budget")
    assert not line.passes


@pytest.mark.parametrize("error", [NoPlanError("no time"), ZeroDivisionError("a fault of ours")])
def test_one_failure_loses_no_other(study, monkeypatch, error):
    solve = PlanSolver.solve_wish

    def fails(self: PlanSolver, wish: Wish) -> SolvedPlan:
        if wish.name == "Battery only":
            raise error
        return solve(self, wish)

    monkeypatch.setattr(PlanSolver, "solve_wish", fails)
    with solver(study) as one:
        own = solve_own(one)
    names = [plan.result.name for plan in own.plans]
    assert names == ["Small money", "Leave it", "Fair weather", "No fuse"]
    (finding,) = own.findings
    assert finding.level is Level.WARNING
    assert finding.value == "Battery only"


def test_a_stopped_run_says_what_was_not_begun(study):
    with solver(study, should_stop=lambda: True) as one:
        own = solve_own(one)
    assert own.plans == ()
    assert [f.value for f in own.findings] == [a.alternative for a in study.alternatives]
