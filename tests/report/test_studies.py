"""Three studies from workbook to workbook: recalculated, traced to inputs, moved by closed forms.

Expected values come from the study's own prices by hand formulas, and from a spreadsheet program.
"""

from __future__ import annotations

import json
import re
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from openpyxl.utils import column_index_from_string, get_column_letter

from tests.test_end_to_end import COMPARED, tables, write_study
from xlplan.base.names import EXISTING, IGNORING_OUTAGES, LEAST_COST
from xlplan.cli import main

from .made_up import crf
from .test_pages import check_charts, check_pages
from .test_recalculation import PROFILE, differences, rewrite

EXAMPLE = Path(__file__).parents[2] / "examples" / "wendlemoor" / "wendlemoor.xlsx"
NAMES = ("villages", "quiet", "example")
RARE = 0.001
OTHER_RATE = 0.09
DEARER = {
    "villages": ("covered wire", "cost", 5000.0),
    "quiet": ("battery", "capital per kWh", 7.0),
    "example": ("Hall battery", "capital per kWh", 50.0),
}
"""Asset, figure of its price list, and what it is raised by."""

Study = tuple[Path, dict[str, Any]]


def quiet_sheets() -> dict[str, list[dict[str, object]]]:
    """The two villages with an evening peak worth shaving, and failures a thousand times rarer."""
    plain = tables(8)
    shape = (0.4, 0.4, 0.5, 0.6, 0.6, 0.8, 1.0, 0.5)
    (overhead,) = plain["Outage assumptions"]
    (window,) = plain["Windows"]
    return {
        "Loads": [{**load, "load_profile": "day"} for load in plain["Loads"]],
        "Profiles": [{"time": k, "day": share} for k, share in enumerate(shape)],
        "Windows": [{**window, "counts_for_demand": "yes"}],
        "Outage assumptions": [{**overhead, "failures_per_year": 3 * RARE}],
    }


@pytest.fixture(scope="module")
def studies(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Study]:
    """Results and twin: with the whole comparison pack; with hardly an outage; the example."""
    folder = tmp_path_factory.mktemp("studies")
    (folder / "example").mkdir()
    write_study(folder / "villages.xlsx", 4, COMPARED)
    write_study(
        folder / "quiet.xlsx",
        8,
        quiet_sheets(),
        gap_target_pct=0.05,
        demand_charge_per_kw_year=90,
    )
    shutil.copy(EXAMPLE, folder / "example.xlsx")
    solved = {}
    for name in NAMES:
        twin = folder / f"{name}.json"
        words = [] if name == "villages" else ["--plan-only"]
        status = main(
            ["solve", str(folder / f"{name}.xlsx"), "--json", str(twin), "--quiet", *words]
        )
        assert status == 0
        results = folder / f"{name}-results.xlsx"
        solved[name] = (results, json.loads(twin.read_text(encoding="utf-8")))
    return solved


# -- recalculated ---------------------------------------------------------------------------------


def price_cell(path: Path, label: str) -> tuple[str, float]:
    """Address and value of a figure of the price list on the Alternatives sheet."""
    sheet = openpyxl.load_workbook(path)["Alternatives"]
    row = next(cell.row for cell in sheet["A"] if cell.value == label)
    return f"C{row}", float(sheet[f"C{row}"].value)


def with_price(path: Path, target: Path, label: str, more: float) -> None:
    """A copy with one price raised."""
    place, value = price_cell(path, label)
    pattern = rf'(<c r="{place}"[^>]*><v>){value:g}(</v>)'
    rewrite(path, target, 2, pattern, rf"\g<1>{value + more:g}\g<2>")


@pytest.fixture(scope="module")
def recalculated(
    studies: dict[str, Study], tmp_path_factory: pytest.TempPathFactory
) -> dict[str, tuple[Path, Any]]:
    """Each workbook, one with a wrong stored value, some with a changed rate or price."""
    if shutil.which("soffice") is None:
        pytest.skip("LibreOffice is not installed")
    home, out = tmp_path_factory.mktemp("home"), tmp_path_factory.mktemp("out")
    books = {name: path for name, (path, _) in studies.items()}
    for name, (path, _) in studies.items():
        planted = home / f"{name}-planted.xlsx"
        # A sum of the Summary.
        rewrite(path, planted, 1, r"(<f>[A-Z]+\d+\+[A-Z]+\d+</f><v>)[^<]*(</v>)", r"\g<1>999\g<2>")
        books[f"{name} planted"] = planted
        rated = home / f"{name}-rated.xlsx"
        rate = r'(<c r="B4"[^>]*><v>)[^<]*(</v>)'
        rewrite(path, rated, 2, rate, rf"\g<1>{OTHER_RATE}\g<2>")
        books[f"{name} rated"] = rated
        dear = home / f"{name}-dear.xlsx"
        asset, figure, more = DEARER[name]
        with_price(path, dear, f"{asset}: {figure}", more)
        books[f"{name} dear"] = dear
    user = home / "profile" / "user"
    user.mkdir(parents=True)
    (user / "registrymodifications.xcu").write_text(PROFILE, encoding="utf-8")
    profile = f"-env:UserInstallation={(home / 'profile').as_uri()}"
    command = ["soffice", profile, "--headless", "--convert-to", "xlsx", "--outdir", str(out)]
    paths = [str(path) for path in books.values()]
    subprocess.run([*command, *paths], check=True, capture_output=True, timeout=600)
    return {
        name: (path, openpyxl.load_workbook(out / path.name, data_only=True))
        for name, path in books.items()
    }


