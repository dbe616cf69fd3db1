"""What the comparison pack costs, in least-cost plans of the demo study.

    python -m validation.benchmarks.bench_pack [--hours H] [--out table.csv]

Solves the demo's least-cost plan alone, by a solver of its own, and then the whole run as
``xlplan solve`` does it: the standing alternatives, the user's, and the pack around the least-cost
plan. One process, one worker, the demo's own options. Prints for each piece the seconds, the
processor time, the subproblems solved and the time inside the linear programming solver, and each
total as a multiple of the plan alone. Seconds are of one machine on one day; the ratio in
subproblems does not depend on what else the machine does. Nothing here is a test.

``--hours`` cuts every window to so many hours from its middle, for a quick look.
"""

from __future__ import annotations

import argparse
import csv
import os
import platform
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, TypeVar

from xlplan.compare.own import solve_alternative
from xlplan.compare.pack import PackMaker, price_studies_of
from xlplan.compare.plan_solver import PlanSolver, Progress, SolvedPlan, SolveOptions, Wish
from xlplan.compare.standing import StandingAlternatives
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.pipeline import Overrides, read_study, solve_options
from xlplan.solve.decomposition import Engine
from xlplan.study.study import Study, Window
from xlplan.workbook.template import write_template

_Made = TypeVar("_Made")


@dataclass
class Spent:
    """What was spent since the last look."""

    seconds: float = 0.0
    cpu_s: float = 0.0
    n_solve: float = 0.0
    solver_s: float = 0.0

    def __add__(self, other: Spent) -> Spent:
        return Spent(
            *(a + b for a, b in zip(vars(self).values(), vars(other).values(), strict=True))
        )

    def __sub__(self, other: Spent) -> Spent:
        return Spent(
            *(a - b for a, b in zip(vars(self).values(), vars(other).values(), strict=True))
        )


@dataclass
class Ledger:
    """Counts of every engine that there has been, the closed ones by their last figures."""

    open: list[Engine] = field(default_factory=list)
    n_solve: float = 0.0
    solver_s: float = 0.0
    rows: list[tuple[str, Spent]] = field(default_factory=list)

    def now(self) -> Spent:
        """Totals up to here."""
        counts = [engine.counts() for engine in self.open]
        return Spent(
            time.perf_counter(),
            time.process_time(),
            self.n_solve + sum(c.get("node solve", 0.0) for c in counts),
            self.solver_s + sum(c.get("seconds in solver", 0.0) for c in counts),
        )

    def close(self, engine: Engine) -> None:
        """Keeps an engine's figures and lets go of it."""
        if any(one is engine for one in self.open):
            self.open = [one for one in self.open if one is not engine]
            counts = engine.counts()
            self.n_solve += counts.get("node solve", 0.0)
            self.solver_s += counts.get("seconds in solver", 0.0)

    def measure(self, name: str, work: Callable[[], _Made]) -> _Made:
        """Does one piece of work and writes down what it took."""
        before = self.now()
        made = work()
        self.rows.append((name, self.now() - before))
        spent = self.rows[-1][1]
        print(
            f"  {name:40s} {spent.seconds:7.1f} s  {spent.cpu_s:7.1f} s processor "
            f"{spent.n_solve:9,.0f} solves",
            flush=True,
        )
        return made


@contextmanager
def counted(ledger: Ledger) -> Iterator[None]:
    """Every engine made inside is counted."""
    begin, end = Engine.__init__, Engine.close

    def start(engine: Engine, *args: Any, **named: Any) -> None:
        begin(engine, *args, **named)
        ledger.open.append(engine)

    def close(engine: Engine) -> None:
        ledger.close(engine)
        end(engine)

    Engine.__init__, Engine.close = start, close  # type: ignore[method-assign]
    try:
        yield
    finally:
        Engine.__init__, Engine.close = begin, end  # type: ignore[method-assign]


def demo_study(folder: Path, hours: float | None) -> Study:
    """The demo as written by ``xlplan template --demo``, with shorter windows if asked for."""
    path = folder / "demo.xlsx"
    write_template(path, with_demo=True)
    study = read_study(path).study
    assert study is not None
    if hours is None:
        return study
    return replace(study, windows=tuple(_shortened(study, one, hours) for one in study.windows))


def _shortened(study: Study, window: Window, hours: float) -> Window:
    """The middle of a window."""
    n = min(window.n_period, round(hours / study.settings.period_h))
    return replace(window, start_row=window.start_row + (window.n_period - n) // 2, n_period=n)


def run(study: Study, options: SolveOptions, ledger: Ledger) -> tuple[Spent, Spent]:
    """The plan alone, and the whole run piece by piece; what each took altogether."""
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    budget = study.settings.capital_budget

    def alone() -> SolvedPlan:
        with PlanSolver(study, feeder, windows, options) as one:
            return one.solve_wish(Wish("Least-cost plan", capital_budget=budget))

    def tell(progress: Progress) -> None:
        """Nothing is shown on the way."""

    print("plan alone")
    ledger.measure("least-cost plan alone", alone)
    start = ledger.now()
    print("whole run")
    with StandingAlternatives(
        study, feeder, windows, options, tell, price_studies=price_studies_of(study)
    ) as solver:
        existing, _, best = ledger.measure("standing alternatives", solver.solve)
        others = []
        for one in study.alternatives:
            name = f"alternative: {one.alternative}"
            others.append(
                ledger.measure(name, lambda one=one: solve_alternative(solver, one)[0])  # type: ignore[misc]
            )
        maker = PackMaker(solver, existing, best, others)
        ledger.measure("line hardening", maker.hardening)
        ledger.measure("budget curve", maker.budget)
        ledger.measure("repair times", maker.repair_times)
        for row, value, is_high in maker.cases():
            name = f"{row.parameter} {'high' if is_high else 'low'} ({value:g})"
            ledger.measure(name, lambda a=(row, value, is_high): maker.case(*a))  # type: ignore[misc]
    assert not maker.findings, maker.findings
    return ledger.rows[0][1], ledger.now() - start


def main() -> None:
    """Makes the study, runs, prints the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--hours", type=float, help="cut every window to so many hours")
    parser.add_argument("--out", type=Path, help="write the table here as .csv too")
    asked = parser.parse_args()
    ledger = Ledger()
    with tempfile.TemporaryDirectory() as folder, counted(ledger):
        study = demo_study(Path(folder), asked.hours)
        options = solve_options(study, Overrides(), workers=1)
        alone, whole = run(study, options, ledger)
    rows = [*ledger.rows, ("whole run", whole)]
    print(f"\nPython {platform.python_version()}, load {os.getloadavg()[0]:.1f} at the end")
    print("| piece | seconds | processor s | solves | s in solver | ratio | ratio in solves |")
    print("| --- | --- | --- | --- | --- | --- | --- |")
    table = []
    for name, spent in rows:
        ratio, solves = spent.seconds / alone.seconds, spent.n_solve / alone.n_solve
        table.append(
            (name, spent.seconds, spent.cpu_s, spent.n_solve, spent.solver_s, ratio, solves)
        )
        print(
            f"| {name} | {spent.seconds:.1f} | {spent.cpu_s:.1f} | {spent.n_solve:,.0f} "
            f"| {spent.solver_s:.1f} | {ratio:.2f} | {solves:.2f} |"
        )
    if asked.out is not None:
        with asked.out.open("w", newline="", encoding="utf-8") as file:
            csv.writer(file).writerows(
                [
                    ("piece", "seconds", "cpu_s", "solves", "solver_s", "ratio", "ratio_solves"),
                    *table,
                ]
            )


if __name__ == "__main__":
    main()
