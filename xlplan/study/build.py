"""Tables to a ``Study``: check everything in one pass, then build.

Enters: a ``RawStudy``. Leaves: a ``Study`` if nothing is at fault, and every finding of one pass:
of the reader, of each field, of what lies between cells and sheets. ``records``
turns rows into records. Checks that need the feeder as a graph come later, in ``network`` and
``outages``.
"""

from __future__ import annotations

import re

from xlplan.base.errors import Finding, Level
from xlplan.base.units import minutes_from_hours
from xlplan.schema.fields import load_sheets
from xlplan.study.records import (
    alternative_of,
    bus_of,
    curves_of,
    customer_class_of,
    device_change_of,
    generator_of,
    line_of,
    load_of,
    measure_of,
    outage_class_of,
    profiles_of,
    purchase_of,
    sensitivity_of,
    storage_of,
    study_settings,
    supply_of,
    windows_of,
)
from xlplan.study.study import Study
from xlplan.workbook.checked_study import CheckedStudy
from xlplan.workbook.cross_checks import check_across
from xlplan.workbook.field_checks import at_most, check_table
from xlplan.workbook.folding import fold
from xlplan.workbook.tables import RawStudy


def check_and_build(raw: RawStudy) -> tuple[Study | None, list[Finding]]:
    """Checks everything that tables alone can tell, and builds the study if nothing is at fault.

    Parameters
    ----------
    raw : RawStudy

    Returns
    -------
    (Study or None, findings): None where any finding is a fault; findings in workbook order
    """
    checked, findings = check_tables(raw)
    if any(finding.level is Level.FAULT for finding in findings):
        return None, findings
    return build_study(checked, raw.fingerprint), findings


def check_tables(raw: RawStudy) -> tuple[CheckedStudy, list[Finding]]:
    """Everything that tables alone can tell.

    Parameters
    ----------
    raw : RawStudy

    Returns
    -------
    (CheckedStudy, findings): findings in workbook order
    """
    findings = list(raw.findings)
    tables = {}
    for schema in load_sheets():
        tables[schema.name], found = check_table(raw.tables[schema.name], schema)
        findings += found
    checked, found = check_across(tables)
    return checked, at_most(in_workbook_order(findings + found))


def in_workbook_order(findings: list[Finding]) -> list[Finding]:
    """By sheet, row and column; what is about the whole file or a whole sheet first.

    Parameters
    ----------
    findings : list of Finding

    Returns
    -------
    list of Finding
    """
    order = {fold(schema.name): i for i, schema in enumerate(load_sheets())}

    def place(finding: Finding) -> tuple[int, int, int, str]:
        match = re.fullmatch(r"([A-Z]+)([0-9]+)", finding.cell)
        letters, row = (match[1], int(match[2])) if match else ("", 0)
        return order.get(fold(finding.sheet), -1), row, len(letters), letters

    return sorted(findings, key=place)


def build_study(checked: CheckedStudy, fingerprint: str) -> Study:
    """The study that faultless tables mean.

    Parameters
    ----------
    checked : CheckedStudy without faults, references resolved
    fingerprint : ``sha256:...`` of the file

    Returns
    -------
    Study
    """
    settings = study_settings(checked)
    conductors = checked.by_id("Conductors")
    curves = curves_of(checked)
    return Study(
        settings=settings,
        buses=tuple(bus_of(row) for row in checked.rows("Buses")),
        loads=tuple(load_of(row) for row in checked.rows("Loads")),
        lines=tuple(line_of(row, conductors, settings.base_kv) for row in checked.rows("Lines")),
        supplies=tuple(supply_of(row) for row in checked.rows("Neighbour supplies")),
        generators=tuple(
            generator_of(row, minutes_from_hours(settings.period_h))
            for row in checked.rows("Generators")
        ),
        storage=tuple(storage_of(row, curves) for row in checked.rows("Storage")),
        outage_classes=tuple(outage_class_of(row) for row in checked.rows("Outage assumptions")),
        measures=tuple(measure_of(row) for row in checked.rows("Hardening")),
        customer_classes=tuple(customer_class_of(row) for row in checked.rows("Customer classes")),
        profiles=profiles_of(checked),
        windows=windows_of(checked, settings.period_h),
        alternatives=tuple(alternative_of(row) for row in checked.rows("Alternatives")),
        fixed_purchases=tuple(purchase_of(row) for row in checked.rows("Fixed purchases")),
        device_changes=tuple(device_change_of(row) for row in checked.rows("Device changes")),
        sensitivities=tuple(sensitivity_of(row) for row in checked.rows("Sensitivities")),
        fingerprint=fingerprint,
    )