@pytest.mark.parametrize("name", NAMES)
def test_stored_values_are_those_of_a_spreadsheet_program(
    recalculated: dict[str, tuple[Path, Any]], name: str
) -> None:
    assert differences(*recalculated[name], least=150) == []


@pytest.mark.parametrize("name", NAMES)
def test_a_wrong_stored_value_is_found(
    recalculated: dict[str, tuple[Path, Any]], name: str
) -> None:
    found = differences(*recalculated[f"{name} planted"], least=150)
    assert len(found) == 1
    assert found[0].startswith("Summary!")
    assert " 999 " in found[0]


# -- traced ---------------------------------------------------------------------------------------

REFERENCE = re.compile(
    r"(?:'(?P<sheet>[^']+)'!)?\$?(?P<col>[A-Z]{1,2})\$?(?P<row>\d+)"
    r"(?::\$?(?P<col2>[A-Z]{1,2})\$?(?P<row2>\d+))?"
)
NAMES_OF_CELLS = {"discount_rate": "'Alternatives'!$B$4", "study_life_years": "'Alternatives'!$B$5"}
PARTS = {
    "Energy bought less energy sold",
    "Fuel and other running cost",
    "Demand charge",
    "Repairs",
    "Surplus and tripping",
    "Stored energy at the end of windows",
    "Interruptions by outages",
    "Load shed in normal service",
}
RUN_FIGURES = {
    "Customers",
    "95 % interval of the difference: low",
    "95 % interval of the difference: high",
    "95 % interval of that: low",
    "95 % interval of that: high",
    "Real discount rate (per year)",
    "Years that present values cover",
}
FOUND_BY_RUN = {"Alternative", "Kind", "Bought", "Power bought (kW)", "Energy bought (kWh)"}

NO_SUCH_FIGURE = {
    "Capital per kW (EUR/kW)",
    "Capital per kWh (EUR/kWh)",
    "Grant (share of capital)",
    "Fixed O&M (EUR/year per kW, or per measure)",
}


def references(formula: str, sheet: str) -> Iterator[tuple[str, str]]:
    """Every cell that a formula names: sheet and address."""
    text = re.sub(r'"[^"]*"', "", formula)
    for name, place in NAMES_OF_CELLS.items():
        text = text.replace(name, place)
    for found in REFERENCE.finditer(text):
        first = column_index_from_string(found["col"])
        last = column_index_from_string(found["col2"] or found["col"])
        for row in range(int(found["row"]), int(found["row2"] or found["row"]) + 1):
            for col in range(first, last + 1):
                yield found["sheet"] or sheet, f"{get_column_letter(col)}{row}"


def leaves(book: Any, sheet: str, place: str) -> set[tuple[str, str]]:
    """Cells without formula at the end of all references from one cell."""
    found, seen, waiting = set(), set(), [(sheet, place)]
    while waiting:
        cell = waiting.pop()
        if cell in seen:
            continue
        seen.add(cell)
        value = book[cell[0]][cell[1]].value
        if isinstance(value, str) and value.startswith("="):
            waiting += references(value, cell[0])
        else:
            found.add(cell)
    return found


def summary_cells(book: Any, heading: str, plan: str) -> str:
    """Address of a figure of a plan on the Summary."""
    sheet = book["Summary"]
    for row in sheet.iter_rows():
        for cell in row:
            if cell.value == heading:
                for below in range(cell.row + 1, cell.row + 20):
                    if sheet.cell(below, 1).value == plan:
                        return str(sheet.cell(below, cell.column).coordinate)
    raise AssertionError(f"no {heading} of {plan}")


def headings(book: Any) -> list[str]:
    """Headings of both tables of the Summary."""
    found = []
    for row in book["Summary"].iter_rows(values_only=True):
        if row[0] in ("Alternative", "Is it worth it"):
            found += [str(cell) for cell in row[1:] if cell]
    return found


