"""Units that people write beside numbers and in headings, recognised and never converted.

Enters: a text. Leaves: the units in it, each in one spelling.
"""

from __future__ import annotations

import re

from xlplan.workbook.folding import fold

_UNITS = frozenset(
    {
        *("w", "kw", "mw", "gw", "wh", "kwh", "mwh", "va", "kva", "mva", "var", "kvar", "mvar"),
        *("v", "kv", "a", "ka", "ohm", "kohm", "mohm", "pu", "%", "cents"),
        *("km", "m", "mi", "ft", "s", "min", "h", "days", "weeks", "months", "years"),
    }
)
"""Words in parentheses that are units beyond doubt."""
_OTHER_SPELLINGS = {
    "hours": "h",
    "hour": "h",
    "hrs": "h",
    "minutes": "min",
    "minute": "min",
    "mins": "min",
    "seconds": "s",
    "second": "s",
    "sec": "s",
    "mile": "mi",
    "miles": "mi",
    "feet": "ft",
    "metres": "m",
    "meters": "m",
    "year": "years",
    "percent": "%",
}


def units_in(text: str) -> set[str]:
    """The units that a text names.

    >>> sorted(units_in("kW and 15 minutes"))
    ['kw', 'min']
    """
    words = re.findall(r"%|[^\W_]+", fold(text).replace("p.u.", "pu").replace("p.u", "pu"))
    return {unit for word in words if (unit := _OTHER_SPELLINGS.get(word, word)) in _UNITS}
