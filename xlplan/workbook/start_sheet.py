"""The two sheets without values of the study: Start at the front, Lists at the end."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from xlsxwriter.utility import xl_col_to_name

from xlplan.base.units import HOURS_PER_YEAR
from xlplan.schema.fields import TEMPLATE_VERSION, load_sheets, sheet
from xlplan.workbook import live_checks, prompts
from xlplan.workbook.formats import Role
from xlplan.workbook.live_checks import Rows
from xlplan.workbook.sheet_writer import SheetWriter
from xlplan.workbook.versions import VERSION_NAME

START = "Start"
LISTS = "Lists"

FILLING_ORDER = (
    "Settings",
    "Buses",
    "Conductors",
    "Lines",
    "Customer classes",
    "Profiles",
    "Loads",
    "Outage assumptions",
    "Windows",
    "Neighbour supplies",
    "Generators",
    "Storage curves",
    "Storage",
    "Hardening",
    "Alternatives",
    "Fixed purchases",
    "Device changes",
    "Sensitivities",
)
"""Whatever a sheet refers to is filled in before it."""

_LINES_OF_USE = (
    "1.  Fill in the sheets in the order of the table below. Needed columns have dark headings; "
    "all others may stay blank, and row 3 of each sheet says what a blank then means.",
    "2.  Row 4 of each sheet shows one filled row as an example. It is never read, and nothing "
    "above the headings is. Rest the pointer on a heading for its unit, limits and usual source.",
    "3.  Units stand in the headings and are never guessed: type numbers alone. In a column in % "
    "type 5 for five percent. Cells with an arrow offer what may stand there.",
    "4.  Columns may be moved, and columns or sheets of your own added: headings count, not "
    "places. Hidden and filtered rows are read like all others; sums belong beside the table.",
    "5.  Watch the live checks below while you fill in. Then save, and run:  xlplan check "
    "STUDY.xlsx  (lists what is wrong, cell by cell)  and:  xlplan solve STUDY.xlsx",
)

_KEY = (
    (Role.SAMPLE_NEEDED, "needed", "Type here: needed in every row that is used. Dark heading."),
    (Role.SAMPLE_OPTIONAL, "may be blank", "Type here if it applies. Pale heading."),
    (Role.SAMPLE_DEFAULT, "blank: 15", "A default, in italics: what a blank means."),
    (Role.SAMPLE_EXAMPLE, "e.g. B12", "An example, in italics above a dotted line: never read."),
    (Role.SAMPLE_CALCULATED, "14", "Calculated, behind a thick bar: do not type here."),
    (Role.SAMPLE_ALERT, "look again", "Needed and still empty, or a name that is used twice."),
)

YEAR_TOLERANCE = 0.03
"""How far the windows' hours may be from a year, as in the checks of windows."""

_CAUTIONS = (
    "Results support planning. They never replace protection, switching or grounding studies.",
    "A part of the feeder that runs on its own can energise lines that crews take for dead. "
    "Settle backfeed, transfer switching and worker safety before anything is built.",
    "Storage has siting, spacing and fire rules of its own; they are not checked here.",
    "The feeder is taken as balanced, flows are linear and losses an allowance; one thing fails "
    "at a time, and nothing else until it is repaired.",
    "Failure rates, repair times and interruption costs carry the result. Note where each is from.",
    "Local codes, the interconnection authority and licensed engineering review come first.",
)


_COLUMNS = (
    ("Step", 8),
    ("Sheet", 22),
    ("What it holds", 74),
    ("Usually from", 62),
    ("Needed?", 18),
    ("Rows filled", 12),
    ("Unknown names", 18),
)
_ROWS_COLUMN, _UNKNOWN_COLUMN, _NEEDED_COLUMN = 5, 6, 4


