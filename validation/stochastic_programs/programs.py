"""Published stochastic programs as graphs for the engine, beside those of tests/solve/graphs.py.

Matrices are those of the publications. Where a second stage has no complete recourse of its own an
unserved quantity at a price that never pays is added, and said.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from tests.solve.graphs import (
    ListFamily,
    family,
    farmer_graph,
    graph,
    make_member,
    read_table,
    root,
)
from xlplan.model.linear_program import ProgramBuilder
from xlplan.model.value_graph import ValueGraph

UNSERVED_PRICE = 1000.0
"""Far above every other price of the problem it is used in, so that nothing is left unserved."""


def table(name: str) -> dict[str, str]:
    """Second column by the first."""
    return {row[0]: row[1] for row in read_table(name)}


def farmer_of_one_year(i_scenario: int) -> ValueGraph:
    """The farmer who knows that the yield is that of one scenario (above, average, below)."""
    whole = farmer_graph()
    spring = whole.families[0]
    assert isinstance(spring, ListFamily)
    weight = np.zeros(3)
    weight[i_scenario] = 1.0
    known = replace(spring, members=[replace(spring.members[0], exit_weight=weight)])
    return replace(whole, families=(known, *whole.families[1:]))


def l_shaped_graph() -> ValueGraph:
    """Two variables, then two recourse variables; costs and bounds by scenario."""
    scenarios = ((0.4, (500.0, 100.0), (-24.0, -28.0)), (0.6, (300.0, 300.0), (-28.0, -32.0)))
    builder = ProgramBuilder()
    x = [builder.add_column(f"x{i}", 0.0, 120.0) for i in range(2)]
    y = [builder.add_column(f"y{i}", 0.0, 500.0) for i in range(2)]
    builder.add_row("one", [(y[0], 6.0), (y[1], 10.0), (x[0], -60.0)], upper=0.0)
    builder.add_row("two", [(y[0], 8.0), (y[1], 5.0), (x[1], -80.0)], upper=0.0)
    program = builder.build()
    members = []
    for _, most, cost in scenarios:
        upper, costs = program.col_upper.copy(), program.cost.copy()
        upper[y], costs[y] = most, cost
        members.append(make_member(program, [], [], col_upper=upper, cost=costs))
    first = ProgramBuilder()
    first.add_column("x0", 40.0, 120.0, 100.0)
    first.add_column("x1", 20.0, 120.0, 150.0)
    first.add_row("sum", [(0, 1.0), (1, 1.0)], upper=120.0)
    roots = [
        root(0, s, scenarios[s][0], 2, np.zeros((0, 2)), [], f"scenario {s}") for s in range(2)
    ]
    return graph(
        [family("recourse", program, members, x, [])],
        roots,
        first.build(),
        [(0, 0), (0, 1)],
        ([40.0, 20.0], [120.0, 120.0]),
        0,
        np.zeros((0, 2)),
    )


def capacity_mix_graph() -> ValueGraph:
    """Four technologies, three modes of demand, the first of them random (Louveaux and Smeers)."""
    rows = read_table("sp_lands_data.csv")
    scalars = table("sp_lands_scalars.csv")
    invest = [float(row[1]) for row in rows]
    costs = [[float(v) for v in row[2:5]] for row in rows]
    levels, chances = scalars["demand mode 1"].split(" with probability ")
    demands = [float(v) for v in levels.split("/")]
    weights = [float(v) for v in chances.split("/")]
    others = [float(scalars["demand mode 2"]), float(scalars["demand mode 3"])]
    budget = float(scalars["investment budget at most (cost-weighted)"])
    top = 40.0
    builder = ProgramBuilder()
    x = [builder.add_column(f"x{i}", 0.0, top) for i in range(4)]
    unserved = builder.add_column("unserved", 0.0, 100.0, UNSERVED_PRICE)
    y = [
        [builder.add_column(f"y{i}{j}", 0.0, top, costs[i][j]) for j in range(3)] for i in range(4)
    ]
    for i in range(4):
        builder.add_row(f"plant {i}", [*((y[i][j], 1.0) for j in range(3)), (x[i], -1.0)], upper=0)
    for j in range(3):
        builder.add_row(f"mode {j}", [*((y[i][j], 1.0) for i in range(4)), (unserved, 1.0)])
    program = builder.build()
    members = []
    for demand in demands:
        side = program.row_lower.copy()
        side[4:] = [demand, *others]
        members.append(make_member(program, [], [], row_lower=side))
    first = ProgramBuilder()
    for i in range(4):
        first.add_column(f"x{i}", 0.0, top, invest[i])
    least = float(scalars["total capacity at least"])
    first.add_row("capacity", [(i, 1.0) for i in range(4)], lower=least)
    first.add_row("budget", [(i, invest[i]) for i in range(4)], upper=budget)
    roots = [root(0, s, weights[s], 4, np.zeros((0, 4)), [], f"demand {s}") for s in range(3)]
    return graph(
        [family("run", program, members, x, [])],
        roots,
        first.build(),
        [(0, s) for s in range(3)],
        ([0.0] * 4, [top] * 4),
        0,
        np.zeros((0, 4)),
    )


def financial_planning_graph() -> ValueGraph:
    """Stocks and bonds over three periods towards a goal; as a minimisation, utility negative.

    The first allocation is ``x``, the state is wealth. What is earned is a coefficient, so both
    outcomes of a period are columns of their own and exits hand on one of them each.
    """
    rows = {row[0]: row[1] for row in read_table("sp_financial_planning_data.csv")}
    start, goal = float(rows["initial wealth"]), float(rows["goal"])
    returns = [
        [float(v) for v in rows[f"{word} return stocks / bonds"].split("/")]
        for word in ("good", "bad")
    ]
    reward = float(rows["reward per unit of surplus"])
    penalty = float(rows["penalty per unit of shortfall"])
    top = 2.0 * start
    builder = ProgramBuilder()
    before = builder.add_column("wealth", 0.0, top)
    held = [builder.add_column(name, 0.0, top) for name in ("stocks", "bonds")]
    after = [builder.add_column(name, 0.0, top) for name in ("good", "bad")]
    builder.add_row("allocate", [(held[0], 1.0), (held[1], 1.0), (before, -1.0)], 0.0, 0.0)
    for outcome, earned in zip(after, returns, strict=True):
        terms = [(held[0], earned[0]), (held[1], earned[1]), (outcome, -1.0)]
        builder.add_row("earn", terms, 0.0, 0.0)
    program = builder.build()
    families = []
    for t in range(2):
        exits = [(0.5, (t + 1, 0), None)] * 2
        member = make_member(program, [before], exits)
        outs = [[column] for column in after]
        families.append(family(f"period {t + 1}", program, [member], [-1, -1], outs))
    last = ProgramBuilder()
    wealth = last.add_column("wealth", 0.0, top)
    surplus = last.add_column("surplus", 0.0, top, -reward)
    shortfall = last.add_column("shortfall", 0.0, top, penalty)
    last.add_row("goal", [(wealth, 1.0), (surplus, -1.0), (shortfall, 1.0)], goal, goal)
    end = last.build()
    families.append(family("goal", end, [make_member(end, [wealth], [])], [-1, -1], []))
    first = ProgramBuilder()
    for name in ("stocks", "bonds"):
        first.add_column(name, 0.0, start)
    first.add_row("wealth", [(0, 1.0), (1, 1.0)], start, start)
    roots = [
        root(0, 0, 0.5, 2, [earned], [0.0], word)
        for word, earned in zip(("good", "bad"), returns, strict=True)
    ]
    return graph(
        families,
        roots,
        first.build(),
        [(2, 0), (1, 0), (0, 0)],
        ([0.0, 0.0], [start, start]),
        1,
        [[2.0, 2.0]],
    )


def hydrothermal_two_stage_graph() -> ValueGraph:
    """Water kept or used before the second inflow is seen."""
    rows = table("sp_hydrothermal_2stage_data.csv")
    demand, cost = float(rows["demand each stage"]), float(rows["thermal cost"])
    top = float(rows["reservoir bounds"].split("-")[1])
    inflows = [
        [float(rows["inflow stage 1"])],
        [float(v) for v in rows["inflow stage 2"].split(" or ")],
    ]
    families = []
    for t in range(2):
        builder = ProgramBuilder()
        before = builder.add_column("before", 0.0, top)
        after = builder.add_column("after", 0.0, top)
        thermal = builder.add_column("thermal", 0.0, demand, cost)
        hydro = builder.add_column("hydro", 0.0, demand)
        spill = builder.add_column("spill", 0.0, 100.0)
        builder.add_row("demand", [(thermal, 1.0), (hydro, 1.0)], demand, demand)
        builder.add_row(
            "water", [(after, 1.0), (before, -1.0), (hydro, 1.0), (spill, 1.0)], 0.0, 0.0
        )
        program = builder.build()
        exits = [] if t == 1 else [(0.5, (1, i), None) for i in range(2)]
        members = []
        for inflow in inflows[t]:
            side = program.row_lower.copy()
            side[1] = inflow
            members.append(
                make_member(program, [before], exits, row_lower=side, row_upper=side.copy())
            )
        families.append(family(f"stage {t}", program, members, [-1], [[after]] * len(exits)))
    first = ProgramBuilder()
    first.add_column("one", 1.0, 1.0)
    start = float(rows["initial volume"])
    return graph(
        families,
        [root(0, 0, 1.0, 1, [[0.0]], [start])],
        first.build(),
        [(1, 0), (1, 1), (0, 0)],
        ([1.0], [1.0]),
        1,
        [[top]],
    )


def capacity_expansion_three_stage_graph() -> ValueGraph:
    """Problem 5.2 in three stages: plants bought now and again after the first demand is seen."""
    data = {
        row[0]: [float(v) for v in row[1:5]]
        for row in read_table("sp_capacity_expansion_problem52_data.csv")
    }
    modes = read_table("sp_capacity_expansion_problem52_modes.csv")
    rules = table("sp_capacity_expansion_problem52_rules.csv")
    chances = [float(v.split()[0]) for v in rules["scenario probabilities"].split("/")]
    shares = [float(r[1].split("/")[0]) / float([*r[1].split("/"), "1"][1]) for r in modes]
    penalty, top = 1e5, 20000.0
    families = []
    for t in range(2):
        builder = ProgramBuilder()
        first_bought = [builder.add_column(f"plant {i}", 0.0, top) for i in range(4)]
        before = [builder.add_column(f"later {i}", 0.0, top) for i in range(4)]
        after = [builder.add_column(f"after {i}", 0.0, top) for i in range(4)]
        unserved = builder.add_column("unserved", 0.0, top, penalty)
        run = {
            (i, j): builder.add_column(
                f"run {i} {j}", 0.0, top, data["operating cost"][i] * shares[j]
            )
            for i in range(4)
            for j in range(3)
        }
        for i in range(4):
            # Bought in the last stage it could never run, so only the first of the two buys.
            most, cost = (top, data["investment cost"][i]) if t == 0 else (0.0, 0.0)
            bought = builder.add_column(f"bought {i}", 0.0, most, cost)
            terms = [(after[i], 1.0), (before[i], -1.0), (bought, -1.0)]
            builder.add_row(f"stock {i}", terms, 0.0, 0.0)
            there = [(first_bought[i], -1.0), (before[i], -1.0)]
            builder.add_row(f"plant {i}", [*((run[i, j], 1.0) for j in range(3)), *there], upper=0)
        modes_from = len(builder.row_lower)
        for j in range(3):
            builder.add_row(f"mode {j}", [*((run[i, j], 1.0) for i in range(4)), (unserved, 1.0)])
        program = builder.build()
        exits = [] if t == 1 else [(chances[s], (1, s), None) for s in range(2)]
        members = []
        for s in range(2):
            side = program.row_lower.copy()
            side[modes_from:] = [float(mode[2 + s]) for mode in modes]
            members.append(make_member(program, before, exits, upper=1e12, row_lower=side))
        families.append(
            family(f"stage {t + 2}", program, members, [*first_bought, -1], [after] * len(exits))
        )
    first = ProgramBuilder()
    for i in range(4):
        first.add_column(f"x{i}", 0.0, top, data["investment cost"][i])
    first.add_column("one", 1.0, 1.0)
    nothing = np.zeros((4, 5))
    roots = [root(0, s, chances[s], 5, nothing, np.zeros(4), f"first demand {s}") for s in range(2)]
    upper = np.zeros((4, 5))
    upper[:, 4] = top
    return graph(
        families,
        roots,
        first.build(),
        [(1, 0), (1, 1), (0, 0), (0, 1)],
        ([0.0] * 4 + [1.0], [top] * 4 + [1.0]),
        4,
        upper,
    )
