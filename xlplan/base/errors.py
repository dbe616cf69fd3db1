"""Findings about the user's workbook, and the exceptions of the program.

    XlplanError            exit status 1, one plain line
        StudyError         2: the study cannot be used as it is; carries every finding
        StudyFileError     2: the file is no readable .xlsx workbook
        NoPlanError        1: stopped before there was a plan
        ResultFileError    1: nowhere to write the results
        PathError          1: no such path

A *finding* is data: where it is (sheet, cell, key), what was typed, what is wrong and what to do.
Turning findings into text happens in ``Finding.text`` alone.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from enum import StrEnum

_CONTROL = re.compile(r"[\x00-\x1f\x7f-\x9f\u2028\u2029]+")
"""Line breaks, and codes that would move a terminal's cursor."""


def one_line(text: str) -> str:
    """Text in which nothing breaks the line or moves a terminal's cursor."""
    return _CONTROL.sub(" ", text)


class Level(StrEnum):
    """How grave a finding is: only faults keep a study from being solved."""

    FAULT = "fault"
    WARNING = "warning"
    NOTE = "note"


@dataclass(frozen=True)
class Origin:
    """Where a record comes from: its sheet and row, and the column letter of each key.

    ``cell("length")`` gives ``D7``; a key that the sheet does not show gives ``A7``.
    """

    sheet: str
    row: int
    column_of: Mapping[str, str] = field(default_factory=dict)

    def cell(self, key: str) -> str:
        """Address of the cell of one key, such as ``D7``."""
        return f"{self.column_of.get(key, 'A')}{self.row}"


@dataclass(frozen=True)
class Finding:
    """One fault, warning or note about one place of the workbook.

    ``code`` is a short stable word (see ``xlplan.base.codes``), ``value`` the text as typed.
    """

    level: Level
    code: str
    sheet: str
    cell: str
    key: str
    value: str
    message: str
    hint: str = ""

    def text(self) -> str:
        """One line for the terminal: ``Lines!D7 length: -0.3 is not above 0. Give it in km.``"""
        place = f"{self.sheet}!{self.cell}" if self.cell else self.sheet
        key = f" {self.key}" if self.key else ""
        hint = f" {self.hint}" if self.hint else ""
        return one_line(f"{place}{key}: {self.message}{hint}")


class XlplanError(Exception):
    """Something the user can act on; the text is the one plain line they see."""

    exit_status = 1


class StudyError(XlplanError):
    """The study cannot be used as it is; ``findings`` holds everything found."""

    exit_status = 2

    def __init__(self, message: str, findings: Iterable[Finding] = ()) -> None:
        super().__init__(message)
        self.findings = tuple(findings)


class StudyFileError(XlplanError):
    """The file is not a workbook that can be read."""

    exit_status = 2


class NoPlanError(XlplanError):
    """The solver was stopped, or failed, before there was any plan."""


class ResultFileError(XlplanError):
    """The results cannot be written where they were asked for."""


class PathError(XlplanError):
    """A path that was given does not exist or is of the wrong kind."""
