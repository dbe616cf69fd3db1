"""A feasible dispatch made by hand passes; each kind of planted violation is caught.

The feeder is S - A - B with 0.1 + j0.1 ohm a line at 10 kV: one kW over a line lowers the squared
voltage by 2 * 0.1 / (1000 * 10^2) = 2e-6 p.u., one kvar as much.
"""

from __future__ import annotations

import math
from dataclasses import fields, replace

import numpy as np
import pytest

from tests.builders import (
    change_study,
    make_bus,
    make_generator,
    make_load,
    make_storage,
    make_supply,
    small_study,
)
from xlplan.evaluate.audit import audit_dispatch
from xlplan.evaluate.violations import (
    Capacities,
    Violation,
    capacities_in_service,
    start_of_window,
)
from xlplan.model.dispatch import Dispatch, Purchases
from xlplan.network.feeder import build_feeder
from xlplan.outages.records import Island, ServicePeriod
from xlplan.study.study import LoadControl, Study, Technology
from xlplan.study.windows import build_window_series

DROP = 2e-6
SECTIONS = np.array([0, 0, 1])
S, A, B = 0, 1, 2
SA, AB = 0, 1


def study_with_units() -> Study:
    """A generator with ramp and tank and a capacitor at A; storage, solar and a supply at B."""
    return small_study(
        buses=(make_bus("S"), make_bus("A", 20.0), make_bus("B")),
        loads=(make_load("LA", "A"), make_load("LB", "B"), make_load("LC", "B")),
        generators=(
            make_generator(
                "G1",
                "A",
                ramp_frac_per_period=0.3,
                tank_h=2.0,
                refill_frac_per_h=0.05,
                existing_kw=100.0,
                max_new_kw=0.0,
            ),
            make_generator(
                "PV", "B", technology=Technology.SOLAR, is_grid_forming=False, existing_kw=40.0
            ),
        ),
        storage=(make_storage("ES", "B", existing_kw=100.0, existing_kwh=200.0),),
        supplies=(make_supply("N", "B", spare_kw=80.0),),
    )


def normal() -> ServicePeriod:
    return ServicePeriod(
        clock_h=0.0,
        line_live=np.array([True, True]),
        bus_live=np.array([True, True, True]),
        source_live=True,
        supply_closed=np.array([False]),
        generator_live=np.array([True, True]),
        generator_may_run=np.array([True, True]),
        generator_refills=np.array([True, True]),
        storage_live=np.array([True]),
        islands=(),
    )


def island_at_b() -> ServicePeriod:
    """The line AB is out; B is an island that the store forms."""
    return replace(
        normal(),
        line_live=np.array([True, False]),
        generator_refills=np.array([True, False]),
        islands=(Island(buses=(B,), forming_generators=(), forming_storage=(0,)),),
    )


def empty(n: int) -> dict[str, np.ndarray]:
    """All zero, for three buses, two lines, three loads, two generators, one store, one supply."""
    sizes = {"generator": 2, "trip": 2, "fuel": 2, "storage": 1, "energy": 1, "supply": 1}
    sizes |= {"shed": 3, "surplus": 3, "capacitor": 3, "v": 3, "line": 2}
    scalars = {"import_kw", "export_kw", "source_kvar"}
    return {
        item.name: np.zeros(n)
        if item.name in scalars
        else np.zeros((n, sizes[item.name.split("_")[0]]))
        for item in fields(Dispatch)
    }


