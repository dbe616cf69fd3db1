"""Whom a fault reaches, on feeders worked out by hand (see the drawing of ``town``)."""

from __future__ import annotations

import math

import pytest

from tests.builders import make_generator, make_line, make_storage, make_supply
from tests.outages.hand_feeders import dead_buses, island_names, live_lines, study_of, tie, town
from xlplan.network.feeder import build_feeder
from xlplan.outages.faults import bulk_supply_stages, failed_unit_stages, isolation_and_repair
from xlplan.outages.sections import build_sections
from xlplan.study.study import Device, Study

NONE = Device.NONE


def fault_on(study: Study, line: str, n_isolation: int = 1, n_period: int = 3):
    """Feeder and stages of a fault on a line, one period of isolation and two of repair."""
    feeder = build_feeder(study)
    sections = build_sections(feeder)
    section = int(sections.section_of_line[feeder.line_ids.index(line)])
    return feeder, isolation_and_repair(study, feeder, sections, section, n_isolation, n_period)


@pytest.mark.parametrize(
    ("line", "isolation", "repair", "islands"),
    [
        # A fuse clears its own lateral.
        ("F1", "D", "D", []),
        # The recloser at the start of M2 clears M2; C hangs below and is an island afterwards.
        ("M2", "BC", "B", ["C"]),
        # The switch of M3 does not open by itself: the recloser above does, B comes back.
        ("M3", "BC", "C", []),
        # The breaker opens for M1: all but the source's bus; B with C and D are left apart.
        ("M1", "ABCD", "A", ["BC", "D"]),
    ],
)
def test_isolation_and_repair(line, isolation, repair, islands):
    feeder, stages = fault_on(town(), line)
    assert [(s.name, s.n_period) for s in stages] == [("isolation", 1), ("repair", 2)]
    assert dead_buses(feeder, stages[0]) == isolation
    assert stages[0].islands == ()
    assert dead_buses(feeder, stages[1]) == repair
    assert island_names(feeder, stages[1]) == islands
    assert stages[0].source_live
    assert stages[1].source_live


def test_a_line_is_live_only_between_live_buses():
    feeder, (isolation, repair) = fault_on(town(), "M2")
    assert live_lines(feeder, isolation) == ["M1", "F1"]
    assert live_lines(feeder, repair) == ["M1", "F1"]  # M3 hangs between dead B and live C


def test_stages_without_periods_are_left_out():
    assert [s.name for s in fault_on(town(), "M2", 0, 2)[1]] == ["repair"]
    assert [s.name for s in fault_on(town(), "M2", 2, 2)[1]] == ["isolation"]


def test_without_a_protective_device_the_breaker_at_the_source_is_implicit():
    lines = [
        make_line("L1", "S", "A", from_device=Device.SWITCH),
        make_line("L2", "S", "B", from_device=Device.SWITCH),
    ]
    feeder, (isolation, repair) = fault_on(study_of(lines), "L1")
    assert dead_buses(feeder, isolation) == "ABS"
    assert not isolation.source_live
    assert dead_buses(feeder, repair) == "A"
    assert repair.source_live


def test_a_fault_in_the_section_of_the_source_takes_the_source_bus():
    # M1 has its breaker at the far end, so it belongs to the source's section.
    lines = [
        make_line("M1", "S", "A", from_device=NONE, to_device=Device.BREAKER),
        make_line("M2", "A", "B", from_device=Device.SWITCH),
    ]
    feeder, (isolation, repair) = fault_on(study_of(lines), "M1")
    assert dead_buses(feeder, isolation) == "ABS"
    assert dead_buses(feeder, repair) == "S"
    assert not repair.source_live
    assert island_names(feeder, repair) == ["AB"]


def test_a_line_between_two_devices_leaves_no_bus_dead_in_repair():
    lines = [
        make_line("M1", "S", "A"),
        make_line("M2", "A", "B", from_device=Device.SWITCH, to_device=Device.SWITCH),
    ]
    feeder, (isolation, repair) = fault_on(study_of([*lines, tie("T", "S", "B")]), "M2")
    assert dead_buses(feeder, isolation) == "AB"  # a switch does not clear: the breaker opens
    assert dead_buses(feeder, repair) == ""
    assert live_lines(feeder, repair) == ["M1", "T"]
    assert repair.closed_ties == (2,)


def test_a_tie_feeds_what_lies_beyond_the_fault():
    feeder, (isolation, repair) = fault_on(town(tie("T", "C", "D")), "M2")
    assert isolation.closed_ties == ()  # not before the fault is isolated
    assert repair.closed_ties == (4,)
    assert repair.islands == ()
    assert live_lines(feeder, repair) == ["M1", "F1", "T"]
    assert len(set(repair.part_of_bus[repair.bus_live])) == 1


