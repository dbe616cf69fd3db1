"""Random radial feeders of plausible make, for what the linear model costs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tests.builders import make_bus, make_line, small_study
from validation.comparison import read_rows
from validation.line_constants.case import HERE as CONDUCTOR_FOLDER
from xlplan.network.feeder import Feeder, build_feeder

FloatArray = NDArray[np.float64]

VOLTAGES_KV = (4.16, 12.47, 24.9)
WIRES = ("556.5 kcmil 26/7 ACSR", "336.4 kcmil 26/7 ACSR", "4/0 6/1 ACSR", "1/0 6/1 ACSR")
"""Heaviest first: for a main with much below it, down to a lateral."""


@dataclass(frozen=True)
class RandomFeeder:
    """A feeder and the pattern of its load, (n_bus,) each, to be scaled."""

    feeder: Feeder
    kw: FloatArray
    kvar: FloatArray
    has_infeed: bool


def random_feeder(seed: int) -> RandomFeeder:
    """A tree of 6 to 60 buses with mains and laterals; every fourth has infeed at some buses.

    Parameters
    ----------
    seed : int

    Returns
    -------
    RandomFeeder
    """
    rng = np.random.default_rng(seed)
    n_bus = int(rng.integers(6, 61))
    base_kv = float(rng.choice(VOLTAGES_KV))
    # Buses hang mostly on one of the last few, which gives mains with laterals, not stars.
    above = np.zeros(n_bus, dtype=np.int64)
    for bus in range(2, n_bus):
        reach = 3 if rng.random() < 0.7 else bus
        above[bus] = bus - 1 - int(rng.integers(min(reach, bus - 1)))
    below = np.ones(n_bus)
    for bus in range(n_bus - 1, 0, -1):
        below[above[bus]] += below[bus]
    wires = {row["conductor"]: row for row in read_rows(CONDUCTOR_FOLDER, "conductors.csv")}
    lines = []
    for bus in range(1, n_bus):
        step = min(len(WIRES) - 1, int(np.searchsorted([-0.4, -0.15, -0.05], -below[bus] / n_bus)))
        wire = wires[WIRES[step]]
        km = float(rng.uniform(0.05, 1.2)) * base_kv / 12.47
        lines.append(
            make_line(
                f"L{bus}",
                f"B{above[bus]}",
                f"B{bus}",
                r_ohm=km * float(wire["r_ohm_per_km"]),
                x_ohm=km * float(wire["x1_ohm_per_km"]),
                rating_kva=float(np.sqrt(3.0)) * base_kv * float(wire["ampacity_a"]),
            )
        )
    study = small_study(
        source_bus="B0",
        base_kv=base_kv,
        buses=tuple(make_bus(f"B{bus}") for bus in range(n_bus)),
        lines=tuple(lines),
        loads=(),
    )
    kw = rng.uniform(0.2, 1.0, n_bus) * (rng.random(n_bus) < 0.8)
    kw[0] = 0.0
    kw[-1] += 0.5
    kvar = kw * np.tan(np.arccos(rng.uniform(0.85, 0.98, n_bus)))
    has_infeed = seed % 4 == 0
    if has_infeed:
        kw = kw - 0.6 * rng.uniform(0.0, 1.0, n_bus) * (rng.random(n_bus) < 0.4)
        kw[0] = 0.0
    return RandomFeeder(build_feeder(study), kw, kvar, has_infeed)
