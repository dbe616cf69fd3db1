"""Watching a study: whole saves are told, once each; the command checks them and stops cleanly."""

from __future__ import annotations

import io
import os
import queue
import shutil
import signal
import subprocess
import sys
import threading
import time
import zipfile
from collections.abc import Callable
from itertools import islice
from pathlib import Path
from typing import IO

import openpyxl
import pytest

from tests.test_end_to_end import write_study
from xlplan.cli import main
from xlplan.watch import GRACE_S, POLL_S, SETTLED_S, Save, is_whole, saves, stamp_of
from xlplan.workbook.template import write_template

ROOT = Path(__file__).resolve().parent.parent


def a_zip(text: str = "content") -> bytes:
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w") as archive:
        archive.writestr("part", text)
    return buffer.getvalue()


class Script:
    """A clock that moves only when somebody sleeps, and deeds done at their times."""

    def __init__(self, *deeds: tuple[float, Callable[[], object]]) -> None:
        self.now = 0.0
        self.deeds = sorted(deeds, key=lambda deed: deed[0])

    def sleep(self, seconds: float) -> None:
        self.now += seconds
        while self.deeds and self.deeds[0][0] <= self.now + 1e-9:
            self.deeds.pop(0)[1]()
        if self.now > 60:
            raise TimeoutError

    def told(self, path: Path, n: int) -> list[tuple[float, Save]]:
        """The first ``n`` saves, with the time at which each was told."""
        found = []
        for save in islice(saves(path, lambda: self.now, self.sleep), n):
            found.append((self.now, save))
        return found


def put(path: Path, content: bytes) -> Callable[[], object]:
    """Writes content with a time of change of its own, however fast the test runs."""

    def deed() -> None:
        put_count[0] += 1
        path.write_bytes(content)
        os.utime(path, ns=(put_count[0] * 10**9, put_count[0] * 10**9))

    return deed


put_count = [1_000_000_000]
LATEST = POLL_S + SETTLED_S + POLL_S
"""Noticed by one look, settled, told by the next: well within two seconds."""


