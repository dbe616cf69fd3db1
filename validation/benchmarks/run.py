"""Benchmarks of the engine: makes the seeded studies, solves them, writes one line per case.

    python -m validation.benchmarks.run R1 R2 ... [--workers N] [--out results.csv]

Every case runs in a process of its own, so that its peak memory is its own. Times are wall times of
one machine on one day: compare ratios within one run only. Not part of the tests.
"""

from __future__ import annotations

import argparse
import csv
import json
import os
import resource
import subprocess
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from validation.benchmarks.studies import feeder_study, with_repair_classes
from xlplan.model.study_graph import StudyGraph, build_study_graph
from xlplan.model.tree_size import judge_size
from xlplan.model.whole_tree import build_whole_tree
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import WindowModel, build_window_models
from xlplan.solve.decomposition import Engine
from xlplan.solve.first_stage import state_of
from xlplan.solve.highs import solve_program
from xlplan.solve.result import DecompositionResult, IterationRecord
from xlplan.solve.tree import solve_tree
from xlplan.study.study import Study

CYCLE = (4.0, 3.0, 2.0, 5.0)
"""Repair times of the classes when the scenarios of R2 are multiplied."""


TREE_BYTES, TREE_LIMIT_S = 20 * 2**30, 1800.0
"""What the whole tree may take."""


@dataclass(frozen=True)
class Case:
    """One solve by the decomposition."""

    name: str
    study: dict[str, object]
    target_gap_frac: float
    limit_s: float
    n_repair_class: int = 1
    workers: int = 0
    """0: as the command line says."""
    has_tree: bool = False
    note: str = ""


def storm(n_period: int, expected: float = 1.0) -> tuple[tuple[str, int, float, float], ...]:
    """One window, twelve times a year."""
    return (("storm", n_period, 12.0, expected),)


LARGE: dict[str, object] = {
    "seed": 4,
    "n_bus": 120,
    "n_section": 30,
    "windows": (("day", 96, 250.0, 0.02), ("peak", 96, 100.0, 0.05), ("storm", 96, 15.0, 1.0)),
    "n_storage": 6,
    "n_measure": 8,
}


def cases() -> Iterator[Case]:
    """All cases, in the order of the table."""
    yield Case("R1", {}, 0.01, 600.0)
    for n in (24, 48, 96, 192):
        yield Case(f"R2 periods {n}", {"windows": storm(n)}, 0.01, 900.0, workers=1)
    for n in (1, 2, 4):
        yield Case(f"R2 scenarios {12 * n}", {}, 0.01, 1200.0, n_repair_class=n, workers=1)
    for n in (5, 6, 7, 8, 9):
        yield Case(
            f"R3 tree {n} periods",
            {"n_bus": 6, "windows": storm(n, 0.3), "repair_h": 0.5, "n_storage": 1,
             "n_generator": 1, "n_measure": 1},
            0.001, 600.0, workers=1, has_tree=True,
        )  # fmt: skip
    yield Case("R4", LARGE, 0.015, 900.0)
    yield Case("R4 one worker", LARGE, 0.015, 1800.0, workers=1)
    yield Case("R6", {"windows": storm(672)}, 0.02, 1800.0)


@dataclass
class Outcome:
    """What is written; empty where it does not apply."""

    case: str
    n_bus: int
    n_scenario: int
    n_period: int
    expected_events: float
    workers: int
    build_s: float = 0.0
    solve_s: float = 0.0
    gap_pct: float = float("nan")
    lower_bound: float = float("nan")
    cost: float = float("nan")
    n_solve: int = 0
    solver_share: float = float("nan")
    own_ms_per_solve: float = float("nan")
    day_lp_s: float = float("nan")
    day_lps: float = float("nan")
    peak_mib: float = 0.0
    tree_nodes: int = 0
    tree_s: float = float("nan")
    tree_cost: float = float("nan")
    tree_peak_mib: float = float("nan")
    tree_end: str = ""
    termination: str = ""
    passes: list[tuple[float, float]] = field(default_factory=list)


def day_lp_seconds(graph: StudyGraph, result: DecompositionResult, repeats: int = 3) -> float:
    """One cold solve of the first window's plan without outages, all rows and columns in it."""
    family = graph.plan_family(0)
    member = family.member(0)
    low, high = member.col_lower.copy(), member.col_upper.copy()
    capacity = result.capacities[0]
    has = family.capacity_columns >= 0
    low[family.capacity_columns[has]] = high[family.capacity_columns[has]] = capacity[has]
    state = state_of(graph.graph.roots[0], capacity)
    given = member.in_columns >= 0
    low[member.in_columns[given]] = high[member.in_columns[given]] = state[given]

    program = replace(
        family.program, cost=member.cost, col_lower=low, col_upper=high,
        row_lower=member.row_lower, row_upper=member.row_upper,
        is_integer=np.zeros(family.program.n_col, dtype=bool),
    )  # fmt: skip
    seconds = []
    for _ in range(repeats):
        begin = time.perf_counter()
        found = solve_program(program)
        seconds.append(time.perf_counter() - begin)
        assert found.has_incumbent, found.raw_status
    return float(np.median(seconds))


