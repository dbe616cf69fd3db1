"""The short stable words that findings carry, so that programs need not read their text."""

from __future__ import annotations

from enum import StrEnum


class Code(StrEnum):
    """What is wrong, in one word or two."""

    # The shape of the feeder.
    SELF_LOOP = "self loop"
    PARALLEL_LINE = "parallel line"
    LOOP = "loop"
    NOT_CONNECTED = "not connected"
    SOURCE_UNKNOWN = "source unknown"
    NO_LOAD_VOLTAGE = "no-load voltage"
    # Outages.
    ISLAND_NOT_FORMED = "island not formed"
    TIME_ROUNDED = "time rounded"
