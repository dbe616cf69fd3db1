"""A run killed at any moment goes on with --resume, and ends with the same plan within its gap."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from xlplan.cli import main
from xlplan.pipeline import savepoint_path

ROOT = Path(__file__).resolve().parents[1]
STUDY = ROOT / "examples" / "wendlemoor" / "wendlemoor.xlsx"
GAP_PCT = 1.0


def command(results: Path, twin: Path, *more: str) -> list[str]:
    """A solve of the example by the decomposition."""
    words = ["solve", str(STUDY), "-o", str(results), "--json", str(twin), "--plan-only", "--force"]
    words += ["--method", "decomposed", "--gap", str(GAP_PCT), "--workers", "1", *more]
    return words


def least_cost(twin: Path) -> dict:
    """The least-cost plan of a JSON twin."""
    document = json.loads(twin.read_text("utf-8"))
    return next(a for a in document["alternatives"] if a["name"] == "Least-cost plan")


@pytest.mark.slow
def test_killed_at_ten_random_moments_and_resumed(tmp_path: Path) -> None:
    whole, twin = tmp_path / "whole.xlsx", tmp_path / "whole.json"
    begin = time.monotonic()
    assert main(command(whole, twin)) == 0
    seconds = time.monotonic() - begin
    assert not savepoint_path(whole).exists()
    reference = least_cost(twin)
    results, twin = tmp_path / "killed.xlsx", tmp_path / "killed.json"
    rng = np.random.default_rng(5)
    n_killed = n_saved = 0
    for _ in range(10):
        process = subprocess.Popen(
            [sys.executable, "-m", "xlplan", *command(results, twin, "--resume")],
            cwd=ROOT,
            stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
        )  # fmt: skip
        try:
            process.wait(timeout=2.0 + float(rng.uniform(0.0, 0.9)) * seconds)
        except subprocess.TimeoutExpired:
            process.send_signal(signal.SIGKILL)
            process.wait()
            n_killed += 1
        # Killed runs leave no half-written results, and never a broken savepoint.
        n_saved += savepoint_path(results).exists()
        if results.exists():
            results.unlink()
    assert n_killed >= 5
    assert n_saved >= 1
    assert main(command(results, twin, "--resume")) == 0
    resumed = least_cost(twin)
    assert not savepoint_path(results).exists()
    allowed = GAP_PCT / 100.0 * abs(reference["annual_cost"]["total"])
    assert resumed["annual_cost"]["total"] == pytest.approx(
        reference["annual_cost"]["total"], abs=allowed
    )
    assert resumed["lower_bound"] <= reference["cost_interval"][1]
    assert reference["lower_bound"] <= resumed["cost_interval"][1]


def test_a_changed_study_starts_afresh_and_says_so(tmp_path: Path, capsys) -> None:
    results, twin = tmp_path / "results.xlsx", tmp_path / "twin.json"
    savepoint_path(results).write_bytes(b"of something else")
    assert main(command(results, twin, "--resume", "--gap", "5")) == 0
    assert "started afresh" in capsys.readouterr().out
    document = json.loads(twin.read_text("utf-8"))
    assert any("started afresh" in f["message"] for f in document["findings"])
