"""The results workbook read back: formulas with values, sums, texts, charts, print setup."""

from __future__ import annotations

import dataclasses
import functools
import re
import zipfile
from pathlib import Path
from typing import Any

import openpyxl
import pytest

from xlplan.compare.pack_result import Pack
from xlplan.compare.study_result import StudyResult
from xlplan.report.json_twin import json_document
from xlplan.report.writer import write_results

from .made_up import made_up_ac, made_up_result

SHEETS = [
    "Summary",
    "Alternatives",
    "Plan",
    "Line hardening",
    "Repair time",
    "Budget",
    "Sensitivities",
    "Reliability",
    "Risk",
    "Operation",
    "Voltages",
    "Feeder",
    "Convergence",
    "Checks",
    "Assumptions",
    "Cautions",
]
PART_LABELS = {
    "Investment": "investment",
    "Fixed O&M of what is bought": "fixed_om",
    "Energy bought less energy sold": "energy",
    "Fuel and other running cost": "fuel",
    "Demand charge": "demand",
    "Repairs": "repair",
    "Surplus and tripping": "surplus",
    "Stored energy at the end of windows": "end_of_window",
    "Interruptions by outages": "interruption",
    "Load shed in normal service": "normal_shedding",
}


@functools.cache
def read(path: Path) -> tuple[Any, Any]:
    """Formulas, and values."""
    return openpyxl.load_workbook(path), openpyxl.load_workbook(path, data_only=True)


def statement(sheet: Any) -> dict[str, list[Any]]:
    """Rows of the Alternatives sheet by label."""
    return {row[0]: list(row[2:6]) for row in sheet.iter_rows(values_only=True) if row[0]}


def table(sheet: Any, heading: str) -> list[dict[str, Any]]:
    """The rows under the heading row that begins with ``heading``."""
    rows = list(sheet.iter_rows(values_only=True))
    start = next(i for i, row in enumerate(rows) if row[0] == heading)
    keys = rows[start]
    found = []
    for row in rows[start + 1 :]:
        if row[0] is None:
            break
        found.append({key: value for key, value in zip(keys, row, strict=True) if key})
    return found


def test_sheets_are_these_and_no_others(workbook_path: Path) -> None:
    formulas, _ = read(workbook_path)
    assert formulas.sheetnames == SHEETS
    assert all(sheet.sheet_state == "visible" for sheet in formulas)
    for sheet in formulas:
        assert sheet["A1"].value
        assert sheet["A2"].value
        assert sheet.print_area
        assert sheet.page_setup.paperSize
        # Fitted to the page's width, or a scale of its own with page breaks.
        properties = sheet.sheet_properties.pageSetUpPr
        is_fitted = properties is not None and bool(properties.fitToPage)
        assert is_fitted != bool(sheet.row_breaks.brk), sheet.title
        assert is_fitted == (sheet.page_setup.scale is None), sheet.title
        assert sheet.page_setup.orientation == "landscape"
        assert sheet.oddFooter.right.text
    # The format leaves out a height of one page; 0 is as many as it takes.
    assert formulas["Summary"].page_setup.fitToHeight in (None, 1)
    assert formulas["Plan"].page_setup.fitToHeight == 0
    broken = {sheet.title for sheet in formulas if sheet.row_breaks.brk}
    assert broken == {
        "Alternatives",
        "Sensitivities",
        "Reliability",
        "Risk",
        "Operation",
        "Voltages",
        "Feeder",
    }


def test_every_formula_has_a_value_and_none_is_an_error(workbook_path: Path) -> None:
    formulas, values = read(workbook_path)
    n_formula = 0
    for sheet in formulas:
        for row in sheet.iter_rows():
            for cell in row:
                value = values[sheet.title][cell.coordinate].value
                assert not (isinstance(value, str) and value.startswith("#")), cell.coordinate
                if cell.data_type == "f":
                    n_formula += 1
                    assert value is not None, f"{sheet.title}!{cell.coordinate}"
    assert n_formula > 500