def write_start_sheet(
    workbook: Any,
    writer: SheetWriter,
    remark: str,
    tables: Mapping[str, Rows],
    settings: Mapping[str, object],
) -> None:
    """Write Start: what the study needs and in which order, live checks, key, cautions, version.

    Parameters
    ----------
    workbook : xlsxwriter Workbook
    writer : SheetWriter of the sheet
    remark : a line of its own under the title, "" for none
    tables : rows as typed by sheet name, for the stored values of the live checks
    settings : key -> value as typed, likewise
    """
    for column, (_, width) in enumerate(_COLUMNS):
        writer.width(column, width)
    writer.head("Resilience study of a distribution feeder", "One workbook is one study.")
    if remark:
        writer.text(2, 0, remark, Role.SUBTITLE)
    row = 4
    for line in _LINES_OF_USE:
        writer.text(row, 0, line, Role.PLAIN)
        row += 1
    first, row = _write_order(writer, row + 1, tables, settings)
    row = _write_live_checks(writer, row + 1, first, tables, settings)
    row = _write_part(writer, row + 1, "Colour key")
    for role, sample, meaning in _KEY:
        writer.text(row, 1, sample, role)
        writer.text(row, 2, meaning, Role.MEANING)
        row += 1
    row = _write_part(writer, row + 1, "Cautions")
    for line in _CAUTIONS:
        writer.text(row, 0, f"\N{EN DASH}  {line}", Role.PLAIN)
        row += 1
    row = _write_part(writer, row + 1, "Version")
    writer.text(row, 1, "Template version", Role.LABEL)
    writer.value(row, 2, TEMPLATE_VERSION, Role.MEANING, Role.MEANING)
    workbook.define_name(VERSION_NAME, f"={START}!$C${row + 1}")
    writer.text(
        row + 1,
        1,
        "Names in this workbook: set_... are the settings, ids_... the rows other sheets refer to, "
        "list_... the dropdown lists, profile_names the headings of Profiles.",
        Role.SUBTITLE,
    )
    writer.page(row + 1, len(_COLUMNS) - 1, None, max(_LINES_OF_USE, key=len))
    writer.worksheet.fit_to_pages(1, 1)


def write_lists_sheet(workbook: Any, writer: SheetWriter, tables: Mapping[str, Rows]) -> None:
    """Write Lists: every dropdown list in a column of its own, with a name.

    Parameters
    ----------
    workbook : xlsxwriter Workbook
    writer : SheetWriter of the sheet
    tables : rows as typed by sheet name, for the list of what can be bought
    """
    line = "The choices offered in the dropdowns. Changing them here does not change what is read."
    writer.head(LISTS, line)
    n_longest = 0
    lists = prompts.choice_lists()
    for column, (name, (heading, choices)) in enumerate(lists.items()):
        writer.width(column, max(14, len(heading) + 2, *(len(choice) + 2 for choice in choices)))
        writer.text(3, column, heading, Role.HEADING_OPTIONAL)
        for i_choice, choice in enumerate(choices):
            writer.text(4 + i_choice, column, choice, Role.LABEL)
        letter = xl_col_to_name(column)
        workbook.define_name(name, f"={LISTS}!${letter}$5:${letter}${4 + len(choices)}")
        n_longest = max(n_longest, len(choices))
    _write_asset_list(workbook, writer, len(lists), tables)
    writer.height(3, 20)
    writer.worksheet.freeze_panes(4, 0)
    writer.worksheet.protect()
    writer.page(4 + n_longest, len(lists), 3, line)


def _write_asset_list(
    workbook: Any, writer: SheetWriter, column: int, tables: Mapping[str, Rows]
) -> None:
    """What can be bought, from several sheets: a list that follows as rows are added."""
    writer.width(column, 30)
    writer.text(3, column, "What can be bought (calculated)", Role.HEADING_OPTIONAL)
    letter = xl_col_to_name(column)
    first = f"${letter}$5"
    for i, (text, value) in enumerate(live_checks.asset_list(tables, first)):
        writer.formula(4 + i, column, text, value, Role.CALCULATED_TEXT)
    names = [prompts.id_list_name(name) for name in live_checks.asset_sheets()]
    count = "+".join(f"ROWS({name})" for name in names)
    area = f"{LISTS}!{first}:${letter}${4 + live_checks.MOST_ASSETS}"
    workbook.define_name(
        prompts.ASSET_LIST,
        f"={LISTS}!{first}:INDEX({area},MIN({live_checks.MOST_ASSETS},{count}))",
    )


