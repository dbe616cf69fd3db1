"""The command line: arguments, exit status and printing; no logic.

Exit status 0: done; 2: the study cannot be used as it is; 3: stopped with a plan whose gap misses
the target; 1: anything else, with one plain line.
"""

from __future__ import annotations

import argparse
import contextlib
import datetime
import io
import json
import logging
import os
import shutil
import signal
import sys
import traceback
from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from types import FrameType
from typing import NoReturn

from rich.console import Console
from rich.status import Status

import xlplan
from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level, NoPlanError, PathError, StudyError, XlplanError
from xlplan.base.listing import listed
from xlplan.base.units import frac_from_pct, hours_from_minutes, pct_from_frac
from xlplan.compare.plan_solver import Progress
from xlplan.compare.study_result import StudyResult
from xlplan.pipeline import (
    CheckedInput,
    Overrides,
    check_target,
    read_study,
    savepoint_path,
    solve_study,
    write_answer,
    write_findings,
)
from xlplan.report.target import replace_whole
from xlplan.watch import Save, saves, stamp_of
from xlplan.workbook.launcher import check_no_launchers, write_launchers
from xlplan.workbook.template import write_template

DONE, FAILED, UNUSABLE, STOPPED = 0, 1, 2, 3

WORKBOOK_SUFFIXES = frozenset({".xlsx", ".xlsm", ".xlsb", ".xls", ".ods"})

_LOG = logging.getLogger("xlplan")


class _Parser(argparse.ArgumentParser):
    """Says one plain line on wrong arguments, with the status of "anything else"."""

    def error(self, message: str) -> NoReturn:
        self.exit(FAILED, f"xlplan: {message}. '{self.prog} --help' lists what there is.\n")


def main(arguments: Sequence[str] | None = None) -> int:
    """Runs one command.

    Parameters
    ----------
    arguments : words after the program's name; those of the process by default

    Returns
    -------
    int, exit status
    """
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")
    options = build_parser().parse_args(arguments)
    try:
        _check_paths(options)
        with _logged(getattr(options, "log", None)):
            return int(options.run(options))
    except StudyError as error:
        print_findings(error.findings)
        print(f"xlplan: {error}", file=sys.stderr)
        return error.exit_status
    except XlplanError as error:
        print(f"xlplan: {error}", file=sys.stderr)
        return error.exit_status
    except KeyboardInterrupt:
        print("xlplan: stopped before there was a plan.", file=sys.stderr)
        return FAILED
    except Exception as error:  # A fault of our own: one plain line, the rest is in the log.
        detail = f"{type(error).__name__}: {error}".splitlines()[0]
        print(
            f"xlplan: something went wrong inside the program ({detail}). "
            "Run again with --log FILE and keep the file for a report.",
            file=sys.stderr,
        )
        return FAILED


