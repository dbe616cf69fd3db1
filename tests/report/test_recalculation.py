"""A spreadsheet program recalculates the workbook and finds every stored value again.

LibreOffice keeps stored values unless it is told to recalculate, so it runs with a profile of its
own that says so, and a wrong value is planted to show that it does.
"""

from __future__ import annotations

import re
import shutil
import subprocess
import zipfile
from pathlib import Path
from typing import Any

import openpyxl
import pytest

from xlplan.report.writer import write_results

from .made_up import ASSETS, crf, made_up_result

SOFFICE = shutil.which("soffice")
pytestmark = pytest.mark.skipif(SOFFICE is None, reason="LibreOffice is not installed")

PROFILE = """<?xml version="1.0" encoding="UTF-8"?>
<oor:items xmlns:oor="http://openoffice.org/2001/registry"
 xmlns:xs="http://www.w3.org/2001/XMLSchema" xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance">
<item oor:path="/org.openoffice.Office.Calc/Formula/Load">
<prop oor:name="OOXMLRecalcMode" oor:op="fuse"><value>0</value></prop></item>
</oor:items>
"""


@pytest.fixture(scope="module")
def books(workbook_path: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """The workbook, one with a wrong stored value, one at 0 %, one with the rate cell changed."""
    folder = tmp_path_factory.mktemp("books")
    paths = {name: folder / f"{name}.xlsx" for name in ("planted", "zero", "changed", "dearer")}
    rewrite(
        workbook_path, paths["planted"], 2, r"(<f>SUM\([^<]*</f><v>)[^<]*(</v>)", r"\g<1>999\g<2>"
    )
    rewrite(
        workbook_path, paths["changed"], 2, r'(<c r="B4"[^>]*><v>)0\.04(</v>)', r"\g<1>0.09\g<2>"
    )
    sheet = openpyxl.load_workbook(workbook_path)["Alternatives"]
    label = "BAT-NORTH: capital per kWh"
    row = next(cell.row for cell in sheet["A"] if cell.value == label)
    cell = rf'(<c r="C{row}"[^>]*><v>)270(</v>)'
    rewrite(workbook_path, paths["dearer"], 2, cell, r"\g<1>370\g<2>")
    write_results(made_up_result(rate=0.0), paths["zero"], False, folder / "study.xlsx")
    shutil.copy(workbook_path, folder / "plain.xlsx")
    return {**paths, "plain": folder / "plain.xlsx"}


@pytest.fixture(scope="module")
def recalculated(
    books: dict[str, Path], tmp_path_factory: pytest.TempPathFactory
) -> dict[str, Any]:
    """Values of all of them after one recalculating conversion, in a profile of its own."""
    home, out = tmp_path_factory.mktemp("office"), tmp_path_factory.mktemp("recalculated")
    (home / "profile" / "user").mkdir(parents=True)
    (home / "profile" / "user" / "registrymodifications.xcu").write_text(PROFILE, encoding="utf-8")
    profile = f"-env:UserInstallation={(home / 'profile').as_uri()}"
    command = [str(SOFFICE), profile, "--headless", "--convert-to", "xlsx", "--outdir", str(out)]
    paths = [str(path) for path in books.values()]
    subprocess.run([*command, *paths], check=True, capture_output=True, timeout=300)
    # The program ends with 0 even where it converted nothing: a missing file fails here.
    return {
        name: openpyxl.load_workbook(out / path.name, data_only=True)
        for name, path in books.items()
    }


def differences(path: Path, recalculated: Any, least: int = 500) -> list[str]:
    """Formula cells whose stored value is not what recalculation gives."""
    formulas = openpyxl.load_workbook(path)
    stored = openpyxl.load_workbook(path, data_only=True)
    found, n_formula = [], 0
    for sheet in formulas:
        for row in sheet.iter_rows():
            for cell in row:
                if cell.data_type != "f":
                    continue
                n_formula += 1
                old = stored[sheet.title][cell.coordinate].value
                new = recalculated[sheet.title][cell.coordinate].value
                same = (
                    old == pytest.approx(new, rel=1e-9, abs=1e-6)
                    if isinstance(old, int | float) and isinstance(new, int | float)
                    else old == new
                )
                if not same:
                    found.append(f"{sheet.title}!{cell.coordinate} {cell.value}: {old} {new}")
    assert n_formula > least
    return found


def rewrite(path: Path, target: Path, sheet_number: int, pattern: str, new: str) -> None:
    """A copy of the workbook with one change in the XML of a sheet."""
    part = f"xl/worksheets/sheet{sheet_number}.xml"
    with zipfile.ZipFile(path) as old, zipfile.ZipFile(target, "w", zipfile.ZIP_DEFLATED) as copy:
        for name in old.namelist():
            data = old.read(name)
            if name == part:
                text, n_change = re.subn(pattern, new, data.decode(), count=1)
                assert n_change == 1
                data = text.encode()
            copy.writestr(name, data)


def test_stored_values_are_found_again(
    books: dict[str, Path], recalculated: dict[str, Any]
) -> None:
    assert differences(books["plain"], recalculated["plain"]) == []


def test_a_wrong_stored_value_would_be_seen(
    books: dict[str, Path], recalculated: dict[str, Any]
) -> None:
    found = differences(books["planted"], recalculated["planted"])
    assert len(found) == 1
    assert "999" in found[0]


def test_no_interest(books: dict[str, Path], recalculated: dict[str, Any]) -> None:
    values = recalculated["zero"]
    assert differences(books["zero"], values) == []
    factors = {
        row[0]: row[11] for row in values["Plan"].iter_rows(values_only=True) if row[2] == "storage"
    }
    assert factors["BAT-NORTH"] == pytest.approx(1.0 / 15.0)


def test_discount_rate_moves_the_totals(recalculated: dict[str, Any]) -> None:
    """9 % in place of 4 %: investment of the least-cost plan from prices and lives, by hand."""
    values = recalculated["changed"]
    life = {asset[0]: asset[9] for asset in ASSETS}
    net = {"BAT-NORTH": 408_768.0, "GEN-B09": 155_000.0, "Tree wire, ridge": 44_000.0}
    wanted = sum(amount * crf(life[name], 0.09) for name, amount in net.items())
    rows = {row[0]: row for row in values["Alternatives"].iter_rows(values_only=True) if row[0]}
    assert rows["Investment"][4] == pytest.approx(wanted)
    costs = made_up_result().plans[2].costs
    total = costs.total - costs.investment + wanted
    assert rows["Total yearly cost"][4] == pytest.approx(total)
    factor = sum(1.09**-year for year in range(1, 21))
    assert rows["Present value of the total yearly cost"][4] == pytest.approx(total * factor)
    checks = [row for row in values["Checks"].iter_rows(values_only=True) if row[8] == "CHANGED"]
    # The three alternatives that buy something, and where the plan's own total stands as well.
    names = [row[1] for row in checks]
    assert names == [
        *["Total of the Alternatives sheet"] * 3,
        "Worth of planning for outages",
        "Sensitivities begin at the study as given",
        "Repair times as given",
    ]
    assert values["Checks"]["B4"].value.startswith("LOOK")
    # The workbook's own sums still agree.
    assert "FAIL" not in [row[8] for row in values["Checks"].iter_rows(values_only=True)]


def test_discount_rate_moves_worth_and_ratios(recalculated: dict[str, Any]) -> None:
    """Net value of a measure and the benefit-cost ratio at 9 %, by hand from prices and lives."""
    values = recalculated["changed"]
    rows = list(values["Line hardening"].iter_rows(values_only=True))
    tree = next(row for row in rows if row[1] == "Tree wire, ridge")
    # 88,000 less half of it as a grant, 40 years, 900 a year of O&M; worth 9,000 a year.
    own = 44_000.0 * crf(40.0, 0.09) + 900.0
    assert tree[6] == pytest.approx(own)
    assert tree[12] == pytest.approx(9_000.0 - own)
    assert tree[13] == pytest.approx(44_000.0 / (9_000.0 - 900.0))
    assert tree[15] == "undecided"
    plans = made_up_result().plans
    life = {asset[0]: asset[9] for asset in ASSETS}
    net = {"BAT-NORTH": 408_768.0, "GEN-B09": 155_000.0, "Tree wire, ridge": 44_000.0}
    wanted = sum(amount * crf(life[name], 0.09) for name, amount in net.items())
    saved = plans[0].costs.total - (plans[2].costs.total - plans[2].costs.investment)
    rows = {row[0]: row for row in values["Alternatives"].iter_rows(values_only=True) if row[0]}
    assert rows["Benefit-cost ratio"][4] == pytest.approx(saved / wanted)
    # Device changes follow the rate as well: 18,000 over 25 years in the last alternative.
    own_net = {
        "BAT-NORTH": 0.8 * (40_000.0 + 800.0 * 310.0 + 3200.0 * 270.0),
        "Cable, creek": 260e3,
    }
    wanted = sum(amount * crf(life[name], 0.09) for name, amount in own_net.items())
    wanted += 18_000.0 * crf(25.0, 0.09)
    assert rows["Investment"][5] == pytest.approx(wanted)


def test_a_price_on_the_alternatives_sheet_moves_the_totals(recalculated: dict[str, Any]) -> None:
    """100 a kWh more on 1261.5 kWh, less 20 % of grant, over 15 years at 4 %."""
    values = recalculated["dearer"]
    extra = 100.0 * 1261.5
    more = 0.8 * extra * crf(15.0)
    rows = {row[0]: row for row in values["Alternatives"].iter_rows(values_only=True) if row[0]}
    plan = made_up_result().plans[2]
    assert rows["Capital before grants"][4] == pytest.approx(plan.capital_gross + extra)
    assert rows["Capital after grants"][4] == pytest.approx(plan.capital_cost + 0.8 * extra)
    assert rows["Total yearly cost"][4] == pytest.approx(plan.costs.total + more)
    factor = sum(1.04**-year for year in range(1, 21))
    present = (plan.costs.total + more) * factor
    assert rows["Present value of the total yearly cost"][4] == pytest.approx(present)
    base = made_up_result().plans[0].costs.total
    saving = base - (plan.costs.total - plan.costs.investment)
    ratio = saving / (plan.costs.investment + more)
    assert rows["Benefit-cost ratio"][4] == pytest.approx(ratio)
    payback = (plan.capital_cost + 0.8 * extra) / saving
    assert rows["Simple payback, customers included"][4] == pytest.approx(payback)
    summary = {row[0]: row for row in values["Summary"].iter_rows(values_only=True) if row[0]}
    assert ratio in [pytest.approx(v) for v in summary[plan.name] if isinstance(v, float)]