def normal_dispatch() -> Dispatch:
    """Two hours: 300 kW of load, 20 kW from G1, 9 kW from the store in the first hour."""
    d = empty(2)
    d["generator_kw"][:, 0] = 20.0
    # The tank holds 2 h * 100 kW = 200 kWh; an hour uses 20 and refills 0.05 * 200 = 10 kWh.
    d["fuel_kwh"][:, 0] = [190.0, 180.0]
    d["fuel_kwh"][:, 1] = np.nan
    # 0.9 = sqrt(0.81) each way: 10 kW drawn from the store give 9 kW; 100 kWh fall to 90.
    d["storage_draw_kw"][:, 0], d["storage_kw"][:, 0] = [10.0, 0.0], [9.0, 0.0]
    d["energy_kwh"][:, 0] = [90.0, 90.0]
    # 10 kvar of the capacitor flow back to the source.
    d["capacitor_kvar"][:, A], d["source_kvar"][:] = 10.0, -10.0
    d["import_kw"][:] = [271.0, 280.0]
    d["line_kw"][:, SA], d["line_kvar"][:, SA] = [271.0, 280.0], -10.0
    d["line_kw"][:, AB] = [191.0, 200.0]
    at_a = 1 - DROP * (np.array([271.0, 280.0]) - 10.0)
    d["v_sq_pu"][:, S], d["v_sq_pu"][:, A] = 1.0, at_a
    d["v_sq_pu"][:, B] = at_a - DROP * np.array([191.0, 200.0])
    return Dispatch(**d)


def island_dispatch() -> Dispatch:
    """One hour: A served by the source; at B 45 kW from the store and 30 kW of sun for 75 kW."""
    d = empty(1)
    d["fuel_kwh"][:, 0], d["fuel_kwh"][:, 1] = 200.0, np.nan
    d["import_kw"][:], d["line_kw"][:, SA] = 100.0, 100.0
    d["storage_draw_kw"][:], d["storage_kw"][:], d["energy_kwh"][:] = 50.0, 45.0, 50.0
    d["generator_kw"][:, 1] = 30.0
    # Both loads of the section are shed in the same share, 62.5 %.
    d["shed_kw"][:] = [0.0, 62.5, 62.5]
    d["v_sq_pu"][:] = [1.0, 1.0 - DROP * 100.0, 1.02]
    return Dispatch(**d)


def audit(
    study: Study,
    service: ServicePeriod,
    dispatch: Dispatch,
    is_event: bool = False,
    demand_kw: float | None = None,
    output_before_kw: float = math.nan,
) -> list[Violation]:
    series = build_window_series(study, study.windows[0])
    feeder = build_feeder(study)
    none = Purchases(np.zeros(2), np.zeros(1), np.zeros(1), np.zeros(0, dtype=bool))
    capacities: Capacities = capacities_in_service(study, none)
    before = start_of_window(study, capacities, series.start_soc_frac)
    before = replace(before, output_kw=np.array([output_before_kw, math.nan]))
    periods = [service] * len(dispatch.import_kw)
    return audit_dispatch(
        study,
        feeder,
        SECTIONS,
        series,
        periods,
        dispatch,
        capacities,
        before,
        1,
        is_event,
        demand_kw,
    )


def with_value(dispatch: Dispatch, name: str, position: tuple[int, ...], value: float) -> Dispatch:
    array = getattr(dispatch, name).copy()
    array[position] = value
    return replace(dispatch, **{name: array})


def kinds(violations: list[Violation]) -> set[str]:
    return {violation.what for violation in violations}


def test_feasible_dispatches_pass() -> None:
    study = study_with_units()
    assert audit(study, normal(), normal_dispatch(), demand_kw=280.0) == []
    assert audit(study, island_at_b(), island_dispatch(), is_event=True) == []


def test_violation_says_where_when_and_how_much() -> None:
    dispatch = with_value(normal_dispatch(), "import_kw", (1,), 285.0)
    found = audit(study_with_units(), normal(), dispatch)
    balance = next(v for v in found if v.what == "kW not balanced")
    assert (balance.where, balance.period) == ("part of S", 2)
    assert balance.amount == pytest.approx(5.0)
    assert "kW not balanced by 5" in balance.text()


