"""What openpyxl's streaming reader does not tell of a sheet: hidden rows, merges, bare formulas.

Enters: the XML of one sheet. Leaves: ``SheetFacts``. The streaming reader is used for every sheet
because a stray formatted cell in the last row costs the ordinary one minutes and gigabytes; one
more pass over the XML, made only where the text holds a formula, a merge or something hidden, is
cheaper than loading the workbook a second time to tell a blank from a formula never calculated.
"""

from __future__ import annotations

import io
import re
from dataclasses import dataclass, field
from xml.etree.ElementTree import Element

from defusedxml.ElementTree import iterparse
from openpyxl.utils import column_index_from_string, get_column_letter
from openpyxl.utils.cell import coordinate_from_string

_WORTH_PARSING = re.compile(rb"<(?:\w+:)?f[\s/>]|hidden=|mergeCell")


@dataclass
class SheetFacts:
    """Facts of one sheet; addresses as in ``D7``, ranges as in ``A1:B2``."""

    hidden_rows: set[int] = field(default_factory=set)
    hidden_columns: set[int] = field(default_factory=set)
    merged_ranges: list[str] = field(default_factory=list)
    uncalculated: set[str] = field(default_factory=set)
    n_formula: int = 0


def sheet_facts(xml: bytes) -> SheetFacts:
    """Facts of a sheet from its XML. Raises what the XML parser raises on broken XML."""
    facts = SheetFacts()
    if not _WORTH_PARSING.search(xml):
        return facts
    row_number = column_number = 0
    for event, element in iterparse(io.BytesIO(xml), events=("start", "end")):
        tag = element.tag.rpartition("}")[2]
        if event == "start":
            if tag == "row":
                row_number = int(element.get("r", row_number + 1))
                column_number = 0
                if element.get("hidden") in ("1", "true"):
                    facts.hidden_rows.add(row_number)
            continue
        if tag == "c":
            column_number += 1
            address = element.get("r") or f"{get_column_letter(column_number)}{row_number}"
            column_number = column_index_from_string(coordinate_from_string(address)[0])
            _add_formula(facts, address, element)
        elif tag == "row":
            element.clear()
        elif tag == "col" and element.get("hidden") in ("1", "true"):
            first, last = int(element.get("min", 0)), int(element.get("max", 0))
            facts.hidden_columns.update(range(first, min(last, first + 1000) + 1))
        elif tag == "mergeCell" and element.get("ref"):
            facts.merged_ranges.append(element.get("ref", ""))
    return facts


def _add_formula(facts: SheetFacts, address: str, cell: Element) -> None:
    """Counts a formula, and keeps its address where it has no stored value.

    A formula whose stored value is the empty text has type ``str`` and counts as calculated.
    """
    value, has_formula = None, False
    for child in cell:
        tag = child.tag.rpartition("}")[2]
        has_formula = has_formula or tag == "f"
        if tag == "v":
            value = child.text or ""
    if has_formula:
        facts.n_formula += 1
        if value is None or (value == "" and cell.get("t") != "str"):
            facts.uncalculated.add(address)
