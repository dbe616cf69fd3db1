"""The network of one period as rows and columns: terminals in, balances and voltages out.

A *terminal* is what a device or load offers to the network: a bus, terms in kW and terms in kvar.
The block adds one flow pair per live line, one squared voltage per live bus, and the rows of
linearised DistFlow (Baran and Wu 1989, losses dropped), and says which of its columns follow from
the others on a radial part, so that a solver can fold the network into the injections. Nothing
outside knows how power gets from one terminal to another, so another network model can take this
one's place.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.base.units import v_sq_drop_per_kw
from xlplan.model.linear_program import ProgramBuilder
from xlplan.network.feeder import Feeder
from xlplan.outages.records import ServicePeriod

N_CORNER = 12
"""Corners of the polygon inside the circle of a rating (model.md section 4)."""

_ANGLE = (2.0 * np.arange(N_CORNER) + 1.0) * np.pi / N_CORNER
_COS, _SIN = np.cos(_ANGLE), np.sin(_ANGLE)
_SHRINK = float(np.cos(np.pi / N_CORNER))
"""Distance of the polygon's sides from its middle, in radii."""

V_SCALE = 1000.0
"""Voltage columns hold 1000 times the squared p.u. voltage: impedances of 1e-4 ohm then stay well
above the 1e-9 under which the solver drops a coefficient."""

Terms = list[tuple[int, float]]
FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass
class Terminal:
    """Power offered to a bus: positive terms flow into the network."""

    bus: int
    kw: Terms
    kvar: Terms


@dataclass(frozen=True)
class NetworkColumns:
    """Columns and rows of one period; -1 where a bus or line plays no part.

    The balance rows read ``terminals - outflow + inflow = load``; their bounds are the load.
    """

    flow_kw: np.ndarray
    flow_kvar: np.ndarray
    v_sq: np.ndarray
    kw_row: np.ndarray
    kvar_row: np.ndarray


def add_polygon(
    builder: ProgramBuilder, name: str, kw: Terms, kvar: Terms, rating: Terms | float
) -> None:
    """Keeps (kW, kvar) inside the regular 12-gon inscribed in the circle of the rating.

    ``rating`` is a number, or terms where the rating is bought. The rows are lazy: few ever bind.
    """
    terms = [(c, a * _COS) for c, a in kw] + [(c, a * _SIN) for c, a in kvar]
    upper = np.zeros(N_CORNER)
    if isinstance(rating, float):
        upper += rating * _SHRINK
    else:
        terms += [(c, np.full(N_CORNER, -a * _SHRINK)) for c, a in rating]
    columns = [int(c) for c, _ in terms]
    if len(set(columns)) != len(columns):
        raise ValueError(f"{name}: a column occurs twice in a rating")
    # One name for all: a name of its own for each would take more room than the rows.
    builder.add_lazy_block(
        [f"{name} polygon"] * N_CORNER,
        np.array([columns] * N_CORNER),
        np.array([a for _, a in terms]).T,
        upper,
    )


def add_line_polygons(
    builder: ProgramBuilder,
    names: list[str],
    flow_kw: IntArray,
    flow_kvar: IntArray,
    rating_kva: FloatArray,
) -> None:
    """``add_polygon`` for the flows of n lines at once: columns (n,), ratings (n,)."""
    n = len(names)
    labels = [f"rating {name} polygon" for name in names]
    builder.add_lazy_block(
        [label for label in labels for _ in range(N_CORNER)],
        np.repeat(np.stack([flow_kw, flow_kvar], axis=1), N_CORNER, axis=0),
        np.tile(np.stack([_COS, _SIN], axis=1), (n, 1)),
        np.repeat(rating_kva * _SHRINK, N_CORNER),
    )


