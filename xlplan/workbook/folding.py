"""When two texts are the same for a reader: names, headings, and the closest of several names.

Names are compared after ``fold``: NFC, ends trimmed, runs of spaces to one, case folded. Not NFKC,
which would change characters such as a raised 2. Headings are compared after ``fold_heading``,
which also drops units in parentheses and punctuation.
"""

from __future__ import annotations

import difflib
import re
import unicodedata
from collections.abc import Iterable
from functools import lru_cache

ZERO_WIDTH = re.compile("[\u200b\u200c\u200d\u2060\ufeff\u00ad]")
_SPACES = re.compile(r"\s+")
_PARENTHESES = re.compile(r"\([^()]*\)|\[[^\[\]]*\]")
_NOT_A_WORD = re.compile(r"[\W_]+")

ALIKE_CUTOFF = 0.8
"""difflib ratio from which a heading counts as a mistyped one: one wrong letter in five."""

SUGGEST_CUTOFF = 0.5
"""A suggestion may be bolder than a fault, and names are short: B1 for Bus 1."""


def clean(text: str) -> str:
    """Text without zero-width characters and outer space, inner runs of space to one space."""
    return _SPACES.sub(" ", ZERO_WIDTH.sub("", text)).strip()


def fold(text: str) -> str:
    """What a name is compared by.

    >>> fold(" Bus  1") == fold("BUS 1")
    True
    """
    return clean(unicodedata.normalize("NFC", text)).casefold()


@lru_cache(maxsize=8192)
def fold_heading(text: str, with_units: bool = False) -> str:
    """What a heading is compared by; ``with_units`` keeps the words in parentheses.

    >>> fold_heading("Peak  load (kW)")
    'peak load'
    >>> fold_heading("peak_load")
    'peak load'
    """
    folded = fold(text)
    if not with_units:
        folded = _PARENTHESES.sub(" ", folded)
    return _NOT_A_WORD.sub(" ", folded).strip()


def alike(text: str, others: Iterable[str]) -> str | None:
    """The one of ``others`` that ``text`` is probably a mistyped form of, both folded."""
    found = difflib.get_close_matches(text, list(others), n=1, cutoff=ALIKE_CUTOFF)
    return found[0] if found else None


def closest(name: str, names: Iterable[str], n: int = 3) -> list[str]:
    """Up to ``n`` names closest to one that was not found, in the spelling of ``names``."""
    spelling = {fold(other): other for other in names}
    found = difflib.get_close_matches(fold(name), list(spelling), n=n, cutoff=SUGGEST_CUTOFF)
    return [spelling[key] for key in found]


def did_you_mean(name: str, names: Iterable[str]) -> str:
    """The question that goes with an unknown name, or the list of what there is."""
    names = list(names)
    near = closest(name, names)
    if near:
        return f"Did you mean {' or '.join(near)}?"
    if not names:
        return "There is none to choose from yet."
    shown = ", ".join(names[:6])
    more = f" and {len(names) - 6} more" if len(names) > 6 else ""
    return f"There is: {shown}{more}."
