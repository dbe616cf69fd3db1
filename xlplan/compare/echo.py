"""Every input used, typed or default, for the Assumptions sheet."""

from __future__ import annotations

from xlplan.compare.study_result import InputEcho
from xlplan.schema.fields import Field, Sheet, load_sheets
from xlplan.study.study import Study
from xlplan.workbook.tables import Cell, RawStudy

BLANK = "blank"
"""Shown where nothing was typed and there is no default number."""


def echo_inputs(raw: RawStudy, study: Study) -> tuple[InputEcho, ...]:
    """Inputs in workbook order; profiles as their number of rows, lowest, mean and highest value.

    Parameters
    ----------
    raw : RawStudy, as typed
    study : Study, for the profiles

    Returns
    -------
    tuple of InputEcho
    """
    echoes: list[InputEcho] = []
    for sheet in load_sheets():
        if sheet.name == "Profiles":
            echoes += _profiles(study)
            continue
        table = raw.tables.get(sheet.name)
        for row in table.rows if table else ():
            name = "" if sheet.is_settings or sheet.id_field is None else row.cell(sheet.id_field)
            label = name.typed if isinstance(name, Cell) else ""
            echoes += [_one(sheet, field, label, row.cell(field.key)) for field in sheet.fields]
    return tuple(echoes)


def _one(sheet: Sheet, field: Field, label: str, cell: Cell) -> InputEcho:
    is_blank = cell.value is None or (isinstance(cell.value, str) and not cell.value.strip())
    value = field.default if is_blank else cell.value
    if value is None:
        value = BLANK
    return InputEcho(
        sheet=sheet.name,
        row=field.group if sheet.is_settings else label,
        title=field.title,
        unit=field.unit,
        value=value,
        is_default=is_blank,
        source=field.source if is_blank else "",
    )


def _profiles(study: Study) -> list[InputEcho]:
    rows = [InputEcho("Profiles", "", "Rows", "", len(study.profiles.times), False, "")]
    for name, values in study.profiles.values.items():
        for title, value in (
            ("Lowest", float(values.min())),
            ("Mean", float(values.mean())),
            ("Highest", float(values.max())),
        ):
            rows.append(InputEcho("Profiles", name, title, "", value, False, ""))
    return rows
