"""How much memory the machine has and this process uses, as far as the system says."""

from __future__ import annotations

import os
import sys
from pathlib import Path

DEFAULT_SHARE = 0.5
"""Share of the machine's memory that a run may use unless told otherwise."""


def machine_bytes() -> int | None:
    """Memory of the machine, None where the system does not say."""
    try:
        return int(os.sysconf("SC_PAGE_SIZE")) * int(os.sysconf("SC_PHYS_PAGES"))
    except (AttributeError, ValueError, OSError):
        return None


def resident_bytes() -> int:
    """Memory held by this process now; its peak where only that is known; 0 where neither is."""
    try:
        pages = int(Path("/proc/self/statm").read_text(encoding="ascii").split()[1])
        return pages * int(os.sysconf("SC_PAGE_SIZE"))
    except (OSError, ValueError, IndexError, AttributeError):
        pass
    try:
        import resource
    except ImportError:
        return 0
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return int(peak) * (1 if sys.platform == "darwin" else 1024)