def build_parser() -> argparse.ArgumentParser:
    """The commands and their options."""
    parser = _Parser(
        prog="xlplan",
        description="Resilience plans for radial distribution feeders, from workbook to workbook.",
    )
    parser.add_argument("--version", action="version", version=f"xlplan {xlplan.__version__}")
    commands = parser.add_subparsers(title="commands", metavar="COMMAND", required=True)

    template = commands.add_parser("template", help="write a blank study, or the demo study")
    template.add_argument("out", type=Path, metavar="OUT.xlsx")
    template.add_argument("--demo", action="store_true", help="fill in the demo study")
    template.add_argument(
        "--launcher", action="store_true", help="write files to double-click beside it, too"
    )
    template.set_defaults(run=_template)

    check = commands.add_parser("check", help="list everything wrong or unlikely in a study")
    check.add_argument("study", type=Path, metavar="STUDY.xlsx")
    check.add_argument(
        "--mark",
        type=Path,
        metavar="OUT.xlsx",
        help="write the findings and marked copies of their sheets to a new workbook",
    )
    check.add_argument("--json", type=Path, metavar="FILE", help="write the findings as JSON")
    check.set_defaults(run=_check)

    watch = commands.add_parser("watch", help="check a study again each time it is saved")
    watch.add_argument("study", type=Path, metavar="STUDY.xlsx")
    watch.add_argument("--solve", action="store_true", help="solve it, too, if it has no faults")
    watch.set_defaults(run=_watch)

    solve = commands.add_parser("solve", help="check a study, solve it, write the results")
    solve.add_argument("study", type=Path, metavar="STUDY.xlsx")
    solve.add_argument("-o", "--output", type=Path, metavar="RESULTS.xlsx")
    solve.add_argument("--json", type=Path, metavar="FILE", help="write the results as JSON too")
    solve.add_argument("--method", choices=("auto", "tree", "decomposed"), default="auto")
    solve.add_argument("--gap", type=_positive, metavar="PCT", help="target gap in percent")
    solve.add_argument(
        "--time-limit", type=_positive, metavar="MIN", help="minutes for each alternative"
    )
    solve.add_argument("--workers", type=_count, metavar="N", help="processes to use")
    solve.add_argument("--seed", type=_whole, metavar="N", help="seed of the random numbers")
    solve.add_argument(
        "--plan-only",
        action="store_true",
        help="leave out the study's own alternatives, sensitivities and other comparisons",
    )
    solve.add_argument("--force", action="store_true", help="replace results that are there")
    solve.add_argument(
        "--resume", action="store_true", help="go on from a stopped run of the same study"
    )
    solve.add_argument(
        "--memory", type=_positive, metavar="GIB", help="memory to use at most (default: half)"
    )
    solve.add_argument("--quiet", action="store_true", help="print the results' path only")
    solve.add_argument("--log", type=Path, metavar="FILE", help="write a log of the run")
    solve.set_defaults(run=_solve)
    return parser


def _positive(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"'{text}' is not a number") from None
    if value == float("inf"):
        raise argparse.ArgumentTypeError(f"{text} is without limit; leave the option out for that")
    if not value > 0.0:
        raise argparse.ArgumentTypeError(f"{text} is not above 0")
    return value


def _count(text: str) -> int:
    value = _integer(text)
    if value < 1:
        raise argparse.ArgumentTypeError(f"{text} is not at least 1")
    return value


def _whole(text: str) -> int:
    value = _integer(text)
    if value < 0:
        raise argparse.ArgumentTypeError(f"{text} is below 0")
    return value


def _integer(text: str) -> int:
    try:
        return int(text)
    except ValueError:
        raise argparse.ArgumentTypeError(f"'{text}' is not a whole number") from None


# -- commands ----------------------------------------------------------------------------------


def _template(options: argparse.Namespace) -> int:
    out: Path = options.out
    if out.suffix.lower() != ".xlsx":
        raise PathError(f"'{out}' should end in .xlsx.")
    if out.exists():
        raise PathError(f"'{out}' is there already; choose another name. Nothing was changed.")
    if options.launcher:
        check_no_launchers(out)
    write_template(out, with_demo=options.demo)
    print(out)
    if options.launcher:
        for path in write_launchers(out, sys.executable):
            print(path)
    return DONE


def _check(options: argparse.Namespace) -> int:
    mark: Path | None = options.mark
    for path in (mark, options.json):
        if path is not None:
            check_target(path, options.study)
    checked = read_study(options.study)
    print_checked(checked)
    if options.json is not None:
        document = {
            "schema": 1,
            "study": str(options.study),
            "fingerprint": checked.raw.fingerprint,
            "findings": [finding_record(finding) for finding in checked.findings],
        }
        replace_whole(options.json, json.dumps(document, indent=1, ensure_ascii=False) + "\n")
    if mark is not None:
        written = write_findings(checked, mark, options.study)
        if written != mark:
            print(f"'{mark}' is there already, so the marked copy has another name:")
        print(written)
    return DONE if checked.is_usable else UNUSABLE