def test_the_study_as_it_stands_is_told_first(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(a_zip())
    [(at, save)] = Script().told(path, 1)
    assert save == Save(stamp_of(path))
    assert at <= LATEST


def test_every_save_is_told_once_and_soon(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(a_zip())
    script = Script((5.0, put(path, a_zip("b"))), (9.0, put(path, a_zip("c"))))
    times = [at for at, _ in script.told(path, 3)]
    assert [5.0 <= times[1] <= 5.0 + LATEST, 9.0 <= times[2] <= 9.0 + LATEST] == [True, True]
    with pytest.raises(TimeoutError):
        Script().told(path, 2)


def test_a_save_in_steps_is_told_once_it_is_whole(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(a_zip())
    whole = a_zip("x" * 50)
    steps = [(5.0 + 0.3 * i, put(path, whole[: 20 * (i + 1)])) for i in range(4)]
    script = Script(*steps, (6.2, put(path, whole)))
    (_, _), (at, save) = script.told(path, 2)
    assert 6.2 <= at <= 6.2 + LATEST
    assert save == Save(stamp_of(path))


def test_a_pause_in_the_middle_of_a_save_is_waited_out(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(a_zip())
    whole = a_zip("y")
    script = Script((5.0, put(path, whole[:30])), (6.1, put(path, whole)))
    (_, _), (at, _) = script.told(path, 2)
    assert 6.1 <= at <= 6.1 + LATEST


def test_a_study_away_for_a_moment_is_no_news_and_its_return_is(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(a_zip())
    script = Script((5.0, path.unlink), (5.6, put(path, a_zip("new"))))
    (_, _), (at, save) = script.told(path, 2)
    assert save.stamp is not None
    assert at <= 5.6 + LATEST


def test_a_study_that_stays_away_is_told_once(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(a_zip())
    script = Script((5.0, path.unlink), (20.0, put(path, a_zip("new"))))
    (_, _), (gone_at, gone), (back_at, back) = script.told(path, 3)
    assert gone == Save(None)
    assert gone_at <= 5.0 + GRACE_S + 2 * POLL_S
    assert back.stamp is not None
    assert 20.0 <= back_at <= 20.0 + LATEST


def test_a_study_that_stays_damaged_is_told_within_two_seconds(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(a_zip())
    script = Script((5.0, put(path, a_zip()[:-10])))
    (_, _), (at, _) = script.told(path, 2)
    assert at <= 5.0 + 2.0
    assert not is_whole(path)


def test_files_beside_the_study_are_no_saves(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(a_zip())
    deeds = [
        (5.0 + i, put(tmp_path / name, b"lock"))
        for i, name in enumerate(("~$study.xlsx", ".~lock.study.xlsx#", "A1B2C3.tmp"))
    ]
    with pytest.raises(TimeoutError):
        Script(*deeds).told(path, 2)


# -- the command ---------------------------------------------------------------------------------


class Command:
    """``xlplan watch`` in a process of its own, its lines as they come."""

    def __init__(self, *words: str) -> None:
        self.process = subprocess.Popen(
            [sys.executable, "-m", "xlplan", "watch", *words],
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
            env={**os.environ, "PYTHONPATH": str(ROOT)},
        )
        self.lines: queue.Queue[str] = queue.Queue()
        self.seen: list[str] = []
        assert self.process.stdout is not None
        self.reader = threading.Thread(target=self._read, args=(self.process.stdout,), daemon=True)
        self.reader.start()

    def _read(self, stream: IO[str]) -> None:
        with stream:
            for line in stream:
                self.lines.put(line)

    def wait_for(self, words: str) -> str:
        """The next line with these words; the limit only ends a test that hangs."""
        end = time.monotonic() + 90
        while time.monotonic() < end:
            try:
                line = self.lines.get(timeout=1.0)
            except queue.Empty:
                continue
            self.seen.append(line)
            if words in line:
                return line
        raise AssertionError(f"no '{words}' in:\n{''.join(self.seen)}")

    def stop(self, signum: int = signal.SIGINT) -> int:
        self.process.send_signal(signum)
        status = self.process.wait(timeout=60)
        self.reader.join(timeout=60)
        return status


posix_only = pytest.mark.skipif(os.name != "posix", reason="signals of this kind are POSIX")


@posix_only
def test_saves_are_checked_until_ctrl_c(tmp_path: Path) -> None:
    study, good = tmp_path / "study.xlsx", tmp_path / "good.xlsx"
    write_template(good, with_demo=True)
    book = openpyxl.load_workbook(good)
    book["Loads"]["D6"] = "1,200 kW"
    book.save(tmp_path / "bad.xlsx")
    shutil.copy(good, study)
    command = Command(str(study))
    try:
        command.wait_for("The study can be solved")
        (tmp_path / "~$study.xlsx").write_bytes(b"owner")
        shutil.copy(tmp_path / "bad.xlsx", study)  # rewritten from its start
        assert "fault" in command.wait_for("Loads!D6")
        command.wait_for("cannot be solved")
        study.write_bytes(good.read_bytes()[:5000])  # half saved, and left so
        command.wait_for("damaged")
        os.replace(shutil.copy(good, tmp_path / "A1B2.tmp"), study)  # a new file under the name
        command.wait_for("The study can be solved")
        assert not [line for line in command.seen if "open in a spreadsheet" in line]
        study.unlink()
        command.wait_for("is gone")
        shutil.copy(good, study)
        command.wait_for("The study can be solved")
    finally:
        status = command.stop()
    assert status == 0
    command.wait_for("Stopped watching")
    assert not [line for line in command.seen if "Traceback" in line]


@posix_only
def test_a_study_without_faults_is_solved_if_asked(tmp_path: Path) -> None:
    study = tmp_path / "study.xlsx"
    write_study(study, hours=2)
    command = Command(str(study), "--solve")
    try:
        command.wait_for("study-results.xlsx")
    finally:
        status = command.stop(signal.SIGTERM)
    assert status == 0
    assert (tmp_path / "study-results.xlsx").exists()


def test_a_study_that_is_not_there_is_status_1(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["watch", str(tmp_path / "none.xlsx")]) == 1
    assert len(capsys.readouterr().err.splitlines()) == 1
