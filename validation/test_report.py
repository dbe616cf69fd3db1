"""The committed report is the one that the program gives."""

from __future__ import annotations

from pathlib import Path

import pytest

from validation.report import CASES, REPORT, report_text

HERE = Path(__file__).resolve().parent


@pytest.mark.slow
def test_report_is_up_to_date() -> None:
    """After a change that moves figures: ``python -m validation.report``, and look at them."""
    text = report_text()
    assert "| NO |" not in text
    assert REPORT.read_text("utf-8") == text


def test_every_case_is_in_the_report_and_has_its_source() -> None:
    folders = {path.parent.name for path in HERE.glob("*/case.py")}
    assert folders == {Path(str(case.__file__)).parent.name for case in CASES}
    for folder in folders:
        assert (HERE / folder / "source.md").exists()
    text = REPORT.read_text("utf-8")
    for case in CASES:
        assert f"## {case.TITLE}" in text
