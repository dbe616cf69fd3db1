"""Trees, paths and the checks of the feeder's shape, each finding at its cell."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.builders import change_study, make_line
from tests.outages.hand_feeders import study_of, tie, town
from xlplan.base.codes import Code
from xlplan.base.errors import Level, Origin
from xlplan.network.feeder import build_feeder
from xlplan.network.topology import check_radial, connected_parts, radial_tree

LINE_COLUMNS = {"to_bus": "C", "normally_open": "K"}


def with_rows(study):
    """The study with lines and buses that stand in rows 2, 3, ... of their sheets."""
    return change_study(
        study,
        lines=tuple(
            replace(line, origin=Origin("Lines", i + 2, LINE_COLUMNS))
            for i, line in enumerate(study.lines)
        ),
        buses=tuple(
            replace(bus, origin=Origin("Buses", i + 2, {"bus": "A"}))
            for i, bus in enumerate(study.buses)
        ),
        origin_of={"source_bus": Origin("Settings", 6, {"source_bus": "B"})},
    )


def places(study) -> list[tuple[str, str, str]]:
    """Code, sheet and cell of every finding; all are faults."""
    findings = check_radial(with_rows(study))
    assert all(finding.level is Level.FAULT for finding in findings)
    return [(finding.code, finding.sheet, finding.cell) for finding in findings]


def test_a_radial_feeder_has_no_findings():
    assert places(town(tie("T", "C", "D"), tie("T2", "C", "D"))) == []


def test_a_self_loop():
    assert places(town(make_line("X", "C", "C"))) == [(Code.SELF_LOOP, "Lines", "C6")]
    assert places(town(tie("X", "C", "C"))) == [(Code.SELF_LOOP, "Lines", "C6")]


def test_parallel_lines_in_either_direction():
    for ends in (("B", "C"), ("C", "B")):
        assert places(town(make_line("X", *ends))) == [(Code.PARALLEL_LINE, "Lines", "C6")]
    assert places(town(tie("X", "B", "C"))) == []  # an open one is of use


def test_a_loop_is_found_at_the_line_that_closes_it():
    assert places(town(make_line("X", "C", "D"))) == [(Code.LOOP, "Lines", "K6")]


def test_loose_buses_are_one_finding_per_part():
    study = study_of(
        [
            make_line("L1", "S", "A"),
            make_line("L2", "B", "C"),
            tie("T", "A", "B"),
            make_line("L3", "D", "E"),
        ]
    )
    assert places(study) == [
        (Code.NOT_CONNECTED, "Buses", "A4"),
        (Code.NOT_CONNECTED, "Buses", "A6"),
    ]
    assert "with it: C" in check_radial(study)[0].message


@pytest.mark.parametrize("source", ["", "Z"])
def test_the_source_has_to_be_a_bus(source):
    assert places(town(source_bus=source)) == [(Code.SOURCE_UNKNOWN, "Settings", "B6")]


def test_lines_to_unknown_buses_are_left_to_the_other_checks():
    study = town()
    lines = (*study.lines, make_line("X", "C", "nowhere"))
    assert places(change_study(study, lines=lines)) == []


def test_tree_and_paths():
    feeder = build_feeder(town(tie("T", "C", "D")))  # buses S A B C D; lines M1 M2 M3 F1 T
    tree = radial_tree(feeder, ~feeder.normally_open, [0])
    assert tree.order == (0, 1, 2, 4, 3)
    assert tree.parent_line.tolist() == [-1, 0, 1, 2, 3]
    assert tree.path_lines(3) == (0, 1, 2)
    assert tree.path_buses(4) == (0, 1, 4)
    assert tree.path_lines(0) == ()
    assert not tree.has_loop
    assert radial_tree(feeder, np.ones(5, dtype=bool), [0]).has_loop
    assert radial_tree(feeder, ~feeder.normally_open, [0, 3]).has_loop  # two roots joined


def test_a_tree_does_not_reach_beyond_dead_lines():
    feeder = build_feeder(town())
    live = np.array([True, False, True, True])
    tree = radial_tree(feeder, live, [0])
    assert tree.order == (0, 1, 4)
    assert tree.root_of_bus.tolist() == [0, 0, -1, -1, 0]
    bus_live = np.array([True, True, False, True, True])
    parts = connected_parts(feeder, np.array([True, False, False, True]), bus_live)
    assert parts.tolist() == [0, 0, -1, 1, 0]
