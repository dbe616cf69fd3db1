"""Small value graphs for tests: published stochastic programs, random trees, renewal windows."""

from __future__ import annotations

import csv
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from xlplan.model.linear_program import LinearProgram, ProgramBuilder
from xlplan.model.value_graph import Family, Member, Root, ValueGraph

INF = float("inf")
DATA = Path(__file__).resolve().parents[2] / "validation" / "stochastic_programs"


def read_table(name: str) -> list[list[str]]:
    """Rows of a data file without its header."""
    with (DATA / name).open(newline="", encoding="utf-8") as handle:
        return list(csv.reader(handle))[1:]


def known_optimum(problem: str, quantity: str) -> float:
    """Published value."""
    for row in read_table("sp_known_optima.csv"):
        if row[0] == problem and row[1].startswith(quantity):
            return float(row[3])
    raise KeyError((problem, quantity))


@dataclass
class ListFamily(Family):
    """A family whose members are a list."""

    name: str
    program: LinearProgram
    members: list[Member]
    capacity_columns: np.ndarray
    out_columns: np.ndarray
    exit_gate: tuple[tuple[int, ...], ...]
    is_expanded: bool

    @property
    def n_member(self) -> int:  # type: ignore[override]
        return len(self.members)

    @property
    def patch(self) -> np.ndarray:  # type: ignore[override]
        return np.zeros(0, dtype=np.int64)

    def member(self, i_member: int) -> Member:
        return self.members[i_member]


def make_member(program: LinearProgram, in_columns, exits, upper=1e9, **changes) -> Member:
    """Member of a program; ``exits``: list of (weight, child, gated child or None)."""
    n = len(exits)
    child = np.array([e[1] for e in exits], dtype=np.int64).reshape(n, 2)
    gated = np.array([e[2] or (-1, -1) for e in exits], dtype=np.int64).reshape(n, 2)
    member = Member(
        cost=program.cost.copy(),
        offset=program.offset,
        col_lower=program.col_lower.copy(),
        col_upper=program.col_upper.copy(),
        row_lower=program.row_lower.copy(),
        row_upper=program.row_upper.copy(),
        in_columns=np.array(in_columns, dtype=np.int64),
        exit_weight=np.array([e[0] for e in exits], dtype=float),
        exit_child=child,
        exit_child_if_gated=gated,
        scale=1.0,
        patch_value=np.zeros(0),
        value_lower=-INF,
        value_upper=upper,
    )
    return replace(member, **changes)


def family(name, program, members, capacities, outs, gates=None, is_expanded=True) -> ListFamily:
    n_exit = len(members[0].exit_weight)
    n_state = len(members[0].in_columns)
    return ListFamily(
        name=name,
        program=program,
        members=members,
        capacity_columns=np.array(capacities, dtype=np.int64),
        out_columns=np.array(outs, dtype=np.int64).reshape(n_exit, n_state),
        exit_gate=gates or ((),) * n_exit,
        is_expanded=is_expanded,
    )


def graph(families, roots, first_stage, order, capacity_box, n_state, state_upper) -> ValueGraph:
    """Graph in which all families share a state between 0 and ``state_upper @ c``."""
    lower, upper = (np.array(side, dtype=float) for side in capacity_box)
    return ValueGraph(
        families=tuple(families),
        roots=tuple(roots),
        first_stage=first_stage,
        order=np.array(order, dtype=np.int64),
        capacity_names=tuple(f"c{i}" for i in range(len(lower))),
        capacity_lower=lower,
        capacity_upper=upper,
        state_names=tuple(tuple(f"s{j}" for j in range(n_state)) for _ in families),
        state_lower_matrix=tuple(np.zeros((n_state, len(lower))) for _ in families),
        state_upper_matrix=tuple(np.asarray(state_upper, dtype=float) for _ in families),
    )


def root(i_family, i_member, weight, n_x, state_matrix, state_offset, name="root") -> Root:
    """Root whose capacities are ``x`` itself."""
    return Root(
        name=name,
        family=i_family,
        member=i_member,
        weight=weight,
        capacity_matrix=np.eye(n_x),
        capacity_offset=np.zeros(n_x),
        state_matrix=np.asarray(state_matrix, dtype=float),
        state_offset=np.asarray(state_offset, dtype=float),
    )


# -- published stochastic programs -------------------------------------------------------------


