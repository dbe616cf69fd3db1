"""The engine alone on stochastic programs with known optima."""

from __future__ import annotations

from functools import cache

import numpy as np

from tests.solve.graphs import (
    air_conditioner_graph,
    capacity_expansion_graph,
    farmer_graph,
    hydrothermal_graph,
    read_table,
)
from validation.comparison import HALF_DIGIT, Comparison, Origin, half_digit
from validation.stochastic_programs.programs import (
    capacity_expansion_three_stage_graph,
    capacity_mix_graph,
    farmer_of_one_year,
    financial_planning_graph,
    hydrothermal_two_stage_graph,
    l_shaped_graph,
)
from xlplan.model.value_graph import ValueGraph
from xlplan.solve.decomposition import Engine
from xlplan.solve.result import DecompositionResult

TITLE = "Stochastic programs with known optima"
SOURCE = "J. R. Birge, F. Louveaux; F. V. Louveaux, Y. Smeers; teaching examples: see source.md"
NOTES = (
    "Solved by the engine alone; its lower bound has to agree as well as the cost of its plan.",
)

GAP = 1e-9


def solve(graph: ValueGraph, **options: object) -> DecompositionResult:
    """Solved to a gap far below the digits compared."""
    with Engine(graph, seed=1) as engine:
        return engine.run(GAP, **options)  # type: ignore[arg-type]


def known(problem: str, quantity: str) -> tuple[str, Origin]:
    """A figure as printed, and where it is from."""
    for row in read_table("sp_known_optima.csv"):
        if row[0] == problem and row[1].startswith(quantity):
            return row[3], Origin.PUBLISHED if row[4] == "stored" else Origin.RECALLED
    raise KeyError((problem, quantity))


@cache
def compare() -> list[Comparison]:
    """Optima, plans, the value of the stochastic solution and of perfect information."""
    found: list[Comparison] = []

    def add(
        problem: str, quantity: str, got: float, digits: int, name: str = "", i_part: int = 0
    ) -> None:
        text, origin = known(problem, quantity)
        found.append(
            Comparison(
                name or f"{problem}: {quantity}",
                "",
                float(text.split("/")[i_part]),
                got,
                half_digit(digits),
                HALF_DIGIT,
                origin,
                digits,
            )
        )

    def optimum(problem: str, quantity: str, graph: ValueGraph, digits: int, sign: float = 1.0):
        result = solve(graph)
        add(problem, quantity, sign * result.cost.mean, digits, f"{problem}: optimum")
        add(problem, quantity, sign * result.lower_bound, digits, f"{problem}: lower bound")
        return result

    farmer = optimum("farmer", "RP", farmer_graph(), 0)
    for i, crop in enumerate(("wheat", "corn", "beets")):
        quantity = "optimal acres"
        add("farmer", quantity, float(farmer.x[i]), 0, f"farmer: acres of {crop}", i)
    years = [solve(farmer_of_one_year(i)).cost.mean for i in range(3)]
    for i, word in enumerate(("above", "average", "below")):
        quantity = "scenario optimum"
        add("farmer", quantity, years[i], 0, f"farmer: yields known to be {word}", i)
    mean_plan = solve(farmer_of_one_year(1)).x
    expected = solve(farmer_graph(), fixed_x=np.asarray(mean_plan)).cost.mean
    add("farmer", "EEV", expected, 0, "farmer: expected cost of the plan for mean yields (EEV)")
    value = expected - farmer.cost.mean
    add("farmer", "VSS", value, 0, "farmer: value of the stochastic solution (VSS)")
    wait = float(np.mean(years))
    add("farmer", "WS", wait, 2, "farmer: wait and see (WS)")
    information = farmer.cost.mean - wait
    add("farmer", "EVPI", information, 2, "farmer: value of perfect information (EVPI)")

    planning = "financial planning 3-period"
    result = optimum(planning, "optimal expected utility", financial_planning_graph(), 3, -1.0)
    for i, word in enumerate(("stocks", "bonds")):
        add(planning, "first stage", float(result.x[i]), 1, f"{planning}: first {word}", i)
    result = optimum("L-shaped example 1", "RP", l_shaped_graph(), 2)
    for i in range(2):
        add(
            "L-shaped example 1", "x1/x2", float(result.x[i]), 2, f"L-shaped example 1: x{i + 1}", i
        )
    optimum("LandS capacity expansion (3 scenarios)", "RP", capacity_mix_graph(), 3)
    optimum("air conditioner 3-stage", "optimum", air_conditioner_graph(), 0)
    optimum("hydro-thermal 3-stage", "optimum", hydrothermal_graph(), 2)
    optimum("hydro-thermal 2-stage", "optimum", hydrothermal_two_stage_graph(), 0)
    problem = "capacity expansion 2-stage (problem 5.2)"
    optimum(problem, "optimum", capacity_expansion_graph(), 2)
    problem = "capacity expansion 3-stage (problem 5.2)"
    optimum(problem, "optimum", capacity_expansion_three_stage_graph(), 2)
    return found
