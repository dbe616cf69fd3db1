"""How long reading a large study takes, against the bare streaming pass of openpyxl over the file.

    python validation/benchmarks/bench_reading.py [--folder FOLDER]

Makes a study with 2,000 buses and a year of quarter hours (35,040 rows of eight profiles), then
times, one after the other and each the best of three: openpyxl's read-only pass over every cell
of the file, ``read_workbook``, and all checks on tables. Prints seconds, the ratio and the peak
of memory. Nothing here is a test.
"""

from __future__ import annotations

import argparse
import datetime as dt
import platform
import resource
import tempfile
import time
import warnings
from collections.abc import Callable
from itertools import pairwise
from pathlib import Path

import openpyxl

from xlplan.study.build import check_tables
from xlplan.workbook.reader import read_workbook
from xlplan.workbook.template import write_study_workbook

N_BUS = 2000
N_PERIOD = 35_040
PROFILES = ("homes", "shops", "works", "water", "street lights", "sun", "wind", "price")
TRIES = 3


def write_large_study(path: Path) -> None:
    """A chain of buses with a load at each, and a year of profiles."""
    start = dt.datetime(2031, 1, 1)
    names = [f"N{i:04d}" for i in range(N_BUS)]
    step = dt.timedelta(minutes=15)
    tables = {
        "Buses": [{"bus": name, "x": i % 50, "y": i // 50} for i, name in enumerate(names)],
        "Loads": [
            {
                "load": f"at {name}",
                "bus": name,
                "customer_class": "homes",
                "peak_kw": 3.5,
                "power_factor": 0.95,
                "customers": 4,
                "load_profile": PROFILES[i % 5],
            }
            for i, name in enumerate(names[1:])
        ],
        "Lines": [
            {
                "line": f"from {before}",
                "from_bus": before,
                "to_bus": after,
                "length": 0.2,
                "conductor": "wire",
                "outage_class": "overhead",
            }
            for before, after in pairwise(names)
        ],
        "Conductors": [{"conductor": "wire", "r_ohm_per_length": 0.2, "x_ohm_per_length": 0.3}],
        "Outage assumptions": [
            {"outage_class": "overhead", "failures_per_length_year": 0.1, "repair_hours": 3}
        ],
        "Customer classes": [
            {
                "customer_class": "homes",
                "critical": "no",
                "cost_0h_per_kw": 1,
                "cost_1h_per_kw": 4,
                "cost_4h_per_kw": 12,
                "cost_8h_per_kw": 25,
                "cost_after_8h_per_kwh": 3,
            }
        ],
        "Profiles": [
            {
                "time": start + i * step,
                **{name: 0.4 + (i * (k + 3) % 97) / 200 for k, name in enumerate(PROFILES)},
            }
            for i in range(N_PERIOD)
        ],
        "Windows": [
            {"window": "year", "occurrences_per_year": 1, "starts_at": start, "hours": 8760}
        ],
    }
    settings = {
        "source_bus": names[0],
        "base_kv": 20,
        "substation_limit_kva": 9000,
        "energy_price_per_kwh": 0.1,
    }
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        write_study_workbook(path, tables, settings)


def bare_pass(path: Path) -> int:
    """Every cell's value through openpyxl's read-only mode, and nothing done with it."""
    book = openpyxl.load_workbook(path, read_only=True, data_only=True)
    n_value = sum(
        value is not None
        for sheet in book.worksheets
        for row in sheet.iter_rows(values_only=True)
        for value in row
    )
    book.close()
    return n_value


def seconds(job: Callable[[], object]) -> float:
    """Best of a few tries."""
    best = float("inf")
    for _ in range(TRIES):
        begin = time.perf_counter()
        job()
        best = min(best, time.perf_counter() - begin)
    return best


def main() -> None:
    """Makes the study, times both, prints."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--folder", type=Path, help="where to keep the study; else it is removed")
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        path = (options.folder or Path(temporary)) / "large-study.xlsx"
        if not path.exists():
            write_large_study(path)
        n_value = bare_pass(path)
        bare = seconds(lambda: bare_pass(path))
        read = seconds(lambda: read_workbook(path))
        raw = read_workbook(path)
        check = seconds(lambda: check_tables(raw))
        n_fault = sum(finding.level == "fault" for finding in check_tables(raw)[1])
    peak_mb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"Python {platform.python_version()}, openpyxl {openpyxl.__version__}")
    print(f"{N_BUS} buses, {N_PERIOD} rows of {len(PROFILES)} profiles: {n_value} values")
    print(f"bare read-only pass      {bare:6.2f} s")
    print(f"read_workbook            {read:6.2f} s   {read / bare:.2f} times the bare pass")
    print(f"all checks on tables     {check:6.2f} s   ({n_fault} faults)")
    print(f"both together            {read + check:6.2f} s   {(read + check) / bare:.2f} times")
    print(f"peak memory of all this  {peak_mb:6.0f} MB")


if __name__ == "__main__":
    main()
