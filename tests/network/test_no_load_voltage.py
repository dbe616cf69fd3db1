"""Voltage with nothing flowing: boosts forwards and backwards, in both bands."""

from __future__ import annotations

from dataclasses import replace

import pytest

from tests.builders import make_generator, make_supply
from tests.outages.hand_feeders import scenarios_of, tie, town
from xlplan.base.codes import Code
from xlplan.base.errors import Origin
from xlplan.network.feeder import build_feeder
from xlplan.network.topology import check_no_load_voltage, no_load_v_sq, radial_tree


def boosted(boost_of: dict[str, float], *more, **changes):
    """The town with boosts on some lines; lines stand in rows 2, 3, ..."""
    study = town(*more, **changes)
    lines = tuple(
        replace(
            line,
            boost_frac=boost_of.get(line.line, 0.0),
            origin=Origin("Lines", i + 2, {"boost_pct": "J"}),
        )
        for i, line in enumerate(study.lines)
    )
    settings = replace(study.settings, origin_of={"source_voltage_pu": Origin("Settings", 9, {})})
    return replace(study, lines=lines, settings=settings)


def cells(study) -> list[str]:
    """Cells of the findings; the events are those of every section's fault."""
    findings = check_no_load_voltage(study, build_feeder(study), {"day": scenarios_of(study)})
    assert all(finding.code == Code.NO_LOAD_VOLTAGE for finding in findings)
    return [f"{finding.sheet}!{finding.cell}" for finding in findings]


def test_boosts_multiply_forwards_and_divide_backwards():
    study = boosted({"M2": 0.05})
    feeder = build_feeder(study)  # buses S A B C D
    closed = ~feeder.normally_open
    forwards = no_load_v_sq(feeder, radial_tree(feeder, closed, [0]), 1.0)
    assert forwards == pytest.approx([1.0, 1.0, 1.05**2, 1.05**2, 1.0])
    backwards = no_load_v_sq(feeder, radial_tree(feeder, closed, [3]), 1.0)
    assert backwards == pytest.approx([1.05**-2, 1.05**-2, 1.0, 1.0, 1.05**-2])


def test_a_flat_feeder_fits():
    assert cells(boosted({})) == []


def test_a_source_voltage_outside_both_bands():
    assert cells(boosted({}, source_voltage_pu=1.12)) == ["Settings!A9", "Settings!A9"]


def test_a_source_voltage_outside_the_normal_band_alone():
    assert cells(boosted({}, source_voltage_pu=0.88)) == ["Settings!A9"]


def test_boosts_add_up_along_the_path():
    # 1.06 * 1.06 = 1.1236 above 1.1, in service and in events, found at the second boost.
    assert cells(boosted({"M1": 0.06, "M2": 0.06})) == ["Lines!J3", "Lines!J3"]


def test_a_boost_exactly_at_the_limit_fits():
    assert cells(boosted({"M1": 0.10})) == []


def test_a_line_fed_backwards_in_an_event():
    # After a fault on M1 the tie feeds C at 1.0 and B from there: M3 boosts from B to C, so B
    # gets 1 / 1.1 = 0.909 (C has 1.1 in service). Found at M3 if events allow no less than 0.92.
    lower = {"vmax_pu": 1.2, "vmax_event_pu": 1.2, "vmin_event_pu": 0.9}
    backwards = boosted({"M3": 0.10}, tie("T", "S", "C"), **lower)
    assert cells(backwards) == []
    lower["vmin_event_pu"] = 0.92
    assert cells(boosted({"M3": 0.10}, tie("T", "S", "C"), **lower)) == ["Lines!J4"]
    assert cells(boosted({"M3": 0.10}, **lower)) == []  # without the tie it is never fed so


def test_a_neighbour_supply_holds_the_source_voltage_at_its_bus():
    study = boosted(
        {"M3": 0.08}, supplies=(make_supply("N", "C"),), vmin_event_pu=0.95, vmin_pu=0.9
    )
    assert cells(study) == ["Lines!J4"]  # B at 1 / 1.08 = 0.926 after a fault on M1


def test_an_island_fits_wherever_the_normal_feeder_does():
    # B and C differ by 1.08, in service as in the island that G forms: 0.95 * 1.08 = 1.026.
    def study(vmax_event_pu: float):
        return boosted(
            {"M2": -0.05, "M3": 0.08},
            generators=(make_generator("G", "B"),),
            vmin_event_pu=0.95,
            vmax_event_pu=vmax_event_pu,
        )

    assert cells(study(1.03)) == []
    assert cells(study(1.02)) == ["Lines!J4"]  # already while the source feeds all of it
