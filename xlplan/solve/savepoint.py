"""What a run has learnt, kept in a file so that a stopped run can go on.

The file holds every cut (they stay valid whatever happens next) and whether whole numbers had been
turned to; the best decision follows from the cuts. It is keyed: a study that changed by a byte, or
another version of the formulation, does not match and is started afresh. The file is replaced in
one step, so that a run killed while saving leaves the last whole one.
"""

from __future__ import annotations

import logging
import os
import time
import zipfile
from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from xlplan.solve.cut_pool import CutBatch, CutPool

_LOG = logging.getLogger(__name__)

FORMULATION = "1"
"""Raised whenever cuts of an earlier version would no longer hold."""

LEAST_INTERVAL_S = 2.0
"""Seconds between two saves, at least."""

SAVING_SHARE = 0.02
"""Saving may take this share of the time."""


class Found(StrEnum):
    """What was there to go on from."""

    NOTHING = "nothing saved"
    OTHER_STUDY = "saved for another study"
    UNREADABLE = "not readable"
    MATCHING = "matching"


@dataclass(frozen=True)
class Saved:
    """Contents of a file: cuts by family, number of the last solve, phase."""

    cuts: tuple[CutBatch, ...]
    n_group: int
    is_integer_phase: bool


class Savepoint:
    """One file and its key. ``found`` says what ``load`` met.

    Parameters
    ----------
    path : Path
    key : str, names the study and whatever else the cuts depend on
    """

    def __init__(self, path: Path, key: str) -> None:
        self.path, self.key = path, f"{FORMULATION} {key}"
        self.found = Found.NOTHING
        self._last = time.monotonic()
        self._interval = LEAST_INTERVAL_S

    def is_due(self) -> bool:
        """Whether it is time to save."""
        return time.monotonic() - self._last >= self._interval

    def save(self, pools: Sequence[CutPool], n_group: int, is_integer_phase: bool) -> None:
        """Replaces the file. A disk that is full is logged, not fatal: the run goes on."""
        begin = time.monotonic()
        arrays: dict[str, NDArray[np.generic]] = {
            "key": np.array(self.key),
            "n_group": np.array(n_group),
            "is_integer_phase": np.array(is_integer_phase),
            "n_family": np.array(len(pools)),
        }
        for i, pool in enumerate(pools):
            for name in ("member", "group", "intercept", "state_slope", "capacity_slope"):
                arrays[f"{name}_{i}"] = getattr(pool, name)
        temporary = self.path.with_name(f"{self.path.name}.{os.getpid()}.part")
        try:
            with temporary.open("wb") as handle:
                np.savez(handle, **arrays)  # type: ignore[arg-type]
            os.replace(temporary, self.path)
        except OSError as error:
            _LOG.warning("nothing saved to go on from: %s", error)
        finally:
            temporary.unlink(missing_ok=True)
        self._last = time.monotonic()
        self._interval = max(LEAST_INTERVAL_S, (self._last - begin) / SAVING_SHARE)

    def load(self, pools: Sequence[CutPool]) -> Saved | None:
        """What was saved for this key and graph; None where there is nothing of use."""
        try:
            # Never unpickled: the file may come from anywhere.
            with (
                self.path.open("rb") as handle,
                np.load(handle, allow_pickle=False) as data,
            ):
                if str(data["key"]) != self.key or int(data["n_family"]) != len(pools):
                    self.found = Found.OTHER_STUDY
                    return None
                saved = _read(data, pools)
        except FileNotFoundError:
            self.found = Found.NOTHING
            return None
        except (OSError, ValueError, KeyError, zipfile.BadZipFile, EOFError) as error:
            _LOG.warning("%s cannot be read: %s", self.path, error)
            self.found = Found.UNREADABLE
            return None
        self.found = Found.MATCHING if saved is not None else Found.OTHER_STUDY
        return saved

    def remove(self) -> None:
        """Removes the file: the run has come to its end."""
        self.path.unlink(missing_ok=True)


def _read(data: np.lib.npyio.NpzFile, pools: Sequence[CutPool]) -> Saved | None:
    """Contents; None where shapes are not those of the graph."""
    cuts = []
    for i, pool in enumerate(pools):
        batch = CutBatch(
            i,
            data[f"member_{i}"].astype(np.int64),
            data[f"intercept_{i}"].astype(float),
            data[f"state_slope_{i}"].astype(float),
            data[f"capacity_slope_{i}"].astype(float),
            data[f"group_{i}"].astype(np.int64),
        )
        n = len(batch.member)
        is_fit = (
            batch.intercept.shape == batch.group.shape == (n,)
            and batch.state_slope.shape == (n, pool.state_slope.shape[1])
            and batch.capacity_slope.shape == (n, pool.capacity_slope.shape[1])
            and (n == 0 or 0 <= batch.member.min() <= batch.member.max() < pool.n_member)
        )
        if not is_fit:
            return None
        cuts.append(batch)
    return Saved(tuple(cuts), int(data["n_group"]), bool(data["is_integer_phase"]))
