"""The live checks on Start: plain formulas whose stored values a spreadsheet program confirms.

LibreOffice keeps stored values unless its profile says to recalculate; a wrong one is planted to
show that it does.
"""

from __future__ import annotations

import re
import shutil
import subprocess
import zipfile
from functools import cache
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from openpyxl import load_workbook

from xlplan.schema.fields import sheet
from xlplan.workbook.demo import demo_settings, demo_tables
from xlplan.workbook.template import write_study_workbook

SOFFICE = shutil.which("soffice")

PROFILE = """<?xml version="1.0" encoding="UTF-8"?>
<oor:items xmlns:oor="http://openoffice.org/2001/registry"
 xmlns:xs="http://www.w3.org/2001/XMLSchema" xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance">
<item oor:path="/org.openoffice.Office.Calc/Formula/Load">
<prop oor:name="OOXMLRecalcMode" oor:op="fuse"><value>0</value></prop></item>
</oor:items>
"""

N_FORMULA = 18 + 9 + 6
"""Rows of 18 sheets, unknown names of the 9 that name others singly, three checks and verdicts."""


def with_slips() -> dict[str, list[dict[str, Any]]]:
    """The demo with two loads at no bus, a store at none, a purchase of nothing, a lost window."""
    tables = demo_tables()
    tables["Loads"][0]["bus"] = "B99"
    tables["Loads"][1]["load_profile"] = "hoems"
    tables["Loads"][2]["bus"] = tables["Loads"][2]["bus"].lower()  # case does not count
    tables["Storage"][0]["bus"] = "nowhere"
    tables["Fixed purchases"][0]["asset"] = "Batery"
    del tables["Windows"][0]
    tables["Customer classes"] = []
    return tables


@pytest.fixture(scope="module")
def books(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    folder = tmp_path_factory.mktemp("live")
    paths = {name: folder / f"{name}.xlsx" for name in ("blank", "demo", "slips", "planted")}
    write_study_workbook(paths["blank"], {}, {})
    write_study_workbook(paths["demo"], demo_tables(), demo_settings())
    write_study_workbook(paths["slips"], with_slips(), {**demo_settings(), "source_bus": "S9"})
    with zipfile.ZipFile(paths["demo"]) as old, zipfile.ZipFile(paths["planted"], "w") as new:
        for name in old.namelist():
            part = old.read(name).decode("utf-8") if name.endswith(".xml") else ""
            if name == "xl/worksheets/sheet1.xml":
                part, n = re.subn(r"(<f>COUNTA[^<]*</f><v>)[^<]*", r"\g<1>999", part, count=1)
                assert n == 1
            new.writestr(name, part or old.read(name))
    return paths


@cache
def book_of(path: Path, has_values: bool) -> Any:
    """The workbook, its formulas or their stored values."""
    return load_workbook(path, data_only=has_values)


def formulas_of(path: Path) -> dict[str, tuple[str, object]]:
    """Formula and stored value of every formula cell, by ``Sheet!Cell``."""
    stored = book_of(path, True)
    return {
        f"{page.title}!{cell.coordinate}": (cell.value, stored[page.title][cell.coordinate].value)
        for page in book_of(path, False)
        for row in page.iter_rows()
        for cell in row
        if cell.data_type == "f"
    }


def value_beside(path: Path, label: str, steps: int = 1) -> object:
    """The stored value some cells to the right of a text on Start."""
    page = book_of(path, True)["Start"]
    [cell] = [cell for row in page.iter_rows() for cell in row if cell.value == label]
    return page.cell(cell.row, cell.column + steps).value


def test_every_formula_has_a_value_and_is_short(books: dict[str, Path]) -> None:
    for path in books.values():
        formulas = formulas_of(path)
        on_start = [value for place, (_, value) in formulas.items() if place.startswith("Start!")]
        assert len(on_start) >= N_FORMULA
        assert all(value is not None for value in on_start)
        assert all(not str(value).startswith("#") for _, value in formulas.values())
        assert all(len(text) < 400 for text, _ in formulas.values())


def test_counts_of_the_demo_and_of_slips(books: dict[str, Path]) -> None:
    assert value_beside(books["demo"], "Loads", 4) == len(demo_tables()["Loads"])
    assert value_beside(books["demo"], "Profiles", 4) == 4 * 48
    assert value_beside(books["demo"], "Settings", 4) == len(demo_settings())
    # 302 and 60 days of 24 hours and 2 storms of 36: 8760.
    for name, empty, unknown, hours, verdicts in (
        ("blank", 7, 0, 0, ["LOOK", "OK", "LOOK"]),
        ("demo", 0, 0, 8760, ["OK", "OK", "OK"]),
        # A bus of a load, a profile, a bus of a store, an asset, the source; every load's class.
        ("slips", 1, 5 + 13, 1512, ["LOOK", "LOOK", "LOOK"]),
    ):
        found = [
            value_beside(books[name], label)
            for label in (
                "Needed sheets without rows",
                "Names that stand on no sheet",
                "Hours a year that the windows make up",
            )
        ]
        assert found == [empty, unknown, hours]
        assert [
            value_beside(books[name], label, 2)
            for label in (
                "Needed sheets without rows",
                "Names that stand on no sheet",
                "Hours a year that the windows make up",
            )
        ] == verdicts


@pytest.mark.skipif(SOFFICE is None, reason="LibreOffice is not installed")
def test_a_spreadsheet_program_finds_the_stored_values_again(
    books: dict[str, Path], tmp_path: Path
) -> None:
    (tmp_path / "profile" / "user").mkdir(parents=True)
    (tmp_path / "profile" / "user" / "registrymodifications.xcu").write_text(PROFILE, "utf-8")
    profile = f"-env:UserInstallation={(tmp_path / 'profile').as_uri()}"
    out = tmp_path / "out"
    paths = [str(path) for path in books.values()]
    command = [str(SOFFICE), profile, "--headless", "--convert-to", "xlsx", "--outdir", str(out)]
    subprocess.run([*command, *paths], check=True, capture_output=True, timeout=300)
    different = {}
    for name, path in books.items():
        again = openpyxl.load_workbook(out / path.name, data_only=True)
        different[name] = []
        for place, (text, stored) in formulas_of(path).items():
            sheet, address = place.split("!")
            value = again[sheet][address].value
            if (stored or "") != (value or "") or (stored == 0) != (value == 0):
                different[name].append((place, text, stored, value))
    assert len(different.pop("planted")) == 1
    assert different == {"blank": [], "demo": [], "slips": []}


def test_the_list_of_what_can_be_bought_has_every_id_in_order(books: dict[str, Path]) -> None:
    page = book_of(books["demo"], True)["Lists"]
    [heading] = [c for row in page.iter_rows() for c in row if str(c.value).startswith("What can")]
    ids = [
        page.cell(row, heading.column).value
        for row in range(heading.row + 1, page.max_row + 1)
        if page.cell(row, heading.column).value
    ]
    tables = demo_tables()
    expected = {
        name: [row[key] for row in tables[name]]
        for name, key in (
            ("Generators", "generator"),
            ("Storage", "storage"),
            ("Hardening", "measure"),
        )
    }
    order = sheet("Fixed purchases").field("asset").refers_to
    assert ids == [ident for name in order for ident in expected[name]]
