"""One study from workbook to answer, one readable line per step."""

from __future__ import annotations

import datetime
import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

import xlplan
from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level, StudyError
from xlplan.base.memory import DEFAULT_SHARE, machine_bytes
from xlplan.base.units import BYTES_PER_GIB, pct_from_frac
from xlplan.compare.assemble import assemble
from xlplan.compare.own import solve_own
from xlplan.compare.pack import PackMaker, price_studies_of
from xlplan.compare.pack_result import Pack
from xlplan.compare.plan_solver import Progress, SolveOptions
from xlplan.compare.standing import StandingAlternatives, against
from xlplan.compare.study_result import StudyResult
from xlplan.network.feeder import Feeder, build_feeder
from xlplan.network.topology import check_no_load_voltage, check_radial
from xlplan.outages.checks import check_failure_counts, check_islands, check_rounded_times
from xlplan.outages.window_model import WindowModel, build_window_models
from xlplan.report.json_twin import write_json
from xlplan.report.target import put_in_place, temporary_beside
from xlplan.report.writer import check_target, write_results
from xlplan.solve.savepoint import Found, Savepoint
from xlplan.study.build import build_study, check_tables, in_workbook_order
from xlplan.study.outline import outline_of
from xlplan.study.study import Study
from xlplan.workbook.marking import write_marked
from xlplan.workbook.reader import read_workbook
from xlplan.workbook.tables import RawStudy


@dataclass(frozen=True)
class CheckedInput:
    """A study as read: everything found, and the study itself where nothing is at fault."""

    raw: RawStudy
    findings: tuple[Finding, ...]
    study: Study | None
    feeder: Feeder | None
    windows: tuple[WindowModel, ...]

    @property
    def is_usable(self) -> bool:
        """True if there is no fault."""
        return not any(finding.level is Level.FAULT for finding in self.findings)


def read_study(path: Path) -> CheckedInput:
    """Reads and checks a study workbook; all findings in one pass.

    Parameters
    ----------
    path : Path

    Returns
    -------
    CheckedInput

    Raises PathError or StudyFileError for what cannot be read at all.
    """
    return check_raw(read_workbook(path))


def check_raw(raw: RawStudy) -> CheckedInput:
    """Checks a study that was read; all findings in one pass.

    Parameters
    ----------
    raw : RawStudy

    Returns
    -------
    CheckedInput
    """
    checked, findings = check_tables(raw)
    if _has_fault(findings):
        outline = outline_of(checked, findings)
        findings += [] if outline is None else check_radial(outline)
        return CheckedInput(raw, _ordered([*findings, _checks_left(outline)]), None, None, ())
    study = build_study(checked, raw.fingerprint)
    findings += check_radial(study)
    if _has_fault(findings):
        return CheckedInput(raw, _ordered([*findings, _checks_left(study)]), None, None, ())
    feeder = build_feeder(study)
    windows = build_window_models(study, feeder)
    scenarios = {
        record.window: window.scenarios
        for record, window in zip(study.windows, windows, strict=True)
    }
    findings += check_no_load_voltage(study, feeder, scenarios)
    findings += check_rounded_times(study)
    findings += check_failure_counts(study, windows)
    findings += check_islands(study, feeder, scenarios)
    return CheckedInput(raw, _ordered(findings), study, feeder, windows)


def _has_fault(findings: list[Finding]) -> bool:
    return any(finding.level is Level.FAULT for finding in findings)


def _ordered(findings: list[Finding]) -> tuple[Finding, ...]:
    """In workbook order, each place and code once."""
    once = {(f.sheet, f.cell, f.code, f.key, f.value): f for f in reversed(findings)}
    kept = set(map(id, once.values()))
    return tuple(in_workbook_order([finding for finding in findings if id(finding) in kept]))


