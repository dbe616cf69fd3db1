"""The feeder's shape alone: what can be told of a study while figures elsewhere are faulty.

A fault in a price must not keep a loop from being found in the same pass. Enters: checked tables.
Leaves: an ``Outline`` where every name and end that makes up the shape is sound.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level, Origin
from xlplan.workbook.checked_study import CheckedStudy
from xlplan.workbook.folding import fold


@dataclass(frozen=True)
class OutlineBus:
    """A bus by its name."""

    bus: str
    origin: Origin


@dataclass(frozen=True)
class OutlineLine:
    """A line by its ends."""

    line: str
    from_bus: str
    to_bus: str
    normally_open: bool
    origin: Origin


@dataclass(frozen=True)
class OutlineSettings:
    """The source, and where it was typed."""

    source_bus: str
    origin_of: dict[str, Origin]


@dataclass(frozen=True)
class Outline:
    """Buses, lines and source: enough to say whether the feeder is radial."""

    settings: OutlineSettings
    buses: tuple[OutlineBus, ...]
    lines: tuple[OutlineLine, ...]


SHAPE_KEYS = frozenset({"line", "from_bus", "to_bus", "normally_open", ""})
"""Keys of Lines whose faults leave the shape unknown."""


def outline_of(checked: CheckedStudy, findings: Iterable[Finding]) -> Outline | None:
    """The shape of the feeder, None where a fault leaves it open.

    Parameters
    ----------
    checked : CheckedStudy, references resolved
    findings : Finding, everything found so far

    Returns
    -------
    Outline or None
    """
    faults = [finding for finding in findings if finding.level is Level.FAULT]
    if any(_is_about_shape(finding) for finding in faults):
        return None
    settings, buses, lines = checked.settings, checked.rows("Buses"), checked.rows("Lines")
    source = settings.text("source_bus") if settings else None
    if settings is None or source is None or not buses or not lines:
        return None
    origin = settings.row.cell("source_bus")
    column = origin.address.rstrip("0123456789")
    row = int(origin.address[len(column) :] or 0)
    return Outline(
        OutlineSettings(source, {"source_bus": Origin(origin.sheet, row, {"source_bus": column})}),
        tuple(OutlineBus(row.text("bus") or "", row.row.origin) for row in buses),
        tuple(
            OutlineLine(
                row.text("line") or "",
                row.text("from_bus") or "",
                row.text("to_bus") or "",
                row.is_yes("normally_open"),
                row.row.origin,
            )
            for row in lines
        ),
    )


def _is_about_shape(finding: Finding) -> bool:
    if finding.code in (Code.SELF_LOOP, Code.NAME_TWICE):
        return False  # the ends are known all the same
    sheet = fold(finding.sheet)
    if sheet == "lines":
        return finding.key in SHAPE_KEYS
    if sheet == "settings":
        return finding.key in ("source_bus", "")
    return sheet == "buses" and finding.key in ("bus", "")