@pytest.mark.parametrize(
    ("name", "position", "value", "what"),
    [
        ("import_kw", (0,), 272.0, "kW not balanced"),
        ("source_kvar", (0,), 0.0, "kvar not balanced"),
        ("import_kw", (0,), -1.0, "purchase below 0"),
        ("export_kw", (0,), -1.0, "sale below 0"),
        ("export_kw", (0,), 1.0, "sale where none is allowed"),
        ("supply_kw", (0, 0), 1.0, "supply above its spare power"),
        ("supply_kw", (0, 0), -1.0, "supply below 0"),
        ("supply_kvar", (0, 0), 1.0, "kvar of an open supply"),
        ("generator_kw", (0, 0), -1.0, "output below 0"),
        ("generator_kw", (0, 0), 101.0, "output above what is available"),
        ("generator_kw", (0, 1), 41.0, "output above what is available"),
        ("generator_kvar", (0, 0), 99.0, "kVA above the rating"),
        ("generator_kw", (1, 0), 51.0, "rise above the ramp"),
        ("trip_kw", (0, 0), -1.0, "trip below 0"),
        ("fuel_kwh", (0, 0), 191.0, "fuel from nowhere"),
        ("fuel_kwh", (0, 0), 201.0, "fuel above the tank"),
        ("fuel_kwh", (0, 0), -1.0, "fuel below 0"),
        ("storage_draw_kw", (0, 0), 11.0, "energy not balanced"),
        ("energy_kwh", (0, 0), 91.0, "energy not balanced"),
        ("energy_kwh", (1, 0), 201.0, "energy above the rating"),
        ("energy_kwh", (1, 0), 19.0, "energy below the lowest charge"),
        ("storage_kw", (0, 0), 9.1, "power above the loss curve"),
        ("storage_kw", (1, 0), 0.5, "power above the loss curve"),
        ("storage_draw_kw", (0, 0), 112.0, "draw above the curve's end"),
        ("storage_draw_kw", (0, 0), -91.0, "draw below the curve's end"),
        ("storage_kvar", (0, 0), 100.0, "kVA above the rating"),
        ("capacitor_kvar", (0, A), 21.0, "capacitor above its kvar"),
        ("capacitor_kvar", (0, A), -1.0, "capacitor below 0"),
        ("surplus_kw", (0, B), -1.0, "surplus below 0"),
        ("surplus_kw", (0, B), 1.0, "kW not balanced"),
        ("shed_kw", (0, 0), -1.0, "shed below 0"),
        ("shed_kw", (0, 0), 101.0, "shed above the load"),
        ("shed_kw", (0, 1), 10.0, "unequal shares in the section"),
        ("line_kw", (0, AB), 190.0, "kW reported"),
        ("line_kvar", (0, AB), 1.0, "kvar reported"),
        ("v_sq_pu", (0, B), 1.0, "voltage reported"),
        ("v_sq_pu", (0, B), math.nan, "voltage reported"),
    ],
)
def test_planted_violation_in_normal_service(
    name: str, position: tuple[int, ...], value: float, what: str
) -> None:
    dispatch = with_value(normal_dispatch(), name, position, value)
    assert what in kinds(audit(study_with_units(), normal(), dispatch))


def test_fall_beyond_the_ramp() -> None:
    # The ramp is 0.3 * 100 = 30 kW a period: 60 kW before and 20 kW now needs a trip of 10 kW.
    study, dispatch = study_with_units(), normal_dispatch()
    found = audit(study, normal(), dispatch, output_before_kw=60.0)
    assert kinds(found) == {"fall beyond the ramp"}
    assert found[0].amount == pytest.approx(10.0)
    tripped = with_value(dispatch, "trip_kw", (0, 0), 10.0)
    assert audit(study, normal(), tripped, output_before_kw=60.0) == []
    assert audit(study, normal(), dispatch, output_before_kw=50.0) == []


def test_demand_binds_the_purchase() -> None:
    found = audit(study_with_units(), normal(), normal_dispatch(), demand_kw=279.0)
    assert [(v.what, v.period) for v in found] == [("purchase above the demand", 2)]


def test_substation_limit_is_a_circle() -> None:
    # hypot(280, 10) = 280.18 in the second hour, hypot(271, 10) = 271.18 in the first.
    study = change_study(study_with_units(), substation_limit_kva=280.1)
    found = audit(study, normal(), normal_dispatch())
    assert [(v.what, v.period) for v in found] == [("kVA above the substation limit", 2)]


