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
from xlplan.base.errors import Finding, Level, Origin
from xlplan.base.units import pct_from_frac
from xlplan.network.feeder import Feeder
from xlplan.network.tree import RadialTree, radial_tree
from xlplan.study.study import NOWHERE, Study

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]

VOLTAGE_TOLERANCE_PU = 1e-9
"""A no-load voltage typed exactly at a limit is inside it; products of boosts round at 1e-15."""


class StageLike(Protocol):
    """What the voltage check needs of one stage of an outage event."""

    @property
    def line_live(self) -> BoolArray: ...
    @property
    def bus_live(self) -> BoolArray: ...
    @property
    def source_live(self) -> bool: ...
    @property
    def closed_supplies(self) -> tuple[int, ...]: ...
    @property
    def islands(self) -> tuple[tuple[int, ...], ...]: ...


class ScenarioLike(Protocol):
    """What the voltage check needs of a scenario (its record lives in a later layer)."""

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

    Complete recourse rests on it: all shed, all units at 0, no-load voltage has to be feasible
    (model.md section 4). Parts fed by a source hold the source's voltage there; in an island the
    level is free, so only the ratio of its highest to its lowest voltage has to fit the band.

    Returns
    -------
    list of Finding, one per place and band, at the boost of the last boosted line on the way to
    the bus, or at the source voltage where no line on the way has a boost
    """
    settings = study.settings
    normal_band = (settings.vmin_pu, settings.vmax_pu)
    event_band = (settings.vmin_event_pu, settings.vmax_event_pu)
    found: dict[tuple[str, str, str], Finding] = {}

    def add(place: tuple[Origin, str, str], band: str, message: str, hint: str) -> None:
        origin, key, value = place
        found.setdefault(
            (origin.sheet, origin.cell(key), band),
            Finding(
                level=Level.FAULT,
                code=Code.NO_LOAD_VOLTAGE,
                sheet=origin.sheet,
                cell=origin.cell(key),
                key=key,
                value=value,
                message=message,
                hint=hint,
            ),
        )

    def check_fed(tree: RadialTree, limits: tuple[float, float], band: str, when: str) -> None:
        v_pu = np.sqrt(no_load_v_sq(feeder, tree, feeder.source_v_sq_pu))
        for i_bus in tree.order:
            if limits[0] - VOLTAGE_TOLERANCE_PU <= v_pu[i_bus] <= limits[1] + VOLTAGE_TOLERANCE_PU:
                continue
            add(
                _voltage_place(study, feeder, tree.path_lines(i_bus)),
                band,
                f"with nothing flowing, bus {feeder.bus_ids[i_bus]} has {v_pu[i_bus]:.4f} p.u. "
                f"{when}, outside the limits for {band}, {limits[0]:g} to {limits[1]:g} p.u.",
                "Change the boost, the source voltage or the limits.",
            )

    closed = ~feeder.normally_open
    tree = radial_tree(feeder, closed, [feeder.source])
    check_fed(tree, normal_band, "normal service", "in normal service")
    check_fed(tree, event_band, "outage events", "as long as the source feeds it")
    seen: set[tuple[object, ...]] = set()
    for window, scenarios in scenarios_by_window.items():
        for scenario in scenarios:
            for stage in scenario.stages:
                sources = [int(feeder.supply_bus[i]) for i in stage.closed_supplies]
                if stage.source_live and stage.bus_live[feeder.source]:
                    sources.append(feeder.source)
                key = (stage.line_live.tobytes(), stage.bus_live.tobytes(), tuple(sources))
                if key in seen:
                    continue
                seen.add(key)
                when = f'in "{scenario.name}" ({window})'
                check_fed(
                    radial_tree(feeder, stage.line_live, sources), event_band, "outage events", when
                )
                for island in stage.islands:
                    tree = radial_tree(feeder, stage.line_live, [island[0]])
                    v_pu = np.sqrt(no_load_v_sq(feeder, tree, 1.0))[list(island)]
                    if v_pu.max() / v_pu.min() <= event_band[1] / event_band[0] * (
                        1.0 + VOLTAGE_TOLERANCE_PU
                    ):
                        continue
                    high, low = island[int(v_pu.argmax())], island[int(v_pu.argmin())]
                    path = radial_tree(feeder, stage.line_live, [low]).path_lines(high)
                    add(
                        _voltage_place(study, feeder, path),
                        "outage events",
                        f"with nothing flowing, bus {feeder.bus_ids[high]} is "
                        f"{pct_from_frac(v_pu.max() / v_pu.min() - 1.0):.1f} % above bus "
                        f"{feeder.bus_ids[low]} of the same island {when}: no voltage of the "
                        f"island puts both between {event_band[0]:g} and {event_band[1]:g} p.u.",
                        "Change the boost or the limits for outage events.",
                    )
    return list(found.values())


def _voltage_place(study: Study, feeder: Feeder, path: tuple[int, ...]) -> tuple[Origin, str, str]:
    """Origin, key and value of what sets a no-load voltage: the last boost on the way."""
    for i_line in reversed(path):
        if feeder.boost_frac[i_line] != 0.0:
            boost_pct = pct_from_frac(float(feeder.boost_frac[i_line]))
            return study.lines[i_line].origin, "boost_pct", f"{boost_pct:g}"
    key = "source_voltage_pu"
    origin = study.settings.origin_of.get(key, NOWHERE)
    return origin, key, f"{study.settings.source_voltage_pu:g}"
