"""Whom a fault reaches: isolation, repair, ties and neighbour supplies, islands.

Enters: a study, its feeder, its sections, and what failed. Leaves: ``Stage`` records.
Rules (model.md section 2):

1. *Isolation*. The nearest protective device at or above the edge of the faulted section ``Z``,
   towards the source, opens; where there is none, an implicit breaker at the source. All beyond
   it is dead. No tie is closed yet.
2. *Repair*. Only ``Z`` is dead. What cannot reach the source without ``Z`` is joined to a supplied
   part through normally open lines and neighbour supplies, one at a time, the largest rating
   first, then by name; whatever stays unsupplied is an island.

A line is *live* in a stage if it is closed and both of its buses are live: a line that hangs
energised on one bus alone carries nothing.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xlplan.network.feeder import Feeder
from xlplan.network.topology import connected_parts
from xlplan.outages.records import Stage
from xlplan.outages.sections import Sections
from xlplan.study.study import Study

BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]

ISOLATION = "isolation"
REPAIR = "repair"


def isolation_and_repair(
    study: Study,
    feeder: Feeder,
    sections: Sections,
    i_section: int,
    n_isolation: int,
    n_period: int,
) -> tuple[Stage, ...]:
    """Stages of a fault on a line of one section.

    Parameters
    ----------
    study, feeder, sections : of one study
    i_section : the faulted section ``Z`` (``sections.section_of_line`` of the line)
    n_isolation, n_period : periods of isolation, and of the whole event

    Returns
    -------
    tuple of Stage; a stage of no period is left out
    """
    stages = []
    if n_isolation > 0:
        stages.append(isolation_stage(study, feeder, sections, i_section, n_isolation))
    if n_period > n_isolation:
        is_dead = np.zeros(sections.n_section, dtype=bool)
        is_dead[i_section] = True
        stages.append(repair_stage(study, feeder, sections, is_dead, n_period - n_isolation))
    return tuple(stages)


def opened_edge(sections: Sections, i_section: int) -> int:
    """Edge of the protective device that opens on a fault in a section.

    -1: none on the way to the source, so the implicit breaker at the source opens.
    """
    for i_edge in sections.upstream(i_section):
        if sections.edges[i_edge].device.is_protective:
            return i_edge
    return -1


def isolation_stage(
    study: Study, feeder: Feeder, sections: Sections, i_section: int, n_period: int
) -> Stage:
    """All beyond the protective device that opens is dead; the rest is fed as ever."""
    i_edge = opened_edge(sections, i_section)
    if i_edge < 0:
        return everything_dead(study, feeder, n_period)
    edge = sections.edges[i_edge]
    # The section below the device is the one whose way to the source leads through it.
    below = edge.line_section
    if sections.parent_edge[below] != i_edge:
        below = edge.bus_section
    return _stage_with_dead(
        study, feeder, sections, sections.beyond(below), ISOLATION, n_period, may_close=False
    )


def repair_stage(
    study: Study, feeder: Feeder, sections: Sections, is_dead_section: BoolArray, n_period: int
) -> Stage:
    """Only the faulted section is dead; ties and neighbour supplies are closed."""
    return _stage_with_dead(
        study, feeder, sections, is_dead_section, REPAIR, n_period, may_close=True
    )


def bulk_supply_stages(
    study: Study, feeder: Feeder, sections: Sections, n_isolation: int, n_period: int
) -> tuple[Stage, ...]:
    """Stages of a failed bulk supply: all dead, then supplies not sharing it, then islands."""
    stages = []
    if n_isolation > 0:
        stages.append(everything_dead(study, feeder, n_isolation))
    if n_period > n_isolation:
        nothing = np.zeros(sections.n_section, dtype=bool)
        stages.append(
            _stage_with_dead(
                study,
                feeder,
                sections,
                nothing,
                REPAIR,
                n_period - n_isolation,
                may_close=True,
                bulk_live=False,
            )
        )
    return tuple(stages)


def failed_unit_stages(
    study: Study,
    feeder: Feeder,
    sections: Sections,
    n_period: int,
    generator: int | None = None,
    storage: int | None = None,
) -> tuple[Stage, ...]:
    """The one stage of a failed unit: nothing dead, the unit out."""
    nothing = np.zeros(sections.n_section, dtype=bool)
    stage = _stage_with_dead(study, feeder, sections, nothing, REPAIR, n_period, may_close=False)
    if generator is not None:
        stage.generator_live[generator] = False
    if storage is not None:
        stage.storage_live[storage] = False
    return (stage,)


def everything_dead(study: Study, feeder: Feeder, n_period: int) -> Stage:
    """Isolation behind the implicit breaker at the source, or without a bulk supply."""
    return Stage(
        name=ISOLATION,
        n_period=n_period,
        line_live=np.zeros(feeder.n_line, dtype=bool),
        closed_ties=(),
        closed_supplies=(),
        source_live=False,
        bus_live=np.zeros(feeder.n_bus, dtype=bool),
        part_of_bus=np.full(feeder.n_bus, -1, dtype=np.int64),
        islands=(),
        generator_live=np.zeros(len(study.generators), dtype=bool),
        storage_live=np.zeros(len(study.storage), dtype=bool),
    )


def _stage_with_dead(
    study: Study,
    feeder: Feeder,
    sections: Sections,
    is_dead_section: BoolArray,
    name: str,
    n_period: int,
    may_close: bool,
    bulk_live: bool = True,
) -> Stage:
    """A stage in which some sections are dead, the rest joined to supplies where it may be."""
    bus_live = ~is_dead_section[sections.section_of_bus]
    may_carry = (
        ~is_dead_section[sections.section_of_line]
        & bus_live[feeder.from_bus]
        & bus_live[feeder.to_bus]
    )
    line_live = may_carry & ~feeder.normally_open
    source_live = bulk_live and bool(bus_live[feeder.source])
    part = connected_parts(feeder, line_live, bus_live)
    supplied = {int(part[feeder.source])} if source_live else set()
    closed_ties: list[int] = []
    closed_supplies: list[int] = []
    if may_close:
        may_supply = bus_live[feeder.supply_bus].copy()
        if not bulk_live:
            may_supply &= ~np.array([s.shares_bulk_supply for s in study.supplies], dtype=bool)
        closed_ties, closed_supplies, supplied = _close_ties(
            study, feeder, part, supplied, may_carry & feeder.normally_open, may_supply
        )
        line_live[closed_ties] = True
    final = connected_parts(feeder, line_live, bus_live)
    fed = {int(final[i]) for i in np.flatnonzero(bus_live) if int(part[i]) in supplied}
    islands = tuple(
        tuple(int(i) for i in np.flatnonzero(final == i_part))
        for i_part in range(int(final.max(initial=-1)) + 1)
        if i_part not in fed
    )
    return Stage(
        name=name,
        n_period=n_period,
        line_live=line_live,
        closed_ties=tuple(closed_ties),
        closed_supplies=tuple(closed_supplies),
        source_live=source_live,
        bus_live=bus_live,
        part_of_bus=final,
        islands=islands,
        generator_live=bus_live[feeder.generator_bus].copy(),
        storage_live=bus_live[feeder.storage_bus].copy(),
    )


def _close_ties(
    study: Study,
    feeder: Feeder,
    part: IntArray,
    supplied: set[int],
    may_close_line: BoolArray,
    may_close_supply: BoolArray,
) -> tuple[list[int], list[int], set[int]]:
    """Closes ties and supplies, one at a time, while one joins a supplied part to another.

    A neighbour supply is a supplied part itself; its rating is its spare power. Every closing
    joins exactly one unsupplied part, so the feeder stays radial. Equal ratings go by name,
    upper and lower case alike (then a line before a supply).

    Returns
    -------
    lines closed, supplies closed (each in the order of closing), parts supplied in the end
    """
    supplied = set(supplied)
    candidates = [
        (-float(feeder.rating_kva[i]), feeder.line_ids[i].casefold(), 0, int(i))
        for i in np.flatnonzero(may_close_line)
    ] + [
        (-study.supplies[i].spare_kw, feeder.supply_ids[i].casefold(), 1, int(i))
        for i in np.flatnonzero(may_close_supply)
    ]
    candidates.sort()
    closed_ties: list[int] = []
    closed_supplies: list[int] = []
    while True:
        for _, _, is_supply, i in candidates:
            if is_supply:
                joined = int(part[feeder.supply_bus[i]])
                if joined not in supplied:
                    closed_supplies.append(i)
                    break
            else:
                ends = {int(part[feeder.from_bus[i]]), int(part[feeder.to_bus[i]])}
                if len(ends) == 2 and len(ends & supplied) == 1:
                    joined = (ends - supplied).pop()
                    closed_ties.append(i)
                    break
        else:
            return closed_ties, closed_supplies, supplied
        supplied.add(joined)
