"""Loads as the model sheds them: groups that are switched off together.

With section control, the loads of one section that follow one profile form one group: its single
variable is the kW shed by switching the section, shared out in fixed proportions. Groups of one
section are tied to the same share of their load by rows in the period. What can be disconnected
remotely is a variable of its own per load. With bus control every load is a group by itself.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.study.study import LoadControl, Study
from xlplan.study.windows import WindowSeries

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class ShedGroup:
    """Loads shed in fixed proportions.

    share[l] of the group's kW belongs to load ``loads[l]``; ``total_kw`` (n_period,) is what can be
    shed by switching; ``section`` -1 with bus control (no share rows).
    """

    section: int
    loads: tuple[int, ...]
    share: tuple[float, ...]
    total_kw: FloatArray


@dataclass(frozen=True)
class Loads:
    """All groups, and for each load its remotely disconnectable kW (n_period, n_load)."""

    groups: tuple[ShedGroup, ...]
    remote_kw: FloatArray

    def shed_kw(self, group_kw: FloatArray, remote_kw: FloatArray) -> FloatArray:
        """kW shed per load from the variables: (..., n_group) and (..., n_load)."""
        shed = remote_kw.copy()
        for i_group, group in enumerate(self.groups):
            for load, share in zip(group.loads, group.share, strict=True):
                shed[..., load] += share * group_kw[..., i_group]
        return shed


def build_loads(study: Study, series: WindowSeries, section_of_load: NDArray[np.int64]) -> Loads:
    """Groups of one window.

    Parameters
    ----------
    study : Study
    series : WindowSeries, of the window
    section_of_load : array, shape (n_load,), section of each load's bus

    Returns
    -------
    Loads
    """
    n_load = len(study.loads)
    by_section = study.settings.load_control is LoadControl.SECTION
    remote = np.array([load.remote_disconnect_frac for load in study.loads])
    if not by_section:
        remote = np.zeros(n_load)
    members: dict[tuple[object, ...], list[int]] = {}
    for i, load in enumerate(study.loads):
        if remote[i] < 1.0:
            key: tuple[object, ...] = (i,)
            if by_section:
                key = (int(section_of_load[i]), load.load_profile)
            members.setdefault(key, []).append(i)
    groups = []
    for key, loads in members.items():
        # Loads of one group follow one profile, so their proportions are those of the peaks.
        size = np.array([study.loads[i].peak_kw * (1.0 - remote[i]) for i in loads])
        share = size / size.sum() if size.sum() > 0 else np.full(len(loads), 1.0 / len(loads))
        groups.append(
            ShedGroup(
                section=int(str(key[0])) if by_section else -1,
                loads=tuple(loads),
                share=tuple(float(s) for s in share),
                total_kw=(series.load_kw[:, loads] * (1.0 - remote[loads])).sum(axis=1),
            )
        )
    return Loads(groups=tuple(groups), remote_kw=series.load_kw * remote)
