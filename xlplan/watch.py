"""When was the study saved? Waits for whole saves of one file, by looking at it.

Looking (five times a second) works on every file system, network drives included, and needs no
library. Spreadsheet programs save in steps: a temporary file beside the study, the study gone for a
moment, the new one under its name, or the old one rewritten from its start. A save counts once the
file has not changed for a moment and is a whole zip; lock and temporary files have other names and
are never looked at.
"""

from __future__ import annotations

import os
import time
import zipfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

POLL_S = 0.2
SETTLED_S = 0.4
"""A file that has not changed for this long is settled."""
GRACE_S = 1.4
"""A file that stays damaged or away for this long is told as it is: nobody is writing any more."""


@dataclass(frozen=True)
class Stamp:
    """What changes with every save: time, size, and the file behind the name."""

    modified_ns: int
    size: int
    inode: int


@dataclass(frozen=True)
class Save:
    """One save of the study; ``stamp`` None: the file is gone."""

    stamp: Stamp | None


def stamp_of(path: Path) -> Stamp | None:
    """The stamp of a file, None where there is none or it cannot be looked at."""
    try:
        status = os.stat(path)
    except OSError:
        return None
    return Stamp(status.st_mtime_ns, status.st_size, status.st_ino)


def is_whole(path: Path) -> bool:
    """True if the file is a zip with its directory, which is written last."""
    try:
        with zipfile.ZipFile(path) as archive:
            return bool(archive.namelist())
    except (OSError, zipfile.BadZipFile, ValueError, NotImplementedError):
        return False


def saves(
    path: Path,
    clock: Callable[[], float] = time.monotonic,
    sleep: Callable[[float], object] = time.sleep,
) -> Iterator[Save]:
    """Yields the study as it stands, then every save of it, for ever.

    Parameters
    ----------
    path : Path of the study
    clock : seconds, ascending
    sleep : waits for some seconds

    Yields
    ------
    Save: once the file has settled and is whole; one that stays damaged is told after a moment,
    and so is one that stays away (once)
    """
    told: Stamp | None = None
    is_told_gone = False
    seen, since = stamp_of(path), clock()
    while True:
        now = stamp_of(path)
        if now != seen:
            seen, since = now, clock()
        elapsed = clock() - since
        if now is None:
            if elapsed >= GRACE_S and not is_told_gone:
                is_told_gone = True
                told = None
                yield Save(None)
        elif (
            (now != told or is_told_gone)
            and elapsed >= SETTLED_S
            and (is_whole(path) or elapsed >= GRACE_S)
        ):
            told, is_told_gone = now, False
            yield Save(now)
            continue
        sleep(POLL_S)