def run_case(case: Case, workers: int) -> Outcome:
    """Solves one case."""
    begin = time.perf_counter()
    study: Study = feeder_study(**case.study)  # type: ignore[arg-type]
    windows: tuple[WindowModel, ...]
    if case.n_repair_class == 1:
        feeder = build_feeder(study)
        windows = build_window_models(study, feeder)
    else:
        feeder, windows = with_repair_classes(study, CYCLE[: case.n_repair_class])
    graph = build_study_graph(study, feeder, windows)
    workers = case.workers or workers
    outcome = Outcome(
        case.name,
        len(study.buses),
        max(len(w.scenarios) for w in windows),
        max(w.series.n_period for w in windows),
        sum(w.clock.expected_events() for w in windows),
        workers,
        build_s=time.perf_counter() - begin,
    )

    def tell(record: IterationRecord) -> None:
        outcome.passes.append((record.seconds, record.gap_frac))
        print(
            f"  {case.name}: {record.seconds:7.1f} s  bound {record.lower_bound:,.0f}"
            f"  gap {100 * record.gap_frac:.2f} %",
            file=sys.stderr,
        )

    begin, cpu = time.perf_counter(), time.process_time()
    with Engine(graph.graph, 1, workers) as engine:
        result = engine.run(case.target_gap_frac, time.monotonic() + case.limit_s, on_progress=tell)
        counts = engine.counts()
    outcome.solve_s = time.perf_counter() - begin
    cpu = time.process_time() - cpu
    outcome.gap_pct = 100.0 * result.gap_frac
    outcome.lower_bound, outcome.cost = result.lower_bound, result.cost.mean
    outcome.termination = str(result.termination)
    outcome.n_solve = int(counts["solve"])
    if workers == 1:
        outcome.solver_share = counts["seconds in solver"] / outcome.solve_s
        own = outcome.solve_s - counts["seconds in solver"]
        outcome.own_ms_per_solve = 1e3 * own / outcome.n_solve
    outcome.day_lp_s = day_lp_seconds(graph, result)
    outcome.day_lps = outcome.solve_s / outcome.day_lp_s
    if case.has_tree:
        fit = judge_size(study, windows)
        outcome.tree_nodes = fit.size.n_node
        outcome.peak_mib = _peak_mib(workers)
        # What is known so far, in case that the tree takes the process with it.
        print(json.dumps(vars(replace(outcome, tree_end="did not fit"))), flush=True)
        resource.setrlimit(resource.RLIMIT_AS, (TREE_BYTES, TREE_BYTES))
        begin = time.perf_counter()
        try:
            solution = solve_tree(
                build_whole_tree(study, feeder, windows, None), TREE_LIMIT_S, 1e-4
            )
        except MemoryError:
            outcome.tree_end = "did not fit"
        else:
            outcome.tree_end = str(solution.termination)
            if solution.has_plan:
                outcome.tree_cost = solution.objective
        outcome.tree_s = time.perf_counter() - begin
        outcome.tree_peak_mib = _peak_mib(workers)
        return outcome
    outcome.peak_mib = _peak_mib(workers)
    return outcome


def _peak_mib(workers: int) -> float:
    """Peak of this process and of its workers; the largest of these stands for all of them."""
    here = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    below = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss
    return (here + (workers if workers > 1 else 0) * below) / 1024.0


COLUMNS = (
    "case", "n_bus", "n_scenario", "n_period", "expected_events", "workers", "build_s", "solve_s",
    "gap_pct", "lower_bound", "cost", "n_solve", "solver_share", "own_ms_per_solve", "day_lp_s",
    "day_lps", "peak_mib", "tree_nodes", "tree_s", "tree_cost", "tree_peak_mib", "tree_end",
    "termination",
)  # fmt: skip


def main() -> None:
    """Runs the cases whose names begin with one of the words given."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("words", nargs="*", default=["R1"])
    parser.add_argument("--workers", type=int, default=len(os.sched_getaffinity(0)))
    parser.add_argument("--out", type=Path)
    parser.add_argument("--here", action="store_true", help="in this process, result as JSON")
    options = parser.parse_args()
    everything = list(cases())
    exact = [c for c in everything if c.name in options.words]
    chosen = exact or [c for c in everything if any(c.name.startswith(w) for w in options.words)]
    if options.here:
        print(json.dumps(vars(run_case(chosen[0], options.workers))))
        return
    rows = []
    for case in chosen:
        command = [sys.executable, "-m", "validation.benchmarks.run", case.name, "--here",
                   "--workers", str(options.workers)]  # fmt: skip
        # As the program itself does; here NumPy may be imported before it.
        environment = {"OMP_NUM_THREADS": "1", **os.environ}
        done = subprocess.run(
            command, stdout=subprocess.PIPE, text=True, check=False, env=environment
        )
        lines = done.stdout.strip().splitlines()
        if done.returncode:
            print(f"{case.name}: ended with {done.returncode}")
            if not lines:
                continue
        found = json.loads(lines[-1])
        rows.append([_short(found[name]) for name in COLUMNS])
        print(",".join(rows[-1]), flush=True)
    if options.out:
        is_new = not options.out.exists()
        with options.out.open("a", newline="", encoding="utf-8") as handle:
            writer = csv.writer(handle)
            if is_new:
                writer.writerow(COLUMNS)
            writer.writerows(rows)


def _short(value: object) -> str:
    return f"{value:.4g}" if isinstance(value, float) else str(value)


if __name__ == "__main__":
    main()