def is_input(book: Any, cell: tuple[str, str]) -> bool:
    """True for an input of the workbook: a price, a rate, a part or a purchase that the run found.

    Prices stand under the statement; parts, purchases and indices are figures of the run.
    """
    sheet, place = cell
    found = book[sheet][place]
    label = str(book[sheet].cell(found.row, 1).value)
    if sheet == "Alternatives":
        is_price = ": " in label and found.column == 3
        return label in PARTS | RUN_FIGURES or is_price or label.startswith("Against the recomm")
    heads = [
        book[sheet].cell(row, found.column).value
        for row in range(found.row, 0, -1)
        if book[sheet].cell(row, 1).value in ("Alternative", "Asset")
    ]
    if sheet == "Plan":
        # An asset without a figure of a kind (a line has no cost per kWh) has 0 there.
        is_absent = bool(heads) and str(heads[0]) in NO_SUCH_FIGURE and found.value == 0
        return bool(heads) and (heads[0] in FOUND_BY_RUN or is_absent)
    return sheet == "Reliability" and bool(heads) and isinstance(found.value, int | float)


@pytest.mark.parametrize("name", NAMES)
def test_every_figure_of_the_summary_leads_to_inputs(studies: dict[str, Study], name: str) -> None:
    path, twin = studies[name]
    book = openpyxl.load_workbook(path)
    titles = headings(book)
    assert len(titles) == 23
    n_formula = 0
    for plan in twin["alternatives"]:
        for title in titles:
            place = summary_cells(book, title, plan["name"])
            value = book["Summary"][place].value
            assert isinstance(value, str), (plan["name"], title)
            assert value.startswith("="), (plan["name"], title)
            ends = leaves(book, "Summary", place)
            assert ("Summary", place) not in ends
            for cell in ends:
                value = book[cell[0]][cell[1]].value
                # Words stand where there is nothing to divide by.
                is_word = value in ("no purchase", "none avoided", "-")
                assert is_word or is_input(book, cell), (title, cell, value)
            n_formula += 1
    assert n_formula == 23 * len(twin["alternatives"])


@pytest.mark.parametrize("name", NAMES)
def test_totals_lead_to_prices_rate_and_purchases(studies: dict[str, Study], name: str) -> None:
    path, twin = studies[name]
    book = openpyxl.load_workbook(path)
    title = next(t for t in headings(book) if t.startswith("Total ("))
    ends = leaves(book, "Summary", summary_cells(book, title, twin["recommended"]))
    assert ("Alternatives", "B4") in ends
    labels = {book[sheet].cell(book[sheet][cell].row, 1).value for sheet, cell in ends}
    assert labels >= PARTS
    bought = {p["asset"] for p in _plan(twin, twin["recommended"])["purchases"] if p["bought"]}
    assert bought
    for asset in bought:
        assert f"{asset}: life" in labels


# -- moved ----------------------------------------------------------------------------------------


def _plan(twin: dict[str, Any], name: str) -> dict[str, Any]:
    return next(a for a in twin["alternatives"] if a["name"] == name)


def study_rows(path: Path, sheet: str) -> dict[str, dict[str, Any]]:
    """Rows of the price list by asset: figure -> value."""
    found: dict[str, dict[str, Any]] = {}
    for row in openpyxl.load_workbook(path, data_only=True)[sheet].iter_rows(values_only=True):
        label = str(row[0] or "")
        if ": " in label and isinstance(row[2], int | float):
            asset, _, figure = label.rpartition(": ")
            found.setdefault(asset, {})[figure] = float(row[2])
    return found


def on_summary(book: Any, start: str, plan: str) -> float:
    title = next(t for t in headings(book) if t.startswith(start))
    return float(book["Summary"][summary_cells(book, title, plan)].value)


def net_capital(asset: dict[str, Any], prices: dict[str, float]) -> float:
    """Capital after grants of one purchase, by hand from the prices."""
    gross = prices.get("site cost", prices.get("cost", 0.0))
    gross += asset["kw"] * prices.get("capital per kW", 0.0)
    gross += asset["kwh"] * prices.get("capital per kWh", 0.0)
    return float(gross * (1.0 - prices.get("grant", 0.0)))


@pytest.mark.parametrize("name", NAMES)
def test_discount_rate_moves_the_summary(
    studies: dict[str, Study], recalculated: dict[str, tuple[Path, Any]], name: str
) -> None:
    """Total by sum of capital times CRF at the other rate; present value by the annuity factor."""
    path, twin = studies[name]
    _, before = recalculated[name]
    _, after = recalculated[f"{name} rated"]
    best = twin["recommended"]
    prices = study_rows(path, "Alternatives")
    rate = before["Alternatives"]["B4"].value
    moved = sum(
        net_capital(asset, prices[asset["asset"]])
        * (
            crf(prices[asset["asset"]]["life"], OTHER_RATE)
            - crf(prices[asset["asset"]]["life"], rate)
        )
        for asset in _plan(twin, best)["purchases"]
        if asset["bought"]
    )
    assert moved > 1.0
    total = on_summary(before, "Total (", best)
    assert total == pytest.approx(_plan(twin, best)["annual_cost"]["total"])
    assert on_summary(after, "Total (", best) == pytest.approx(total + moved)
    assert on_summary(after, "Utility's own", best) == pytest.approx(
        on_summary(before, "Utility's own", best) + moved
    )
    base = on_summary(before, "Total (", EXISTING)
    assert on_summary(after, "Total (", EXISTING) == pytest.approx(base)
    factor = sum((1.0 + OTHER_RATE) ** -year for year in range(1, 21))
    assert on_summary(after, "Present value", best) == pytest.approx(
        (total + moved - base) * factor
    )