def _checks_left(shape: object) -> Finding:
    """Says which checks wait until the faults are mended."""
    waiting = "islands, voltages without load and times rounded to periods"
    if shape is None:
        waiting = f"whether the feeder is radial and connected, {waiting}"
    message = f"not checked yet, because of faults elsewhere: {waiting}."
    hint = "These follow once the faults are mended."
    return Finding(Level.NOTE, Code.CHECKS_LEFT, "Lines", "", "", "", message, hint)


def write_findings(checked: CheckedInput, path: Path, study_path: Path) -> Path:
    """Writes the findings as a new workbook, with marked copies of the affected sheets.

    Parameters
    ----------
    checked : CheckedInput
    path : Path asked for
    study_path : Path, never written to

    Returns
    -------
    Path of the workbook written: the next free name where the one asked for is taken
    """
    check_target(path, study_path)
    with temporary_beside(path) as temporary:
        write_marked(temporary, checked.raw, checked.findings)
        return put_in_place(temporary, path, force=False)


@dataclass(frozen=True)
class Overrides:
    """What the command line sets instead of the study's settings; None: as the study says."""

    method: str = "auto"
    gap_frac: float | None = None
    time_limit_h: float | None = None
    seed: int | None = None
    workers: int | None = None
    plan_only: bool = False
    resume: bool = False
    memory_gib: float | None = None


def solve_options(study: Study, overrides: Overrides, workers: int) -> SolveOptions:
    """Options in force."""
    settings = study.settings

    def pick(value: float | None, setting: float) -> float:
        return setting if value is None else value

    return SolveOptions(
        method=overrides.method,
        gap_target_frac=pick(overrides.gap_frac, settings.gap_target_frac),
        time_limit_h=pick(overrides.time_limit_h, settings.time_limit_h),
        samples=settings.samples,
        seed=settings.random_seed if overrides.seed is None else overrides.seed,
        workers=workers,
        memory_bytes=allowed_memory(overrides.memory_gib),
    )


def allowed_memory(asked_gib: float | None) -> int | None:
    """Bytes that a run may use: what was asked for, or a share of the machine's; None: no limit."""
    if asked_gib is not None:
        return int(asked_gib * BYTES_PER_GIB)
    machine = machine_bytes()
    return None if machine is None else int(DEFAULT_SHARE * machine)


def savepoint_path(results_path: Path) -> Path:
    """File beside the results in which a run keeps what it has learnt."""
    return results_path.with_name(f"{results_path.stem}.unfinished.npz")


def solve_study(
    path: Path,
    overrides: Overrides,
    cores: int = 1,
    on_progress: Callable[[Progress], None] | None = None,
    should_stop: Callable[[], bool] | None = None,
    results_path: Path | None = None,
) -> StudyResult:
    """Reads, checks and solves a study.

    Parameters
    ----------
    path : Path
    overrides : Overrides
    cores : int, processes to use where ``overrides`` names no number
    on_progress : told about every step
    should_stop : asked now and then; True ends the search with the best plan so far
    results_path : Path or None, beside which the run keeps what it learns until it is done

    Returns
    -------
    StudyResult

    Raises StudyError with every finding if the study cannot be used as it is.
    """
    begin = time.monotonic()
    started_at = datetime.datetime.now().strftime("%Y-%m-%d %H:%M")
    tell = on_progress or (lambda _: None)
    tell(Progress("", "reading"))
    checked = read_study(path)
    if not checked.is_usable or checked.study is None or checked.feeder is None:
        raise StudyError("The study cannot be used as it is.", checked.findings)
    findings = list(checked.findings)
    read = time.monotonic()
    workers = overrides.workers or useful_workers(checked.windows, cores)
    options = solve_options(checked.study, overrides, workers)
    savepoint = None
    if results_path is not None:
        savepoint = Savepoint(
            savepoint_path(results_path), f"{xlplan.__version__} {checked.study.fingerprint}"
        )
    prices = () if overrides.plan_only else price_studies_of(checked.study)
    solver = StandingAlternatives(
        checked.study,
        checked.feeder,
        checked.windows,
        options,
        on_progress,
        should_stop,
        price_studies=prices,
        savepoint=savepoint,
        resumes=overrides.resume,
    )
    if savepoint is not None and overrides.resume:
        findings.append(_what_was_saved(savepoint, solver.method))
    pack = Pack()
    with solver:
        plans = solver.solve()
        if not overrides.plan_only:
            existing, _, best = plans
            own = solve_own(solver)
            plans += tuple(against(plan, existing) for plan in own.plans)
            findings += own.findings
            if checked.study.settings.risk_weight_frac > 0.0:
                pack = Pack(left_out=LEFT_OUT)
                findings.append(_left_out(checked.study))
            else:
                maker = PackMaker(solver, existing, best, own.plans)
                pack = maker.make()
                findings += maker.findings
    if savepoint is not None and plans[2].result.status == "gap reached":
        savepoint.remove()
    return assemble(
        checked.study,
        checked.raw,
        checked.feeder,
        checked.windows,
        options,
        plans,
        pack,
        findings,
        started_at,
        read - begin,
        time.monotonic() - read,
    )


