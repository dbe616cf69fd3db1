"""Modified Carson equations on the published example, and conductors through the study workbook."""

from __future__ import annotations

import math
import tempfile
from functools import cache
from pathlib import Path

import numpy as np

from validation.comparison import HALF_DIGIT, Comparison, Origin, half_digit, read_rows
from xlplan.pipeline import read_study
from xlplan.study.study import Study
from xlplan.workbook.template import write_study_workbook

HERE = Path(__file__).resolve().parent

TITLE = "Line constants and conductors"
SOURCE = "W. H. Kersting, Distribution System Modeling and Analysis; IEEE PES test feeders, 2001"
NOTES = (
    "Reproduced by a balanced model: positive-sequence impedance, and drop and losses of balanced "
    "currents with it.",
    "Not reproduced: coupling between phases, zero sequence, single-phase laterals' return path, "
    "line charging.",
)

EARTH_R = 0.09530
EARTH_X = 0.12134
EARTH_LOG = 7.93402
"""Modified Carson equations at 60 Hz and 100 ohm m, ohm per mile and feet (Kersting)."""

EXAMPLE_FT = ((0.0, 29.0), (2.5, 29.0), (7.0, 29.0), (4.0, 25.0))
"""Phases a, b, c and the neutral of the example; those of spacing 500 as well."""

BASE_KV = 12.47


def conductor(name: str) -> dict[str, float]:
    """One row of the conductor table as numbers."""
    for row in read_rows(HERE, "conductors.csv"):
        if row["conductor"] == name:
            return {
                key: float(value)
                for key, value in row.items()
                if key not in ("conductor", "provenance")
            }
    raise KeyError(name)


def phase_matrix(phase: str, neutral: str) -> np.ndarray:
    """3 x 3 ohm per mile after elimination of the neutral; conductors at ``EXAMPLE_FT``."""
    wires = [conductor(phase)] * 3 + [conductor(neutral)]
    z = np.zeros((4, 4), dtype=complex)
    for i, wire in enumerate(wires):
        for j in range(4):
            if i == j:
                log = math.log(1.0 / wire["gmr_ft"])
                r = wire["r_ohm_per_mile_at_50C_60Hz"] + EARTH_R
            else:
                log, r = math.log(1.0 / math.dist(EXAMPLE_FT[i], EXAMPLE_FT[j])), EARTH_R
            z[i, j] = complex(r, EARTH_X * (log + EARTH_LOG))
    return z[:3, :3] - np.outer(z[:3, 3], z[3, :3]) / z[3, 3]


def sequences(matrix: np.ndarray) -> tuple[complex, complex]:
    """Positive and zero sequence of a transposed line: mean self, less or plus twice the mutual."""
    own = np.diag(matrix).mean()
    mutual = (matrix.sum() - np.trace(matrix)) / 6.0
    return complex(own - mutual), complex(own + 2.0 * mutual)


def configuration(number: int) -> np.ndarray:
    """Phase matrix of a configuration, as printed."""
    matrix = np.zeros((3, 3), dtype=complex)
    for row in read_rows(HERE, "ieee13_line_configurations.csv"):
        if row["configuration"] == str(number):
            i, j = ("abc".index(row[key]) for key in ("row_phase", "col_phase"))
            matrix[i, j] = complex(float(row["r_ohm_per_mile"]), float(row["x_ohm_per_mile"]))
    return matrix


@cache
def study_of_conductors() -> Study:
    """One mile of every conductor of the table, through a study workbook."""
    rows = read_rows(HERE, "conductors.csv")
    names = [row["conductor"] for row in rows]
    sheets: dict[str, list[dict[str, object]]] = {
        "Buses": [{"bus": "S"}, *({"bus": f"B{i}"} for i in range(len(rows)))],
        "Loads": [
            {
                "load": "L",
                "bus": "B0",
                "customer_class": "C",
                "peak_kw": 10,
                "power_factor": 0.95,
                "customers": 1,
            }
        ],
        "Lines": [
            {
                "line": f"Line {i}",
                "from_bus": "S",
                "to_bus": f"B{i}",
                "length": 1,
                "conductor": name,
                "from_device": "fuse",
                "outage_class": "Overhead",
            }
            for i, name in enumerate(names)
        ],
        "Conductors": [
            {
                "conductor": row["conductor"],
                "r_ohm_per_length": float(row["r_ohm_per_mile_at_50C_60Hz"]),
                "x_ohm_per_length": float(row["x1_ohm_per_mile_at_gmd_4.29ft"]),
                "ampacity_a": float(row["ampacity_a"]),
            }
            for row in rows
        ],
        "Outage assumptions": [
            {
                "outage_class": "Overhead",
                "failures_per_length_year": 0.1,
                "repair_hours": 2,
                "figure_from": "assumed for this comparison",
            }
        ],
        "Customer classes": [
            {
                "customer_class": "C",
                "cost_0h_per_kw": 0,
                "cost_1h_per_kw": 5,
                "cost_4h_per_kw": 20,
                "cost_8h_per_kw": 40,
                "cost_after_8h_per_kwh": 5,
            }
        ],
        "Profiles": [{"time": k, "flat": 1} for k in range(4)],
        "Windows": [
            {"window": "day", "occurrences_per_year": 365, "starts_at": 0, "hours": 4},
        ],
    }
    settings = {
        "study_name": "Conductors",
        "currency": "EUR",
        "source_bus": "S",
        "base_kv": BASE_KV,
        "substation_limit_kva": 10_000,
        "length_unit": "mi",
        "period_minutes": 60,
        "energy_price_per_kwh": 0.1,
    }
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "conductors.xlsx"
        write_study_workbook(path, sheets, settings)
        checked = read_study(path)
    if checked.study is None:
        raise RuntimeError(f"the study was refused: {checked.findings}")
    return checked.study