def _write_order(
    writer: SheetWriter, row: int, tables: Mapping[str, Rows], settings: Mapping[str, object]
) -> tuple[int, int]:
    """The sheets in filling order with their live counts; returns first row and the one after."""
    for column, (heading, _) in enumerate(_COLUMNS):
        writer.text(row, column, heading, Role.HEADING_OPTIONAL)
    writer.height(row, 20)
    if set(FILLING_ORDER) != {entry.name for entry in load_sheets()}:
        raise ValueError("the filling order leaves a sheet out")
    for step, name in enumerate(FILLING_ORDER, start=1):
        entry = sheet(name)
        writer.value(row + step, 0, step, Role.STEP, Role.STEP)
        writer.sheet_link(row + step, 1, name)
        writer.text(row + step, 2, entry.help, Role.NOTE)
        writer.text(row + step, 3, entry.comes_from, Role.NOTE)
        writer.text(row + step, 4, OPTIONAL if entry.is_optional else NEEDED, Role.LABEL)
        n_line = max(
            math.ceil(len(text) * 0.9 / _COLUMNS[column][1])
            for column, text in ((2, entry.help), (3, entry.comes_from))
        )
        writer.height(row + step, 13.5 * n_line + 2)
        filled = live_checks.rows_filled(entry, tables.get(name, ()), settings)
        writer.formula(row + step, _ROWS_COLUMN, filled.text, filled.value, Role.CALCULATED)
        unknown = live_checks.unknown_names(entry, tables, settings)
        if unknown is None:
            writer.text(row + step, _UNKNOWN_COLUMN, "", Role.LABEL)
        else:
            writer.formula(
                row + step, _UNKNOWN_COLUMN, unknown.text, unknown.value, Role.CALCULATED
            )
    return row + 1, row + len(FILLING_ORDER) + 1


NEEDED, OPTIONAL = "needed", "where it applies"
LOOK, FINE = "LOOK", "OK"


def _write_live_checks(
    writer: SheetWriter,
    row: int,
    first: int,
    tables: Mapping[str, Rows],
    settings: Mapping[str, object],
) -> int:
    """Three lines that say whether the study is coming together; returns the row after."""
    row = _write_part(
        writer, row, "Live checks (they follow what is typed; the command finds more)"
    )
    last = first + len(FILLING_ORDER) - 1
    needed, rows, unknown = (
        f"{xl_col_to_name(column, col_abs=True)}${first + 1}:"
        f"{xl_col_to_name(column, col_abs=True)}${last + 1}"
        for column in (_NEEDED_COLUMN, _ROWS_COLUMN, _UNKNOWN_COLUMN)
    )
    entries = [sheet(name) for name in FILLING_ORDER]
    n_empty = sum(
        1
        for entry in entries
        if not entry.is_optional
        and live_checks.rows_filled(entry, tables.get(entry.name, ()), settings).value == 0
    )
    counts = [live_checks.unknown_names(entry, tables, settings) for entry in entries]
    n_unknown = sum(count.value for count in counts if count is not None)
    hours = live_checks.window_hours(tables)
    for label, text, value in (
        ("Needed sheets without rows", f'=SUMPRODUCT(({needed}="{NEEDED}")*({rows}=0))', n_empty),
        ("Names that stand on no sheet", f"=SUM({unknown})", n_unknown),
    ):
        writer.text(row, 3, label, Role.LABEL)
        writer.formula(row, 4, text, value, Role.CALCULATED)
        verdict = f'=IF($E${row + 1}=0,"{FINE}","{LOOK}")'
        writer.formula(row, 5, verdict, FINE if value == 0 else LOOK, Role.CALCULATED_WORD)
        row += 1
    writer.text(row, 3, "Hours a year that the windows make up", Role.LABEL)
    writer.formula(row, 4, hours.text, hours.value, Role.CALCULATED_HOURS)
    share = abs(hours.value / HOURS_PER_YEAR - 1.0)
    year, tolerance = f"$E${row + 2}", f"$E${row + 3}"
    verdict = f'=IF(ABS($E${row + 1}/{year}-1)<={tolerance},"{FINE}","{LOOK}")'
    is_fine = share <= YEAR_TOLERANCE
    writer.formula(row, 5, verdict, FINE if is_fine else LOOK, Role.CALCULATED_WORD)
    writer.text(row + 1, 3, "Hours of a year, to compare with", Role.LABEL)
    writer.value(row + 1, 4, HOURS_PER_YEAR, Role.MEANING, Role.CALCULATED)
    writer.text(row + 2, 3, "Share by which they may differ", Role.LABEL)
    writer.value(row + 2, 4, YEAR_TOLERANCE, Role.MEANING, Role.CALCULATED_HOURS)
    return row + 3


def _write_part(writer: SheetWriter, row: int, heading: str) -> int:
    writer.text(row, 0, heading, Role.PART_HEADING)
    for column in range(1, len(_COLUMNS)):
        writer.blank(row, column, Role.PART_HEADING)
    return row + 1
