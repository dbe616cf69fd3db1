"""Files that are no readable workbook: one plain line each, and which exit status it leads to."""

from __future__ import annotations

import io
import os
import zipfile
from pathlib import Path

import pytest

from tests.workbook.study_tables import study_workbook
from xlplan.base.errors import PathError, StudyFileError
from xlplan.workbook.reader import read_workbook
from xlplan.workbook.triage import triage

OLE = bytes.fromhex("D0CF11E0A1B11AE1")
TYPES = "http://schemas.openxmlformats.org/package/2006/content-types"


def workbook_bytes() -> bytes:
    buffer = io.BytesIO()
    study_workbook().save(buffer)
    return buffer.getvalue()


def zipped(**parts: str | bytes) -> bytes:
    """A zip of parts; double underscores in a name stand for a slash, dots stay."""
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, content in parts.items():
            archive.writestr(name.replace("__", "/"), content)
    return buffer.getvalue()


def rezipped(change: dict[str, bytes], content: bytes | None = None) -> bytes:
    """The workbook with some parts replaced or added."""
    buffer = io.BytesIO()
    with zipfile.ZipFile(io.BytesIO(content or workbook_bytes())) as old:
        parts = {name: old.read(name) for name in old.namelist()} | change
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as new:
        for name, part in parts.items():
            new.writestr(name, part)
    return buffer.getvalue()


def part(name: str) -> bytes:
    with zipfile.ZipFile(io.BytesIO(workbook_bytes())) as archive:
        return archive.read(name)


UNREADABLE = [
    ("empty.xlsx", b"", "0 bytes"),
    ("old.xls", OLE + bytes(600), "old .xls"),
    ("renamed.xlsx", OLE + bytes(600), "old .xls"),
    ("locked.xlsx", OLE + bytes(64) + "EncryptedPackage".encode("utf-16-le"), "password"),
    ("table.csv", b"bus,kw\nB1,3\n", "text file"),
    ("table.xlsx", b"bus,kw\nB1,3\n", "not an Excel workbook"),
    ("picture.xlsx", b"\x89PNG\r\n\x1a\n" + bytes(20), "not an Excel workbook"),
    ("hole.xlsx", bytes(5000), "damaged"),
    ("cut.xlsx", workbook_bytes()[:3000], "damaged"),
    ("~$study.xlsx", b"\x06owner" + bytes(50), "lock file"),
    (
        "sheet.ods",
        zipped(mimetype="application/vnd.oasis.opendocument.spreadsheet", content="<a/>"),
        "OpenDocument",
    ),
    ("photos.xlsx", zipped(readme="hello"), "zip file"),
    (
        "letter.xlsx",
        zipped(**{"[Content_Types].xml": f'<Types xmlns="{TYPES}">wordprocessingml</Types>'}),
        "not a workbook",
    ),
    (
        "binary.xlsx",
        rezipped(
            {
                "[Content_Types].xml": part("[Content_Types].xml").replace(
                    b"spreadsheetml.sheet.main", b"ms-excel.sheet.binary.main"
                )
            }
        ),
        ".xlsb",
    ),
    (
        "strict.xlsx",
        rezipped(
            {
                "xl/workbook.xml": part("xl/workbook.xml").replace(
                    b"http://schemas.openxmlformats.org/spreadsheetml/2006/main",
                    b"http://purl.oclc.org/ooxml/spreadsheetml/main",
                )
            }
        ),
        "Strict",
    ),
    ("bomb.xlsx", rezipped({"xl/media/a.xml": b"<a>" + bytes(3_000_000)}), "times its size"),
    (
        "entity.xlsx",
        rezipped(
            {
                "xl/worksheets/sheet1.xml": b'<?xml version="1.0"?><!DOCTYPE a [<!ENTITY b "c">]>'
                + part("xl/worksheets/sheet1.xml").split(b"?>")[-1]
            }
        ),
        "document type",
    ),
    (
        "entity16.xlsx",
        rezipped({"xl/other.xml": '<?xml version="1.0"?><!DOCTYPE a>'.encode("utf-16")}),
        "document type",
    ),
    ("broken.xlsx", rezipped({"xl/worksheets/sheet2.xml": b"<worksheet><sheetData>"}), "read"),
    ("page.xls", b"<html><table><tr><td>1</td></tr></table></html>", "web page"),
    (".~lock.study.xlsx#", b",me,desk,01.01.2026;", "lock file of 'study.xlsx'"),
    (
        "many.xlsx",
        rezipped({f"xl/media/{number}.bin": b"" for number in range(10_001)}),
        "by the thousand",
    ),
    ("headless.xlsx", rezipped({"xl/workbook.xml": b"<nothing/>"}), "no sheets"),
]


