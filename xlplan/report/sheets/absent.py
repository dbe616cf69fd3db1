"""What a sheet says where the run has nothing for it: blank would look like a fault."""

from __future__ import annotations

from xlplan.compare.study_result import StudyResult
from xlplan.report.safe_book import SafeSheet

PLAN_ONLY = "Not computed: the run was asked for the plan only (--plan-only)."


def say_absent(sheet: SafeSheet, result: StudyResult, what: str) -> None:
    """One line in place of tables; ``what`` the study lacks, if that is the reason."""
    reason = f"Nothing to show: the study has no {what}, or a finding on Assumptions says why."
    if not result.pack.is_asked:
        reason = result.pack.left_out or PLAN_ONLY
    sheet.text(3, 0, reason, "note")
    sheet.print_setup(3, 12)
