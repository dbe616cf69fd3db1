"""Feeders small enough to reason about on paper, shared by the tests of network and outages."""

from __future__ import annotations

import numpy as np

from tests.builders import change_study, make_bus, make_line, small_study
from xlplan.network.feeder import Feeder, build_feeder
from xlplan.outages.records import Stage
from xlplan.outages.scenarios import build_scenarios
from xlplan.study.study import Device, Line, Study
from xlplan.study.windows import build_window_series


def study_of(lines: list[Line], **changes: object) -> Study:
    """A study of these lines, source S; buses in the order in which the lines name them."""
    names = dict.fromkeys(["S"] + [bus for line in lines for bus in (line.from_bus, line.to_bus)])
    study = small_study(buses=tuple(make_bus(bus) for bus in names), lines=tuple(lines), loads=())
    return change_study(study, **changes)


def tie(line: str, from_bus: str, to_bus: str, **changes: object) -> Line:
    """A normally open line with a switch at its start."""
    plain: dict[str, object] = {"normally_open": True, "from_device": Device.SWITCH}
    return make_line(line, from_bus, to_bus, **{**plain, **changes})


def town(*more: Line, **changes: object) -> Study:
    """Main S-A-B-C, fused lateral A-D; devices at the start of every line.

    ::

        S =M1(breaker)= A =M2(recloser)= B =M3(switch)= C
                        |
                        F1(fuse)
                        |
                        D
    """
    lines = [
        make_line("M1", "S", "A", from_device=Device.BREAKER),
        make_line("M2", "A", "B", from_device=Device.RECLOSER),
        make_line("M3", "B", "C", from_device=Device.SWITCH),
        make_line("F1", "A", "D", from_device=Device.FUSE),
    ]
    return study_of([*lines, *more], **changes)


def scenarios_of(study: Study):
    """Scenarios of the study's first window."""
    series = build_window_series(study, study.windows[0])
    return build_scenarios(study, build_feeder(study), series)


def dead_buses(feeder: Feeder, stage: Stage) -> str:
    """Names of the dead buses, sorted and joined: one letter each in these feeders."""
    return "".join(sorted(feeder.bus_ids[i] for i in np.flatnonzero(~stage.bus_live)))


def island_names(feeder: Feeder, stage: Stage) -> list[str]:
    """Names of the buses of each island."""
    return ["".join(feeder.bus_ids[i] for i in island) for island in stage.islands]


def live_lines(feeder: Feeder, stage: Stage) -> list[str]:
    """Names of the live lines."""
    return [feeder.line_ids[i] for i in np.flatnonzero(stage.line_live)]
