"""How much text fits: lines of wrapped text, and heights of rows from them."""

from __future__ import annotations

HEADING_CHARS, BODY_CHARS = 1.0, 1.1
"""Characters of bold and of plain Arial that fit in one unit of column width (measured)."""

LINE_POINTS = 13.0


def lines_needed(text: str, room: float) -> int:
    """Lines that wrapped text takes where ``room`` characters fit on one."""
    lines, used = 1, 0.0
    for word in text.split():
        if used and used + 1 + len(word) > room:
            lines, used = lines + 1, 0.0
        used += len(word) + (1 if used else 0)
        while used > room > 0:
            lines, used = lines + 1, used - room
    return lines
