"""The files to double-click: run under a shell here; the Windows one is only looked at."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import openpyxl
import pytest

from xlplan.base.errors import PathError
from xlplan.cli import main
from xlplan.workbook.launcher import write_launchers

ROOT = Path(__file__).resolve().parents[2]
NAME = "feeder 4 & it's 100% 'ours'.xlsx"

needs_shell = pytest.mark.skipif(shutil.which("sh") is None, reason="no shell here")


def run(script: Path, *words: str, answer: str = "n\n") -> subprocess.CompletedProcess[str]:
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    return subprocess.run(
        [str(script), *words],
        input=answer,
        capture_output=True,
        text=True,
        env=environment,
        cwd="/",
        timeout=120,
    )


@needs_shell
def test_a_double_click_checks_the_study_beside_it(tmp_path: Path) -> None:
    study = tmp_path / NAME
    assert main(["template", str(study), "--demo", "--launcher"]) == 0
    done = run(study.with_suffix(".command"))
    assert done.returncode == 0, done.stderr
    assert "The study can be solved" in done.stdout
    assert "Solve it now?" in done.stdout
    assert not list(tmp_path.glob("*results*"))  # nothing is solved unasked


@needs_shell
def test_dropped_studies_are_checked_and_the_gravest_status_is_kept(tmp_path: Path) -> None:
    beside = tmp_path / "beside.xlsx"
    main(["template", str(beside), "--demo", "--launcher"])
    book = openpyxl.load_workbook(beside)
    book["Loads"]["D6"] = -1
    book.save(tmp_path / "bad one.xlsx")
    done = run(
        beside.with_suffix(".command"), str(tmp_path / "bad one.xlsx"), str(beside), answer="n\nn\n"
    )
    assert done.returncode == 2
    assert "Loads!D6" in done.stdout
    assert "The study can be solved" in done.stdout


def test_the_windows_file_keeps_percent_signs_and_ends_its_lines_its_way(tmp_path: Path) -> None:
    study = tmp_path / NAME
    windows, _ = write_launchers(study, r"C:\with space\100%\python.exe")
    content = windows.read_bytes().decode("utf-8")
    assert content.count("\r\n") == content.count("\n")
    assert r'set "PYTHON=C:\with space\100%%\python.exe"' in content
    assert "it's 100%% 'ours'.xlsx" in content


def test_launchers_that_are_there_are_not_replaced_and_no_template_is_left(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "study.cmd").write_text("mine")
    assert main(["template", str(tmp_path / "study.xlsx"), "--launcher"]) == 1
    assert "study.cmd" in capsys.readouterr().err
    assert [path.name for path in tmp_path.iterdir()] == ["study.cmd"]
    with pytest.raises(PathError):
        write_launchers(tmp_path / "study.xlsx", sys.executable)
