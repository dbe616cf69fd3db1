"""What openpyxl's streaming reader does not tell of a sheet: hidden rows, merges, bare formulas.

Enters: the XML of one sheet. Leaves: ``SheetFacts``. The streaming reader is used for every sheet
because a stray formatted cell in the last row costs the ordinary one minutes and gigabytes. The
text is searched rather than parsed a second time: a sheet formatted down to its last row would
take the parser a quarter of a minute. Where a text is not of the plain form that spreadsheet
programs write (another encoding, comments, cells without an address), it is parsed after all.
"""

from __future__ import annotations

import io
import re
from dataclasses import dataclass, field
from xml.etree.ElementTree import Element

from defusedxml.ElementTree import iterparse
from openpyxl.utils import column_index_from_string, get_column_letter
from openpyxl.utils.cell import coordinate_from_string

_WORTH_LOOKING = re.compile(rb"<(?:\w+:)?f[\s/>]|hidden=|mergeCell")
_FORMULA = re.compile(rb"<(?:\w+:)?f[\s/>]")
_ADDRESS = re.compile(rb"\sr=[\"']([A-Z]{1,3}[0-9]{1,7})[\"']")
_FORMULA_CELL = re.compile(
    rb"<(?:\w+:)?c(\s[^>]*)>\s*"
    rb"<(?:\w+:)?f(?:\s[^>]*)?(?:/>|>([^<]*)</(?:\w+:)?f>)\s*"
    rb"(<(?:\w+:)?v(?:\s[^>]*)?(?:/>|>([^<]*)<))?"
)
"""Attributes of a cell, its formula, its stored value as an element and as text."""
_TYPE_IS_TEXT = re.compile(rb"\st=[\"']str[\"']")
_HIDDEN_ROW = re.compile(rb"<(?:\w+:)?row\s[^>]*hidden=[\"'](?:1|true)[\"'][^>]*>")
_ROW_NUMBER = re.compile(rb"\sr=[\"']([0-9]{1,7})[\"']")
_HIDDEN_COLUMN = re.compile(rb"<(?:\w+:)?col\s[^>]*hidden=[\"'](?:1|true)[\"'][^>]*>")
_MIN = re.compile(rb"\smin=[\"']([0-9]{1,5})[\"']")
_MAX = re.compile(rb"\smax=[\"']([0-9]{1,5})[\"']")
_MERGE = re.compile(rb"<(?:\w+:)?mergeCell\s[^>]*ref=[\"']([A-Z0-9:]+)[\"']")
_FAR_RIGHT = re.compile(rb"\sr=[\"'][A-Z]{3}[0-9]")
_OTHER_BOOK = re.compile(r"\[[0-9]+\]|\[[^\[\]]+\.xls[xmb]?\]", re.IGNORECASE)


@dataclass
class SheetFacts:
    """Facts of one sheet; addresses as in ``D7``, ranges as in ``A1:B2``.

    ``external``: formulas that read another workbook. ``is_wide``: cells stand beyond column ZZ.
    """

    hidden_rows: set[int] = field(default_factory=set)
    hidden_columns: set[int] = field(default_factory=set)
    merged_ranges: list[str] = field(default_factory=list)
    uncalculated: set[str] = field(default_factory=set)
    external: list[str] = field(default_factory=list)
    n_formula: int = 0
    is_wide: bool = False

    def add_formula(self, address: str, text: str, stored: str | None, is_text: bool) -> None:
        """Counts a formula, and keeps its address where it has no stored value.

        A formula whose stored value is the empty text has type ``str`` and counts as calculated.
        """
        self.n_formula += 1
        if stored is None or (stored == "" and not is_text):
            self.uncalculated.add(address)
        if _OTHER_BOOK.search(text):
            self.external.append(address)

    def add_hidden_columns(self, first: int, last: int) -> None:
        """Adds columns; a sheet's last ones are often hidden by the thousand."""
        self.hidden_columns.update(range(first, min(last, first + 1000) + 1))


def sheet_facts(xml: bytes) -> SheetFacts:
    """Facts of a sheet from its XML. Raises what the XML parser raises on broken XML."""
    facts = SheetFacts(is_wide=bool(_FAR_RIGHT.search(xml)))
    if not _WORTH_LOOKING.search(xml):
        return facts
    if not _search(xml, facts):
        facts = SheetFacts(is_wide=facts.is_wide)
        _parse(xml, facts)
    return facts


def _search(xml: bytes, facts: SheetFacts) -> bool:
    """Facts by searching the text; False where it is not of the plain form."""
    if xml[:2] in (b"\xff\xfe", b"\xfe\xff") or b"<!--" in xml or b"<![CDATA[" in xml:
        return False
    n_formula = sum(1 for _ in _FORMULA.finditer(xml))
    for match in _FORMULA_CELL.finditer(xml):
        address = _ADDRESS.search(match[1])
        if address is None:
            return False
        facts.add_formula(
            address[1].decode(),
            (match[2] or b"").decode("utf-8", "replace"),
            (match[4] or b"").decode("utf-8", "replace") if match[3] else None,
            bool(_TYPE_IS_TEXT.search(match[1])),
        )
    if facts.n_formula != n_formula:
        return False
    for match in _HIDDEN_ROW.finditer(xml):
        number = _ROW_NUMBER.search(match[0])
        if number is None:
            return False
        facts.hidden_rows.add(int(number[1]))
    for match in _HIDDEN_COLUMN.finditer(xml):
        first, last = _MIN.search(match[0]), _MAX.search(match[0])
        facts.add_hidden_columns(int(first[1]) if first else 0, int(last[1]) if last else 0)
    facts.merged_ranges += [match[1].decode() for match in _MERGE.finditer(xml)]
    return True


def _parse(xml: bytes, facts: SheetFacts) -> None:
    """Facts by the XML parser, whatever the form of the text."""
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
            _parse_formula(facts, address, element)
        elif tag == "row":
            element.clear()
        elif tag == "col" and element.get("hidden") in ("1", "true"):
            facts.add_hidden_columns(int(element.get("min", 0)), int(element.get("max", 0)))
        elif tag == "mergeCell" and element.get("ref"):
            facts.merged_ranges.append(element.get("ref", ""))


def _parse_formula(facts: SheetFacts, address: str, cell: Element) -> None:
    stored, formula = None, None
    for child in cell:
        tag = child.tag.rpartition("}")[2]
        if tag == "f":
            formula = child.text or ""
        elif tag == "v":
            stored = child.text or ""
    if formula is not None:
        facts.add_formula(address, formula, stored, cell.get("t") == "str")