def add_network(
    builder: ProgramBuilder,
    tag: str,
    feeder: Feeder,
    service: ServicePeriod,
    terminals: list[Terminal],
    band_pu: tuple[float, float],
    flow_limit_kw: float,
    voltage_sources: list[int],
) -> NetworkColumns:
    """Adds one period's network.

    Parameters
    ----------
    builder : ProgramBuilder, its terminals' columns already there
    tag : str, ends every name
    feeder : Feeder
    service : ServicePeriod, which lines and buses are live
    terminals : list of Terminal
    band_pu : (lowest, highest) voltage in p.u.
    flow_limit_kw : float, no flow can pass this (a finite box for lines without a rating)
    voltage_sources : buses held at the source voltage

    Returns
    -------
    NetworkColumns
    """
    n_bus, n_line = feeder.n_bus, feeder.n_line
    flow_kw = np.full(n_line, -1)
    flow_kvar = np.full(n_line, -1)
    v_sq = np.full(n_bus, -1)
    voltage_row = np.full(n_line, -1)
    kw_terms: dict[int, Terms] = {}
    kvar_terms: dict[int, Terms] = {}
    low, high = V_SCALE * band_pu[0] ** 2, V_SCALE * band_pu[1] ** 2
    for bus in np.flatnonzero(service.bus_live).tolist():
        kw_terms[bus], kvar_terms[bus] = [], []
        bounds = (low, high)
        if bus in voltage_sources:
            held = V_SCALE * feeder.source_v_sq_pu
            bounds = (held, held)
        v_sq[bus] = builder.add_column(f"v2 {feeder.bus_ids[bus]} {tag}", *bounds)
    for terminal in terminals:
        kw_terms[terminal.bus] += terminal.kw
        kvar_terms[terminal.bus] += terminal.kvar
    rated: list[int] = []
    rated_names: list[str] = []
    for line in np.flatnonzero(service.line_live).tolist():
        i, j = int(feeder.from_bus[line]), int(feeder.to_bus[line])
        if not (service.bus_live[i] and service.bus_live[j]):
            continue
        name = f"{feeder.line_ids[line]} {tag}"
        rating = float(feeder.rating_kva[line])
        box = min(rating, flow_limit_kw)
        flow_kw[line] = p = builder.add_column(f"kW {name}", -box, box)
        flow_kvar[line] = q = builder.add_column(f"kvar {name}", -box, box)
        for at_bus, flow in ((kw_terms, p), (kvar_terms, q)):
            at_bus[i].append((flow, -1.0))
            at_bus[j].append((flow, 1.0))
        drop_r = V_SCALE * v_sq_drop_per_kw(float(feeder.r_ohm[line]), feeder.base_kv)
        drop_x = V_SCALE * v_sq_drop_per_kw(float(feeder.x_ohm[line]), feeder.base_kv)
        boost = (1.0 + float(feeder.boost_frac[line])) ** 2
        terms = [(int(v_sq[j]), 1.0), (int(v_sq[i]), -boost), (p, drop_r), (q, drop_x)]
        voltage_row[line] = builder.add_row(f"voltage {name}", terms, 0.0, 0.0)
        if np.isfinite(rating):
            rated.append(line)
            rated_names.append(name)
    if rated:
        ratings = feeder.rating_kva[rated]
        add_line_polygons(builder, rated_names, flow_kw[rated], flow_kvar[rated], ratings)
    kw_row = np.full(n_bus, -1)
    kvar_row = np.full(n_bus, -1)
    for bus in kw_terms:
        name = f"{feeder.bus_ids[bus]} {tag}"
        kw_row[bus] = builder.add_row(f"kW balance {name}", kw_terms[bus], 0.0, 0.0)
        kvar_row[bus] = builder.add_row(f"kvar balance {name}", kvar_terms[bus], 0.0, 0.0)
    below = _lines_below(feeder, np.flatnonzero(flow_kw >= 0), voltage_sources)
    buses, lines = [bus for bus, _ in below], [line for _, line in below]
    builder.add_fold(0, kw_row[buses], flow_kw[lines])
    builder.add_fold(0, kvar_row[buses], flow_kvar[lines])
    builder.add_fold(1, voltage_row[lines], v_sq[buses])
    return NetworkColumns(flow_kw, flow_kvar, v_sq, kw_row, kvar_row)


def _lines_below(
    feeder: Feeder, lines: IntArray, voltage_sources: list[int]
) -> list[tuple[int, int]]:
    """(bus, line that feeds it) of every bus that hangs on another in a radial connected part.

    The flow on that line follows from the balance of the bus, the bus's voltage from the line's
    drop. A part with a loop is left out.
    """
    at_bus: dict[int, list[int]] = {}
    for line in lines.tolist():
        for bus in (int(feeder.from_bus[line]), int(feeder.to_bus[line])):
            at_bus.setdefault(bus, []).append(line)
    found: list[tuple[int, int]] = []
    seen: set[int] = set()
    for root in [*voltage_sources, *at_bus]:
        if root in seen:
            continue
        seen.add(root)
        part: list[tuple[int, int]] = []
        is_radial = True
        waiting = [(root, -1)]
        while waiting:
            bus, feeding = waiting.pop()
            for line in at_bus.get(bus, ()):
                if line == feeding:
                    continue
                ends = int(feeder.from_bus[line]), int(feeder.to_bus[line])
                other = ends[1] if ends[0] == bus else ends[0]
                if other in seen:
                    is_radial = False
                    continue
                seen.add(other)
                part.append((other, line))
                waiting.append((other, line))
        if is_radial:
            found += part
    return found