def _watch(options: argparse.Namespace) -> int:
    """Ctrl-C while waiting or checking is how watching ends: status 0. During a solve it counts
    for the solve, whose status it is then."""
    study: Path = options.study
    if not study.exists():
        raise PathError(f"There is no file '{study}'.")
    # A shell that starts us in the background has SIGINT ignored; watching must end all the same.
    with contextlib.suppress(ValueError):
        signal.signal(signal.SIGINT, signal.default_int_handler)
        signal.signal(signal.SIGTERM, signal.default_int_handler)
    try:
        _say(f"Watching '{study}'. Save it to have it checked again; Ctrl-C stops.")
        for save in saves(study):
            status = _after_save(options, save)
            if status is not None:
                return status
    except KeyboardInterrupt:
        _say("Stopped watching.")
    return DONE


def _after_save(options: argparse.Namespace, save: Save) -> int | None:
    """Checks, and solves if asked; a status where watching is to end."""
    study: Path = options.study
    if save.stamp is None:
        _say(f"'{study}' is gone; waiting for it to come back.")
        return None
    _say(f"\n{datetime.datetime.now():%H:%M:%S}  {study.name}")
    try:
        checked = read_study(study)
        # That the study is open is what watching is for.
        kept = tuple(f for f in checked.findings if f.code != Code.OPEN_ELSEWHERE)
        checked = replace(checked, findings=kept)
        print_checked(checked)
        sys.stdout.flush()
        if options.solve and checked.is_usable:
            return _solve_while_watching(study, save)
    except XlplanError as error:
        # Caught in the middle of the next save: that one is told instead.
        if stamp_of(study) == save.stamp:
            _say(f"xlplan: {error}")
    return None


def _solve_while_watching(study: Path, save: Save) -> int | None:
    """Solves, unless the study is saved again; a status where the user stopped it."""
    with _Interrupt() as interrupt, _Display(is_quiet=False) as display:

        def is_saved_again() -> bool:
            return stamp_of(study) not in (save.stamp, None)

        try:
            result = solve_study(
                study,
                Overrides(),
                _cores(),
                display.show,
                should_stop=lambda: interrupt.is_asked or is_saved_again(),
            )
        except NoPlanError:
            if interrupt.is_asked or not is_saved_again():
                raise
            result = None
        if result is None or (is_saved_again() and not interrupt.is_asked):
            _say("The study was saved again, so this solve is dropped.")
            return None
        output = study.with_name(f"{study.stem}-results.xlsx")
        written = write_answer(result, study, output, None, force=False)
    print_summary(result)
    if written != output:
        print(f"'{output}' is there already, so the results have another name:")
    _say(str(written))
    if interrupt.is_asked:
        return DONE if result.status == "gap reached" else STOPPED
    return None


def _say(text: str) -> None:
    """Prints at once, into a pipe as well."""
    print(text, flush=True)


def _solve(options: argparse.Namespace) -> int:
    study: Path = options.study
    output = options.output or study.with_name(f"{study.stem}-results.xlsx")
    check_target(output, study)
    if options.json is not None:
        check_target(options.json, study)
    overrides = Overrides(
        method=options.method,
        gap_frac=None if options.gap is None else frac_from_pct(options.gap),
        time_limit_h=None if options.time_limit is None else hours_from_minutes(options.time_limit),
        seed=options.seed,
        workers=options.workers,
        plan_only=options.plan_only,
        resume=options.resume,
        memory_gib=options.memory,
    )
    with _Interrupt() as interrupt, _Display(options.quiet) as display:
        result = solve_study(
            study,
            overrides,
            _cores(),
            display.show,
            should_stop=lambda: interrupt.is_asked,
            results_path=output,
        )
        display.show(Progress("", "writing"))
        written = write_answer(result, study, output, options.json, options.force)
    if not options.quiet:
        print_findings([f for f in result.findings if f.level is not Level.NOTE])
        print_summary(result)
        if written != output:
            print(f"'{output}' is there already, so the results have another name:")
        if result.status != "gap reached" and savepoint_path(output).exists():
            print(f"Stopped before the target; run again with --resume to go on ({output.name}).")
    print(written)
    return DONE if result.status == "gap reached" else STOPPED