@pytest.mark.parametrize(
    ("name", "content", "words"), UNREADABLE, ids=[name for name, *_ in UNREADABLE]
)
def test_unreadable_files_get_one_plain_line(
    tmp_path: Path, name: str, content: bytes, words: str
) -> None:
    path = tmp_path / name
    path.write_bytes(content)
    with pytest.raises(StudyFileError, match=words) as caught:
        read_workbook(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)
    assert caught.value.exit_status == 2


def test_a_missing_file_and_a_folder_are_wrong_paths(tmp_path: Path) -> None:
    for path, words in ((tmp_path / "none.xlsx", "no file"), (tmp_path, "folder")):
        with pytest.raises(PathError, match=words) as caught:
            read_workbook(path)
        assert caught.value.exit_status == 1


def test_a_flipped_byte_inside_a_part_is_damage(tmp_path: Path) -> None:
    content = bytearray(workbook_bytes())
    with zipfile.ZipFile(io.BytesIO(bytes(content))) as archive:
        start = archive.getinfo("xl/worksheets/sheet1.xml").header_offset
    content[start + 100] ^= 0xFF
    path = tmp_path / "flipped.xlsx"
    path.write_bytes(bytes(content))
    with pytest.raises(StudyFileError, match="damaged"):
        read_workbook(path)


@pytest.mark.parametrize("name", ["study.xlsx", "STUDY.XLSX", "caf\u00e9 & '#1%.xlsx"])
def test_readable_workbooks_pass_whatever_their_name(tmp_path: Path, name: str) -> None:
    path = tmp_path / name
    path.write_bytes(workbook_bytes())
    assert triage(path).findings == ()


def test_macros_are_ignored_with_a_note(tmp_path: Path) -> None:
    types = part("[Content_Types].xml").replace(
        b"application/vnd.openxmlformats-officedocument.spreadsheetml.sheet.main+xml",
        b"application/vnd.ms-excel.sheet.macroEnabled.main+xml",
    )
    path = tmp_path / "study.xlsm"
    path.write_bytes(rezipped({"[Content_Types].xml": types}))
    raw = read_workbook(path)
    assert [str(finding.code) for finding in raw.findings] == ["macros ignored"]
    assert raw.tables["Buses"].rows


@pytest.mark.parametrize("lock", ["~$study.xlsx", ".~lock.study.xlsx#"])
def test_a_workbook_open_elsewhere_gets_a_note(tmp_path: Path, lock: str) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(workbook_bytes())
    (tmp_path / lock).write_bytes(b"owner")
    assert [str(finding.code) for finding in triage(path).findings] == ["open elsewhere"]


def test_links_to_other_workbooks_get_a_note(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(rezipped({"xl/externalLinks/externalLink1.xml": b"<externalLink/>"}))
    assert [str(finding.code) for finding in triage(path).findings] == ["external links"]


def test_two_parts_of_one_name_are_refused(tmp_path: Path) -> None:
    """One of them would be checked and the other read."""
    path = tmp_path / "study.xlsx"
    path.write_bytes(workbook_bytes())
    with pytest.warns(UserWarning, match="Duplicate"), zipfile.ZipFile(path, "a") as archive:
        archive.writestr("xl/workbook.xml", part("xl/workbook.xml"))
    with pytest.raises(StudyFileError, match="twice"):
        read_workbook(path)


def test_what_unpacks_to_too_much_in_all_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(workbook_bytes())
    monkeypatch.setattr("xlplan.workbook.triage.MAX_UNPACKED_BYTES", 20_000)
    with pytest.raises(StudyFileError, match="unpacks to"):
        read_workbook(path)


def test_a_table_of_texts_that_is_too_large_is_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(rezipped({"xl/sharedStrings.xml": b"<sst>" + b"<si/>" * 20_000 + b"</sst>"}))
    monkeypatch.setattr("xlplan.workbook.triage.MAX_OTHER_PART_BYTES", 90_000)
    with pytest.raises(StudyFileError, match="sharedStrings"):
        read_workbook(path)


def test_a_file_that_is_too_large_is_refused_before_it_is_read(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "study.xlsx"
    with path.open("wb") as file:
        file.truncate(200_000_001)  # takes no room on the disk
    monkeypatch.setattr(Path, "read_bytes", None)
    with pytest.raises(StudyFileError, match="larger than"):
        read_workbook(path)


def test_more_values_than_a_study_holds_are_refused(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "study.xlsx"
    path.write_bytes(workbook_bytes())
    monkeypatch.setattr("xlplan.workbook.reader.MAX_VALUES", 100)
    with pytest.raises(StudyFileError, match="more than 100 values"):
        read_workbook(path)


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="no pipes here")
def test_a_pipe_is_no_file_and_is_not_waited_for(tmp_path: Path) -> None:
    path = tmp_path / "study.xlsx"
    os.mkfifo(path)
    with pytest.raises(PathError, match="no file"):
        read_workbook(path)
