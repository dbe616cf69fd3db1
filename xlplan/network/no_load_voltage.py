"""The voltage of every bus while nothing flows: the source's, times the boosts on the way.

Enters: a study, its feeder and its scenarios. Leaves: findings. Complete recourse rests on this
check: all shed, all units at 0, no-load voltage has to be feasible (model.md section 4).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level
from xlplan.base.units import pct_from_frac
from xlplan.network.feeder import Feeder
from xlplan.network.tree import RadialTree, radial_tree
from xlplan.study.study import NOWHERE, Study

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]

VOLTAGE_TOLERANCE_PU = 1e-9
"""A no-load voltage typed exactly at a limit is inside it; products of boosts round at 1e-15."""


class StageLike(Protocol):
    """What the check needs of one stage of an outage event (the record's own layer is later)."""

    @property
    def line_live(self) -> BoolArray: ...
    @property
    def bus_live(self) -> BoolArray: ...
    @property
    def source_live(self) -> bool: ...
    @property
    def closed_supplies(self) -> tuple[int, ...]: ...


class ScenarioLike(Protocol):
    """What the check needs of a scenario."""

    @property
    def name(self) -> str: ...
    @property
    def stages(self) -> tuple[StageLike, ...]: ...


def no_load_v_sq(feeder: Feeder, tree: RadialTree, root_v_sq: float) -> FloatArray:
    """Squared voltage (p.u.) of every bus when nothing flows: the root's, times the boosts.

    A boosted line fed from its to end divides. Shape (n_bus,); nan where no root leads.
    """
    v_sq = np.full(feeder.n_bus, np.nan)
    for i_bus in tree.order:
        i_line = int(tree.parent_line[i_bus])
        if i_line < 0:
            v_sq[i_bus] = root_v_sq
            continue
        ratio = (1.0 + feeder.boost_frac[i_line]) ** 2
        above = v_sq[tree.parent_bus[i_bus]]
        is_forward = feeder.to_bus[i_line] == i_bus
        v_sq[i_bus] = above * ratio if is_forward else above / ratio
    return v_sq


def check_no_load_voltage(
    study: Study, feeder: Feeder, scenarios_by_window: Mapping[str, Iterable[ScenarioLike]]
) -> list[Finding]:
    """Faults where the voltage with nothing flowing leaves a band, in service or in an event.

    Parts fed by a source hold the source's voltage there. The normal feeder has to fit both bands,
    since in some events the source feeds all of it. In an island the level is free and only the
    ratio of its highest to its lowest voltage counts; an island is a piece of the normal feeder
    (no tie is closed into it), so it fits wherever the normal feeder does, at the same level.

    Parameters
    ----------
    study, feeder : of one study, radial
    scenarios_by_window : scenarios of each window, by its name

    Returns
    -------
    list of Finding, one per place and band, at the boost of the last boosted line on the way to
    the bus, or at the source voltage where no line on the way has a boost
    """
    check = _Check(study, feeder)
    tree = radial_tree(feeder, ~feeder.normally_open, [feeder.source])
    check.fed_part(tree, is_event=False, when="in normal service")
    check.fed_part(tree, is_event=True, when="while the source feeds all of the feeder")
    for window, scenarios in scenarios_by_window.items():
        for scenario in scenarios:
            when = f'in "{scenario.name}" ({window})'
            for stage in scenario.stages:
                check.stage(stage, when)
    return list(check.found.values())


class _Check:
    """The findings so far; a topology that was seen before is passed over."""

    def __init__(self, study: Study, feeder: Feeder) -> None:
        self.study = study
        self.feeder = feeder
        self.found: dict[tuple[str, str, bool], Finding] = {}
        self._seen: set[tuple[object, ...]] = set()

    def stage(self, stage: StageLike, when: str) -> None:
        """One stage: what its sources feed."""
        feeder = self.feeder
        sources = [int(feeder.supply_bus[i]) for i in stage.closed_supplies]
        if stage.source_live and stage.bus_live[feeder.source]:
            sources.append(feeder.source)
        key = (stage.line_live.tobytes(), tuple(sources))
        if key not in self._seen:
            self._seen.add(key)
            tree = radial_tree(feeder, stage.line_live, sources)
            self.fed_part(tree, is_event=True, when=when)

    def fed_part(self, tree: RadialTree, is_event: bool, when: str) -> None:
        """Buses fed from a source stay inside the band."""
        settings = self.study.settings
        low, high = settings.vmin_pu, settings.vmax_pu
        band = "normal service"
        if is_event:
            low, high, band = settings.vmin_event_pu, settings.vmax_event_pu, "outage events"
        v_pu = np.sqrt(no_load_v_sq(self.feeder, tree, self.feeder.source_v_sq_pu))
        for i_bus in tree.order:
            if low - VOLTAGE_TOLERANCE_PU <= v_pu[i_bus] <= high + VOLTAGE_TOLERANCE_PU:
                continue
            self._add(
                tree.path_lines(i_bus),
                is_event,
                f"with nothing flowing, bus {self.feeder.bus_ids[i_bus]} has {v_pu[i_bus]:.4f} "
                f"p.u. {when}, outside the limits for {band}, {low:g} to {high:g} p.u.",
            )

    def _add(self, path: tuple[int, ...], is_event: bool, message: str) -> None:
        """One finding per place and band, at what sets the voltage: the last boost on the way."""
        key, value = "source_voltage_pu", self.study.settings.source_voltage_pu
        origin = self.study.settings.origin_of.get(key, NOWHERE)
        for i_line in path:
            boost_frac = float(self.feeder.boost_frac[i_line])
            if boost_frac != 0.0:
                key, value = "boost_pct", pct_from_frac(boost_frac)
                origin = self.study.lines[i_line].origin
        # Records made without a workbook all stand nowhere, so the message tells them apart.
        place = (origin.sheet, origin.cell(key) if origin.sheet else message, is_event)
        finding = Finding(
            level=Level.FAULT,
            code=Code.NO_LOAD_VOLTAGE,
            sheet=origin.sheet,
            cell=origin.cell(key),
            key=key,
            value=f"{value:g}",
            message=message,
            hint="Change the boost, the source voltage or the limits.",
        )
        self.found.setdefault(place, finding)
