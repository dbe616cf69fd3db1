"""The study workbook, blank or filled, made from the schema.

``write_study_workbook`` writes any study from rows of typed values: the demo, the examples and
tests use it. What is written is what a person would have typed; nothing is checked here.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

from xlplan.schema.fields import load_sheets
from xlplan.workbook.demo import demo_settings, demo_tables
from xlplan.workbook.input_sheets import write_settings_sheet, write_table_sheet
from xlplan.workbook.sheet_writer import SheetWriter, new_workbook
from xlplan.workbook.start_sheet import LISTS, START, write_lists_sheet, write_start_sheet

DEMO_REMARK = (
    "A worked example: the utility, its places and every figure are invented. "
    "Prices and costs are no guide to anybody's."
)


def write_template(path: Path, with_demo: bool = False) -> None:
    """Write the blank study, or the demo study. A file already there is replaced.

    Parameters
    ----------
    path : where the workbook will stand
    with_demo : True for the filled demo

    Raises PathError or ResultFileError if it cannot be written there.
    """
    if with_demo:
        write_study_workbook(path, demo_tables(), demo_settings(), DEMO_REMARK)
    else:
        write_study_workbook(path, {}, {})


def write_study_workbook(
    path: Path,
    tables: Mapping[str, Sequence[Mapping[str, object]]],
    settings: Mapping[str, object],
    remark: str = "",
) -> None:
    """Write a study workbook; sheets that are not mentioned are written empty.

    Parameters
    ----------
    path : where the workbook will stand; a file already there is replaced
    tables : sheet name -> rows, each key -> value as a person would type it (text, number, bool,
        datetime; None or a missing key: blank). On Profiles any key but ``time`` is the heading
        of a profile
    settings : key -> value as typed
    remark : a line under the title of Start

    Raises ValueError for a sheet or key that is not in the schema, PathError or ResultFileError
    if the workbook cannot be written there.
    """
    sheets = load_sheets()
    unknown = set(tables) - {sheet.name for sheet in sheets if not sheet.is_settings}
    if unknown:
        raise ValueError(f"there is no input table {sorted(unknown)[0]}")
    with new_workbook(Path(path), "Resilience study of a distribution feeder") as (book, formats):
        write_start_sheet(book, SheetWriter(book, START, formats), remark, tables, settings)
        for sheet in sheets:
            writer = SheetWriter(book, sheet.name, formats)
            if sheet.is_settings:
                write_settings_sheet(book, writer, sheet, settings)
            else:
                write_table_sheet(book, writer, sheet, tables.get(sheet.name, ()))
        write_lists_sheet(book, SheetWriter(book, LISTS, formats), tables)
