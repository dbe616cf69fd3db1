"""The two sheets without values of the study: Start at the front, Lists at the end."""

from __future__ import annotations

from typing import Any

from xlplan.schema.fields import TEMPLATE_VERSION, load_sheets, sheet
from xlplan.workbook import prompts
from xlplan.workbook.formats import Role
from xlplan.workbook.sheet_writer import SheetWriter

START = "Start"
LISTS = "Lists"
VERSION_NAME = "template_version"

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
    "Fill in the sheets in the order below, save, then run:  xlplan check STUDY.xlsx  and, "
    "once it finds no faults:  xlplan solve STUDY.xlsx",
    "Columns may be moved and columns of your own added beside them: headings count, not places. "
    "Hidden and filtered rows are read like all others.",
    "Units stand in the headings and are never guessed. In a column in % type 5 for five percent. "
    "Type numbers only, without a unit.",
)

_KEY = (
    (Role.SAMPLE_NEEDED, "needed", "Needed in every row that is used; dark heading."),
    (Role.SAMPLE_OPTIONAL, "may be blank", "Row 3 says what a blank means; pale heading."),
    (Role.SAMPLE_ALERT, "look again", "Needed and still empty, or a name that is used twice."),
)

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


def write_start_sheet(workbook: Any, writer: SheetWriter, remark: str) -> None:
    """Write Start: what the study needs and in which order, colour key, cautions, version.

    Parameters
    ----------
    workbook : xlsxwriter Workbook
    writer : SheetWriter of the sheet
    remark : a line of its own under the title, "" for none
    """
    for column, width in enumerate((8, 24, 108, 18)):
        writer.width(column, width)
    writer.head("Resilience study of a distribution feeder", "One workbook is one study.")
    if remark:
        writer.text(2, 0, remark, Role.SUBTITLE)
    row = 4
    for line in _LINES_OF_USE:
        writer.text(row, 0, line, Role.PLAIN)
        row += 1
    row = _write_order(writer, row + 1)
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
    writer.page(row + 1, 3, None, max(_LINES_OF_USE, key=len))
    writer.worksheet.fit_to_pages(1, 1)


def write_lists_sheet(workbook: Any, writer: SheetWriter) -> None:
    """Write Lists: every dropdown list in a column of its own, with a name."""
    line = "The choices offered in the dropdowns. Changing them here does not change what is read."
    writer.head(LISTS, line)
    n_longest = 0
    lists = prompts.choice_lists()
    for column, (name, (heading, choices)) in enumerate(lists.items()):
        writer.width(column, max(14, len(heading) + 2, *(len(choice) + 2 for choice in choices)))
        writer.text(3, column, heading, Role.HEADING_OPTIONAL)
        for i_choice, choice in enumerate(choices):
            writer.text(4 + i_choice, column, choice, Role.LABEL)
        letter = chr(ord("A") + column)
        workbook.define_name(name, f"={LISTS}!${letter}$5:${letter}${4 + len(choices)}")
        n_longest = max(n_longest, len(choices))
    writer.height(3, 20)
    writer.worksheet.freeze_panes(4, 0)
    writer.worksheet.protect()
    writer.page(4 + n_longest, len(lists) - 1, 3, line)


def _write_order(writer: SheetWriter, row: int) -> int:
    for column, heading in enumerate(("Step", "Sheet", "What it holds", "Needed?")):
        writer.text(row, column, heading, Role.HEADING_OPTIONAL)
    writer.height(row, 20)
    if set(FILLING_ORDER) != {entry.name for entry in load_sheets()}:
        raise ValueError("the filling order leaves a sheet out")
    for step, name in enumerate(FILLING_ORDER, start=1):
        entry = sheet(name)
        writer.value(row + step, 0, step, Role.STEP, Role.STEP)
        writer.sheet_link(row + step, 1, name)
        writer.text(row + step, 2, entry.help, Role.LABEL)
        needed = "where it applies" if entry.is_optional else "needed"
        writer.text(row + step, 3, needed, Role.LABEL)
    return row + len(FILLING_ORDER) + 1


def _write_part(writer: SheetWriter, row: int, heading: str) -> int:
    writer.text(row, 0, heading, Role.PART_HEADING)
    for column in (1, 2, 3):
        writer.blank(row, column, Role.PART_HEADING)
    return row + 1