def farmer_graph(is_integer: bool = False) -> ValueGraph:
    """Birge and Louveaux, section 1.1; one family, a member for each yield."""
    rows = {row[0]: row[1:4] for row in read_table("sp_farmer_data.csv")}
    yields = [float(v) for v in rows["mean yield"]]
    factors = [float(v) for v in rows["yield factor per scenario"][0].split("/")]
    land = float(rows["land available"][0])
    price, rest = rows["selling price"][2].split(" up to ")
    quota, low_price = rest.split(" t then ")
    sell = [float(rows["selling price"][0]), float(rows["selling price"][1]), float(price)]
    builder = ProgramBuilder()
    acres = [builder.add_column(f"acres {i}", 0.0, land) for i in range(3)]
    sold = [builder.add_column(f"sold {i}", 0.0, 20000.0, -sell[i]) for i in range(3)]
    sold_low = builder.add_column("sold at the low price", 0.0, 20000.0, -float(low_price))
    builder.col_upper[sold[2]] = float(quota)
    for i in range(2):
        buy = builder.add_column(f"bought {i}", 0.0, 20000.0, float(rows["purchase price"][i]))
        need = float(rows["minimum requirement"][i])
        builder.add_row(f"crop {i}", [(acres[i], 1.0), (buy, 1.0), (sold[i], -1.0)], lower=need)
    builder.add_row("beets", [(acres[2], 1.0), (sold[2], -1.0), (sold_low, -1.0)], lower=0.0)
    # The yield is a coefficient, so each yield is a family of its own.
    families, exits = [], []
    for f, factor in enumerate(factors):
        program = builder.build()
        value = program.value.copy()
        for i in range(3):
            value[(program.index == acres[i])] = yields[i] * factor
        program = replace(program, value=value)
        families.append(family(f"yield {f}", program, [make_member(program, [], [])], acres, []))
        exits.append((1.0 / len(factors), (f + 1, 0), None))
    top = ProgramBuilder()
    top.add_column("nothing", 0.0, 0.0)
    start = top.build()
    families.insert(
        0, family("spring", start, [make_member(start, [], exits)], [-1] * 3, [[]] * len(factors))
    )
    first = ProgramBuilder()
    for i in range(3):
        first.add_column(f"x{i}", 0.0, land, float(rows["planting cost"][i]), is_integer)
    first.add_row("land", [(i, 1.0) for i in range(3)], upper=land)
    return graph(
        families,
        [root(0, 0, 1.0, 3, np.zeros((0, 3)), [])],
        first.build(),
        [(1, 0), (2, 0), (3, 0), (0, 0)],
        ([0.0] * 3, [land] * 3),
        0,
        np.zeros((0, 3)),
    )


def hydrothermal_graph() -> ValueGraph:
    """Three weeks, inflow seen before each decision; one root for each first inflow."""
    rows = {row[0]: row[1] for row in read_table("sp_hydrothermal_3stage_data.csv")}
    demand = float(rows["demand each stage"])
    costs = [float(v) for v in rows["thermal cost by stage"].split("/")]
    top = float(rows["reservoir bounds"].split("-")[1])
    inflows = [
        float(v)
        for v in rows["inflow each stage (including the first, seen before deciding)"].split("/")
    ]
    families = []
    for t, cost in enumerate(costs):
        builder = ProgramBuilder()
        before = builder.add_column("before", 0.0, top)
        after = builder.add_column("after", 0.0, top)
        thermal = builder.add_column("thermal", 0.0, demand, cost)
        hydro = builder.add_column("hydro", 0.0, demand)
        spill = builder.add_column("spill", 0.0, 1000.0)
        builder.add_row("demand", [(thermal, 1.0), (hydro, 1.0)], demand, demand)
        builder.add_row(
            "water", [(after, 1.0), (before, -1.0), (hydro, 1.0), (spill, 1.0)], 0.0, 0.0
        )
        program = builder.build()
        exits = [] if t == 2 else [(1 / 3, (t + 1, i), None) for i in range(3)]
        members = []
        for inflow in inflows:
            side = program.row_lower.copy()
            side[1] = inflow
            members.append(
                make_member(program, [before], exits, row_lower=side, row_upper=side.copy())
            )
        families.append(family(f"week {t}", program, members, [-1], [[after]] * len(exits)))
    first = ProgramBuilder()
    first.add_column("one", 1.0, 1.0)
    start = float(rows["initial volume"])
    roots = [root(0, i, 1 / 3, 1, [[0.0]], [start], f"inflow {i}") for i in range(3)]
    order = [(t, i) for t in (2, 1, 0) for i in range(3)]
    return graph(families, roots, first.build(), order, ([1.0], [1.0]), 1, [[top]])


