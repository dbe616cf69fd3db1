"""Which way the feeder hangs: trees, paths and connected parts.

Enters: a ``Feeder`` and a mask of live lines. Leaves: a ``RadialTree``, or part numbers.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.network.feeder import Feeder

IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class RadialTree:
    """Buses reached from the roots over live lines.

    order : buses, every one after the bus it is fed from (roots first)
    parent_line, parent_bus : (n_bus,), -1 at a root and where no root leads
    root_of_bus : (n_bus,), -1 where no root leads
    has_loop : True if some live line between reached buses is in nobody's path
    """

    order: tuple[int, ...]
    parent_line: IntArray
    parent_bus: IntArray
    root_of_bus: IntArray
    has_loop: bool

    def path_lines(self, i_bus: int) -> tuple[int, ...]:
        """Lines from the root to a bus, in that order; () at a root."""
        lines: list[int] = []
        while self.parent_line[i_bus] >= 0:
            lines.append(int(self.parent_line[i_bus]))
            i_bus = int(self.parent_bus[i_bus])
        return tuple(reversed(lines))

    def path_buses(self, i_bus: int) -> tuple[int, ...]:
        """Buses from the root to a bus, both included."""
        buses = [i_bus]
        while self.parent_line[buses[-1]] >= 0:
            buses.append(int(self.parent_bus[buses[-1]]))
        return tuple(reversed(buses))


def radial_tree(feeder: Feeder, line_live: BoolArray, roots: Iterable[int]) -> RadialTree:
    """Breadth-first tree over the live lines.

    Parameters
    ----------
    feeder : Feeder
    line_live : (n_line,), lines that may be walked along
    roots : buses to begin from

    Returns
    -------
    RadialTree; two roots joined by live lines count as a loop
    """
    neighbours: list[list[tuple[int, int]]] = [[] for _ in range(feeder.n_bus)]
    for i_line in (int(i) for i in np.flatnonzero(line_live)):
        i, j = int(feeder.from_bus[i_line]), int(feeder.to_bus[i_line])
        neighbours[i].append((i_line, j))
        neighbours[j].append((i_line, i))
    parent_line = np.full(feeder.n_bus, -1, dtype=np.int64)
    parent_bus = np.full(feeder.n_bus, -1, dtype=np.int64)
    root_of_bus = np.full(feeder.n_bus, -1, dtype=np.int64)
    order = list(dict.fromkeys(int(root) for root in roots))
    root_of_bus[order] = order
    n_root = len(order)
    for i_bus in order:
        for i_line, other in neighbours[i_bus]:
            if root_of_bus[other] < 0:
                parent_line[other], parent_bus[other] = i_line, i_bus
                root_of_bus[other] = root_of_bus[i_bus]
                order.append(other)
    walked = sum(len(neighbours[i_bus]) for i_bus in order) // 2
    return RadialTree(
        order=tuple(order),
        parent_line=parent_line,
        parent_bus=parent_bus,
        root_of_bus=root_of_bus,
        has_loop=walked > len(order) - n_root,
    )


def connected_parts(feeder: Feeder, line_live: BoolArray, bus_live: BoolArray) -> IntArray:
    """Connected part of each live bus over live lines, which join live buses only.

    Returns
    -------
    array, shape (n_bus,): parts numbered from 0 by their first bus, -1 where the bus is dead
    """
    # Union-find, the lower bus as head of a group.
    head = list(range(feeder.n_bus))

    def head_of(i_bus: int) -> int:
        while head[i_bus] != i_bus:
            head[i_bus] = head[head[i_bus]]
            i_bus = head[i_bus]
        return i_bus

    ends = zip(feeder.from_bus[line_live].tolist(), feeder.to_bus[line_live].tolist(), strict=True)
    for i_bus, j_bus in ends:
        first, second = sorted((head_of(i_bus), head_of(j_bus)))
        head[second] = first
    heads = np.array([head_of(i_bus) for i_bus in range(feeder.n_bus)], dtype=np.int64)
    part = np.full(feeder.n_bus, -1, dtype=np.int64)
    live = np.flatnonzero(bus_live)
    part[live] = np.unique(heads[live], return_inverse=True)[1]
    return part
