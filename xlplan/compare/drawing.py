"""The feeder as a drawing: places of buses, and what is live in normal service and in outages.

Places are those of the study where every bus has x and y. Otherwise they are computed: distance
from the source to the right, one row for every end of the feeder, each bus in the middle of what
hangs on it.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xlplan.compare.study_result import DrawnBus, DrawnLine, FeederDrawing
from xlplan.evaluate.results import PlanResult
from xlplan.network.feeder import Feeder
from xlplan.network.tree import RadialTree, radial_tree
from xlplan.outages.records import Stage
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]

LIVE, ISLAND, DEAD, OPEN = "live", "island", "dead", "open"
NORMAL_SERVICE = "Normal service"


def draw_feeder(
    study: Study, feeder: Feeder, windows: Sequence[WindowModel], plan: PlanResult
) -> FeederDrawing:
    """The drawing, with every stage of the outage events that the plan's traces show.

    Parameters
    ----------
    study, feeder, windows : of one study
    plan : PlanResult, whose traces name the events

    Returns
    -------
    FeederDrawing; normal service first
    """
    closed = ~feeder.normally_open
    tree = radial_tree(feeder, closed, [feeder.source])
    x, y, is_computed = _places(study, feeder, tree)
    stages: list[tuple[str, str, Stage | None]] = [
        (NORMAL_SERVICE, "Everything is fed from the source; ties are open.", None)
    ]
    stages += _event_stages(plan, windows)
    bus_states = [_bus_states(feeder, stage) for _, _, stage in stages]
    line_states = [_line_states(feeder, stage) for _, _, stage in stages]
    buses = tuple(
        DrawnBus(bus, float(x[i]), float(y[i]), tuple(s[i] for s in bus_states), _note(study, bus))
        for i, bus in enumerate(feeder.bus_ids)
    )
    lines = tuple(
        DrawnLine(
            line=line,
            from_bus=feeder.bus_ids[feeder.from_bus[i]],
            to_bus=feeder.bus_ids[feeder.to_bus[i]],
            is_open=bool(feeder.normally_open[i]),
            states=tuple(s[i] for s in line_states),
        )
        for i, line in enumerate(feeder.line_ids)
    )
    titles, notes = tuple(s[0] for s in stages), tuple(s[1] for s in stages)
    return FeederDrawing(buses, lines, titles, notes, is_computed)


def _event_stages(
    plan: PlanResult, windows: Sequence[WindowModel]
) -> list[tuple[str, str, Stage | None]]:
    found: list[tuple[str, str, Stage | None]] = []
    scenarios = {(w.series.window, s.name): s for w in windows for s in w.scenarios}
    for trace in plan.traces:
        scenario = scenarios.get((trace.window, trace.scenario))
        if scenario is None:
            continue
        for stage, words in zip(scenario.stages, trace.closings, strict=True):
            title = f"{trace.title.split(' outage event')[0]}: {scenario.name}, {stage.name}"
            if title not in [known[0] for known in found]:
                found.append((title, words, stage))
    return found


def _bus_states(feeder: Feeder, stage: Stage | None) -> list[str]:
    if stage is None:
        return [LIVE] * feeder.n_bus
    islanded = {bus for island in stage.islands for bus in island}
    return [
        DEAD if not stage.bus_live[i] else ISLAND if i in islanded else LIVE
        for i in range(feeder.n_bus)
    ]


def _line_states(feeder: Feeder, stage: Stage | None) -> list[str]:
    if stage is None:
        return [OPEN if is_open else LIVE for is_open in feeder.normally_open]
    buses = _bus_states(feeder, stage)
    states = []
    for i in range(feeder.n_line):
        if not stage.line_live[i]:
            is_tie = bool(feeder.normally_open[i])
            states.append(OPEN if is_tie else DEAD)
        else:
            states.append(buses[feeder.from_bus[i]])
    return states


def _note(study: Study, bus: str) -> str:
    """What stands at a bus."""
    parts = []
    if bus == study.settings.source_bus:
        parts.append("source")
    load_kw = sum(load.peak_kw for load in study.loads if load.bus == bus)
    if load_kw > 0.0:
        parts.append(f"load {load_kw:,.0f} kW")
    parts += [f"storage {one.storage}" for one in study.storage if one.bus == bus]
    parts += [f"generator {one.generator}" for one in study.generators if one.bus == bus]
    parts += [f"neighbour supply {one.supply}" for one in study.supplies if one.bus == bus]
    return ", ".join(parts)


def _places(study: Study, feeder: Feeder, tree: RadialTree) -> tuple[FloatArray, FloatArray, bool]:
    given = [(bus.x, bus.y) for bus in study.buses]
    if all(x is not None and y is not None for x, y in given):
        x = np.array([one[0] for one in given], dtype=float)
        y = np.array([one[1] for one in given], dtype=float)
        if np.ptp(x) > 0.0 or np.ptp(y) > 0.0:
            return x, y, False
    depth = np.zeros(feeder.n_bus)
    children: dict[int, list[int]] = {}
    for bus in tree.order:
        parent = int(tree.parent_bus[bus])
        if parent >= 0:
            depth[bus] = depth[parent] + 1.0
            children.setdefault(parent, []).append(bus)
    size = np.ones(feeder.n_bus)
    for bus in reversed(tree.order):
        size[bus] = max(1.0, sum(size[child] for child in children.get(bus, ())))
    row = np.zeros(feeder.n_bus)
    top = np.zeros(feeder.n_bus)
    for bus in tree.order:
        # The largest part goes straight on, the others below it.
        at = top[bus]
        row[bus] = 0.0 - at
        for child in sorted(children.get(bus, ()), key=lambda one: -size[one]):
            top[child] = at
            at += size[child]
    return depth, row, True