def test_line_rating_is_a_circle() -> None:
    study = study_with_units()
    lines = (replace(study.lines[SA], rating_kva=280.1), study.lines[AB])
    found = audit(replace(study, lines=lines), normal(), normal_dispatch())
    assert [(v.what, v.where, v.period) for v in found] == [("kVA above the rating", "SA", 2)]


def test_voltage_band_of_normal_service_and_of_events() -> None:
    # Lowest: 1 - 2e-6 (280 - 10) - 2e-6 * 200 = 0.99906 squared, that is 0.99953 p.u.
    study = change_study(study_with_units(), vmin_pu=0.9996)
    found = audit(study, normal(), normal_dispatch())
    assert {(v.what, v.where) for v in found} == {("voltage below the band", "B")}
    assert audit(study, normal(), normal_dispatch(), is_event=True) == []
    high = change_study(study_with_units(), vmax_pu=0.9999)
    assert "voltage above the band" in kinds(audit(high, normal(), normal_dispatch()))


def test_boost_lifts_what_lies_beyond() -> None:
    study, dispatch = study_with_units(), normal_dispatch()
    lines = (study.lines[SA], replace(study.lines[AB], boost_frac=0.02))
    boosted = replace(study, lines=lines)
    assert "voltage reported" in kinds(audit(boosted, normal(), dispatch))
    v_sq = dispatch.v_sq_pu.copy()
    v_sq[:, B] = v_sq[:, A] * 1.02**2 - DROP * np.array([191.0, 200.0])
    assert audit(boosted, normal(), replace(dispatch, v_sq_pu=v_sq)) == []


def test_reversed_line_carries_negative_flow() -> None:
    study, dispatch = study_with_units(), normal_dispatch()
    line = study.lines[AB]
    lines = (study.lines[SA], replace(line, from_bus="B", to_bus="A"))
    turned = with_value(dispatch, "line_kw", (0, AB), -191.0)
    turned = with_value(turned, "line_kw", (1, AB), -200.0)
    assert audit(replace(study, lines=lines), normal(), turned) == []
    assert "kW reported" in kinds(audit(replace(study, lines=lines), normal(), dispatch))


def test_bus_control_frees_the_shares() -> None:
    study = study_with_units()
    dispatch = with_value(island_dispatch(), "shed_kw", (0, 1), 100.0)
    dispatch = with_value(dispatch, "shed_kw", (0, 2), 25.0)
    found = audit(study, island_at_b(), dispatch, is_event=True)
    assert kinds(found) == {"unequal shares in the section"}
    assert found[0].amount == pytest.approx(75.0)
    free = change_study(study, load_control=LoadControl.BUS)
    assert audit(free, island_at_b(), dispatch, is_event=True) == []


def test_remote_share_may_differ() -> None:
    # LB can be disconnected remotely by half: 25 kW of switching at a share of 50 % from its other
    # half, and up to 50 kW more; LC sheds 50 kW at the same share.
    study = study_with_units()
    loads = (study.loads[0], replace(study.loads[1], remote_disconnect_frac=0.5), study.loads[2])
    study = replace(study, loads=loads)
    dispatch = with_value(island_dispatch(), "shed_kw", (0, 1), 75.0)
    dispatch = with_value(dispatch, "shed_kw", (0, 2), 50.0)
    assert audit(study, island_at_b(), dispatch, is_event=True) == []
    # 80 kW at LB and 45 kW at LC would need a remote share of 57.5 kW.
    dispatch = with_value(island_dispatch(), "shed_kw", (0, 1), 80.0)
    dispatch = with_value(dispatch, "shed_kw", (0, 2), 45.0)
    found = audit(study, island_at_b(), dispatch, is_event=True)
    assert kinds(found) == {"unequal shares in the section"}


@pytest.mark.parametrize(
    ("change", "what"),
    [
        # 30 kW of sun against 0.2 * 100 kW of the store.
        ({"island_ratio": 0.2}, "followers above the island ratio"),
        # 100 - 45 = 55 kW in hand against 0.8 * 75 = 60 kW.
        ({"island_headroom_frac": 0.8}, "headroom too small"),
    ],
)
def test_island_rules(change: dict[str, float], what: str) -> None:
    found = audit(
        change_study(study_with_units(), **change), island_at_b(), island_dispatch(), is_event=True
    )
    assert kinds(found) == {what}


