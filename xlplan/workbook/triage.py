"""What kind of file is it? Settled before openpyxl sees it, whose errors tell a planner nothing.

Enters: a path. Leaves: the file's bytes and notes, or an error with one plain line. The order:
lock file, folder, size, first bytes, directory of the zip, content types, sizes, XML entities.
"""

from __future__ import annotations

import io
import zipfile
import zlib
from dataclasses import dataclass
from pathlib import Path

from xlplan.base.codes import Code
from xlplan.base.errors import Finding, Level, PathError, StudyFileError

_OLE_MAGIC = bytes.fromhex("D0CF11E0A1B11AE1")
_ZIP_MAGIC = b"PK\x03\x04"
_SAVE_AS = "Open it in a spreadsheet program and save it as Excel Workbook (.xlsx)."

MAX_PACKED_BYTES = 200_000_000
MAX_PARTS = 10_000
MAX_UNPACKED_BYTES = 400_000_000
"""A study of every sheet filled to a year of 5-minute rows unpacks to well below this."""
MAX_OTHER_PART_BYTES = 60_000_000
"""Texts, styles and the like are taken into memory whole, unlike the rows of sheets."""
MAX_RATIO = 200
"""Ordinary sheets pack about ten to one; beyond this, in a part of some size, it is a trap."""
RATIO_FROM_BYTES = 1_000_000


@dataclass(frozen=True)
class WorkbookFile:
    """The bytes of a file that openpyxl may see, and the notes to hand on."""

    path: Path
    content: bytes
    findings: tuple[Finding, ...]


def triage(path: Path) -> WorkbookFile:
    """The bytes of a readable .xlsx or .xlsm file.

    Raises PathError where there is no such file, StudyFileError for everything else that is no
    readable workbook; each with one plain line.
    """
    name = path.name
    if path.is_dir():
        raise PathError(f"'{path}' is a folder. Name the study workbook in it.")
    if name.startswith(("~$", ".~lock.")):
        owner = name.removeprefix("~$").removeprefix(".~lock.").removesuffix("#")
        raise StudyFileError(
            f"'{path}' is the lock file of '{owner}', which is open in a spreadsheet program. "
            f"Name the workbook itself."
        )
    try:
        if path.exists() and not path.is_file():
            raise PathError(f"'{path}' is no file. Name the study workbook.")
        if path.stat().st_size > MAX_PACKED_BYTES:
            raise StudyFileError(
                f"'{path}' is larger than {MAX_PACKED_BYTES / 1e6:.0f} MB, which no study needs. "
                f"Remove what is no part of it."
            )
        content = path.read_bytes()
    except FileNotFoundError:
        raise PathError(f"There is no file '{path}'.") from None
    except PermissionError:
        raise StudyFileError(
            f"'{path}' cannot be opened: permission denied. Close it where it is open."
        ) from None
    except OSError as error:
        raise PathError(f"'{path}' cannot be read: {error.strerror or error}.") from None
    if not content:
        raise StudyFileError(f"'{path}' is empty (0 bytes): damaged, or still downloading.")
    if content.startswith(_OLE_MAGIC):
        raise StudyFileError(_about_ole(path, content))
    if not content.startswith(_ZIP_MAGIC):
        raise StudyFileError(_about_other(path, content))
    return WorkbookFile(path, content, tuple(_look_inside(path, content)))


def _about_ole(path: Path, content: bytes) -> str:
    """The container of old .xls files also holds encrypted workbooks."""
    if "EncryptedPackage".encode("utf-16-le") in content:
        return (
            f"'{path}' is protected by a password. Remove it in the spreadsheet program "
            f"(File > Info) and save the workbook again."
        )
    return f"'{path}' is an old .xls file. {_SAVE_AS}"


def _about_other(path: Path, content: bytes) -> str:
    """Neither an old Excel file nor a zip."""
    head = content[:512].lstrip().lower()
    if head.startswith((b"<html", b"<!doctype html", b"<table")):
        return f"'{path}' is a web page under the name of a workbook. {_SAVE_AS}"
    if path.suffix.lower() in (".csv", ".txt", ".tsv"):
        return f"'{path}' is a text file, not a workbook. {_SAVE_AS}"
    if not any(content[:4]) or content[:2] == b"PK":
        return f"'{path}' is damaged or still downloading. Get a whole copy of it."
    return f"'{path}' is not an Excel workbook. {_SAVE_AS}"


def _look_inside(path: Path, content: bytes) -> list[Finding]:
    """Notes about a zip that is a workbook; StudyFileError where it is not one."""
    damaged = f"'{path}' is damaged or still downloading. Get a whole copy of it."
    try:
        with zipfile.ZipFile(io.BytesIO(content)) as archive:
            infos = {info.filename: info for info in archive.infolist()}
            if len(archive.infolist()) > MAX_PARTS or len(infos) < len(archive.infolist()):
                raise StudyFileError(
                    f"'{path}' holds parts by the thousand or twice under one name, which no "
                    f"spreadsheet program writes. It is not read."
                )
            _check_kind(path, archive, infos)
            _check_sizes(path, infos)
            _check_entities(path, archive, infos)
            if archive.testzip() is not None:
                raise StudyFileError(damaged)
            types = archive.read("[Content_Types].xml")
    except (zipfile.BadZipFile, zlib.error, EOFError, OSError, ValueError, NotImplementedError):
        raise StudyFileError(damaged) from None
    except RuntimeError:  # zipfile's word for an encrypted member
        raise StudyFileError(f"'{path}' holds parts locked by a password. {_SAVE_AS}") from None
    return _notes(path, types, infos)


