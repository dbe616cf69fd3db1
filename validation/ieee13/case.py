"""The 13-node feeder as a balanced equivalent: what such a model can say of it."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np

from tests.builders import make_bus, make_line, small_study
from validation.comparison import Comparison, Origin, read_rows
from xlplan.network.ac_flow import AcFlow, solve_ac_flow
from xlplan.network.feeder import Feeder, build_feeder

HERE = Path(__file__).resolve().parent

TITLE = "13-node feeder, balanced equivalent"
SOURCE = "IEEE PES Distribution System Analysis Subcommittee, Radial distribution test feeders"
NOTES = (
    "Reproduced: the mean of the three phase voltages at three-phase nodes, and the input power.",
    "Not reproduced: voltages of single phases (0.9738 to 1.0553 p.u. in the published solution), "
    "laterals, regulator taps by phase, losses by unbalanced currents.",
)

BASE_KV = 4.16
FEET_PER_MILE = 5280.0
MAIN = ("650", "RG60", "632", "633", "634", "671", "680", "692", "675")
LEAVES_FROM = {"645": "632", "646": "632", "684": "671", "611": "671", "652": "671"}
"""Nodes of laterals, and the three-phase node at which their load is lumped."""

TOLERANCE_PU = 0.002
TOLERANCE_LOSS = 0.20
TOLERANCE_INPUT = 0.01


def positive_sequence(configuration: str) -> complex:
    """Ohm per mile of the transposed line: mean self less mean mutual impedance."""
    own, mutual = [], []
    for row in read_rows(HERE, "ieee13_line_configurations.csv"):
        if row["configuration"] == configuration:
            z = complex(float(row["r_ohm_per_mile"]), float(row["x_ohm_per_mile"]))
            (own if row["row_phase"] == row["col_phase"] else mutual).append(z)
    return sum(own) / len(own) - sum(mutual) / len(mutual)


def feeder_of() -> Feeder:
    """Three-phase nodes only."""
    taps = next(r for r in read_rows(HERE, "ieee13_regulator.csv") if r["item"].startswith("final"))
    boost = np.mean([float(taps[f"phase_{p}"]) for p in "abc"]) * 0.00625
    lines = [make_line("regulator", "650", "RG60", r_ohm=0.0, x_ohm=0.0, boost_frac=float(boost))]
    xfm = next(r for r in read_rows(HERE, "ieee13_transformers.csv") if r["name"].startswith("XFM"))
    base_ohm = BASE_KV**2 * 1000.0 / float(xfm["rating_kva"])
    for row in read_rows(HERE, "ieee13_line_segments.csv"):
        start, end = row["from_node"], row["to_node"]
        if start not in MAIN or end not in MAIN:
            continue
        if row["configuration"].startswith("XFM"):
            z = complex(float(xfm["r_percent"]), float(xfm["x_percent"])) / 100.0 * base_ohm
        elif row["configuration"].startswith("switch"):
            z = 0j
        else:
            z = positive_sequence(row["configuration"]) * float(row["length_ft"]) / FEET_PER_MILE
        start = "RG60" if start == "650" else start
        lines.append(make_line(f"{start}-{end}", start, end, r_ohm=z.real, x_ohm=z.imag))
    study = small_study(
        source_bus="650",
        base_kv=BASE_KV,
        buses=tuple(make_bus(bus) for bus in MAIN),
        lines=tuple(lines),
        loads=(),
    )
    return build_feeder(study)


def drawn() -> tuple[np.ndarray, np.ndarray]:
    """kW and kvar by node of ``MAIN``, three-phase totals."""
    kw, kvar = np.zeros(len(MAIN)), np.zeros(len(MAIN))

    def add(node: str, p: float, q: float) -> None:
        i = MAIN.index(LEAVES_FROM.get(node, node))
        kw[i] += p
        kvar[i] += q

    for row in read_rows(HERE, "ieee13_spot_loads.csv"):
        add(row["node"], float(row["p_kw"]), float(row["q_kvar"]))
    for row in read_rows(HERE, "ieee13_distributed_load.csv"):
        for node in (row["from_node"], row["to_node"]):
            add(node, float(row["p_kw"]) / 2.0, float(row["q_kvar"]) / 2.0)
    for row in read_rows(HERE, "ieee13_capacitors.csv"):
        add(row["node"], 0.0, -float(row["q_kvar_at_nominal_voltage"]))
    return kw, kvar


@cache
def solve() -> AcFlow:
    """AC power flow of the balanced equivalent."""
    feeder = feeder_of()
    return solve_ac_flow(feeder, np.ones(feeder.n_line, dtype=bool), {0: 1.0}, *drawn())


def published_phases() -> dict[str, list[float]]:
    """Voltages of the phases, as recalled, by node."""
    phases: dict[str, list[float]] = {}
    for row in read_rows(HERE, "ieee13_voltages.csv"):
        phases.setdefault(row["node"], []).append(float(row["v_published_pu"]))
    return phases


def published(quantity: str) -> float:
    """A total, as recalled."""
    for row in read_rows(HERE, "ieee13_summary.csv"):
        if row["quantity"] == quantity:
            return float(row["published_value"])
    raise KeyError(quantity)


@cache
def compare() -> list[Comparison]:
    """Mean voltages of the three-phase nodes, input power, losses."""
    flow = solve()
    phases = published_phases()
    found = [
        Comparison(
            f"Mean phase voltage at {node}",
            "p.u.",
            float(np.mean(phases[node])),
            float(abs(flow.v_pu[i])),
            TOLERANCE_PU,
            "second order of the phases' spread of up to 0.046 p.u.",
            Origin.RECALLED,
            4,
        )
        for i, node in enumerate(MAIN)
        if node != "650"
    ]
    loss = published("real loss total")
    found.append(
        Comparison(
            "Real losses (balanced model: always lower)",
            "kW",
            loss,
            float(flow.loss_kw.sum()),
            TOLERANCE_LOSS * loss,
            "unbalanced currents and laterals add losses that a balanced model does not have",
            Origin.RECALLED,
            1,
        )
    )
    power = published("input P total")
    found.append(
        Comparison(
            "Input power",
            "kW",
            power,
            float(flow.root_kw[0]),
            TOLERANCE_INPUT * power,
            "voltage-dependent loads and the losses of unbalance",
            Origin.RECALLED,
            0,
        )
    )
    return found