def capacity_expansion_graph() -> ValueGraph:
    """Problem 5.2 in two stages: plants bought now, demand seen, then run in three modes."""
    data = {row[0]: [float(v) for v in row[1:5]] for row in read_table(
        "sp_capacity_expansion_problem52_data.csv")}  # fmt: skip
    modes = read_table("sp_capacity_expansion_problem52_modes.csv")
    rules = {r[0]: r[1] for r in read_table("sp_capacity_expansion_problem52_rules.csv")}
    chances = [float(v.split()[0]) for v in rules["scenario probabilities"].split("/")]
    penalty = 1e6
    shares = [float(r[1].split("/")[0]) / float([*r[1].split("/"), "1"][1]) for r in modes]
    top = 20000.0
    builder = ProgramBuilder()
    plants = [builder.add_column(f"plant {i}", 0.0, top) for i in range(4)]
    unserved = builder.add_column("unserved", 0.0, top, penalty)
    run = {}
    for i in range(4):
        for j, share in enumerate(shares):
            run[i, j] = builder.add_column(
                f"run {i} {j}", 0.0, top, data["operating cost"][i] * share
            )
        builder.add_row(
            f"plant {i}", [(run[i, j], 1.0) for j in range(3)] + [(plants[i], -1.0)], upper=0.0
        )
    for j in range(3):
        builder.add_row(f"mode {j}", [(run[i, j], 1.0) for i in range(4)] + [(unserved, 1.0)])
    program = builder.build()
    members = []
    for s in range(2):
        side = program.row_lower.copy()
        side[4:] = [float(mode[2 + s]) for mode in modes]
        members.append(make_member(program, [], [], upper=1e12, row_lower=side))
    first = ProgramBuilder()
    for i in range(4):
        first.add_column(f"x{i}", 0.0, top, data["investment cost"][i])
    families = [family("use", program, members, plants, [])]
    roots = [root(0, s, chances[s], 4, np.zeros((0, 4)), [], f"demand {s}") for s in range(2)]
    return graph(
        families, roots, first.build(), [(0, 0), (0, 1)], ([0.0] * 4, [top] * 4), 0,
        np.zeros((0, 4)),
    )  # fmt: skip


def air_conditioner_graph() -> ValueGraph:
    """Three months of production and storage; the first demand is known."""
    rows = {row[0]: row[1] for row in read_table("sp_air_conditioner_data.csv")}
    builder = ProgramBuilder()
    before = builder.add_column("before", 0.0, 1000.0)
    after = builder.add_column("after", 0.0, 1000.0, float(rows["storage cost"]))
    normal = builder.add_column(
        "normal", 0.0, float(rows["normal capacity"]), float(rows["normal cost"])
    )
    overtime = builder.add_column("overtime", 0.0, 1000.0, float(rows["overtime cost (unlimited)"]))
    builder.add_row(
        "stock", [(before, 1.0), (normal, 1.0), (overtime, 1.0), (after, -1.0)], 0.0, 0.0
    )
    program = builder.build()
    later = [float(v) for v in rows["demand months 2 and 3"].split(" or ")]
    families = []
    for t in range(3):
        demands = [float(rows["demand month 1"])] if t == 0 else later
        exits = [] if t == 2 else [(0.5, (t + 1, i), None) for i in range(2)]
        members = [
            make_member(program, [before], exits, row_lower=np.array([d]), row_upper=np.array([d]))
            for d in demands
        ]
        families.append(family(f"month {t}", program, members, [-1], [[after]] * len(exits)))
    first = ProgramBuilder()
    first.add_column("one", 1.0, 1.0)
    order = [(2, 0), (2, 1), (1, 0), (1, 1), (0, 0)]
    return graph(
        families, [root(0, 0, 1.0, 1, [[0.0]], [0.0])], first.build(), order, ([1.0], [1.0]), 1,
        [[1000.0]],
    )  # fmt: skip


# -- invented ------------------------------------------------------------------------------------