def _what_was_saved(savepoint: Savepoint, method: str) -> Finding:
    """Says whether the run goes on from an earlier one."""
    name = f"'{savepoint.path}'"
    message, level = {
        Found.MATCHING: (f"This run goes on from the work kept in {name}.", Level.NOTE),
        Found.NOTHING: (f"There is no {name} to go on from: started afresh.", Level.NOTE),
        Found.OTHER_STUDY: (
            f"The work kept in {name} is of another study, or of this one before it was changed: "
            "started afresh.",
            Level.WARNING,
        ),
        Found.UNREADABLE: (f"{name} cannot be read: started afresh.", Level.WARNING),
    }[savepoint.found]
    if method == "tree":
        message, level = "The whole tree is solved in one go: nothing to go on from.", Level.NOTE
    return Finding(
        level=level, code=Code.STOPPED_RUN, sheet="Run", cell="", key="", value="", message=message
    )


FEW_SUBPROBLEMS = 2000
"""With fewer subproblems per pass, starting further processes takes longer than it saves."""


def useful_workers(windows: tuple[WindowModel, ...], cores: int) -> int:
    """Processes worth starting."""
    work = sum(window.series.n_period * len(window.scenarios) for window in windows)
    return 1 if work < FEW_SUBPROBLEMS else cores


LEFT_OUT = (
    "With a weight on bad outcomes this is left out: the value of hardening, budgets, repair times "
    "and sensitivities are worked out for the expected cost alone."
)


def _left_out(study: Study) -> Finding:
    """Says what a weight on bad outcomes leaves out."""
    origin = study.settings.origin_of.get("risk_weight_pct")
    return Finding(
        level=Level.NOTE,
        code=Code.NOT_SOLVED,
        sheet="Settings" if origin is None else origin.sheet,
        cell="" if origin is None else origin.cell("risk_weight_pct"),
        key="risk_weight_pct",
        value=f"{pct_from_frac(study.settings.risk_weight_frac):g}",
        message="with a weight on bad outcomes the sheets on line hardening, repair time, budget "
        "and sensitivities are left out, and so is the bound from above where it needs a run of "
        "its own: they are worked out for the expected cost alone.",
        hint="Set the weight to 0 to have them.",
    )


def write_answer(
    result: StudyResult, study_path: Path, results_path: Path, json_path: Path | None, force: bool
) -> Path:
    """Writes the results workbook and the JSON twin.

    Parameters
    ----------
    result : StudyResult
    study_path : Path, never written to
    results_path : Path asked for
    json_path : Path or None
    force : bool, replace a results workbook that is there

    Returns
    -------
    Path of the workbook written: the next free name where the one asked for is taken
    """
    begin = time.monotonic()
    written = write_results(result, results_path, force, study_path)
    result = replace(result, write_seconds=time.monotonic() - begin)
    if json_path is not None:
        write_json(result, json_path)
    return written


__all__ = [
    "CheckedInput",
    "Overrides",
    "check_raw",
    "check_target",
    "read_study",
    "solve_study",
    "write_answer",
    "write_findings",
]