@pytest.mark.parametrize("name", NAMES)
def test_the_price_of_an_asset_moves_the_summary(
    studies: dict[str, Study], recalculated: dict[str, tuple[Path, Any]], name: str
) -> None:
    """Capital, total and payback by kWh, grant and CRF."""
    path, twin = studies[name]
    _, before = recalculated[name]
    _, after = recalculated[f"{name} dear"]
    dearer, _, more = DEARER[name]
    prices = study_rows(path, "Alternatives")[dearer]
    rate = before["Alternatives"]["B4"].value
    best = twin["recommended"]
    bought = next(p for p in _plan(twin, best)["purchases"] if p["asset"] == dearer)
    assert bought["bought"]
    units = bought["kwh"] if bought["type"] == "storage" else 1.0
    assert units >= 1.0
    capital = more * units * (1.0 - prices.get("grant", 0.0))
    net, total = on_summary(before, "Capital after", best), on_summary(before, "Total (", best)
    assert on_summary(after, "Capital after", best) == pytest.approx(net + capital)
    yearly = capital * crf(prices["life"], rate)
    assert on_summary(after, "Total (", best) == pytest.approx(total + yearly)
    payback = on_summary(before, "Simple payback", best)
    assert on_summary(after, "Simple payback", best) == pytest.approx(
        payback * (net + capital) / net
    )


# -- looked at, and read --------------------------------------------------------------------------


@pytest.mark.parametrize("name", NAMES)
def test_pages_of_real_studies(studies: dict[str, Study], name: str) -> None:
    path, _ = studies[name]
    check_pages(path)
    check_charts(path)


@pytest.mark.parametrize("name", NAMES)
def test_every_reconciliation_has_its_line_and_none_fails(
    studies: dict[str, Study], name: str
) -> None:
    path, twin = studies[name]
    sheet = openpyxl.load_workbook(path, data_only=True)["Checks"]
    rows = [row for row in sheet.iter_rows(values_only=True) if row[8] in ("PASS", "LOOK", "FAIL")]
    assert not [row for row in rows if row[8] == "FAIL"]
    names = {str(row[1]) for row in rows}
    sums = ("bus", "customer class", "window", "dead section")
    assert {f"Energy not supplied by {word}" for word in sums} <= names
    assert {"Total of the Alternatives sheet", "Worth of planning for outages"} <= names
    if name == "villages":
        assert {"Sensitivities begin at the study as given", "Repair times as given"} <= names
        assert {"Budget curve never rises", "No measure does harm"} <= names
    of_plans = [row for row in rows if row[1] == "Sum of the ten cost parts"]
    assert [row[0] for row in of_plans] == [plan["name"] for plan in twin["alternatives"]]


def test_planning_for_outages_is_worth_nothing_where_there_are_none(
    studies: dict[str, Study],
) -> None:
    """Both plans shave the same peak; they cost the same within the gap, and Summary says so."""
    path, twin = studies["quiet"]
    blind, best = _plan(twin, IGNORING_OUTAGES), _plan(twin, LEAST_COST)
    assert best["capital_cost"] > 1000.0
    total = best["annual_cost"]["total"]
    gap = best["gap_pct"] / 100.0 * total
    assert gap <= 0.01 * total
    assert abs(blind["annual_cost"]["total"] - total) <= max(gap, 0.01)
    sheet = openpyxl.load_workbook(path, data_only=True)["Summary"]
    words = [str(c.value) for row in sheet.iter_rows() for c in row if c.value]
    assert [w for w in words if "Planning for outages is worth nothing here" in w]


def test_planning_for_outages_is_worth_something_where_there_are_some(
    studies: dict[str, Study],
) -> None:
    """The claim of nothing is not made where the plan that ignores outages is dearer."""
    path, twin = studies["villages"]
    assert twin["value_of_outage_planning"] > 1.0
    sheet = openpyxl.load_workbook(path, data_only=True)["Summary"]
    words = " ".join(str(c.value) for row in sheet.iter_rows() for c in row if c.value)
    assert "worth nothing here" not in words
    assert "against a plan that ignores them" in words