def test_island_formed_by_a_unit_that_cannot() -> None:
    service = replace(island_at_b(), islands=(Island((B,), (1,), (0,)),))
    found = audit(study_with_units(), service, island_dispatch(), is_event=True)
    assert "formed by a unit that cannot" in kinds(found)


def test_power_does_not_cross_a_dead_line() -> None:
    dispatch = with_value(island_dispatch(), "import_kw", (0,), 110.0)
    dispatch = with_value(dispatch, "line_kw", (0, AB), 10.0)
    found = kinds(audit(study_with_units(), island_at_b(), dispatch, is_event=True))
    assert {"kW not balanced", "kW of a dead line"} <= found


def test_dead_bus_stands_still() -> None:
    """Isolation: B is dead. Everything shed and still passes; whatever moves is caught."""
    study = study_with_units()
    service = replace(
        normal(),
        line_live=np.array([True, False]),
        bus_live=np.array([True, True, False]),
        generator_live=np.array([True, False]),
        generator_may_run=np.array([True, False]),
        storage_live=np.array([False]),
    )
    still = island_dispatch()
    for name, value in (("storage_draw_kw", 0.0), ("storage_kw", 0.0), ("energy_kwh", 100.0)):
        still = with_value(still, name, (0, 0), value)
    still = with_value(still, "generator_kw", (0, 1), 0.0)
    still = replace(still, shed_kw=np.array([[0.0, 100.0, 100.0]]))
    still = with_value(still, "v_sq_pu", (0, B), math.nan)
    assert audit(study, service, still, is_event=True) == []
    for name, position, value, what in (
        ("shed_kw", (0, 1), 90.0, "dead load served"),
        ("generator_kw", (0, 1), 5.0, "output of a unit that stands still"),
        ("generator_kvar", (0, 1), 5.0, "kvar of a unit that stands still"),
        ("storage_kw", (0, 0), -5.0, "power of a unit that stands still"),
        ("storage_kvar", (0, 0), 5.0, "kvar of a unit that stands still"),
        ("storage_draw_kw", (0, 0), 5.0, "draw of a unit that stands still"),
        ("energy_kwh", (0, 0), 95.0, "energy not balanced"),
        ("surplus_kw", (0, B), 5.0, "surplus on a dead bus"),
    ):
        moved = with_value(still, name, position, value)
        assert what in kinds(audit(study, service, moved, is_event=True)), what


def test_fuel_of_a_unit_that_stands_still() -> None:
    service = replace(normal(), generator_live=np.array([False, True]))
    found = kinds(audit(study_with_units(), service, normal_dispatch(), is_event=True))
    assert {"output of a unit that stands still", "fuel of a unit that stands still"} <= found


def test_unit_that_may_not_run() -> None:
    waiting = replace(normal(), generator_may_run=np.array([False, True]))
    found = audit(study_with_units(), waiting, normal_dispatch(), is_event=True)
    assert kinds(found) == {"output of a unit that may not run"}


def test_outage_only_unit_rests_in_normal_service() -> None:
    study = study_with_units()
    units = (replace(study.generators[0], is_outage_only=True), study.generators[1])
    study = replace(study, generators=units)
    found = audit(study, normal(), normal_dispatch())
    assert kinds(found) == {"output of a unit that may not run"}
    assert audit(study, normal(), normal_dispatch(), is_event=True) == []


def test_tank_without_refill_runs_down() -> None:
    service = replace(normal(), generator_refills=np.array([False, True]))
    found = audit(study_with_units(), service, normal_dispatch(), is_event=True)
    assert kinds(found) == {"fuel from nowhere"}
    # 20 kW for an hour out of 200 kWh leave 180 and 160 kWh.
    fuel = np.array([[180.0, np.nan], [160.0, np.nan]])
    dispatch = replace(normal_dispatch(), fuel_kwh=fuel)
    assert audit(study_with_units(), service, dispatch, is_event=True) == []