@pytest.mark.parametrize("line", ["F1", "M3"])
def test_a_tie_that_ends_in_the_dead_section_stays_open(line):
    _, (_, repair) = fault_on(town(tie("T", "C", "D")), line)
    assert repair.closed_ties == ()


def test_a_tie_between_two_parts_without_supply_stays_open():
    feeder, (_, repair) = fault_on(town(tie("T", "C", "D")), "M1")
    assert repair.closed_ties == ()
    assert island_names(feeder, repair) == ["BC", "D"]


def test_a_supply_comes_first_where_the_larger_tie_joins_nothing_yet():
    # T (inf) joins the unsupplied parts BC and D, so it has to wait until N supplies BC.
    study = town(tie("T", "C", "D"), supplies=(make_supply("N", "C", 50.0),))
    _, (_, repair) = fault_on(study, "M1")
    assert repair.closed_supplies == (0,)
    assert repair.closed_ties == (4,)
    assert repair.islands == ()


@pytest.mark.parametrize(
    ("ratings", "names", "closed"),
    [
        ((200.0, 300.0), ("T1", "T2"), 5),  # the largest rating
        ((300.0, 200.0), ("T1", "T2"), 4),
        ((200.0, math.inf), ("T1", "T2"), 5),  # no limit is the largest
        ((200.0, 200.0), ("T2", "T1"), 5),  # then by name, not by row
        ((200.0, 200.0), ("t1", "T2"), 4),  # whatever the case
    ],
)
def test_the_largest_tie_is_closed_then_the_first_by_name(ratings, names, closed):
    study = town(
        tie(names[0], "C", "D", rating_kva=ratings[0]),
        tie(names[1], "S", "C", rating_kva=ratings[1]),
    )
    _, (_, repair) = fault_on(study, "M2")
    assert repair.closed_ties == (closed,)  # one is enough: a second would close a loop


def test_a_supply_is_ranked_by_its_spare_power():
    for spare_kw, ties, supplies in ((250.0, (), (0,)), (150.0, (4,), ())):
        study = town(
            tie("T", "C", "D", rating_kva=200.0), supplies=(make_supply("N", "C", spare_kw),)
        )
        _, (_, repair) = fault_on(study, "M2")
        assert (repair.closed_ties, repair.closed_supplies) == (ties, supplies)


def test_a_supply_in_the_dead_section_stays_open():
    feeder, (_, repair) = fault_on(town(supplies=(make_supply("N", "B"),)), "M2")
    assert repair.closed_supplies == ()
    assert island_names(feeder, repair) == ["C"]


def test_a_supply_that_shares_the_bulk_supply_helps_in_a_fault_but_not_without_it():
    study = town(supplies=(make_supply("N", "C", shares_bulk_supply=True),))
    feeder, (_, repair) = fault_on(study, "M2")
    assert repair.closed_supplies == (0,)
    stages = bulk_supply_stages(study, feeder, build_sections(feeder), 1, 3)
    assert stages[1].closed_supplies == ()
    assert island_names(feeder, stages[1]) == ["SABCD"]


def test_units_in_the_dead_section_are_dead():
    study = town(
        generators=(make_generator("GB", "B"), make_generator("GC", "C")),
        storage=(make_storage("ED", "D"),),
    )
    _, (isolation, repair) = fault_on(study, "M2")
    assert isolation.generator_live.tolist() == [False, False]
    assert repair.generator_live.tolist() == [False, True]
    assert isolation.storage_live.tolist() == repair.storage_live.tolist() == [True]


def test_bulk_supply_failure():
    # All dead while isolating; then the largest supply of its own feeds the whole feeder alone.
    study = town(
        supplies=(
            make_supply("N1", "B", 500.0, shares_bulk_supply=True),
            make_supply("N2", "C", 80.0),
            make_supply("N3", "D", 90.0),
        )
    )
    feeder = build_feeder(study)
    isolation, repair = bulk_supply_stages(study, feeder, build_sections(feeder), 2, 5)
    assert (isolation.n_period, repair.n_period) == (2, 3)
    assert dead_buses(feeder, isolation) == "ABCDS"
    assert dead_buses(feeder, repair) == ""
    assert not isolation.source_live
    assert not repair.source_live
    assert repair.closed_supplies == (2,)
    assert repair.islands == ()


def test_a_failed_unit_leaves_nothing_dead():
    study = town(
        generators=(make_generator("G1", "B"), make_generator("G2", "C")),
        storage=(make_storage("E1", "B"),),
    )
    feeder = build_feeder(study)
    sections = build_sections(feeder)
    (stage,) = failed_unit_stages(study, feeder, sections, 4, generator=1)
    assert dead_buses(feeder, stage) == ""
    assert stage.n_period == 4
    assert stage.generator_live.tolist() == [True, False]
    assert stage.storage_live.tolist() == [True]
    (stage,) = failed_unit_stages(study, feeder, sections, 4, storage=0)
    assert stage.generator_live.tolist() == [True, True]
    assert stage.storage_live.tolist() == [False]
