"""The made-up result and its workbook, written once for all tests that only read it."""

from __future__ import annotations

from pathlib import Path

import pytest

from xlplan.compare.study_result import StudyResult
from xlplan.report.writer import write_results

from .made_up import made_up_result


@pytest.fixture(scope="session")
def result() -> StudyResult:
    """The made-up answer at a discount rate of 4 %."""
    return made_up_result()


@pytest.fixture(scope="session")
def workbook_path(result: StudyResult, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Its workbook; not to be changed."""
    folder = tmp_path_factory.mktemp("results")
    return write_results(result, folder / "made up-results.xlsx", False, folder / "made up.xlsx")