def _cores() -> int:
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def _check_paths(options: argparse.Namespace) -> None:
    """Raises PathError for a study that is a folder, two files to write under one name, or a name
    that says another kind of file.

    Called before the log is opened: opening it empties whatever it names.
    """
    study: Path | None = getattr(options, "study", None)
    if study is None:
        return
    if study.is_dir():
        raise PathError(f"'{study}' is a folder; give the name of a study.")
    named = [getattr(options, name, None) for name in ("output", "json", "log", "mark")]
    targets = [path for path in named if path is not None]
    for i, target in enumerate(targets):
        if _is_same_file(target, study):
            raise PathError(f"'{target}' is the study itself; it is never written to.")
        if any(_is_same_file(target, other) for other in targets[:i]):
            raise PathError(f"'{target}' is named for two different files; give each its own.")
    for path in (getattr(options, "output", None), getattr(options, "mark", None)):
        if path is not None and path.suffix.lower() != ".xlsx" and not path.is_dir():
            raise PathError(f"'{path}' should end in .xlsx.")
    for path in (getattr(options, "json", None), getattr(options, "log", None)):
        # Both are replaced without asking; a workbook of the user's must not be.
        if path is not None and path.suffix.lower() in WORKBOOK_SUFFIXES:
            raise PathError(f"'{path}' is the name of a workbook, and this file is none.")


def _is_same_file(one: Path, other: Path) -> bool:
    """True if two paths lead to one file, by whatever name or link."""
    if one.resolve() == other.resolve():
        return True
    return one.exists() and other.exists() and one.samefile(other)


# -- printing ----------------------------------------------------------------------------------


def print_checked(checked: CheckedInput) -> None:
    """The findings of a study, how many there are, and whether it can be solved."""
    print_findings(checked.findings)
    verdict = "can be solved" if checked.is_usable else "cannot be solved yet"
    print(f"{count_findings(checked.findings)} The study {verdict}.")


def print_findings(findings: Sequence[Finding]) -> None:
    """Findings sheet by sheet, wrapped to the terminal; in a pipe one line each."""
    for line in listed(findings, _line_width()):
        print(line)


def _line_width() -> int | None:
    """Characters of a line: those of the terminal, or of COLUMNS where that is set; else any."""
    if sys.stdout.isatty():
        return shutil.get_terminal_size().columns
    columns = os.environ.get("COLUMNS", "")
    return int(columns) if columns.isascii() and columns.isdigit() and int(columns) > 0 else None


def count_findings(findings: Sequence[Finding]) -> str:
    """How many of each level, in a sentence."""
    parts = []
    for level in Level:
        n = sum(finding.level is level for finding in findings)
        parts.append(f"{n} {level}{'' if n == 1 else 's'}")
    return ", ".join(parts) + "."


def finding_record(finding: Finding) -> dict[str, str]:
    """A finding for the JSON file."""
    return {
        "level": str(finding.level),
        "code": str(finding.code),
        "sheet": finding.sheet,
        "cell": finding.cell,
        "key": finding.key,
        "value": finding.value,
        "message": finding.message,
        "hint": finding.hint,
    }