def _check_kind(path: Path, archive: zipfile.ZipFile, infos: dict[str, zipfile.ZipInfo]) -> None:
    """OpenDocument, binary workbooks and strict workbooks are zips as well."""
    if "mimetype" in infos and "[Content_Types].xml" not in infos:
        raise StudyFileError(f"'{path}' is an OpenDocument file (.ods). {_SAVE_AS}")
    if "[Content_Types].xml" not in infos:
        raise StudyFileError(f"'{path}' is a zip file, but not a workbook. {_SAVE_AS}")
    if infos["[Content_Types].xml"].file_size > RATIO_FROM_BYTES:
        raise StudyFileError(f"'{path}' is not a usable workbook. {_SAVE_AS}")
    types = archive.read("[Content_Types].xml")
    if b"sheet.binary" in types:
        raise StudyFileError(f"'{path}' is a binary workbook (.xlsb). {_SAVE_AS}")
    if b"spreadsheetml" not in types and b"ms-excel" not in types:
        raise StudyFileError(f"'{path}' is an Office file, but not a workbook. {_SAVE_AS}")
    book = infos.get("xl/workbook.xml")
    is_readable = book is not None and book.file_size < RATIO_FROM_BYTES
    if is_readable and b"purl.oclc.org" in archive.read("xl/workbook.xml"):
        raise StudyFileError(
            f"'{path}' is a Strict Open XML workbook. Save it as Excel Workbook (.xlsx), "
            f"not as Strict Open XML."
        )


def _check_sizes(path: Path, infos: dict[str, zipfile.ZipInfo]) -> None:
    """Refuses what would unpack to far more than a study holds."""
    total = sum(info.file_size for info in infos.values())
    for info in infos.values():
        ratio = info.file_size / max(info.compress_size, 1)
        if info.file_size > RATIO_FROM_BYTES and ratio > MAX_RATIO:
            raise StudyFileError(
                f"'{path}' unpacks to {ratio:.0f} times its size in '{info.filename}', which no "
                f"study needs. Clear the formatted but empty cells, or copy the study into a new "
                f"workbook."
            )
        is_text = info.filename.lower().endswith((".xml", ".rels", ".vml"))
        is_sheet = info.filename.startswith("xl/worksheets/")
        if is_text and not is_sheet and info.file_size > MAX_OTHER_PART_BYTES:
            raise StudyFileError(
                f"'{path}' unpacks to {info.file_size / 1e6:.0f} MB in '{info.filename}', which no "
                f"study needs. Remove what is no part of the study."
            )
    if total > MAX_UNPACKED_BYTES:
        raise StudyFileError(
            f"'{path}' unpacks to {total / 1e6:.0f} MB; at most {MAX_UNPACKED_BYTES / 1e6:.0f} MB "
            f"are read. Remove what is no part of the study."
        )


def _check_entities(
    path: Path, archive: zipfile.ZipFile, infos: dict[str, zipfile.ZipInfo]
) -> None:
    """No part of a workbook declares a document type; one that does is an attack.

    Only the head of a part can hold the declaration. defusedxml refuses entities once more while
    reading, whatever the encoding.
    """
    marks = [b"<!DOCTYPE", "<!DOCTYPE".encode("utf-16-le"), "<!DOCTYPE".encode("utf-16-be")]
    for info in infos.values():
        if not info.filename.lower().endswith((".xml", ".rels", ".vml")):
            continue
        with archive.open(info) as part:
            head = part.read(4096)
        if any(mark in head for mark in marks):
            raise StudyFileError(
                f"'{path}' holds a document type declaration in '{info.filename}', which no "
                f"spreadsheet program writes. It is not read."
            )


def _notes(path: Path, types: bytes, infos: dict[str, zipfile.ZipInfo]) -> list[Finding]:
    """What is accepted, and said."""
    notes: list[Finding] = []

    def note(code: Code, message: str) -> None:
        notes.append(Finding(Level.NOTE, code, path.name, "", "", "", message))

    if b"macroEnabled" in types:
        note(Code.MACROS_IGNORED, "the macros of this workbook are ignored.")
    if any(name.startswith("xl/externalLinks/") for name in infos):
        note(
            Code.EXTERNAL_LINKS,
            "the workbook links to other workbooks. The values stored in this one are used.",
        )
    locks = ("~$" + path.name, f".~lock.{path.name}#")
    if any(path.with_name(name).exists() for name in locks):
        note(
            Code.OPEN_ELSEWHERE,
            "the workbook seems to be open in a spreadsheet program. Changes that were not saved "
            "are not in this run.",
        )
    return notes
