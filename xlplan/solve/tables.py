"""What the engine looks up about a graph again and again, gathered once.

Enters: a ``ValueGraph``. Leaves: ``GraphTables``: bounds of every node's value, children of every
exit, domains.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.value_graph import Family, Member, ValueGraph
from xlplan.solve.cuts import DomainBox
from xlplan.solve.member_cache import MemberCache
from xlplan.solve.member_table import FEW_EXITS

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.integer]


@dataclass(frozen=True)
class ExitTable:
    """Exits of every member: weight (n_member, n_exit), true; child, child_if_gated (.., 2)."""

    weight: FloatArray
    child: IntArray
    child_if_gated: IntArray


@dataclass(frozen=True)
class FamilyTable:
    """Numbers of one family.

    value_lower, value_upper : (n_member,), valid bounds of every member's value
    is_fixed : True if every exit has one and the same child in all members where it counts
    child, child_if_gated : (n_exit, 2), that child where ``is_fixed``, else -1
    theta_lower : (n_exit,), lowest value of any child of the exit
    child_families : families that any exit leads to, ascending
    exits : what the exits are in every member, where there are few; else None
    """

    n_state: int
    value_lower: FloatArray
    value_upper: FloatArray
    is_fixed: bool
    child: IntArray
    child_if_gated: IntArray
    theta_lower: FloatArray
    box: DomainBox
    child_families: tuple[int, ...]
    exits: ExitTable | None


@dataclass(frozen=True)
class GraphTables:
    """Tables of every family, how many nodes there are, and rows of all programs."""

    families: tuple[FamilyTable, ...]
    n_node: int
    n_row: int


def gather_tables(graph: ValueGraph, cache: MemberCache) -> GraphTables:
    """Looks at every node once, children first.

    Raises ValueError where a column has no finite box, for no valid cut could then be made, or
    where ``graph.order`` is not children first or lacks a node.
    """
    lowers = [np.full(f.n_member, np.nan) for f in graph.families]
    uppers = [np.full(f.n_member, np.nan) for f in graph.families]
    n_exits = [len(f.exit_gate) for f in graph.families]
    children = [np.full((n, 2), -1, dtype=np.int64) for n in n_exits]
    gated = [np.full((n, 2), -1, dtype=np.int64) for n in n_exits]
    theta_lowers = [np.full(n, np.inf) for n in n_exits]
    is_fixed = [True] * len(graph.families)
    led_to: list[set[int]] = [set() for _ in graph.families]
    exit_tables = [
        ExitTable(
            np.zeros((f.n_member, n)),
            np.full((f.n_member, n, 2), -1, dtype=np.int64),
            np.full((f.n_member, n, 2), -1, dtype=np.int64),
        )
        if n <= FEW_EXITS
        else None
        for f, n in zip(graph.families, n_exits, strict=True)
    ]
    for i_family, i_member in graph.order.tolist():
        family = graph.families[i_family]
        member = cache.get(i_family, i_member)
        _check_boxes(family, member, i_member)
        lower = _exit_lower(family, member, i_member, lowers)
        active = member.exit_weight > 0.0
        theta_lowers[i_family] = np.where(
            active, np.minimum(theta_lowers[i_family], lower), theta_lowers[i_family]
        )
        exit_table = exit_tables[i_family]
        if exit_table is not None:
            exit_table.weight[i_member] = member.exit_weight / member.scale
            exit_table.child[i_member] = member.exit_child
            exit_table.child_if_gated[i_member] = member.exit_child_if_gated
        for table, now in (
            (children[i_family], member.exit_child),
            (gated[i_family], member.exit_child_if_gated),
        ):
            known = table[:, 1] >= 0
            led_to[i_family].update(np.unique(now[now[:, 1] >= 0, 0]).tolist())
            both = known & active
            if np.any(table[both] != now[both]):
                is_fixed[i_family] = False
            fresh = active & ~known
            table[fresh] = now[fresh]
        value_lower = member.value_lower
        if not np.isfinite(value_lower):
            columns = np.minimum(member.cost * member.col_lower, member.cost * member.col_upper)
            exits = member.exit_weight[active] @ lower[active] if active.any() else 0.0
            value_lower = (columns.sum() + member.offset + exits) / member.scale
        lowers[i_family][i_member] = value_lower
        uppers[i_family][i_member] = member.value_upper
    if any(np.isnan(lower).any() for lower in lowers):
        raise ValueError("the order of the graph lacks a node")
    tables = []
    for i, family in enumerate(graph.families):
        n_state = family.out_columns.shape[1] if n_exits[i] else len(graph.state_names[i])
        tables.append(
            FamilyTable(
                n_state=len(graph.state_names[i]) if len(graph.state_names) > i else n_state,
                value_lower=lowers[i],
                value_upper=uppers[i],
                is_fixed=is_fixed[i],
                child=children[i] if is_fixed[i] else np.full_like(children[i], -1),
                child_if_gated=gated[i] if is_fixed[i] else np.full_like(gated[i], -1),
                theta_lower=np.where(np.isfinite(theta_lowers[i]), theta_lowers[i], 0.0),
                box=_domain(graph, i, family),
                child_families=tuple(sorted(led_to[i])),
                exits=exit_tables[i],
            )
        )
    n_row = sum(family.program.n_row for family in graph.families)
    return GraphTables(tuple(tables), len(graph.order), n_row)


def _check_boxes(family: Family, member: Member, i_member: int) -> None:
    is_open = ~(np.isfinite(member.col_lower) & np.isfinite(member.col_upper))
    if is_open.any():
        names = family.program.col_names
        column = int(np.flatnonzero(is_open)[0])
        word = names[column] if names else str(column)
        raise ValueError(f"{family.name}, member {i_member}: column {word} has no finite box")


def _exit_lower(
    family: Family, member: Member, i_member: int, lowers: list[FloatArray]
) -> FloatArray:
    """Lower bound of the value at every exit that counts, (n_exit,); 0 elsewhere."""
    lower = np.full(len(member.exit_weight), np.inf)
    for table in (member.exit_child, member.exit_child_if_gated):
        for i_child in np.unique(table[table[:, 1] >= 0, 0]):
            here = (table[:, 0] == i_child) & (table[:, 1] >= 0)
            lower[here] = np.minimum(lower[here], lowers[i_child][table[here, 1]])
    active = member.exit_weight > 0.0
    if np.isnan(lower[active]).any() or np.isposinf(lower[active]).any():
        raise ValueError(
            f"{family.name}, member {i_member}: an exit has no child, or the order of the graph "
            "does not put children first"
        )
    return np.where(active, lower, 0.0)


def _domain(graph: ValueGraph, i_family: int, family: Family) -> DomainBox:
    """Domain of the states at a family's exits."""
    program = family.program
    out = family.out_columns
    if len(out):
        lower = program.col_lower[out].min(axis=0)
        upper = program.col_upper[out].max(axis=0)
    else:
        n_state = len(graph.state_names[i_family])
        lower, upper = np.zeros(n_state), np.zeros(n_state)
    return DomainBox(
        capacity_lower=graph.capacity_lower,
        capacity_upper=graph.capacity_upper,
        state_lower=lower,
        state_upper=upper,
        state_lower_matrix=graph.state_lower_matrix[i_family],
        state_upper_matrix=graph.state_upper_matrix[i_family],
    )


def clip_states(table: FamilyTable, states: FloatArray, capacities: FloatArray) -> FloatArray:
    """States (n, n_state), each at its own capacities (n, n_capacity), brought into their domain.

    Solvers leave it by a rounding error.
    """
    lower = capacities @ table.box.state_lower_matrix.T
    upper = capacities @ table.box.state_upper_matrix.T
    clipped: FloatArray = np.minimum(np.maximum(states, lower), np.maximum(upper, lower))
    return clipped
