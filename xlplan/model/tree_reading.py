"""Operation of a solved whole tree as named arrays: columns back to meaning."""

from __future__ import annotations

from dataclasses import fields

import numpy as np
from pulp import LpAffineExpression as Expression

from xlplan.model.dispatch import BoolArray, Dispatch, FloatArray, TreeSegment
from xlplan.model.tree_account import Gate
from xlplan.model.tree_columns import OperatedPeriod
from xlplan.model.tree_purchases import value_of
from xlplan.model.whole_tree import TreeNode, WholeTree


def read_segments(tree: WholeTree) -> tuple[TreeSegment, ...]:
    """Operation in every node that the purchases leave possible.

    Parameters
    ----------
    tree : WholeTree, solved

    Returns
    -------
    tuple of TreeSegment, parents before children; of an avoided failure only the branch that holds
    """
    is_hardened = tree.purchases.read().is_hardened
    position: dict[int, int] = {-1: -1}
    segments: list[TreeSegment] = []
    for i_node, node in enumerate(tree.nodes):
        if not _hold(node.gates, is_hardened):
            continue
        position[i_node] = len(segments)
        segments.append(_segment(node, position[node.i_parent], is_hardened))
    return tuple(segments)


def _segment(node: TreeNode, i_parent: int, is_hardened: BoolArray) -> TreeSegment:
    """One node as arrays."""
    ends = sum(chance for chance, gates in node.ends if _hold(gates, is_hardened))
    return TreeSegment(
        i_window=node.i_window,
        kind=node.kind,
        i_scenario=node.i_scenario,
        i_parent=i_parent,
        start_period=node.start_period,
        n_period=len(node.periods),
        weight=node.chance,
        period_weight=node.chance * np.array(node.period_chance),
        end_weight=node.chance * ends,
        dispatch=read_dispatch(node.periods),
    )


def read_dispatch(periods: list[OperatedPeriod]) -> Dispatch:
    """Values of consecutive periods."""
    columns: dict[str, FloatArray] = {}
    for item in fields(Dispatch):
        rows = [getattr(period, item.name) for period in periods]
        columns[item.name] = np.array(
            [[_value(v) for v in row] if isinstance(row, list) else _value(row) for row in rows],
            dtype=float,
        )
    return Dispatch(**columns)


def _value(expression: Expression | None) -> float:
    """Value of an expression; nan where there is none."""
    return float("nan") if expression is None else value_of(expression)


def _hold(gates: tuple[Gate, ...], is_hardened: BoolArray) -> bool:
    """Whether the measures bought are such that a branch with these gates is followed."""
    return all(any(is_hardened[i] for i in gate.measures) == gate.is_avoided for gate in gates)
