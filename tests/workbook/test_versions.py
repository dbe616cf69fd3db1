"""Studies of older templates are read with a note; newer ones are refused with one plain line.

``data/template-1-demo.xlsx`` was written by the program when the template had version 1.
"""

from __future__ import annotations

from pathlib import Path

import openpyxl
import pytest

from xlplan.base.errors import Level, StudyFileError
from xlplan.cli import main
from xlplan.pipeline import read_study
from xlplan.schema.fields import TEMPLATE_VERSION
from xlplan.workbook.reader import read_workbook
from xlplan.workbook.template import write_template
from xlplan.workbook.versions import NEWS, check_version

OLD = Path(__file__).parent / "data" / "template-1-demo.xlsx"


def with_version(folder: Path, version: object) -> Path:
    """The demo with another version in its named cell."""
    path = folder / "study.xlsx"
    write_template(path, with_demo=True)
    book = openpyxl.load_workbook(path)
    sheet, address = book.defined_names["template_version"].attr_text.split("!")
    book[sheet][address.replace("$", "")] = version
    book.save(path)
    return path


def test_a_study_of_the_first_template_is_read_and_the_news_are_told(tmp_path: Path) -> None:
    checked = read_study(OLD)
    assert checked.is_usable
    [note] = [f for f in checked.findings if f.code == "older template"]
    assert note.level is Level.NOTE
    assert (note.sheet, note.cell, note.value) == ("Start", "C43", "1")
    assert NEWS[2] in note.message
    # Its figures are those of the same demo in the present template.
    write_template(tmp_path / "demo.xlsx", with_demo=True)
    present = read_study(tmp_path / "demo.xlsx").study
    assert checked.study is not None
    assert present is not None
    assert [load.peak_kw for load in checked.study.loads] == [x.peak_kw for x in present.loads]
    assert [line.r_ohm for line in checked.study.lines] == [x.r_ohm for x in present.lines]


def test_a_newer_study_is_refused_with_one_line(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = with_version(tmp_path, TEMPLATE_VERSION + 1)
    with pytest.raises(StudyFileError):
        read_workbook(path)
    assert main(["check", str(path)]) == 2
    err = capsys.readouterr().err
    assert len(err.splitlines()) == 1
    assert f"template version {TEMPLATE_VERSION + 1}" in err
    assert "newer xlplan" in err


@pytest.mark.parametrize("version", ["two", "-1", "2b", 1.5, "9" * 30])
def test_what_is_no_version_is_noted_and_the_study_read(version: object) -> None:
    [found] = check_version(Path("x.xlsx"), version, ("Start", "C9"))
    assert (found.level, found.code, found.cell) == (Level.NOTE, "older template", "C9")
    assert str(version)[:40] in found.message


@pytest.mark.parametrize("version", [None, True, TEMPLATE_VERSION, float(TEMPLATE_VERSION)])
def test_the_present_version_and_none_say_nothing(version: object) -> None:
    assert check_version(Path("x.xlsx"), version, ("Start", "C9")) == []


def test_every_version_has_its_news() -> None:
    assert set(NEWS) == set(range(2, TEMPLATE_VERSION + 1))