def print_summary(result: StudyResult) -> None:
    """The plan in a few lines."""
    best = result.plan(result.recommended)
    money = result.currency
    print(f"{result.study_name}: {best.name}")
    print(f"  yearly cost       {best.costs.total:,.0f} {money}")
    low, high = best.cost_interval
    if best.is_enumerated:
        print("                    every history counted, no sampling")
    else:
        print(f"                    95 % interval {low:,.0f} to {high:,.0f}")
    if best.aim is not None:
        weight = pct_from_frac(best.aim.weight_frac)
        print(f"  weighted cost     {best.aim.total:,.0f} {money}")
        print(f"                    {weight:g} % of it for bad outcomes: {best.aim.tail:,.0f}")
    if best.lower_bound is not None and best.gap_frac is not None:
        of = "" if best.aim is None else " (of the weighted cost)"
        print(f"  lower bound       {best.lower_bound:,.0f}{of}")
        print(
            f"  gap               {pct_from_frac(best.gap_frac):.2f} % "
            f"(target {pct_from_frac(result.gap_target_frac):g} %): {result.status}"
        )
    print(f"  capital           {best.capital_cost:,.0f} {money}")
    for purchase in best.purchases:
        if purchase.is_bought:
            size = {
                "storage": f"{purchase.kw:,.0f} kW, {purchase.kwh:,.0f} kWh",
                "generator": f"{purchase.kw:,.0f} kW",
            }.get(purchase.kind, purchase.place)  # a line measure, or a device at its line
            print(f"  buy               {purchase.asset}: {size}")
    if not any(purchase.is_bought for purchase in best.purchases):
        print("  buy               nothing")
    for plan in result.plans:
        index = plan.indices
        print(
            f"  {plan.name + ':':<27} {plan.costs.total:>14,.0f} {money} a year, "
            f"{index.eens_kwh:,.0f} kWh unserved, SAIDI {index.saidi_h:.2f} h"
        )
    failed = [
        check
        for plan in result.plans
        for check in plan.checks
        if not check.passes and not check.is_warning
    ]
    print(f"  checks            {'all pass' if not failed else f'{len(failed)} FAIL'}")


class _Display:
    """One line of progress on a terminal; nothing when piped or quiet."""

    def __init__(self, is_quiet: bool) -> None:
        self._status: Status | None = None
        if not is_quiet and sys.stderr.isatty():
            self._status = Console(stderr=True).status("starting")

    def __enter__(self) -> _Display:
        if self._status is not None:
            self._status.start()
        return self

    def __exit__(self, *_: object) -> None:
        if self._status is not None:
            self._status.stop()

    def show(self, progress: Progress) -> None:
        """Shows a step."""
        text = progress_text(progress)
        _LOG.info("%s", text)
        if self._status is not None:
            self._status.update(text)


def progress_text(progress: Progress) -> str:
    """A step in words."""
    parts = [f"{progress.alternative}: {progress.step}" if progress.alternative else progress.step]
    if progress.lower_bound is not None:
        parts.append(f"bound {progress.lower_bound:,.0f}")
    if progress.cost is not None:
        parts.append(f"cost {progress.cost:,.0f}")
    if progress.gap_frac is not None:
        parts.append(f"gap {pct_from_frac(progress.gap_frac):.2f} %")
    if progress.seconds_left is not None:
        minutes, seconds = divmod(int(progress.seconds_left), 60)
        parts.append(f"{minutes}:{seconds:02d} left to the limit")
    return ", ".join(parts)


class _Interrupt:
    """Ctrl-C once: finish with the best plan so far; twice: stop at once."""

    def __init__(self) -> None:
        self.is_asked = False
        self._before: object = None

    def __enter__(self) -> _Interrupt:
        with contextlib.suppress(ValueError):  # Not in the main thread: leave signals alone.
            self._before = signal.signal(signal.SIGINT, self._handle)
        return self

    def __exit__(self, *_: object) -> None:
        if self._before is not None:
            signal.signal(signal.SIGINT, self._before)  # type: ignore[arg-type]

    def _handle(self, signum: int, frame: FrameType | None) -> None:
        if self.is_asked:
            raise KeyboardInterrupt
        self.is_asked = True
        print("\nStopping: finishing with the best plan so far.", file=sys.stderr)


@contextlib.contextmanager
def _logged(path: Path | None) -> Iterator[None]:
    """Writes the program's log to a file while a command runs."""
    if path is None:
        yield
        return
    try:
        handler = logging.FileHandler(path, mode="w", encoding="utf-8")
    except OSError as error:
        raise PathError(f"'{path}' cannot be written: {error.strerror}.") from error
    handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(name)s: %(message)s"))
    root = logging.getLogger()
    level = root.level
    root.addHandler(handler)
    root.setLevel(logging.DEBUG)
    try:
        yield
    except XlplanError:
        raise
    except Exception:
        # While the file is still there to take it; without one it would go to the terminal.
        _LOG.error("%s", traceback.format_exc())
        raise
    finally:
        root.setLevel(level)
        root.removeHandler(handler)
        handler.close()
