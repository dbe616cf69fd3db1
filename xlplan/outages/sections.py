"""The feeder cut at its devices.

Enters: a ``Feeder``. Leaves: ``Sections``, the section of every bus and line and the devices
between sections, hung as a tree from the source.

Definitions (model.md section 2). Every device cuts, whatever it is and whether its line is closed
or open. A line with devices at both ends is a section of its own. A line end without a device
belongs to the section of its bus; a closed line without any device joins its two buses.
A normally open line is cut as well, at its *open point*: its device where it has one (at both ends:
the line hangs between them as a section of its own), else at its to end, so that the line belongs
to the section of its from bus. Sections never merge across it, and the open point joins nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.network.feeder import Feeder
from xlplan.network.topology import radial_tree
from xlplan.study.study import Device

IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class SectionEdge:
    """One device of a closed line: it stands between the section of its bus and that of its line.

    ``is_from_end`` True if it stands at the line's from end.
    """

    line: int
    is_from_end: bool
    device: Device
    bus_section: int
    line_section: int


@dataclass(frozen=True)
class Sections:
    """Sections of a radial feeder, numbered by their first bus, sections of one line only last.

    section_of_bus : (n_bus,); section_of_line : (n_line,)
    labels : one per section, such as ``Section of bus B4`` (its bus nearest to the source; the
        earlier row where two are as near) or ``Line L3`` (no bus in it)
    edges : devices of closed lines
    parent_edge, parent_section : (n_section,), towards the source, -1 at the source's section and
        where no closed line leads (an open tie's own section)
    order : the sections that closed lines lead to, each after its parent
    """

    section_of_bus: IntArray
    section_of_line: IntArray
    labels: tuple[str, ...]
    edges: tuple[SectionEdge, ...]
    parent_edge: IntArray
    parent_section: IntArray
    order: tuple[int, ...]

    @property
    def n_section(self) -> int:
        """Number of sections."""
        return len(self.labels)

    def upstream(self, i_section: int) -> tuple[int, ...]:
        """Edges passed on the way from a section to the source, the nearest first."""
        edges: list[int] = []
        while self.parent_edge[i_section] >= 0:
            edges.append(int(self.parent_edge[i_section]))
            i_section = int(self.parent_section[i_section])
        return tuple(edges)

    def beyond(self, i_section: int) -> BoolArray:
        """(n_section,), True for the section and all that hangs below it."""
        is_beyond = np.zeros(self.n_section, dtype=bool)
        is_beyond[i_section] = True
        for other in self.order:
            parent = int(self.parent_section[other])
            if parent >= 0 and is_beyond[parent]:
                is_beyond[other] = True
        return is_beyond


def build_sections(feeder: Feeder) -> Sections:
    """Cuts a radial feeder at its devices and at the open points of its ties.

    Parameters
    ----------
    feeder : Feeder, radial with ties open

    Returns
    -------
    Sections
    """
    group = list(range(feeder.n_bus))

    def root(i_bus: int) -> int:
        while group[i_bus] != i_bus:
            i_bus = group[i_bus]
        return i_bus

    for i_line in range(feeder.n_line):
        if feeder.normally_open[i_line] or _has_device(feeder, i_line) != (False, False):
            continue
        first, second = sorted(
            (root(int(feeder.from_bus[i_line])), root(int(feeder.to_bus[i_line])))
        )
        group[second] = first
    heads = sorted({root(i_bus) for i_bus in range(feeder.n_bus)})
    number = {head: i for i, head in enumerate(heads)}
    section_of_bus = np.array([number[root(i)] for i in range(feeder.n_bus)], dtype=np.int64)

    section_of_line = np.zeros(feeder.n_line, dtype=np.int64)
    own_line: list[int] = []
    for i_line in range(feeder.n_line):
        has_from, has_to = _has_device(feeder, i_line)
        if has_from and has_to:
            section_of_line[i_line] = len(heads) + len(own_line)
            own_line.append(i_line)
        else:
            end = feeder.to_bus if has_from else feeder.from_bus
            section_of_line[i_line] = section_of_bus[end[i_line]]
    edges = _build_edges(feeder, section_of_bus, section_of_line)
    n_section = len(heads) + len(own_line)
    parent_edge, parent_section, order = _hang_from_source(
        edges, n_section, int(section_of_bus[feeder.source])
    )
    depth = _bus_depth(feeder)
    labels = []
    for i_section in range(len(heads)):
        members = np.flatnonzero(section_of_bus == i_section)
        nearest = members[np.argmin(depth[members])]
        labels.append(f"Section of bus {feeder.bus_ids[nearest]}")
    labels += [f"Line {feeder.line_ids[i_line]}" for i_line in own_line]
    return Sections(
        section_of_bus=section_of_bus,
        section_of_line=section_of_line,
        labels=tuple(labels),
        edges=edges,
        parent_edge=parent_edge,
        parent_section=parent_section,
        order=order,
    )


def _has_device(feeder: Feeder, i_line: int) -> tuple[bool, bool]:
    """Whether the from end and the to end of a line carry a device."""
    return (
        feeder.from_device[i_line] is not Device.NONE,
        feeder.to_device[i_line] is not Device.NONE,
    )


def _build_edges(
    feeder: Feeder, section_of_bus: IntArray, section_of_line: IntArray
) -> tuple[SectionEdge, ...]:
    """Devices of closed lines, in the order of the lines, from ends first."""
    edges = []
    for i_line in np.flatnonzero(~feeder.normally_open):
        for is_from_end, device, end in (
            (True, feeder.from_device[i_line], feeder.from_bus[i_line]),
            (False, feeder.to_device[i_line], feeder.to_bus[i_line]),
        ):
            if device is not Device.NONE:
                edges.append(
                    SectionEdge(
                        line=int(i_line),
                        is_from_end=is_from_end,
                        device=device,
                        bus_section=int(section_of_bus[end]),
                        line_section=int(section_of_line[i_line]),
                    )
                )
    return tuple(edges)


def _hang_from_source(
    edges: tuple[SectionEdge, ...], n_section: int, root: int
) -> tuple[IntArray, IntArray, tuple[int, ...]]:
    """Parent edge and section of each section and their order, walking away from the source."""
    touching: list[list[tuple[int, int]]] = [[] for _ in range(n_section)]
    for i_edge, edge in enumerate(edges):
        touching[edge.bus_section].append((i_edge, edge.line_section))
        touching[edge.line_section].append((i_edge, edge.bus_section))
    parent_edge = np.full(n_section, -1, dtype=np.int64)
    parent_section = np.full(n_section, -1, dtype=np.int64)
    order, reached = [root], {root}
    for i_section in order:
        for i_edge, other in touching[i_section]:
            if other not in reached:
                reached.add(other)
                parent_edge[other], parent_section[other] = i_edge, i_section
                order.append(other)
    return parent_edge, parent_section, tuple(order)


def _bus_depth(feeder: Feeder) -> IntArray:
    """Lines between each bus and the source, n_bus where none leads there; shape (n_bus,)."""
    tree = radial_tree(feeder, ~feeder.normally_open, [feeder.source])
    depth = np.full(feeder.n_bus, feeder.n_bus, dtype=np.int64)
    for i_bus in tree.order:
        above = tree.parent_bus[i_bus]
        depth[i_bus] = 0 if above < 0 else depth[above] + 1
    return depth