def test_user_text_is_never_a_formula(workbook_path: Path) -> None:
    formulas, _ = read(workbook_path)
    seen = 0
    for sheet in formulas:
        for row in sheet.iter_rows():
            for cell in row:
                if isinstance(cell.value, str) and "1+1" in cell.value:
                    seen += 1
                    assert cell.data_type == "s", f"{sheet.title}!{cell.coordinate}"
                if cell.hyperlink is not None:
                    assert cell.hyperlink.location
                    assert not cell.hyperlink.target
    assert seen > 10
    with zipfile.ZipFile(workbook_path) as package:
        charts = [n for n in package.namelist() if n.startswith("xl/charts/chart")]
        for name in charts:
            found = re.findall(r"<c:f>(.*?)</c:f>", package.read(name).decode())
            assert found
            assert all("1+1" not in formula for formula in found)


def test_parts_totals_and_twin_agree(workbook_path: Path, result: StudyResult) -> None:
    _, values = read(workbook_path)
    rows = statement(values["Alternatives"])
    document = json_document(result)
    for i, alternative in enumerate(document["alternatives"]):
        cost = alternative["annual_cost"]
        for label, part in PART_LABELS.items():
            assert rows[label][i] == pytest.approx(cost[part], abs=0.005), label
        total = sum(rows[label][i] for label in PART_LABELS)
        assert rows["Total yearly cost"][i] == pytest.approx(total, abs=0.005)
        assert rows["Total yearly cost"][i] == pytest.approx(cost["total"], abs=0.005)
        customers = cost["interruption"] + cost["normal_shedding"]
        assert rows["Customers' outage cost"][i] == pytest.approx(customers, abs=0.005)
        assert rows["Utility's own cost"][i] == pytest.approx(cost["total"] - customers, abs=0.005)
        difference = alternative["against_existing"]["difference"]
        assert rows["Against the existing feeder"][i] == pytest.approx(difference, abs=0.005)
        assert rows["Capital after grants"][i] == pytest.approx(
            alternative["capital_cost"], abs=0.005
        )
    summary = table(values["Summary"], "Alternative")
    for row, alternative in zip(summary, document["alternatives"], strict=True):
        assert row["Alternative"] == alternative["name"]
        assert row["Total (crowns/year)"] == pytest.approx(alternative["annual_cost"]["total"])
        assert row["Outage hours per customer (h/year)"] == alternative["reliability"]["saidi_h"]


def test_worth_worked_out_by_hand(workbook_path: Path, result: StudyResult) -> None:
    _, values = read(workbook_path)
    rows = statement(values["Alternatives"])
    base, best = result.plans[0].costs, result.plans[2].costs
    # Present value of 20 yearly amounts at 4 %, summed one by one.
    factor = sum(1.04**-year for year in range(1, 21))
    assert rows["Present value of the total yearly cost"][2] == pytest.approx(best.total * factor)
    # Nothing is invested in the existing feeder, so the saving is its total less the running cost.
    saving = base.total - (best.total - best.investment)
    assert rows["Yearly saving before investment"][2] == pytest.approx(saving)
    capital = result.plans[2].capital_cost
    # 40000 + 420.5 * 310 + 1261.5 * 270 less 20 %; 25000 + 250 * 520; half of 88000.
    assert capital == pytest.approx(510_960.0 * 0.8 + 155_000.0 + 44_000.0)
    assert rows["Simple payback, customers included"][2] == pytest.approx(capital / saving)
    assert rows["Benefit-cost ratio"][2] == pytest.approx(saving / best.investment)
    assert rows["Simple payback, customers included"][0] == "no purchase"


def test_no_payback_in_words(tmp_path: Path) -> None:
    dear = made_up_result()
    costs = dataclasses.replace(dear.plans[3].costs, energy=2e6)
    plans = (*dear.plans[:3], dataclasses.replace(dear.plans[3], costs=costs))
    path = write_results(
        dataclasses.replace(dear, plans=plans), tmp_path / "o.xlsx", False, tmp_path / "s.xlsx"
    )
    _, values = read(path)
    assert statement(values["Alternatives"])["Simple payback, customers included"][3] == (
        "no payback"
    )


