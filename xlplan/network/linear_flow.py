"""Lossless flows and voltages of a radial feeder, worked out directly, without a solver.

Enters: a feeder, its live lines, roots, and what each bus draws. Leaves: ``LinearFlow``. Linearised
DistFlow (M. E. Baran, F. F. Wu, 1989, losses dropped): the flow into a bus is all that is drawn
below it, and

    v_j = (1 + boost)^2 v_i - 2 (r P + x Q) / (1000 kV^2)        line from i to j, P and Q from i on

Audits and reports use it to check what the linear programs say; it takes no part in building them.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from xlplan.base.units import v_sq_drop_per_kw
from xlplan.network.feeder import Feeder
from xlplan.network.tree import radial_tree

BoolArray = NDArray[np.bool_]
FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class LinearFlow:
    """Flows signed from a line's from bus to its to bus, 0 on lines that are in no path.

    flow_kw, flow_kvar : (..., n_line)
    v_sq_pu : (..., n_bus), nan where no root leads
    """

    flow_kw: FloatArray
    flow_kvar: FloatArray
    v_sq_pu: FloatArray


def flows_and_voltages(
    feeder: Feeder,
    line_live: BoolArray,
    roots: int | Mapping[int, ArrayLike],
    drawn_kw: ArrayLike,
    drawn_kvar: ArrayLike,
) -> LinearFlow:
    """Flows and squared voltages of radial parts, for one period or for many at once.

    Parameters
    ----------
    feeder : Feeder
    line_live : (n_line,)
    roots : the one bus that is fed at the source's voltage, or squared voltage (p.u.; one number,
        or one per period) by root bus. A root supplies whatever its part draws
    drawn_kw, drawn_kvar : (..., n_bus), load served less what is injected at the bus (negative
        where it feeds in)

    Returns
    -------
    LinearFlow with the leading axes of ``drawn_kw``

    Raises ValueError if the live lines form a loop or join two roots.
    """
    root_v_sq: Mapping[int, ArrayLike] = (
        roots if isinstance(roots, Mapping) else {roots: feeder.source_v_sq_pu}
    )
    tree = radial_tree(feeder, line_live, root_v_sq)
    if tree.has_loop:
        raise ValueError("the live lines form a loop or join two roots")
    below_kw = np.array(drawn_kw, dtype=float)
    below_kvar = np.array(drawn_kvar, dtype=float)
    leading = below_kw.shape[:-1]
    flow_kw = np.zeros((*leading, feeder.n_line))
    flow_kvar = np.zeros((*leading, feeder.n_line))
    v_sq_pu = np.full((*leading, feeder.n_bus), np.nan)
    for i_bus in reversed(tree.order):
        i_line, above = int(tree.parent_line[i_bus]), int(tree.parent_bus[i_bus])
        if i_line < 0:
            continue
        sign = 1.0 if feeder.to_bus[i_line] == i_bus else -1.0
        flow_kw[..., i_line] = sign * below_kw[..., i_bus]
        flow_kvar[..., i_line] = sign * below_kvar[..., i_bus]
        below_kw[..., above] += below_kw[..., i_bus]
        below_kvar[..., above] += below_kvar[..., i_bus]
    for i_bus in tree.order:
        i_line, above = int(tree.parent_line[i_bus]), int(tree.parent_bus[i_bus])
        if i_line < 0:
            v_sq_pu[..., i_bus] = np.asarray(root_v_sq[i_bus], dtype=float)
            continue
        drop = flow_kw[..., i_line] * v_sq_drop_per_kw(float(feeder.r_ohm[i_line]), feeder.base_kv)
        drop += flow_kvar[..., i_line] * v_sq_drop_per_kw(
            float(feeder.x_ohm[i_line]), feeder.base_kv
        )
        ratio = (1.0 + feeder.boost_frac[i_line]) ** 2
        if feeder.to_bus[i_line] == i_bus:
            v_sq_pu[..., i_bus] = ratio * v_sq_pu[..., above] - drop
        else:
            v_sq_pu[..., i_bus] = (v_sq_pu[..., above] + drop) / ratio
    return LinearFlow(flow_kw, flow_kvar, v_sq_pu)
