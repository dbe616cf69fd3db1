"""Checks of the feeder's shape, and the way to everything that knows which way it hangs.

Enters: a ``Study``. Leaves: findings, each at the cell of the record it is about.
*Radial* here: with every normally open line open, each bus has exactly one path to the source.
Trees and paths are in ``tree.py``, the voltage with nothing flowing in ``no_load_voltage.py``.
"""

from __future__ import annotations

from collections.abc import Callable

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level
from xlplan.network.no_load_voltage import check_no_load_voltage, no_load_v_sq
from xlplan.network.tree import RadialTree, connected_parts, radial_tree
from xlplan.study.outline import Outline, OutlineLine
from xlplan.study.study import NOWHERE, Line, Study

__all__ = [
    "RadialTree",
    "check_no_load_voltage",
    "check_radial",
    "connected_parts",
    "no_load_v_sq",
    "radial_tree",
]


def check_radial(study: Study | Outline) -> list[Finding]:
    """Faults of the feeder's shape: source, self loops, parallel lines, loops, loose buses.

    References that do not exist are passed over: the workbook's checks report them.
    """
    buses = list(dict.fromkeys(bus.bus for bus in study.buses))
    findings: list[Finding] = []
    group = {bus: bus for bus in buses}

    def root(bus: str) -> str:
        while group[bus] != bus:
            group[bus] = group[group[bus]]
            bus = group[bus]
        return bus

    between: dict[frozenset[str], Line | OutlineLine] = {}
    for line in study.lines:
        if line.from_bus not in group or line.to_bus not in group:
            continue
        if line.from_bus == line.to_bus:
            findings.append(
                _line_fault(
                    line,
                    Code.SELF_LOOP,
                    "to_bus",
                    line.to_bus,
                    f"line {line.line} begins and ends at bus {line.to_bus}.",
                    "Give the two different buses that it joins.",
                )
            )
            continue
        if line.normally_open:
            continue
        ends = frozenset((line.from_bus, line.to_bus))
        if ends in between:
            findings.append(
                _line_fault(
                    line,
                    Code.PARALLEL_LINE,
                    "to_bus",
                    line.to_bus,
                    f"line {line.line} runs beside line {between[ends].line} between the same "
                    "buses, both closed.",
                    "Enter them as one line, or mark one as normally open.",
                )
            )
            continue
        between[ends] = line
        if root(line.from_bus) == root(line.to_bus):
            findings.append(
                _line_fault(
                    line,
                    Code.LOOP,
                    "normally_open",
                    "",
                    f"line {line.line} from {line.from_bus} to {line.to_bus} closes a loop; the "
                    "feeder has to be radial with its ties open.",
                    "Mark one line of the loop as normally open.",
                )
            )
            continue
        group[root(line.from_bus)] = root(line.to_bus)
    return findings + _source_and_loose_buses(study, buses, root)


def _line_fault(
    line: Line | OutlineLine, code: Code, key: str, value: str, message: str, hint: str
) -> Finding:
    """A fault at one cell of a line's row."""
    return Finding(
        level=Level.FAULT,
        code=code,
        sheet=line.origin.sheet,
        cell=line.origin.cell(key),
        key=key,
        value=value,
        message=message,
        hint=hint,
    )


def _source_and_loose_buses(
    study: Study | Outline, buses: list[str], root: Callable[[str], str]
) -> list[Finding]:
    """The source bus has to exist, and every other bus has to reach it."""
    source = study.settings.source_bus
    if source not in buses:
        origin = study.settings.origin_of.get("source_bus", NOWHERE)
        return [
            Finding(
                level=Level.FAULT,
                code=Code.SOURCE_UNKNOWN,
                sheet=origin.sheet,
                cell=origin.cell("source_bus"),
                key="source_bus",
                value=source,
                message=f"the feeder needs exactly one source; {source or 'a blank'} is no bus.",
                hint="Give the bus that the substation feeds.",
            )
        ]
    loose: dict[str, list[str]] = {}
    for bus in buses:
        if root(bus) != root(source):
            loose.setdefault(root(bus), []).append(bus)
    named = [(bus.bus, bus.origin) for bus in study.buses]
    origin_of = dict(reversed(named))
    findings = []
    for part in loose.values():
        origin = origin_of[part[0]]
        others = f" (with it: {', '.join(part[1:])})" if len(part) > 1 else ""
        findings.append(
            Finding(
                level=Level.FAULT,
                code=Code.NOT_CONNECTED,
                sheet=origin.sheet,
                cell=origin.cell("bus"),
                key="bus",
                value=part[0],
                message=f"bus {part[0]}{others} has no path to the source {source} while ties are "
                "open.",
                hint="Add the missing line, or take the bus out.",
            )
        )
    return findings