def test_plan_sheet(workbook_path: Path) -> None:
    _, values = read(workbook_path)
    plan = values["Plan"]
    totals = table(plan, "Alternative")
    best = totals[2]
    assert best["Storage power (kW)"] == 420.5
    assert best["Storage energy (kWh)"] == 1261.5
    assert best["Generation (kW)"] == 250.0
    assert best["Hardening measures (number)"] == 1
    assert totals[3]["Device changes: capital (crowns)"] == pytest.approx(18_000.0)
    assert totals[0]["Capital after grants (crowns)"] == 0
    factors = {
        row["Asset"]: row["Capital recovery factor (per year)"] for row in table(plan, "Asset")
    }
    # Tables of compound interest at 4 %: 0.08994 for 15 years, 0.07358 for 20.
    assert factors["BAT-NORTH"] == pytest.approx(0.08994, abs=5e-6)
    assert factors["GEN-B09"] == pytest.approx(0.07358, abs=5e-6)


def test_checks_pass_and_fail(workbook_path: Path, tmp_path: Path, result: StudyResult) -> None:
    _, values = read(workbook_path)
    rows = table(values["Checks"], "About")
    assert {row["Result"] for row in rows} == {"PASS"}
    assert len(rows) > 25
    assert values["Checks"]["B4"].value == "PASS: all checks agree"
    # A bus whose unserved energy is wrong, and history beyond its tolerance.
    best = result.plans[2]
    bus = dataclasses.replace(best.buses[0], eens_kwh=best.buses[0].eens_kwh + 5.0)
    spoilt = dataclasses.replace(best, buses=(bus, *best.buses[1:]))
    history = dataclasses.replace(result.checks[0], left=9.0)
    changed = dataclasses.replace(
        result, plans=(*result.plans[:2], spoilt, result.plans[3]), checks=(history,)
    )
    _, values = read(write_results(changed, tmp_path / "o.xlsx", False, tmp_path / "s.xlsx"))
    outcome = {
        (row["About"], row["Check"]): row["Result"] for row in table(values["Checks"], "About")
    }
    assert outcome["Least-cost plan", "Energy not supplied by bus"] == "FAIL"
    assert outcome["Study", "SAIFI"] == "LOOK"
    assert values["Checks"]["B4"].value.startswith("FAIL")
    assert "STOP: too far from the records" in [
        c.value for row in values["Reliability"] for c in row
    ]
    shown = [cell.value for row in values["Summary"] for cell in row]
    assert "FAIL: some checks do not agree" in shown
    # A yearly cost that does not follow from the prices, in the asset and in the total alike.
    asset = dataclasses.replace(best.purchases[0], investment=best.purchases[0].investment + 50.0)
    costs = dataclasses.replace(best.costs, investment=best.costs.investment + 50.0)
    wrong = dataclasses.replace(best, purchases=(asset, *best.purchases[1:]), costs=costs)
    spoilt_result = dataclasses.replace(result, plans=(*result.plans[:2], wrong, result.plans[3]))
    _, values = read(write_results(spoilt_result, tmp_path / "w.xlsx", False, tmp_path / "s.xlsx"))
    outcome = {
        (row["About"], row["Check"]): row["Result"] for row in table(values["Checks"], "About")
    }
    assert outcome["Least-cost plan", "Total of the Alternatives sheet"] == "FAIL"
    assert outcome["Least-cost plan", "Capital after grants"] == "PASS"
    # A total outside its own interval.
    off = dataclasses.replace(best, cost_interval=(best.costs.total + 1e4, best.costs.total + 2e4))
    outside = dataclasses.replace(result, plans=(*result.plans[:2], off, result.plans[3]))
    _, values = read(write_results(outside, tmp_path / "i.xlsx", False, tmp_path / "s.xlsx"))
    rows = table(values["Checks"], "About")
    assert [(r["About"], r["Check"]) for r in rows if r["Result"] == "FAIL"] == [
        ("Least-cost plan", "Total lies in its 95 % interval")
    ]
    nan = dataclasses.replace(result, checks=(dataclasses.replace(history, left=float("nan")),))
    _, values = read(write_results(nan, tmp_path / "n.xlsx", False, tmp_path / "s.xlsx"))
    row = table(values["Checks"], "About")[0]
    assert row["First figure"] == "not computed"
    assert row["Result"] == "LOOK"


