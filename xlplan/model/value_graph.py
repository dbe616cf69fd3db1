"""What the decomposition solves: a weighted, acyclic graph of linear programs with named states.

A *family* is one constraint matrix shared by several *members* (the periods in which a scenario
may begin, say): costs and bounds differ, the matrix does not. One member of one family is a *node*
of the graph, and has a value function of its incoming state ``s`` and the capacities ``c``:

    value(s, c) = (1 / scale) * min  cost @ y + offset + sum_e weight_e * theta_e
                  subject to the rows and bounds of the member,
                             y[in_columns] = s,   y[capacity_columns] = c,
                             theta_e >= value of the child of exit e at (y[out_columns[e]], c)

An *exit* hands the state in ``out_columns[e]`` on to a child. A *gated* exit has two children: the
capacities named in ``gate`` sum to 0 or 1; at 0 its value is that of ``child``, at 1 that of
``child_if_gated`` (a failure that a measure avoids). A family with ``exit_columns`` has columns of
``y`` that stand for the values of its exits, so that rows may hold them (an aim that is not their
weighted sum alone). ``first_stage`` decides ``x`` once; every
*root* is a node with a weight, its own map from ``x`` to the capacities in service, and a map from
capacities to its initial state:

    min  first_stage(x) + sum_r weight_r * value_r(state_matrix c_r + state_offset, c_r),
         c_r = capacity_matrix x + capacity_offset

The engine (``xlplan.solve``) knows these records and no bus and no kW.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.model.linear_program import LinearProgram
from xlplan.model.risk_aim import RiskAim

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class Member:
    """Numbers of one member of a family; arrays are full length and owned by the caller.

    in_columns : (n_state,), column that holds each incoming state component, -1 where the member
        leaves that component free (it then belongs to no cut)
    exit_weight : (n_exit,), 0 where the exit does not count for this member
    exit_child : (n_exit, 2), family and member of the child, -1 where there is none
    exit_child_if_gated : (n_exit, 2), likewise for gated exits
    scale : positive; costs, offset and weights above are the true ones times ``scale``
        (the same multipliers then serve all members of a family)
    patch_value : (n_patch,), this member's values of the matrix entries ``Family.patch``
    value_lower, value_upper : valid bounds of the node's value in its state and capacity box;
        ``-inf`` lets the engine compute the lower one
    """

    cost: FloatArray
    offset: float
    col_lower: FloatArray
    col_upper: FloatArray
    row_lower: FloatArray
    row_upper: FloatArray
    in_columns: IntArray
    exit_weight: FloatArray
    exit_child: IntArray
    exit_child_if_gated: IntArray
    scale: float
    patch_value: FloatArray
    value_lower: float
    value_upper: float


@dataclass(frozen=True)
class Nest:
    """Says that each member of a family is the one before without some rows, columns and exits.

    A row becomes free, a column is held at one value and has no cost, an exit loses its weight, and
    stays so. While a column counts, so does every row and exit that holds it, rows that count in
    member 0 alone excepted; when it no longer counts it is in no row that does, unless it holds the
    incoming state of that member. Then the terms of a cut are sums over what is left, and one set
    of multipliers gives the cuts of all later members at the cost of a few.

    row_last (n_row,), col_last (n_col,), exit_last (n_exit,) : last member in which each counts
    """

    row_last: IntArray
    col_last: IntArray
    exit_last: IntArray


@dataclass(frozen=True)
class Outcomes:
    """A root's aim at one solution: the exits, and the outcome that none of them is taken.

    aim : RiskAim; chance (n_exit + 1,), the last one that of no exit; cost (n_exit + 1,), what has
    been paid by then, to which the value of an exit is added
    """

    aim: RiskAim
    chance: FloatArray
    cost: FloatArray

    def value(self, theta: FloatArray) -> float:
        """The aim if the exits are worth ``theta``, (n_exit,)."""
        return self.aim.value(self.chance, self._with(theta))

    def slope(self, theta: FloatArray) -> FloatArray:
        """Factor by which each exit counts beyond its chance, (n_exit,)."""
        slope: FloatArray = self.aim.slope(self.chance, self._with(theta))[:-1]
        return slope

    def _with(self, theta: FloatArray) -> FloatArray:
        cost: FloatArray = self.cost + np.concatenate([theta, [0.0]])
        return cost


class Family:
    """One constraint matrix and its members. Subclasses must be picklable.

    A few matrix entries may differ between members (a load's share of its section, the availability
    of a plant that can be bought): ``patch`` holds their positions in ``program.value``.

    Attributes
    ----------
    name : str, for messages
    program : LinearProgram, its costs and bounds are those of no member in particular; bounds of
        state and capacity columns are the finite boxes in which values are asked for
    n_member : int
    capacity_columns : (n_capacity,), -1 where a capacity plays no part in the family's own rows
        (it still reaches the children)
    out_columns : (n_exit, n_state), columns of the state at each exit
    exit_gate : one tuple of capacity positions per exit, () where not gated
    patch : (n_patch,), positions in ``program.value`` that vary by member; mostly empty
    is_expanded : True if the cost of following a plan expands the exits that lead to this family
        over all of them (outage events: cheap), False if it samples them
    nest : Nest, or None where the members differ in other ways
    exit_columns : (n_exit,) columns that are the values ``theta`` of the exits, or None. Their cost
        comes on top of the weight of the exit; the two and what rows add are never below 0
        together, and the column's box plays no part
    aim : RiskAim of a family of roots that ``outcomes`` is about, or None
    """

    name: str
    program: LinearProgram
    n_member: int
    capacity_columns: IntArray
    out_columns: IntArray
    exit_gate: tuple[tuple[int, ...], ...]
    patch: IntArray
    is_expanded: bool
    nest: Nest | None = None
    exit_columns: IntArray | None = None
    aim: RiskAim | None = None

    def member(self, i_member: int) -> Member:
        """Numbers of one member."""
        raise NotImplementedError

    def outcomes(self, y: FloatArray) -> Outcomes | None:
        """What the aim of a root is taken over; None where that is the expectation alone."""
        return None


@dataclass(frozen=True)
class Root:
    """One node whose value enters the first stage.

    beside : a node (family, member) that is solved where the root is, for the sake of its cuts,
        where those of the root serve no other node; or None
    """

    name: str
    family: int
    member: int
    weight: float
    capacity_matrix: FloatArray
    capacity_offset: FloatArray
    state_matrix: FloatArray
    state_offset: FloatArray
    beside: tuple[int, int] | None = None


@dataclass(frozen=True)
class ValueGraph:
    """Families, roots and the first stage.

    ``first_stage`` has the columns ``x`` with finite bounds, integers allowed;
    ``order``: every node as (family, member), children before parents (the graph is acyclic);
    ``capacity_lower``, ``capacity_upper``: finite box of the capacities;
    ``state_lower_matrix``, ``state_upper_matrix``: the state's domain as functions of the
    capacities, into which states are clipped before they are passed on.
    """

    families: tuple[Family, ...]
    roots: tuple[Root, ...]
    first_stage: LinearProgram
    order: IntArray
    capacity_names: tuple[str, ...]
    capacity_lower: FloatArray
    capacity_upper: FloatArray
    state_names: tuple[tuple[str, ...], ...]
    """Per family: names of its state components (families of one window share them)."""
    state_lower_matrix: tuple[FloatArray, ...]
    state_upper_matrix: tuple[FloatArray, ...]
    """Per family: lower <= s <= upper with lower = matrix @ c, (n_state, n_capacity)."""
