"""Results appear whole or not at all, under a free name, and never over the study."""

from __future__ import annotations

import os
import stat
import zipfile
from pathlib import Path

import pytest

from xlplan.base.errors import ResultFileError
from xlplan.compare.study_result import StudyResult
from xlplan.report import writer
from xlplan.report.target import put_in_place
from xlplan.report.writer import check_target, check_whole, write_results


@pytest.fixture
def study(tmp_path: Path) -> Path:
    """A stand-in for the study file: only its place and its bytes matter."""
    path = tmp_path / "study.xlsx"
    path.write_bytes(b"the study")
    return path


def names(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir())


def test_next_free_name_and_force(result: StudyResult, tmp_path: Path, study: Path) -> None:
    path = tmp_path / "rés & Ülts 'a' #1 %.xlsx"
    assert write_results(result, path, False, study) == path
    before = path.read_bytes()
    second = write_results(result, path, False, study)
    assert second == tmp_path / "rés & Ülts 'a' #1 %-2.xlsx"
    assert write_results(result, path, False, study).name.endswith("-3.xlsx")
    assert path.read_bytes() == before
    path.write_bytes(b"something old")
    assert write_results(result, path, True, study) == path
    assert zipfile.is_zipfile(path)
    assert len(names(tmp_path)) == 4


def test_same_result_same_bytes(result: StudyResult, tmp_path: Path, study: Path) -> None:
    one = write_results(result, tmp_path / "one.xlsx", False, study)
    two = write_results(result, tmp_path / "two.xlsx", False, study)
    assert one.read_bytes() == two.read_bytes()


@pytest.mark.parametrize("force", [False, True])
@pytest.mark.parametrize("how", ["same", "dots", "symbolic link", "hard link"])
def test_never_over_the_study(
    result: StudyResult, tmp_path: Path, study: Path, force: bool, how: str
) -> None:
    path = study
    if how == "dots":
        (tmp_path / "sub").mkdir()
        path = tmp_path / "sub" / ".." / "study.xlsx"
    elif how == "symbolic link":
        path = tmp_path / "link.xlsx"
        path.symlink_to(study)
    elif how == "hard link":
        path = tmp_path / "link.xlsx"
        os.link(study, path)
    with pytest.raises(ResultFileError, match="over the study"):
        write_results(result, path, force, study)
    with pytest.raises(ResultFileError, match="over the study"):
        check_target(path, study)
    assert study.read_bytes() == b"the study"


def test_folder_is_tested_before(result: StudyResult, tmp_path: Path, study: Path) -> None:
    with pytest.raises(ResultFileError, match="no folder"):
        check_target(tmp_path / "nowhere" / "out.xlsx", study)
    with pytest.raises(ResultFileError, match="no folder"):
        write_results(result, tmp_path / "nowhere" / "out.xlsx", False, study)
    (tmp_path / "folder.xlsx").mkdir()
    with pytest.raises(ResultFileError, match="is a folder"):
        check_target(tmp_path / "folder.xlsx", study)
    check_target(tmp_path / "out.xlsx", study)
    assert names(tmp_path) == ["folder.xlsx", "study.xlsx"]


@pytest.mark.parametrize("error", [RuntimeError("ours"), KeyboardInterrupt()])
def test_nothing_is_left_when_writing_stops(
    result: StudyResult,
    tmp_path: Path,
    study: Path,
    monkeypatch: pytest.MonkeyPatch,
    error: BaseException,
) -> None:
    def stop(*_: object) -> None:
        raise error

    monkeypatch.setattr(writer.summary, "write", stop)
    with pytest.raises(type(error)):
        write_results(result, tmp_path / "out.xlsx", False, study)
    assert names(tmp_path) == ["study.xlsx"]


def test_damaged_file_is_not_put_in_place(
    result: StudyResult,
    workbook_path: Path,
    tmp_path: Path,
    study: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    whole = workbook_path.read_bytes()
    cut = tmp_path / "cut.xlsx"
    cut.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(ResultFileError, match="damaged"):
        check_whole(cut)
    check_whole(workbook_path)
    cut.unlink()

    real = writer._fill

    def fill_and_spoil(book: object, answer: StudyResult) -> None:
        real(book, answer)  # type: ignore[arg-type]
        monkeypatch.setattr(writer, "SHEET_ORDER", (*writer.SHEET_ORDER, "one more"))

    monkeypatch.setattr(writer, "_fill", fill_and_spoil)
    with pytest.raises(ResultFileError, match="parts are missing"):
        write_results(result, tmp_path / "out.xlsx", False, study)
    assert names(tmp_path) == ["study.xlsx"]


def test_locked_file_gets_the_next_name(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path, temporary = tmp_path / "out.xlsx", tmp_path / "temporary.xlsx"
    path.write_bytes(b"open elsewhere")
    temporary.write_bytes(b"new")

    def locked(*_: object) -> None:
        raise PermissionError(13, "in use")

    monkeypatch.setattr("xlplan.report.target.os.replace", locked)
    assert put_in_place(temporary, path, force=True) == tmp_path / "out-2.xlsx"
    assert path.read_bytes() == b"open elsewhere"
    assert (tmp_path / "out-2.xlsx").read_bytes() == b"new"


def test_without_hard_links(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def no_links(*_: object) -> None:
        raise OSError(95, "not supported")

    monkeypatch.setattr("xlplan.report.target.os.link", no_links)
    (tmp_path / "out.xlsx").write_bytes(b"old")
    temporary = tmp_path / "temporary.xlsx"
    temporary.write_bytes(b"new")
    assert put_in_place(temporary, tmp_path / "out.xlsx", force=False).name == "out-2.xlsx"
    assert names(tmp_path) == ["out-2.xlsx", "out.xlsx"]


def test_permissions_are_those_of_any_new_file(
    result: StudyResult, tmp_path: Path, study: Path
) -> None:
    path = write_results(result, tmp_path / "out.xlsx", False, study)
    assert stat.S_IMODE(path.stat().st_mode) == stat.S_IMODE(study.stat().st_mode)
