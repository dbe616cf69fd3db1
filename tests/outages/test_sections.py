"""Cutting the feeder at its devices, on feeders worked out by hand."""

from __future__ import annotations

import pytest

from tests.builders import make_line
from tests.outages.hand_feeders import study_of, tie, town
from xlplan.network.feeder import build_feeder
from xlplan.outages.sections import Sections, build_sections
from xlplan.study.study import Device, Study

NONE, SWITCH, FUSE = Device.NONE, Device.SWITCH, Device.FUSE


def cut(study: Study) -> tuple[Sections, dict[str, str]]:
    """Sections, and the label of the section of every bus and line by name."""
    feeder = build_feeder(study)
    sections = build_sections(feeder)
    names = (*feeder.bus_ids, *feeder.line_ids)
    section_of = (*sections.section_of_bus, *sections.section_of_line)
    of = {name: sections.labels[i] for name, i in zip(names, section_of, strict=True)}
    return sections, of


def test_a_device_at_the_start_puts_each_line_with_the_bus_beyond():
    sections, of = cut(town())
    assert sections.n_section == 5
    for line, bus in {"M1": "A", "M2": "B", "M3": "C", "F1": "D"}.items():
        assert of[line] == of[bus] == f"Section of bus {bus}"
    assert of["S"] == "Section of bus S"


def test_a_device_at_the_end_puts_the_line_with_the_bus_before():
    _, of = cut(study_of([make_line("L", "S", "A", from_device=NONE, to_device=SWITCH)]))
    assert of["L"] == of["S"] != of["A"]


def test_devices_at_both_ends_make_the_line_a_section_without_buses():
    sections, of = cut(study_of([make_line("L", "S", "A", from_device=FUSE, to_device=SWITCH)]))
    assert of["L"] == "Line L"
    assert len({of["S"], of["A"], of["L"]}) == sections.n_section == 3


def test_a_bare_line_joins_its_buses():
    lines = [make_line("L1", "S", "A"), make_line("L2", "A", "B", from_device=NONE)]
    _, of = cut(study_of(lines))
    # The section is named after its bus nearest to the source.
    assert of["A"] == of["B"] == of["L2"] == of["L1"] == "Section of bus A"


def test_label_names_the_bus_nearest_to_the_source_whatever_the_order_of_rows():
    lines = [make_line("L2", "A", "B", from_device=NONE), make_line("L1", "S", "A")]
    study = study_of(lines)
    study = study_of(lines, buses=tuple(reversed(study.buses)))
    assert cut(study)[1]["B"] == "Section of bus A"


@pytest.mark.parametrize(
    ("from_device", "to_device", "beside"),
    [(NONE, NONE, "B"), (SWITCH, NONE, "C"), (NONE, SWITCH, "B"), (SWITCH, SWITCH, None)],
)
def test_sections_do_not_merge_across_an_open_tie(from_device, to_device, beside):
    lines = [make_line("L1", "S", "B"), make_line("L2", "S", "C")]
    open_tie = tie("T", "B", "C", from_device=from_device, to_device=to_device)
    sections, of = cut(study_of([*lines, open_tie]))
    assert of["B"] != of["C"]
    assert of["T"] == ("Line T" if beside is None else of[beside])
    # Its devices join nothing: both sections hang from the source by their own breakers.
    assert [edge.line for edge in sections.edges] == [0, 1]


def test_sections_hang_from_the_source_in_either_direction_of_the_line():
    # L2 is drawn towards the source: its fuse at the to end is the one on the source's side.
    lines = [
        make_line("L1", "S", "A"),
        make_line("L2", "B", "A", from_device=NONE, to_device=FUSE),
    ]
    study = study_of(lines)
    feeder = build_feeder(study)
    sections = build_sections(feeder)
    section = int(sections.section_of_bus[feeder.bus_ids.index("B")])
    assert section == sections.section_of_line[1]
    devices = [sections.edges[i].device for i in sections.upstream(section)]
    assert devices == [FUSE, Device.BREAKER]
    at_a = int(sections.section_of_bus[feeder.bus_ids.index("A")])
    assert set(sections.beyond(at_a).nonzero()[0]) == {at_a, section}
