"""The checks between cells and between sheets, in the order of the sheets they speak about.

Enters: checked tables. Leaves: the same with references in one spelling, and findings. Checks are
written so that a faulty cell is not complained about twice.
"""

from __future__ import annotations

from collections.abc import Mapping

from xlplan.base.errors import Finding
from xlplan.workbook.asset_checks import check_assets
from xlplan.workbook.checked_study import CheckedStudy
from xlplan.workbook.feeder_checks import check_feeder
from xlplan.workbook.field_checks import CheckedTable, shorten
from xlplan.workbook.names import resolve_names
from xlplan.workbook.plan_checks import check_plans
from xlplan.workbook.time_checks import check_times


def check_across(tables: Mapping[str, CheckedTable]) -> tuple[CheckedStudy, list[Finding]]:
    """Everything that needs more than one cell and no feeder.

    Parameters
    ----------
    tables : CheckedTable by schema sheet name

    Returns
    -------
    (CheckedStudy, findings): references have the spelling of the row they mean
    """
    study, findings = resolve_names(CheckedStudy(tables))
    findings += check_feeder(study)
    findings += check_assets(study)
    findings += check_times(study)
    findings += check_plans(study)
    return study, shorten(findings)
