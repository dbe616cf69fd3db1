"""Operation checked by AC power flow: by hand on two buses, with limits that only just hold."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.builders import (
    change_study,
    make_bus,
    make_line,
    make_load,
    make_outage_class,
    make_profiles,
    make_storage,
    make_supply,
    make_window,
    random_study,
    small_study,
)
from xlplan.base.names import EXISTING
from xlplan.compare.standing import SolveOptions, StandingAlternatives
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.study.study import Study


def existing_plan(study: Study, method: str = "decomposed"):
    """The existing feeder, run and checked."""
    feeder = build_feeder(study)
    solver = StandingAlternatives(
        study, feeder, build_window_models(study, feeder), SolveOptions(method=method)
    )
    try:
        return solver._optimise(EXISTING).result
    finally:
        solver.close()


def one_load(peak_kw: float, r_ohm: float, x_ohm: float = 0.0, **changes: object) -> Study:
    """S - A over one line at 10 kV, a flat load at A at unity power factor, two hours."""
    line = replace(make_line("SA", "S", "A"), r_ohm=r_ohm, x_ohm=x_ohm)
    plain: dict[str, object] = {
        "buses": (make_bus("S"), make_bus("A")),
        "lines": (line,),
        "loads": (make_load("LA", "A", peak_kw),),
        "profiles": make_profiles(2),
        "windows": (make_window(n_period=2),),
        "substation_limit_kva": 1e6,
    }
    return change_study(small_study(), **{**plain, **changes})


def ac_voltage(kw: float, r_ohm: float) -> float:
    """Voltage behind a resistance at 10 kV: root of ``u^2 + (2 r p - 1) u + (r p)^2 = 0``."""
    rp = r_ohm * kw / 100_000.0
    b = 2.0 * rp - 1.0
    return float(np.sqrt((-b + np.sqrt(b * b - 4.0 * rp * rp)) / 2.0))


@pytest.mark.parametrize("method", ["tree", "decomposed"])
def test_loads_are_checked_without_the_loss_allowance(method):
    """The linear flow carries 4,400 kW, the AC flow the 4,000 kW of customers, and losses."""
    check = existing_plan(one_load(4000.0, 2.0, loss_allowance_frac=0.1), method).ac
    v_ac = ac_voltage(4000.0, 2.0)
    bus = next(b for b in check.buses if b.bus == "A" and not b.is_event)
    assert bus.low_linear_pu == pytest.approx(np.sqrt(1.0 - 2.0 * 2.0 * 4400.0 / 100_000.0))
    assert bus.low_ac_pu == pytest.approx(v_ac, abs=1e-8)
    assert bus.high_ac_pu == pytest.approx(v_ac, abs=1e-8)
    # Losses r i^2 with i = p / v; two hours, a hundred times a year.
    loss_kw = 100_000.0 * 2.0 * (0.04 / v_ac) ** 2
    plan = next(s for s in check.stretches if not s.is_event)
    assert (plan.n_period, plan.n_not_converged, plan.n_topology) == (2, 0, 1)
    assert plan.served_kwh == pytest.approx(8000.0)
    assert plan.loss_kwh == pytest.approx(2.0 * loss_kw, rel=1e-6)
    assert plan.allowance_kwh == pytest.approx(800.0)
    assert plan.highest_loss_frac == pytest.approx(loss_kw / 4000.0, rel=1e-6)
    assert plan.cost_beyond == pytest.approx(0.1 * 2.0 * (loss_kw - 400.0), rel=1e-5)
    year = check.losses_per_year()
    assert year == pytest.approx((200.0 * loss_kw, 80_000.0, 800_000.0, 20 * (loss_kw - 400.0)))
    # The fault on the only line leaves nothing to serve at A; S stays at the source's voltage.
    assert any(s.is_event for s in check.stretches)
    dead = next(b for b in check.buses if b.bus == "A" and b.is_event)
    assert dead.n_period == 0
    assert np.isnan(dead.low_ac_pu)
    assert not dead.breaks_limits


def test_a_voltage_that_only_the_linear_model_keeps():
    """The planner sheds to stay at 0.95 by the linear flow; the AC voltage is lower.

    A limit tighter by the margin that is advised keeps the AC voltage inside the true one.
    """
    study = one_load(4000.0, 2.0, vmin_pu=0.95)
    result = existing_plan(study)
    check = result.ac
    served_kw = (1.0 - 0.95**2) * 100_000.0 / 4.0
    v_ac = ac_voltage(served_kw, 2.0)
    bus = next(b for b in check.buses if b.bus == "A" and not b.is_event)
    assert bus.low_linear_pu == pytest.approx(0.95, abs=1e-7)
    assert bus.low_ac_pu == pytest.approx(v_ac, abs=1e-6)
    assert bus.breaks_limits
    assert not check.holds
    assert [b.bus for b in check.broken_buses(False)] == ["A"]
    margin = check.advice.low_normal_pu
    assert margin == pytest.approx(0.95 - v_ac, abs=1e-6)
    line = next(c for c in result.checks if c.name == "AC voltages in normal service")
    assert not line.passes
    assert line.is_warning
    assert "A, " in line.what
    assert f"{margin:.4f} p.u. below" in line.what
    covered = existing_plan(change_study(study, vmin_pu=0.95 + margin)).ac
    bus = next(b for b in covered.buses if b.bus == "A" and not b.is_event)
    assert bus.low_ac_pu >= 0.95


def test_a_rating_that_only_the_linear_model_keeps():
    """Rated 2,000 kVA, loaded with 2,000 kW: at 0.9 something p.u. the current is above rating.

    A loss allowance as advised brings the AC loading back to the rating or below.
    """
    study = one_load(4000.0, 3.0)
    line = replace(study.lines[0], rating_kva=2000.0)
    result = existing_plan(replace(study, lines=(line,)))
    one = next(x for x in result.ac.loadings if x.kind == "line" and not x.is_event)
    assert one.linear_frac == pytest.approx(1.0, abs=1e-6)
    assert one.ac_frac == pytest.approx(1.0 / ac_voltage(2000.0, 3.0), rel=1e-5)
    assert one.breaks_limits
    check = next(c for c in result.checks if c.name == "AC loadings")
    assert not check.passes
    assert "line SA" in check.what
    needed = result.ac.advice.allowance_frac
    assert needed == pytest.approx(1.0 / ac_voltage(2000.0, 3.0) - 1.0, rel=1e-4)
    covered = change_study(replace(study, lines=(line,)), loss_allowance_frac=needed)
    again = next(x for x in existing_plan(covered).ac.loadings if x.kind == "line")
    assert again.ac_frac <= 1.0 + 1e-6


def test_what_the_feeder_cannot_carry_is_said():
    """Over 1 ohm at 10 kV at most 25 MW arrive; the linear flow carries 26 MW without a word."""
    result = existing_plan(one_load(26_000.0, 1.0, vmin_pu=0.5))
    check = result.ac
    assert check.n_not_converged == 2
    assert not check.holds
    bus = next(b for b in check.buses if b.bus == "A" and not b.is_event)
    assert bus.low_linear_pu == pytest.approx(np.sqrt(1.0 - 0.52))
    assert np.isnan(bus.low_ac_pu)
    assert bus.n_not_converged == 2
    plan = next(s for s in check.stretches if not s.is_event)
    assert plan.n_not_converged == 2
    assert plan.served_kwh == 0.0
    line = next(c for c in result.checks if c.name == "AC power flow converged")
    assert not line.passes
    assert line.left == 2.0


def test_an_island_is_held_by_its_largest_forming_unit():
    """A store at B carries A over a line while the source is cut off; it also gives the losses."""
    line = replace(make_line("SA", "S", "A"), r_ohm=0.5)
    inside = replace(make_line("AB", "A", "B", outage_class=None), r_ohm=4.0, x_ohm=0.0)
    ends = replace(line, to_device=line.from_device)
    study = change_study(
        small_study(),
        lines=(ends, inside),
        loads=(make_load("LA", "A", 1000.0),),
        storage=(
            make_storage(
                "E",
                "B",
                existing_kw=1200.0,
                existing_kwh=20_000.0,
                max_new_kw=0.0,
                max_new_kwh=0.0,
                is_grid_forming=True,
                outage_class=None,
            ),
        ),
        outage_classes=(make_outage_class("overhead", 1.0),),
    )
    check = existing_plan(study).ac
    event = next(s for s in check.stretches if s.is_event)
    assert event.n_not_converged == 0
    assert event.served_kwh == pytest.approx(2 * 1000.0)
    held, fed = (next(b for b in check.buses if b.bus == n and b.is_event) for n in "BA")
    # The root stands at nominal voltage, which the limits of 0.85 to 1.1 leave room for.
    assert held.low_ac_pu == held.high_ac_pu == pytest.approx(1.0)
    assert fed.low_ac_pu == pytest.approx(ac_voltage(1000.0, 4.0), abs=1e-7)
    assert fed.low_linear_pu == pytest.approx(np.sqrt(1.0 - 2 * 4.0 * 1000 / 100_000))
    loss_kw = 100_000.0 * 4.0 * (0.01 / fed.low_ac_pu) ** 2
    unit = next(x for x in check.loadings if x.kind == "forming unit")
    assert unit.asset == "E"
    assert unit.linear_frac == pytest.approx(1000.0 / 1200.0, rel=1e-6)
    assert unit.ac_frac == pytest.approx((1000.0 + loss_kw) / 1200.0, rel=1e-6)


def test_a_closed_neighbour_supply_gives_the_losses():
    """The source is cut off; 500 kW of spare power carry 500 kW of load, but not the losses."""
    line = make_line("SA", "S", "A")
    far = replace(make_line("AB", "A", "B", outage_class=None), r_ohm=4.0, x_ohm=0.0)
    study = change_study(
        small_study(),
        lines=(replace(line, to_device=line.from_device), far),
        loads=(make_load("LA", "A", 500.0),),
        supplies=(make_supply("N", "B", 500.0),),
    )
    result = existing_plan(study)
    one = next(x for x in result.ac.loadings if x.kind == "neighbour supply")
    loss_kw = 100_000.0 * 4.0 * (0.005 / ac_voltage(500.0, 4.0)) ** 2
    assert one.linear_frac == pytest.approx(1.0)
    assert one.ac_frac == pytest.approx((500.0 + loss_kw) / 500.0, rel=1e-6)
    assert one.breaks_limits


@pytest.mark.parametrize("seed", [1, 5, 9, 13])
def test_random_studies_balance(seed):
    """Whatever the study: every stretch is solved, shares are finite, and all buses have a row."""
    study = random_study(seed)
    check = existing_plan(study).ac
    n_bus = len(study.buses)
    assert len([b for b in check.buses if not b.is_event]) == n_bus
    assert check.n_period > 0
    for bus in check.buses:
        if bus.n_period and not bus.n_not_converged:
            assert bus.low_ac_pu <= bus.high_ac_pu + 1e-12
            # Small impedances: linear and AC voltages lie close together, on either side.
            assert abs(bus.low_ac_pu - bus.low_linear_pu) < 0.05
    for one in check.stretches:
        assert one.loss_kwh >= -1e-6


def test_range_a_counts_at_the_service_voltage():
    """ANSI C84.1 Range A: 114 to 126 V up to 600 V, 117 to 126 V above, on a base of 120 V."""
    check = existing_plan(one_load(1700.0, 2.0)).ac
    bus = next(b for b in check.buses if b.bus == "A" and not b.is_event)
    assert bus.low_ac_pu == pytest.approx(ac_voltage(1700.0, 2.0))
    assert 114 / 120 < bus.low_ac_pu < 117 / 120
    assert not bus.is_outside_range_a
    assert bus.is_outside_range_a_above_600_v
    check = existing_plan(one_load(2400.0, 2.0)).ac
    bus = next(b for b in check.buses if b.bus == "A" and not b.is_event)
    assert bus.low_ac_pu == pytest.approx(ac_voltage(2400.0, 2.0))
    assert bus.low_ac_pu < 114 / 120
    assert check.outside_range_a() == (bus,)
