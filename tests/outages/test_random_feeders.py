"""What holds on every radial feeder, whatever its devices, ties and units."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.builders import change_study
from tests.outages.hand_feeders import scenarios_of
from tests.outages.random_feeders import random_feeders
from xlplan.network.feeder import Feeder, build_feeder
from xlplan.outages.clock import Clock
from xlplan.outages.faults import isolation_and_repair
from xlplan.outages.sections import build_sections
from xlplan.study.study import Device, Study
from xlplan.study.windows import build_window_series


def spread(start, joints) -> set:
    """Everything reached from a point over joints (pairs of points)."""
    reached, more = {start}, True
    while more:
        step = {b for a, b in joints if a in reached} | {a for a, b in joints if b in reached}
        more = not step <= reached
        reached |= step
    return reached


def ends_of(feeder: Feeder, i_line: int):
    """(bus, device) at both ends of a line."""
    yield int(feeder.from_bus[i_line]), feeder.from_device[i_line]
    yield int(feeder.to_bus[i_line]), feeder.to_device[i_line]


def dead_by_definition(feeder: Feeder, i_line: int) -> tuple[set[int], set[int]]:
    """Buses dead in isolation and in repair, found point by point without any section tree.

    Points are buses and line middles; each closed line end joins its bus and its middle. The
    section is what the fault reaches without passing a device. Every protective device whose
    opening alone parts the fault from the source is above it; the one that takes out least opens.
    """
    joints = {}
    for other in np.flatnonzero(~feeder.normally_open):
        for end, (bus, device) in enumerate(ends_of(feeder, int(other))):
            joints[int(other), end] = ((("bus", bus), ("line", int(other))), device)
    fault = ("line", i_line)
    bare = [joint for joint, device in joints.values() if device is Device.NONE]
    section = {i for kind, i in spread(fault, bare) if kind == "bus"}
    everything = set(range(feeder.n_bus))
    dead = everything
    for key, (_, device) in joints.items():
        if device.is_protective:
            others = [joint for at, (joint, _) in joints.items() if at != key]
            fed = spread(("bus", feeder.source), others)
            if fault not in fed:
                beyond = everything - {i for kind, i in fed if kind == "bus"}
                # A device at the far end of a line takes out no more buses than one at its start.
                dead = beyond if len(beyond) <= len(dead) else dead
    return dead, section


@given(random_feeders())
def test_dead_buses_are_those_of_the_definition(study):
    feeder = build_feeder(study)
    sections = build_sections(feeder)
    for i_line in np.flatnonzero(~feeder.normally_open):
        section = int(sections.section_of_line[i_line])
        stages = isolation_and_repair(study, feeder, sections, section, 1, 2)
        found = tuple(set(np.flatnonzero(~stage.bus_live).tolist()) for stage in stages)
        assert found == dead_by_definition(feeder, int(i_line))


@given(random_feeders())
def test_every_stage_is_radial_and_every_part_has_one_source_or_is_an_island(study):
    feeder = build_feeder(study)
    for scenario in scenarios_of(study):
        for stage in scenario.stages:
            lines = np.flatnonzero(stage.line_live)
            joints = [(int(feeder.from_bus[i]), int(feeder.to_bus[i])) for i in lines]
            live = set(np.flatnonzero(stage.bus_live).tolist())
            parts = {frozenset(spread(i_bus, joints)) for i_bus in live}
            assert set().union(*parts) == live  # no live line leads to a dead bus
            assert len(lines) == len(live) - len(parts)  # a forest
            sources = [int(feeder.supply_bus[i]) for i in stage.closed_supplies]
            sources += [feeder.source] if stage.source_live else []
            for part in parts:
                fed_by = [i_bus for i_bus in sources if i_bus in part]
                assert len(fed_by) == (0 if tuple(sorted(part)) in stage.islands else 1)
            assert len(stage.islands) == sum(not part & set(sources) for part in parts)


@given(random_feeders())
def test_nothing_is_left_to_close_after_isolation(study):
    feeder = build_feeder(study)
    for scenario in scenarios_of(study):
        repair = scenario.stages[-1]
        if repair.name != "repair" or scenario.causes[0].kind not in ("line", "bulk supply"):
            continue
        island = {i for buses in repair.islands for i in buses}
        for i_line in np.flatnonzero(feeder.normally_open & ~repair.line_live):
            ends = [int(feeder.from_bus[i_line]), int(feeder.to_bus[i_line])]
            in_island = [i_bus in island for i_bus in ends]
            if all(repair.bus_live[ends]):
                assert in_island in ([True, True], [False, False])
        for i_supply, supply in enumerate(study.supplies):
            if (
                i_supply not in repair.closed_supplies
                and int(feeder.supply_bus[i_supply]) in island
            ):
                assert scenario.is_bulk_supply
                assert supply.shares_bulk_supply


@given(random_feeders())
def test_islands_of_a_period_are_formed_and_the_rest_of_them_is_dead(study):
    feeder = build_feeder(study)
    for scenario in scenarios_of(study):
        stages = [stage for stage in scenario.stages for _ in range(stage.n_period)]
        assert len(stages) == len(scenario.service) == scenario.n_period
        for stage, period in zip(stages, scenario.service, strict=True):
            formed = {island.buses for island in period.islands}
            for island in period.islands:
                assert island.forming_generators or island.forming_storage
            lost = {i for buses in stage.islands if buses not in formed for i in buses}
            expected = stage.bus_live.copy()
            expected[list(lost)] = False
            assert (period.bus_live == expected).all()
            for i, i_bus in enumerate(feeder.generator_bus):
                assert not period.generator_live[i] or period.bus_live[i_bus]
                assert period.generator_live[i] or not period.generator_may_run[i]
            ends_live = period.bus_live[feeder.from_bus] & period.bus_live[feeder.to_bus]
            assert (ends_live | ~period.line_live).all()


@given(random_feeders())
def test_chances_sum_to_one_and_rates_to_those_of_the_components(study):
    scenarios = scenarios_of(study)
    clock = Clock.of(scenarios, build_window_series(study, study.windows[0]))
    assert clock.scenario_chance.sum(axis=1) == pytest.approx(np.ones(clock.n_period))
    assert clock.first_failure_from(0).sum() + clock.survival[-1] == pytest.approx(1.0)
    n_line = sum(not line.normally_open for line in study.lines)
    n_unit = sum(generator.existing_kw > 0 for generator in study.generators)
    total = sum(scenario.rate_per_year for scenario in scenarios)
    assert total == pytest.approx(np.full(4, 300.0 * n_line + 100.0 * n_unit + 50.0))
    assert len({scenario.name for scenario in scenarios}) == len(scenarios)


def renamed(study: Study, order: list[int]) -> Study:
    """The study with its buses in another order and under other names."""
    new = {bus.bus: f"bus {i}" for i, bus in enumerate(study.buses)}

    def moved(records):
        return tuple(replace(record, bus=new[record.bus]) for record in records)

    return change_study(
        study,
        buses=tuple(replace(study.buses[i], bus=new[study.buses[i].bus]) for i in order),
        lines=tuple(
            replace(line, from_bus=new[line.from_bus], to_bus=new[line.to_bus])
            for line in study.lines
        ),
        supplies=moved(study.supplies),
        generators=moved(study.generators),
        storage=moved(study.storage),
        source_bus=new[study.settings.source_bus],
    )


@given(random_feeders(), st.randoms(use_true_random=False))
def test_names_and_order_of_buses_change_nothing(study, random):
    order = list(range(len(study.buses)))
    random.shuffle(order)

    def facts(scenario, old_bus):
        """All that matters, in the bus positions of the study as first drawn."""
        return (
            [cause.ident for cause in scenario.causes if cause.kind != "bulk supply"],
            [
                (
                    stage.line_live.tolist(),
                    stage.closed_ties,
                    stage.closed_supplies,
                    {old_bus[i] for i in np.flatnonzero(~stage.bus_live)},
                    {frozenset(old_bus[i] for i in island) for island in stage.islands},
                    stage.generator_live.tolist(),
                )
                for stage in scenario.stages
            ],
            [len(period.islands) for period in scenario.service],
            scenario.rate_per_year.tolist(),
        )

    before = [facts(s, range(len(order))) for s in scenarios_of(study)]
    after = [facts(s, order) for s in scenarios_of(renamed(study, order))]
    assert before == after