def gate_graph(price_of_measure: float, damage: float = 10.0, chance: float = 0.5) -> ValueGraph:
    """One period with a failure that a measure avoids.

    Without it: ``chance * damage``; with it: its price, and the other child, whose value is 1.
    """

    def constant(name: str, value: float) -> ListFamily:
        builder = ProgramBuilder()
        builder.add_column("before", 0.0, 1.0)
        builder.add_column("cost", value, value, 1.0)
        program = builder.build()
        return family(name, program, [make_member(program, [0], [], upper=value)], [-1], [])

    builder = ProgramBuilder()
    before = builder.add_column("before", 0.0, 1.0)
    program = builder.build()
    member = make_member(program, [before], [(chance, (1, 0), (2, 0))], upper=damage)
    families = [
        family("plan", program, [member], [-1], [[before]], gates=((0,),), is_expanded=False),
        constant("failure", damage),
        constant("nothing", 1.0),
    ]
    first = ProgramBuilder()
    first.add_column("measure", 0.0, 1.0, price_of_measure, is_integer=True)
    return graph(
        families, [root(0, 0, 1.0, 1, [[0.0]], [0.5])], first.build(), [(1, 0), (2, 0), (0, 0)],
        ([0.0], [1.0]), 1, [[1.0]],
    )  # fmt: skip


def random_tree_graph(seed: int, n_stage: int = 4, n_branch: int = 2) -> ValueGraph:
    """Store and generator of bought size against random loads, with a fixed cost if bought."""
    rng = np.random.default_rng(seed)
    families = []
    for t in range(n_stage):
        builder = ProgramBuilder()
        before = [builder.add_column(f"before {j}", 0.0, 10.0) for j in range(2)]
        kwh, kw, fixed = (builder.add_column(n, 0.0, 10.0) for n in ("kwh", "kw", "fixed"))
        builder.col_upper[fixed] = 1.0
        after = [builder.add_column(f"after {j}", 0.0, 10.0) for j in range(2)]
        buy = builder.add_column("buy", 0.0, 20.0, float(rng.uniform(1.0, 6.0)))
        run = builder.add_column("run", 0.0, 10.0, 2.0)
        shed = builder.add_column("shed", 0.0, 20.0, 30.0)
        charge = builder.add_column("charge", 0.0, 10.0)
        draw = builder.add_column("draw", 0.0, 10.0)
        builder.add_row(
            "load", [(buy, 1.0), (run, 1.0), (shed, 1.0), (draw, 1.0), (charge, -1.0)], lower=0.0
        )
        builder.add_row(
            "energy", [(after[0], 1.0), (before[0], -1.0), (charge, -0.9), (draw, 1.0)], 0.0, 0.0
        )
        builder.add_row("size", [(after[0], 1.0), (kwh, -1.0)], upper=0.0, is_lazy=True)
        builder.add_row("kw", [(run, 1.0), (kw, -1.0)], upper=0.0, is_lazy=True)
        builder.add_row(
            "ramp", [(run, 1.0), (before[1], -1.0), (kw, -0.4)], upper=0.0, is_lazy=True
        )
        builder.add_row("output", [(after[1], 1.0), (run, -1.0)], 0.0, 0.0)
        program = builder.build()
        exits = []
        if t + 1 < n_stage:
            chances = rng.dirichlet(np.ones(n_branch))
            exits = [(float(c), (t + 1, i), None) for i, c in enumerate(chances)]
        members = []
        for _ in range(1 if t == 0 else n_branch):
            side = program.row_lower.copy()
            side[0] = rng.uniform(2.0, 12.0)
            high = program.col_upper.copy()
            high[buy] = rng.uniform(0.0, 8.0)
            members.append(
                make_member(
                    program, before, exits, row_lower=side, col_upper=high, upper=30.0 * 20 * 5
                )
            )
        outs = [after] * len(exits)
        families.append(family(f"stage {t}", program, members, [kwh, kw, -1], outs))
    first = ProgramBuilder()
    first.add_column("kwh", 0.0, 10.0, 0.8)
    first.add_column("kw", 0.0, 10.0, 1.5)
    first.add_column("fixed", 0.0, 1.0, 4.0, is_integer=True)
    first.add_row("site", [(1, 1.0), (2, -10.0)], upper=0.0)
    order = [(t, i) for t in reversed(range(n_stage)) for i in range(len(families[t].members))]
    upper = np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 0.0]])
    return graph(
        families,
        [root(0, 0, 1.0, 3, [[0.5, 0.0, 0.0], [0.0, 0.0, 0.0]], [0.0, 0.0])],
        first.build(),
        order,
        ([0.0] * 3, [10.0, 10.0, 1.0]),
        2,
        upper,
    )
