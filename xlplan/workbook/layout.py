"""Where things stand on the input sheets of the template; rows counted from 0."""

HINT_ROW = 2
EXAMPLE_ROW = 3
HEADING_ROW = 4
FIRST_ROW = 5
"""Zero-based: row 6 of the sheet."""

ROOM = 200
"""Rows that a table offers at least."""

SPARE_ROWS = 50
"""Rows that a table offers beyond those that are filled."""

LAST_CHECKED_ROW = 5000
"""Cells down to row 5001 are validated and offered in dropdowns."""
