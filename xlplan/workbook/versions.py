"""Which template a study was made with: older ones are read, newer ones refused.

Enters: what stands in the template's named cell. Leaves: a note on what is new, or an error.
Studies without the cell (typed by hand, or pasted into a new workbook) are read as they are.
"""

from __future__ import annotations

from pathlib import Path

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level, StudyFileError
from xlplan.schema.fields import TEMPLATE_VERSION

VERSION_NAME = "template_version"

NEWS: dict[int, str] = {
    2: "a filled example above the headings of every sheet, live checks on Start, charts on "
    "Profiles and Storage curves, and where each figure usually comes from",
}
"""What each version of the template brought; a column that must be filled is named here."""


def check_version(path: Path, version: object, place: tuple[str, str]) -> list[Finding]:
    """A note where a study was made with an older template.

    Parameters
    ----------
    path : Path of the study
    version : value of the named cell, None where there is none
    place : sheet and address of that cell

    Returns
    -------
    list of Finding, one at most

    Raises StudyFileError for a study of a newer template, which may hold what is not understood.
    """
    if version is None or isinstance(version, bool):
        return []
    text = str(version).strip()
    is_whole = text.isascii() and text.removesuffix(".0").isdigit()
    if not is_whole or len(text) > 9:
        message = f"'{text[:40]}' is no version of the template; the study is read as it stands."
        hint = f"Type {TEMPLATE_VERSION} if its sheets are those of the present template."
        return [Finding(Level.NOTE, Code.OLDER_TEMPLATE, *place, "", text[:40], message, hint)]
    number = int(text.removesuffix(".0"))
    if number > TEMPLATE_VERSION:
        raise StudyFileError(
            f"'{path}' was made with template version {number}; this program reads up to version "
            f"{TEMPLATE_VERSION}. Install a newer xlplan."
        )
    if number == TEMPLATE_VERSION:
        return []
    news = "; ".join(text for since, text in sorted(NEWS.items()) if since > number)
    message = (
        f"made with template version {number}; the present one is {TEMPLATE_VERSION}. New since: "
        f"{news}."
    )
    hint = "The study is read as it stands; nothing has to be moved."
    return [Finding(Level.NOTE, Code.OLDER_TEMPLATE, *place, "", text, message, hint)]