def test_sections_add_up(workbook_path: Path, result: StudyResult) -> None:
    _, values = read(workbook_path)
    rows = table(values["Reliability"], "Dead section")
    total = sum(row["Energy not supplied, plan (kWh/year)"] for row in rows)
    assert total == pytest.approx(result.plans[2].indices.eens_kwh)
    assert [row["Dead section"] for row in rows] == ["(nothing dead)", "Z0", "Z1", "Z2", "Z3"]


def test_voltages_sheet(workbook_path: Path, result: StudyResult) -> None:
    _, values = read(workbook_path)
    sheet = values["Voltages"]
    rows = list(sheet.iter_rows(values_only=True))
    starts = {row[:3]: i for i, row in enumerate(rows) if row[0] == "Alternative"}
    # Buses outside Range A and buses of all alternatives begin alike; the latter come last.
    assert len(starts) == 4

    def block(*heading: str) -> list[dict[str, Any]]:
        start = starts[("Alternative", *heading)]
        found = []
        for row in rows[start + 1 :]:
            if row[0] not in {plan.name for plan in result.plans}:
                break
            found.append(dict(zip(rows[start], row, strict=True)))
        return found

    verdicts = block("AC power flow", "What was found")
    assert {row["Alternative"]: row["AC power flow"] for row in verdicts} == {
        plan.name: "PASS" for plan in result.plans
    }
    losses = {(row["Alternative"], row["Stretch"]): row for row in block("Operation", "Stretch")}
    # 300 ordinary days and 60 peak days: 300 * 700 + 60 * 1200 of 300 * 30,000 + 60 * 40,000.
    year = losses["Least-cost plan", "A year, as if nothing failed"]
    assert year["AC losses (kWh)"] == pytest.approx(282_000.0)
    assert year["AC losses (share of load)"] == pytest.approx(282_000.0 / 11_400_000.0)
    assert year["Cost beyond the allowance (crowns)"] == pytest.approx(300 * 9.0 + 60 * 36.0)
    assert year["Losses against the allowance"] == "0.47 % of load not covered"
    head = next(h for h in starts if h[2] == "Bus" and "Lowest, linear (p.u.)" in rows[starts[h]])
    by_bus = [
        dict(zip(rows[starts[head]], row, strict=True))
        for row in rows[starts[head] + 1 :]
        if row[2] in ("=1+1 bus", "B04")
    ]
    first = next(row for row in by_bus if row["Bus"] == "=1+1 bus")
    assert first["Alternative"] == "Least-cost plan"
    assert first["Lowest, AC (p.u.)"] == pytest.approx(0.981)
    assert first["AC less linear (p.u.)"] == pytest.approx(-0.002)
    assert first["Within the limits"] == "PASS"
    assert first["ANSI C84.1 Range A"] == "inside"
    dead = next(r for r in by_bus if r["Bus"] == "B04" and r["Operation"] == "outage events")
    assert dead["Lowest, AC (p.u.)"] in ("", None)
    assert dead["When lowest"] == "without supply throughout"


def test_a_plan_that_breaks_limits_is_not_called_fine(tmp_path: Path) -> None:
    """Summary, Voltages and the twin say it; every bus outside Range A is named."""
    full = made_up_result()
    check = made_up_ac(0.93)
    plans = tuple(
        dataclasses.replace(plan, ac=check) if plan.name == "Least-cost plan" else plan
        for plan in full.plans
    )
    result = dataclasses.replace(full, plans=plans)
    _, values = read(write_results(result, tmp_path / "o.xlsx", False, tmp_path / "s.xlsx"))
    shown = " ".join(str(c.value) for row in values["Summary"] for c in row if c.value)
    assert "LOOK: in an AC power flow 4 buses leave the voltage limits" in shown
    assert "a margin of 0.0030 p.u. would have covered it" in shown
    rows = list(values["Voltages"].iter_rows(values_only=True))
    assert any(row[:3] == ("Least-cost plan", "LOOK", "voltages in normal service") for row in rows)
    start = next(i for i, row in enumerate(rows) if row[5] == "Range A (p.u.)")
    listed = set()
    for row in rows[start + 1 :]:
        if row[0] != "Least-cost plan":
            break
        listed.add((row[1], row[2]))
    expected = {
        ("outage events" if b.is_event else "normal service", b.bus)
        for b in check.buses
        if b.low_ac_pu < 0.95
    }
    assert listed == expected
    assert len(listed) == 8
    marked = {row[2] for row in rows if row[13] == "inside; outside above 600 V"}
    assert marked == {b.bus for b in check.buses if 0.95 <= b.low_ac_pu < 0.975}
    twin = [row for row in json_document(result)["voltages"] if not row["within_limits"]]
    assert {row["alternative"] for row in twin} == {"Least-cost plan"}
    assert len(twin) == 4