def test_dead_source_gives_nothing() -> None:
    service = replace(normal(), source_live=False)
    found = kinds(audit(study_with_units(), service, normal_dispatch(), is_event=True))
    assert {"purchase of a dead source", "kvar of a dead source"} <= found


def test_closed_supply_feeds_its_part_at_source_voltage() -> None:
    """B fed by its neighbour: 60 kW of 80 kW spare beside the store and the sun."""
    study = study_with_units()
    service = replace(island_at_b(), islands=(), supply_closed=np.array([True]))
    dispatch = with_value(island_dispatch(), "supply_kw", (0, 0), 60.0)
    dispatch = replace(dispatch, shed_kw=np.array([[0.0, 32.5, 32.5]]))
    dispatch = with_value(dispatch, "v_sq_pu", (0, B), 1.0)
    assert audit(study, service, dispatch, is_event=True) == []
    too_much = with_value(dispatch, "supply_kw", (0, 0), 90.0)
    too_much = replace(too_much, shed_kw=np.array([[0.0, 17.5, 17.5]]))
    assert kinds(audit(study, service, too_much, is_event=True)) == {"supply above its spare power"}


def test_loop_is_found() -> None:
    study = study_with_units()
    tie = replace(study.lines[AB], line="T", normally_open=True)
    study = replace(study, lines=(*study.lines, tie))
    dispatch = normal_dispatch()
    none = np.zeros((2, 1))
    dispatch = replace(
        dispatch,
        line_kw=np.hstack([dispatch.line_kw, none]),
        line_kvar=np.hstack([dispatch.line_kvar, none]),
    )
    closed = replace(normal(), line_live=np.array([True, True, True]))
    assert "loop" in kinds(audit(study, closed, dispatch))
    opened = replace(normal(), line_live=np.array([True, True, False]))
    assert audit(study, opened, dispatch) == []


def test_voltages_of_an_island_may_float_but_not_spread() -> None:
    """A and B form an island: at 5000 ohm, 1 kW over the line spreads more than the band."""
    study = study_with_units()
    # 2 * 5000 / (1000 * 100) = 0.1 p.u. squared per kW; the band is 0.85^2 to 1.1^2, 0.4875 wide.
    lines = (study.lines[SA], replace(study.lines[AB], r_ohm=5000.0))
    study = replace(study, lines=lines)
    d = empty(1)
    d["fuel_kwh"][:] = [[200.0, np.nan]]
    # The store gives 4 kW (drawn 4 / 0.9), or 5 kW, and A takes them.
    for kw, is_fine in ((4.0, True), (5.0, False)):
        d["storage_draw_kw"][:], d["storage_kw"][:] = kw / 0.9, kw
        d["energy_kwh"][:] = 100.0 - kw / 0.9
        d["shed_kw"][:] = [100.0 - kw, 100.0, 100.0]
        d["line_kw"][:] = [0.0, -kw]
        d["v_sq_pu"][:] = [np.nan, 0.73, 0.73 + 0.1 * kw]
        service = replace(
            normal(),
            source_live=False,
            line_live=np.array([False, True]),
            bus_live=np.array([False, True, True]),
            islands=(Island((A, B), (), (0,)),),
        )
        found = kinds(audit(study, service, Dispatch(**d), is_event=True))
        assert found == (set() if is_fine else {"voltages spread beyond the band"})


def test_two_sources_in_one_part_hold_one_voltage_only() -> None:
    """A neighbour supply closed on the fed feeder: B cannot have the source's voltage."""
    service = replace(normal(), supply_closed=np.array([True]))
    found = kinds(audit(study_with_units(), service, normal_dispatch(), is_event=True))
    assert found == {"voltage of a source"}


def test_dead_line_carries_no_kvar() -> None:
    dispatch = with_value(island_dispatch(), "line_kvar", (0, AB), 1.0)
    found = kinds(audit(study_with_units(), island_at_b(), dispatch, is_event=True))
    assert found == {"kvar of a dead line"}
