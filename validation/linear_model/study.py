"""What the linear model costs: its voltages and missing losses against AC power flow.

Run from the root of the repository: ``python -m validation.linear_model.study``. It prints the
tables that stand in DEVELOPERS.md; a test holds the two together.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from validation.linear_model.feeders import RandomFeeder, random_feeder
from xlplan.network.ac_flow import solve_ac_flow
from xlplan.network.linear_flow import flows_and_voltages

FloatArray = NDArray[np.float64]

N_FEEDER = 200
DROPS_PU = (0.01, 0.02, 0.03, 0.04, 0.05, 0.06, 0.08, 0.10)
"""Largest drop by the linear model, from a source at 1 p.u."""

LOADINGS = (0.25, 0.5, 0.75, 1.0)
"""Highest loading of any line by the linear model, as a share of its rating."""


@dataclass(frozen=True)
class Compared:
    """One feeder at several scales of its load, (n_scale,) each.

    drop_pu : largest linear drop; error_pu : linear less AC voltage at the bus that is lowest by AC
    flow; least_error_pu : the same at the bus where it is smallest; loss_frac : of the load served;
    current_over_linear : AC current over linear kVA (at nominal voltage) of the line loaded most
    """

    drop_pu: FloatArray
    error_pu: FloatArray
    least_error_pu: FloatArray
    loss_frac: FloatArray
    current_over_linear: FloatArray
    converged: NDArray[np.bool_]


def compare(one: RandomFeeder, scales: FloatArray) -> Compared:
    """Both flows at the given scales of the load pattern."""
    feeder = one.feeder
    live = np.ones(feeder.n_line, dtype=bool)
    kw, kvar = np.outer(scales, one.kw), np.outer(scales, one.kvar)
    linear = flows_and_voltages(feeder, live, {0: 1.0}, kw, kvar)
    ac = solve_ac_flow(feeder, live, {0: 1.0}, kw, kvar)
    v_linear, v_ac = np.sqrt(np.maximum(linear.v_sq_pu, 0.0)), np.abs(ac.v_pu)
    error = v_linear - v_ac
    lowest = np.where(np.isnan(v_ac), np.inf, v_ac).argmin(axis=1)
    rows = np.arange(len(scales))
    kva = np.hypot(linear.flow_kw, linear.flow_kvar)
    most = (kva / feeder.rating_kva).argmax(axis=1)
    return Compared(
        drop_pu=1.0 - v_linear.min(axis=1),
        error_pu=error[rows, lowest],
        least_error_pu=error.min(axis=1),
        loss_frac=ac.loss_kw.sum(axis=1) / np.maximum(kw, 0.0).sum(axis=1),
        current_over_linear=ac.current_kva[rows, most] / kva[rows, most],
        converged=ac.converged,
    )


def scales_of_drops(one: RandomFeeder) -> FloatArray:
    """Scales at which the largest linear drop is that of ``DROPS_PU`` (squares are linear)."""
    live = np.ones(one.feeder.n_line, dtype=bool)
    unit = flows_and_voltages(one.feeder, live, {0: 1.0}, one.kw, one.kvar)
    per_scale = float((1.0 - unit.v_sq_pu).max())
    return (1.0 - (1.0 - np.array(DROPS_PU)) ** 2) / per_scale


def scales_of_loadings(one: RandomFeeder) -> FloatArray:
    """Scales at which the highest linear loading is that of ``LOADINGS``."""
    live = np.ones(one.feeder.n_line, dtype=bool)
    unit = flows_and_voltages(one.feeder, live, {0: 1.0}, one.kw, one.kvar)
    per_scale = float((np.hypot(unit.flow_kw, unit.flow_kvar) / one.feeder.rating_kva).max())
    return np.array(LOADINGS) / per_scale


@cache
def run() -> tuple[tuple[Compared, ...], tuple[Compared, ...]]:
    """All feeders, by drop and by loading."""
    feeders = [random_feeder(seed) for seed in range(N_FEEDER)]
    return (
        tuple(compare(one, scales_of_drops(one)) for one in feeders),
        tuple(compare(one, scales_of_loadings(one)) for one in feeders),
    )


def _spread(values: list[float], factor: float, digits: int) -> str:
    """Median, 95th percentile and largest, as table cells."""
    at = np.quantile(values, [0.5, 0.95, 1.0]) * factor
    return " | ".join(f"{number:.{digits}f}" for number in at)


def drop_table() -> str:
    """Error and losses by the largest drop of the linear model."""
    by_drop, _ = run()
    lines = [
        "| linear drop (p.u.) | voltage too high: median | 95 % | largest (p.u.) "
        "| losses: median | 95 % | largest (% of load) |",
        "| --- | --- | --- | --- | --- | --- | --- |",
    ]
    for i, drop in enumerate(DROPS_PU):
        error = [one.error_pu[i] for one in by_drop if one.converged[i]]
        loss = [one.loss_frac[i] for one in by_drop if one.converged[i]]
        lines.append(f"| {drop:.2f} | {_spread(error, 1.0, 4)} | {_spread(loss, 100.0, 1)} |")
    return "\n".join(lines)


def loading_table() -> str:
    """Drop, error and current by the highest line loading; some feeders cannot carry it."""
    _, by_loading = run()
    lines = [
        "| linear loading (% of rating) | no AC solution | linear drop: median | 95 % (p.u.) "
        "| voltage too high: median | 95 % (p.u.) | AC current over linear: median | 95 % |",
        "| --- | --- | --- | --- | --- | --- | --- | --- |",
    ]
    for i, loading in enumerate(LOADINGS):
        chosen = [one for one in by_loading if one.converged[i]]
        cells = [f"{100.0 * loading:.0f}", f"{len(by_loading) - len(chosen)} of {len(by_loading)}"]
        for key, digits in (("drop_pu", 3), ("error_pu", 4), ("current_over_linear", 3)):
            values = [getattr(one, key)[i] for one in chosen]
            cells += [f"{number:.{digits}f}" for number in np.quantile(values, [0.5, 0.95])]
        lines.append("| " + " | ".join(cells) + " |")
    return "\n".join(lines)


def coefficient() -> float:
    """Largest error over the square of the linear drop, up to a drop of 0.10 p.u."""
    by_drop, _ = run()
    return max(float((one.error_pu / one.drop_pu**2)[one.converged].max()) for one in by_drop)


if __name__ == "__main__":
    print(drop_table())
    print()
    print(loading_table())
    print()
    print(f"largest error over the square of the drop: {coefficient():.2f}")