def test_bare_study_can_be_written(tmp_path: Path) -> None:
    """No assets, traces, history, classes, findings: sheets stay whole, nothing is invented."""
    full = made_up_result()
    bare = dataclasses.replace(
        full.plans[0],
        purchases=(),
        traces=(),
        classes=(),
        causes=(),
        convergence=(),
        checks=(),
        ac=None,
    )
    best = dataclasses.replace(bare, name="Least-cost plan")
    result = dataclasses.replace(
        full, plans=(bare, bare, best), checks=(), findings=(), inputs=(), started_at="today"
    )
    result = dataclasses.replace(result, pack=Pack(), feeder=None)
    _, values = read(write_results(result, tmp_path / "o.xlsx", False, tmp_path / "s.xlsx"))
    assert values.sheetnames == SHEETS
    assert values["Operation"]["A4"].value == "The run kept no trace of operation."
    assert values["Voltages"]["A4"].value == "LOOK: no plan was checked by an AC power flow."
    for name in ("Line hardening", "Repair time", "Budget", "Sensitivities"):
        assert "--plan-only" in values[name]["A4"].value


def test_recommended_may_be_the_existing_feeder(tmp_path: Path) -> None:
    full = made_up_result()
    result = dataclasses.replace(full, recommended="Existing feeder")
    _, values = read(write_results(result, tmp_path / "o.xlsx", False, tmp_path / "s.xlsx"))
    assert "buys nothing" in values["Summary"]["A1"].value
    assert len(table(values["Reliability"], "Dead section")) == 5


def test_many_causes_and_sources_are_gathered(tmp_path: Path) -> None:
    full = made_up_result()
    best = full.plans[2]
    causes = tuple(
        dataclasses.replace(best.causes[0], eens_kwh=float(i), causes=f"line {i}")
        for i in range(450)
    )
    trace = best.traces[0]
    extra = {f"Unit {i}": trace.load_kw * 0.001 * (i + 1) for i in range(8)}
    crowded = dataclasses.replace(trace, sources={**trace.sources, **extra})
    plan = dataclasses.replace(best, causes=causes, traces=(crowded,))
    result = dataclasses.replace(full, plans=(*full.plans[:2], plan, full.plans[3]))
    _, values = read(write_results(result, tmp_path / "o.xlsx", False, tmp_path / "s.xlsx"))
    rows = table(values["Reliability"], "Dead section")
    section = next(row for row in rows if row["Dead section"] == "Z0")
    assert section["Energy not supplied, plan (kWh/year)"] == pytest.approx(449 * 450 / 2)
    head = next(row for row in values["Operation"].iter_rows(values_only=True) if row[0] == "Time")
    assert "Other sources (kW)" in head
    first = table(values["Operation"], "Time")[10]
    other = [
        k for k in first if k.endswith("(kW)") and head.index(k) > head.index("Other sources (kW)")
    ]
    assert first["Other sources (kW)"] == pytest.approx(sum(first[k] for k in other))


def test_sections_far_from_the_index_are_for_the_reader_to_judge(tmp_path: Path) -> None:
    full = made_up_result()
    best = full.plans[2]
    causes = tuple(dataclasses.replace(c, eens_kwh=1.05 * c.eens_kwh) for c in best.causes)
    plan = dataclasses.replace(best, causes=causes)
    result = dataclasses.replace(full, plans=(*full.plans[:2], plan, full.plans[3]))
    _, values = read(write_results(result, tmp_path / "o.xlsx", False, tmp_path / "s.xlsx"))
    rows = [
        row
        for row in table(values["Checks"], "About")
        if row["Check"] == "Energy not supplied by dead section"
    ]
    found = {row["About"]: row["Result"] for row in rows}
    assert found == {"Existing feeder": "PASS", "Least-cost plan": "LOOK"}
