"""A number written as text: read only where there is one way to read it.

Enters: a text. Leaves: a ``ParsedNumber``. ``float`` alone would take inf, nan, 1_000 and digits of
other scripts, so an own pattern comes first.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

from xlplan.base.codes import Code
from xlplan.workbook.folding import clean

PLAIN_NUMBER = re.compile(r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")

_GROUPED_BY_COMMA = re.compile(r"[+-]?[1-9][0-9]{0,2}(?:,[0-9]{3})+(?:\.[0-9]+)?")
_GROUPED_BY_SPACE = re.compile(r"[+-]?[1-9][0-9]{0,2}(?: [0-9]{3})+(?:\.[0-9]+)?")
_ONE_COMMA = re.compile(r"[+-]?[0-9]{1,3},[0-9]{3}")
"""1,250 is 1250 to some and 1.25 to others."""
_DECIMAL_COMMA = re.compile(r"[+-]?[0-9]{1,3}(?:\.?[0-9]{3})*,[0-9]+|[+-]?[0-9]+,[0-9]+")
_GROUPED_BY_DOT = re.compile(r"[+-]?[1-9][0-9]{0,2}(?:\.[0-9]{3}){2,}")
_NUMBER_AND_UNIT = re.compile(r"([+-]?[0-9][0-9., ]*)([^\W\d_][^\d]{0,20})")
_STARTS_AS_NUMBER = re.compile(r"\W{0,2}[0-9]")


@dataclass(frozen=True)
class ParsedNumber:
    """``number`` None: not readable, for the reason that ``code`` and ``problem`` give.

    ``is_percent``: a percent sign followed, and is not yet taken into account.
    """

    number: float | None
    is_percent: bool = False
    code: Code = Code.NOT_A_NUMBER
    problem: str = ""
    has_more_than_a_number: bool = False
    unit: str = ""
    """What stands behind the number, and ``before_unit`` the number, where it is clear."""
    before_unit: float | None = None


def parse_number(text: str) -> ParsedNumber:
    """The number that a text means.

    >>> parse_number("1,250.5").number
    1250.5
    >>> parse_number("1.250,5").problem
    "the text '1.250,5' can be read in more than one way (1250.5 or 1.2505)."
    """
    tidy = clean(text).replace("\u2212", "-")
    is_percent = tidy.endswith("%")
    if is_percent:
        tidy = tidy[:-1].rstrip()
    digits = _plain_form(tidy)
    if digits is None:
        return _why_not(text, tidy)
    number = float(digits)
    if not math.isfinite(number):
        return ParsedNumber(None, problem=f"'{text}' is too large.")
    return ParsedNumber(number, is_percent)


def _plain_form(tidy: str) -> str | None:
    """The text as a plain number, without separators of thousands; None where it is not clear."""
    if PLAIN_NUMBER.fullmatch(tidy):
        return tidy
    if _GROUPED_BY_COMMA.fullmatch(tidy) and not _ONE_COMMA.fullmatch(tidy):
        return tidy.replace(",", "")
    if _GROUPED_BY_SPACE.fullmatch(tidy):
        return tidy.replace(" ", "")
    return None


def _why_not(text: str, tidy: str) -> ParsedNumber:
    if _DECIMAL_COMMA.fullmatch(tidy) or _GROUPED_BY_DOT.fullmatch(tidy):
        readings = [tidy.replace(".", "").replace(",", "."), tidy.replace(",", "")]
        either = " or ".join(reading for reading in readings if PLAIN_NUMBER.fullmatch(reading))
        return ParsedNumber(
            None,
            code=Code.AMBIGUOUS_NUMBER,
            problem=f"the text '{text}' can be read in more than one way ({either}).",
        )
    if any(ch.isdigit() and not ch.isascii() for ch in tidy):
        return ParsedNumber(None, problem=f"'{text}' is not written in the digits 0 to 9.")
    if match := _NUMBER_AND_UNIT.fullmatch(tidy):
        digits = _plain_form(match[1].rstrip())
        return ParsedNumber(
            None,
            problem=f"'{text}' is a number with '{match[2]}' behind it.",
            has_more_than_a_number=True,
            unit=match[2],
            before_unit=None if digits is None else float(digits),
        )
    if _STARTS_AS_NUMBER.match(tidy):
        return ParsedNumber(
            None, problem=f"'{text}' is not a plain number.", has_more_than_a_number=True
        )
    return ParsedNumber(None, problem=f"'{text}' is not a number.")
