"""The results workbook: sheets in their order, written whole or not at all.

    Summary - Alternatives - Plan - Line hardening - Repair time - Budget - Sensitivities
    - Reliability - Risk - Operation - Voltages - Feeder - Convergence - Checks - Assumptions
    - Cautions

Sheets are filled in the order in which they need each other's addresses: Plan first, Summary last.
"""

from __future__ import annotations

import datetime as dt
import logging
import zipfile
from pathlib import Path
from xml.etree import ElementTree

from xlplan.base.errors import ResultFileError
from xlplan.compare.study_result import StudyResult
from xlplan.report.money import largest_amount
from xlplan.report.safe_book import SafeBook
from xlplan.report.sheets import (
    alternatives,
    assumptions,
    budget,
    cautions,
    checks,
    convergence,
    feeder,
    hardening,
    operation,
    plan,
    reliability,
    repair_time,
    risk,
    sensitivities,
    summary,
    voltages,
)
from xlplan.report.tables import SHEET_ORDER
from xlplan.report.target import check_folder, check_not_study, put_in_place, temporary_beside

logger = logging.getLogger(__name__)


def check_target(path: Path, forbidden: Path) -> None:
    """Raises ResultFileError where the results could not be written; for before a long run."""
    check_not_study(path, forbidden)
    check_folder(path)


def write_results(result: StudyResult, path: Path, force: bool, forbidden: Path) -> Path:
    """Writes the results workbook.

    Parameters
    ----------
    result : StudyResult
    path : Path, the name asked for; its folder must exist
    force : bool, replace a file of that name
    forbidden : Path, the study file, which is never written over

    Returns
    -------
    Path of the file written: the next free name where ``path`` was taken (unless ``force``) or
    locked; it differs from ``path`` then, and the caller says so

    Raises ResultFileError if nothing can be written there.
    """
    path = Path(path)
    check_not_study(path, forbidden)
    with temporary_beside(path) as temporary:
        try:
            with _new_book(result, temporary) as book:
                _fill(book, result)
        except OSError as error:
            raise ResultFileError(f"Cannot write '{path}': {error.strerror or error}.") from error
        check_whole(temporary)
        written = put_in_place(temporary, path, force)
    if written != path:
        logger.warning("'%s' is taken; the results are in '%s'", path, written)
    return written


def _new_book(result: StudyResult, temporary: Path) -> SafeBook:
    created = None
    try:
        created = dt.datetime.fromisoformat(result.started_at).replace(tzinfo=None)
    except ValueError:
        logger.debug("start time '%s' is no ISO date", result.started_at)
    return SafeBook(
        temporary,
        result.currency,
        largest_amount(result),
        footer_note=Path(result.study_file).name,
        title=f"Results: {result.study_name}",
        created=created,
    )


def _fill(book: SafeBook, result: StudyResult) -> None:
    """Fills all sheets; their order in the book is that of ``SHEET_ORDER``."""
    for name in SHEET_ORDER:
        book.add_sheet(name)
    plan_cells = plan.write(book, result)
    reliability_cells = reliability.write(book, result)
    alternatives_cells = alternatives.write(book, result, plan_cells, reliability_cells)
    pack_cells = checks.PackCells(
        hardening=hardening.write(book, result, plan_cells),
        repair_time=repair_time.write(book, result),
        budget=budget.write(book, result),
        sensitivities=sensitivities.write(book, result),
    )
    risk.write(book, result)
    operation.write(book, result)
    voltages.write(book, result)
    feeder.write(book, result)
    convergence.write(book, result)
    checks_cells = checks.write(book, result, alternatives_cells, reliability_cells, pack_cells)
    assumptions.write(book, result)
    cautions.write(book)
    summary.write(book, result, alternatives_cells, reliability_cells, checks_cells)


def check_whole(path: Path) -> None:
    """Opens a finished workbook again: every part unpacks and parses, every sheet is there.

    Raises ResultFileError if not (a full disk, say).
    """
    try:
        with zipfile.ZipFile(path) as package:
            broken = package.testzip()
            names = package.namelist()
            for name in names:
                if name.endswith((".xml", ".rels")):
                    ElementTree.fromstring(package.read(name))
    except (OSError, zipfile.BadZipFile, ElementTree.ParseError) as error:
        raise ResultFileError(f"The results file came out damaged: {error}.") from error
    n_sheet = sum(name.startswith("xl/worksheets/sheet") for name in names)
    if broken is not None or n_sheet != len(SHEET_ORDER):
        raise ResultFileError("The results file came out damaged: parts are missing.")