@cache
def compare() -> list[Comparison]:
    """The example, the printed 601 matrix, sequences, and what the study makes of the table."""
    found: list[Comparison] = []

    def printed(quantity: str, expected: float, got: float, origin: Origin) -> None:
        found.append(
            Comparison(quantity, "ohm/mile", expected, got, half_digit(4), HALF_DIGIT, origin, 4)
        )

    matrix = phase_matrix("336.4 kcmil 26/7 ACSR", "4/0 6/1 ACSR")
    positive, zero = sequences(matrix)
    for row in read_rows(HERE, "kersting_line_example.csv"):
        seen = row["provenance"] == "stored"
        origin = Origin.PUBLISHED if seen else Origin.RECALLED
        expected = complex(float(row["r_ohm_per_mile"]), float(row["x_ohm_per_mile"]))
        if row["item"].startswith("phase impedance"):
            got = complex(matrix["abc".index(row["row"]), "abc".index(row["col"])])
            name = f"Example, phase impedance {row['row']}{row['col']}"
        elif row["item"].endswith("sequence"):
            got = positive if row["row"] == "1" else zero
            name = f"Example, {row['item']}"
        else:
            continue
        printed(f"{name}: r", expected.real, got.real, origin)
        printed(f"{name}: x", expected.imag, got.imag, origin)
    # Configuration 601 has phasing b, a, c on the same spacing.
    mine = phase_matrix("556.5 kcmil 26/7 ACSR", "4/0 6/1 ACSR")
    order = [1, 0, 2]
    mine = mine[np.ix_(order, order)]
    theirs = configuration(601)
    for part in ("real", "imag"):
        one, two = getattr(theirs, part).ravel(), getattr(mine, part).ravel()
        worst = int(np.abs(one - two).argmax())
        letter = "r" if part == "real" else "x"
        printed(
            f"Configuration 601, the entry furthest off: {letter}",
            float(one[worst]),
            float(two[worst]),
            Origin.PUBLISHED,
        )
    reason = "eliminating the neutral leaves a little of it in the average of the phases"
    for number, name in ((601, "556.5 kcmil 26/7 ACSR"), (602, "4/0 6/1 ACSR")):
        whole, _ = sequences(configuration(number))
        wire = conductor(name)
        for letter, expected, key in (
            ("r", whole.real, "r_ohm_per_mile_at_50C_60Hz"),
            ("x", whole.imag, "x1_ohm_per_mile_at_gmd_4.29ft"),
        ):
            found.append(
                Comparison(
                    f"Configuration {number}, positive sequence from table and spacing: {letter}",
                    "ohm/mile",
                    expected,
                    wire[key],
                    5e-4,
                    reason,
                    Origin.PUBLISHED,
                    4,
                )
            )
    return found + _through_a_study()


def _through_a_study() -> list[Comparison]:
    """Of all conductors the one furthest off: ohms of one mile, and the rating by ampacity."""
    lines = study_of_conductors().lines
    rows = read_rows(HERE, "conductors.csv")
    # Geometric mean of the three phase distances, printed as 4.29 ft.
    spacing_ft = (2.5 * 4.5 * 7.0) ** (1.0 / 3.0)
    compared = (
        (
            "r of one mile",
            "ohm",
            [float(row["r_ohm_per_mile_at_50C_60Hz"]) for row in rows],
            [line.r_ohm for line in lines],
            Origin.RECALLED,
            4,
        ),
        (
            "x of one mile, by spacing and mean radius",
            "ohm",
            [EARTH_X * math.log(spacing_ft / float(row["gmr_ft"])) for row in rows],
            [line.x_ohm for line in lines],
            Origin.CLOSED_FORM,
            4,
        ),
        (
            "rating by ampacity, sqrt(3) kV A",
            "kVA",
            [math.sqrt(3.0) * BASE_KV * float(row["ampacity_a"]) for row in rows],
            [line.rating_kva for line in lines],
            Origin.CLOSED_FORM,
            1,
        ),
    )
    found = []
    for quantity, unit, expected, got, origin, digits in compared:
        worst = int(np.abs(np.array(expected) - np.array(got)).argmax())
        found.append(
            Comparison(
                f"Study workbook, the conductor furthest off of {len(rows)}: {quantity}",
                unit,
                expected[worst],
                got[worst],
                half_digit(4),
                HALF_DIGIT,
                origin,
                digits,
            )
        )
    return found
