"""Findings as lines of text: by sheet, the same fault down a column said once with its range.

Enters: findings in workbook order. Leaves: lines that fit a width. Nothing is printed here.
"""

from __future__ import annotations

import re
import textwrap
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

from xlplan.base.errors import Finding, Level, one_line

_ADDRESS = re.compile(r"([A-Z]{1,3})([0-9]+)")

MOST_OF_A_KIND_SHOWN = 3
"""Findings of one kind down a column that are written out; the others are given as a range."""

MOST_LINES_OF_FINDINGS = 200
"""Findings listed on a terminal; nobody reads more, and ``--mark`` and ``--json`` hold them."""


def cell_ranges(addresses: Iterable[str]) -> str:
    """Addresses as ranges down their columns, in order.

    >>> cell_ranges(["D5", "D6", "D7", "D9", "E7"])
    'D5:D7, D9, E7'
    """
    by_column: dict[str, list[int]] = {}
    others: list[str] = []
    for address in dict.fromkeys(addresses):
        match = _ADDRESS.fullmatch(address)
        if match:
            by_column.setdefault(match[1], []).append(int(match[2]))
        elif address:
            others.append(address)
    parts = []
    for letters in sorted(by_column, key=lambda name: (len(name), name)):
        first = last = None
        for row in [*sorted(by_column[letters]), None]:
            if last is not None and row == last + 1:
                last = row
                continue
            if first is not None:
                parts.append(f"{letters}{first}" if first == last else _span(letters, first, last))
            first = last = row
    return ", ".join(parts + others)


def _span(letters: str, first: int, last: int | None) -> str:
    return f"{letters}{first}:{letters}{last}"


@dataclass(frozen=True)
class Group:
    """Findings that are listed as one: the first of them, and the cells of all."""

    finding: Finding
    cells: tuple[str, ...]
    is_same: bool = True
    """True if all say the same; False if they only are of one kind."""

    def text(self) -> str:
        """One line, as ``Finding.text``, with the range of the others."""
        finding = self.finding
        if len(self.cells) < 2:
            return finding.text()
        if self.is_same:
            return replace(finding, cell=cell_ranges(self.cells)).text()
        n = len(self.cells)
        key = f" {finding.key}" if finding.key else ""
        return one_line(
            f"{finding.sheet}!{cell_ranges(self.cells)}{key}: {n} more of this kind, the first: "
            f"{finding.message}"
        )


def group_findings(findings: Sequence[Finding]) -> list[Group]:
    """Findings of one kind down a column brought together.

    Parameters
    ----------
    findings : in workbook order

    Returns
    -------
    list of Group: equal ones as one; of different ones of a kind (level, code, sheet and key) the
    first few by themselves and the others as one
    """
    equal: dict[tuple[object, ...], list[Finding]] = {}
    for finding in findings:
        equal.setdefault((*_kind(finding), finding.message, finding.hint), []).append(finding)
    kinds: dict[tuple[object, ...], list[list[Finding]]] = {}
    for same in equal.values():
        kinds.setdefault(_kind(same[0]), []).append(same)
    groups = []
    for alike in kinds.values():
        n_shown = len(alike) if len(alike) <= MOST_OF_A_KIND_SHOWN + 1 else MOST_OF_A_KIND_SHOWN
        for same in alike[:n_shown]:
            groups.append(Group(same[0], tuple(finding.cell for finding in same)))
        rest = [finding for same in alike[n_shown:] for finding in same]
        if rest:
            groups.append(Group(rest[0], tuple(finding.cell for finding in rest), is_same=False))
    return groups


def _kind(finding: Finding) -> tuple[str, ...]:
    return (finding.sheet, str(finding.level), str(finding.code), finding.key)


def listed(
    findings: Sequence[Finding], width: int | None = None, most: int = MOST_LINES_OF_FINDINGS
) -> list[str]:
    """The findings sheet by sheet, faults first within a sheet.

    Parameters
    ----------
    findings : in workbook order
    width : characters of a line; None: every finding on one line, however long
    most : groups listed at most; a last line says how many are left out

    Returns
    -------
    list of str, without line ends
    """
    sheets: dict[str, list[Finding]] = {}
    for finding in findings:
        sheets.setdefault(finding.sheet, []).append(finding)
    lines: list[str] = []
    n_left, n_listed = most, 0
    for sheet, found in sheets.items():
        groups = group_findings(found)
        groups.sort(key=lambda group: list(Level).index(group.finding.level))
        groups = groups[:n_left]
        if not groups:
            continue
        n_left -= len(groups)
        n_listed += sum(len(group.cells) for group in groups)
        lines.append(one_line(f"{sheet} ({counted(found)})"))
        for group in groups:
            lines += _wrapped(f"{group.finding.level:<8} ", group.text(), width)
    if n_listed < len(findings):
        lines.append(f"{len(findings) - n_listed} more findings are not listed here.")
    return lines


def _wrapped(label: str, text: str, width: int | None) -> list[str]:
    start = "  " + label
    if width is None:
        return [start + text]
    return textwrap.wrap(
        text,
        max(width, 40),
        initial_indent=start,
        subsequent_indent=" " * len(start),
        break_on_hyphens=False,
    )


def counted(findings: Sequence[Finding]) -> str:
    """How many there are of each level, those that occur: ``2 faults, 1 note``."""
    parts = []
    for level in Level:
        n = sum(finding.level is level for finding in findings)
        if n:
            parts.append(f"{n} {level}{'' if n == 1 else 's'}")
    return ", ".join(parts)
