"""One thread for linear algebra in each process, unless the user says otherwise."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
THREADS = Path("/proc/self/task")
VARIABLE = "OMP_NUM_THREADS"


def threads_after(imports: str, **variables: str) -> int:
    """Threads of a fresh process that multiplied two matrices."""
    code = (
        f"import os; import {imports}; import numpy as np; a = np.ones((500, 500)); a @ a; "
        f"print(len(os.listdir({str(THREADS)!r})))"
    )
    environment = {k: v for k, v in os.environ.items() if not k.endswith("_NUM_THREADS")}
    done = subprocess.run(
        [sys.executable, "-c", code],
        cwd=ROOT, env={**environment, **variables}, capture_output=True, text=True, check=True,
    )  # fmt: skip
    return int(done.stdout)


@pytest.mark.skipif(not THREADS.exists(), reason="needs /proc")
def test_linear_algebra_keeps_to_one_thread_per_process():
    if threads_after("numpy") == 1:
        pytest.skip("NumPy starts no threads here")
    assert threads_after("xlplan.solve.workers") == 1
    assert threads_after("xlplan.cli") == 1


@pytest.mark.skipif(not THREADS.exists(), reason="needs /proc")
def test_the_number_of_threads_is_the_users_where_they_set_it():
    plain = threads_after("numpy", **{VARIABLE: "2"})
    assert threads_after("xlplan.cli", **{VARIABLE: "2"}) == plain
