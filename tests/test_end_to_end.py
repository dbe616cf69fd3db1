"""The command from workbook to results: files read back, exit statuses, closed forms."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import openpyxl
import pytest

from xlplan.base.names import EXISTING, IGNORING_OUTAGES, LEAST_COST
from xlplan.cli import main
from xlplan.workbook.template import write_study_workbook, write_template

ROOT = Path(__file__).resolve().parent.parent

PARTS = (
    "investment",
    "fixed_om",
    "energy",
    "fuel",
    "demand",
    "repair",
    "interruption",
    "normal_shedding",
    "surplus",
    "end_of_window",
)

TOP_KEYS = {
    "schema",
    "study",
    "status",
    "method",
    "seed",
    "fingerprint",
    "recommended",
    "alternatives",
    "method_reason",
    "hardening",
    "repair_time",
    "budget",
    "sensitivities",
    "voltages",
    "value_of_outage_planning",
    "scenarios",
    "findings",
    "seconds",
}

PLAN_KEYS = {
    "name",
    "kind",
    "annual_cost",
    "capital_cost",
    "lower_bound",
    "cost_interval",
    "gap_pct",
    "purchases",
    "reliability",
    "windows",
    "buses",
    "classes",
    "bound_upper",
    "risk",
    "against_existing",
}


def settings(**changes: object) -> dict[str, object]:
    return {
        "study_name": "Two villages",
        "currency": "EUR",
        "source_bus": "S",
        "base_kv": 10,
        "substation_limit_kva": 5000,
        "period_minutes": 60,
        "real_discount_rate_pct": 5,
        "energy_price_per_kwh": 0.1,
        "demand_charge_per_kw_year": 30,
        "random_seed": 7,
        **changes,
    }


def tables(hours: int = 8, **changes: object) -> dict[str, list[dict[str, object]]]:
    """One line to A, a switch, on to B; a battery and covered wire can be bought."""
    plain: dict[str, list[dict[str, object]]] = {
        "Buses": [{"bus": "S"}, {"bus": "A"}, {"bus": "B"}],
        "Loads": [
            {
                "load": name,
                "bus": bus,
                "customer_class": "homes",
                "peak_kw": kw,
                "power_factor": 1,
                "customers": customers,
            }
            for name, bus, kw, customers in (("LA", "A", 200, 80), ("LB", "B", 100, 20))
        ],
        "Lines": [
            {
                "line": "L1",
                "from_bus": "S",
                "to_bus": "A",
                "r_ohm": 0.2,
                "x_ohm": 0.2,
                "from_device": "breaker",
                "outage_class": "overhead",
            },
            {
                "line": "L2",
                "from_bus": "A",
                "to_bus": "B",
                "r_ohm": 0.2,
                "x_ohm": 0.2,
                "from_device": "switch",
                "outage_class": "overhead",
            },
        ],
        "Storage": [
            {
                "storage": "battery",
                "bus": "B",
                "max_new_kw": 150,
                "max_new_kwh": 600,
                "capital_cost_per_kw": 100,
                "capital_cost_per_kwh": 60,
                "life_years": 15,
                "grid_forming": "yes",
            }
        ],
        "Outage assumptions": [
            {
                "outage_class": "overhead",
                "failures_per_year": 3,
                "repair_hours": 3,
                "switching_minutes": 60,
                "repair_cost_per_failure": 500,
            }
        ],
        "Hardening": [
            {
                "measure": "covered wire",
                "lines": "L1",
                "capital_cost": 20000,
                "life_years": 30,
                "failures_avoided_pct": 60,
            }
        ],
        "Customer classes": [
            {
                "customer_class": "homes",
                "critical": "no",
                "cost_0h_per_kw": 2,
                "cost_1h_per_kw": 12,
                "cost_4h_per_kw": 42,
                "cost_8h_per_kw": 80,
                "cost_after_8h_per_kwh": 9,
            }
        ],
        "Profiles": [{"time": h} for h in range(hours)],
        "Windows": [
            {
                "window": "stretch",
                "occurrences_per_year": 8760 / hours,
                "starts_at": 0,
                "hours": hours,
            }
        ],
    }
    return {**plain, **changes}  # type: ignore[dict-item]


def write_study(path: Path, hours: int = 8, sheets: Any = None, **setting: object) -> Path:
    write_study_workbook(path, tables(hours, **(sheets or {})), settings(**setting))
    return path


def solve(study: Path, *words: str) -> tuple[int, dict[str, Any]]:
    twin = study.with_suffix(".json")
    status = main(["solve", str(study), "--json", str(twin), "--quiet", "--plan-only", *words])
    return status, json.loads(twin.read_text(encoding="utf-8"))


def plan_of(twin: dict[str, Any], name: str) -> dict[str, Any]:
    return next(a for a in twin["alternatives"] if a["name"] == name)


@pytest.fixture(scope="module")
def answer(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, Any]]:
    """Results workbook and twin of the two villages, decomposed."""
    study = write_study(tmp_path_factory.mktemp("answer") / "study.xlsx")
    before = hashlib.sha256(study.read_bytes()).hexdigest()
    status, twin = solve(study, "--method", "decomposed")
    assert status == 0
    assert hashlib.sha256(study.read_bytes()).hexdigest() == before
    assert twin["fingerprint"] == f"sha256:{before}"
    return study.with_name("study-results.xlsx"), twin


# -- what comes out ----------------------------------------------------------------------------


def test_twin_has_the_agreed_keys(answer):
    _, twin = answer
    assert set(twin) == TOP_KEYS
    assert twin["schema"] == 1
    assert [a["name"] for a in twin["alternatives"]] == [EXISTING, IGNORING_OUTAGES, LEAST_COST]
    for plan in twin["alternatives"]:
        assert set(plan) == PLAN_KEYS
        assert set(plan["annual_cost"]) == {"total", *PARTS}
        assert set(plan["reliability"]) == {
            "eens_kwh_per_year",
            "saifi",
            "maifi",
            "saidi_h",
            "caidi_h",
            "asai",
        }
        assert set(plan["risk"]) == {"mean", "p50", "p95", "cvar95"}
        assert {b["bus"] for b in plan["buses"]} == {"A", "B"}
        assert {p["asset"] for p in plan["purchases"]} == {"battery", "covered wire"}
    assert set(twin["seconds"]) == {"read", "solve", "write"}


def test_totals_are_sums_and_lie_in_their_interval(answer):
    _, twin = answer
    for plan in twin["alternatives"]:
        cost = plan["annual_cost"]
        assert cost["total"] == pytest.approx(sum(cost[p] for p in PARTS), abs=0.01)
        low, high = plan["cost_interval"]
        assert low - 0.01 <= cost["total"] <= high + 0.01
        eens = plan["reliability"]["eens_kwh_per_year"]
        assert eens == pytest.approx(sum(b["eens_kwh_per_year"] for b in plan["buses"]), rel=1e-9)
        assert eens == pytest.approx(sum(c["eens_kwh_per_year"] for c in plan["classes"]), rel=1e-9)
        if plan["lower_bound"] is not None:
            gap = 100.0 * max(0.0, high - plan["lower_bound"]) / abs(cost["total"])
            assert plan["gap_pct"] == pytest.approx(gap, abs=1e-6)
    totals = {a["name"]: a["annual_cost"]["total"] for a in twin["alternatives"]}
    value = totals[IGNORING_OUTAGES] - totals[LEAST_COST]
    assert twin["value_of_outage_planning"] == pytest.approx(value, abs=0.01)


def row_of(sheet: Any, *labels: str) -> dict[str, Any]:
    """The first row that begins with these labels, by the nearest heading row above it.

    A heading row has text in at least four cells and no number.
    """
    heading: list[Any] = []
    for row in sheet.iter_rows(values_only=True):
        texts = [cell for cell in row if isinstance(cell, str)]
        if row[: len(labels)] == labels and heading:
            return dict(zip(heading, row, strict=True))
        if len(texts) >= 4 and not any(isinstance(cell, int | float) for cell in row):
            heading = list(row)
    raise AssertionError(f"no row {labels} on {sheet.title}")


STATEMENT = {
    "investment": "Investment",
    "fixed_om": "Fixed O&M of what is bought",
    "energy": "Energy bought less energy sold",
    "fuel": "Fuel and other running cost",
    "demand": "Demand charge",
    "repair": "Repairs",
    "interruption": "Interruptions by outages",
    "normal_shedding": "Load shed in normal service",
    "surplus": "Surplus and tripping",
    "end_of_window": "Stored energy at the end of windows",
    "total": "Total yearly cost",
}


def close(number: float) -> Any:
    return pytest.approx(number, rel=1e-9, abs=1e-6)


def test_every_formula_has_its_value(answer):
    path, _ = answer
    values = openpyxl.load_workbook(path, data_only=True)
    formulas = openpyxl.load_workbook(path)
    n_formula = 0
    for sheet in formulas:
        for row in sheet.iter_rows():
            for cell in row:
                if cell.data_type == "f":
                    n_formula += 1
                    stored = values[sheet.title][cell.coordinate].value
                    assert stored is not None, f"{sheet.title}!{cell.coordinate}"
                    assert not str(stored).startswith("#"), f"{sheet.title}!{cell.coordinate}"
    assert n_formula > 100


def test_workbook_holds_the_numbers_of_the_twin(answer):
    path, twin = answer
    book = openpyxl.load_workbook(path, data_only=True)
    for plan in twin["alternatives"]:
        name = plan["name"]
        for part, label in STATEMENT.items():
            row = row_of(book["Alternatives"], label)
            assert row[name] == close(plan["annual_cost"][part]), (name, part)
        low, high = plan["cost_interval"]
        figures = {
            "95 % interval of the total: low": low,
            "95 % interval of the total: high": high,
            "Against the existing feeder": plan["against_existing"]["difference"],
            "Capital after grants": plan["capital_cost"],
        }
        if plan["lower_bound"] is not None:
            figures["Lower bound"] = plan["lower_bound"]
            figures["Gap"] = plan["gap_pct"] / 100.0
        for label, number in figures.items():
            assert row_of(book["Alternatives"], label)[name] == close(number), (name, label)
        summary = row_of(book["Summary"], name)
        assert summary["Total (EUR/year)"] == close(plan["annual_cost"]["total"])
        assert summary["Capital after grants (EUR)"] == close(plan["capital_cost"])
        index = plan["reliability"]
        assert summary["Outage hours per customer (h/year)"] == close(index["saidi_h"])
        assert summary["Energy not supplied (kWh/year)"] == close(index["eens_kwh_per_year"])
        for purchase in plan["purchases"]:
            if purchase["bought"]:
                row = row_of(book["Plan"], name, purchase["asset"])
                assert row["Power bought (kW)"] == close(purchase["kw"])
                assert row["Energy bought (kWh)"] == close(purchase["kwh"])
        totals = row_of(book["Plan"], name)
        storage = [p for p in plan["purchases"] if p["type"] == "storage"]
        assert totals["Storage energy (kWh)"] == close(sum(p["kwh"] for p in storage))


def test_voltages_of_the_workbook_are_those_of_the_twin(answer):
    path, twin = answer
    sheet = openpyxl.load_workbook(path, data_only=True)["Voltages"]
    rows = [list(row) for row in sheet.iter_rows(values_only=True)]
    head = next(row for row in rows if "Lowest, AC (p.u.)" in row)
    found = {}
    for row in rows[rows.index(head) + 1 :]:
        if row[head.index("Within the limits")] is None and row[head.index("Bus")] is None:
            break
        record = dict(zip(head, row, strict=True))
        found[record["Alternative"], record["Operation"], record["Bus"]] = record
    plans = [EXISTING, IGNORING_OUTAGES, LEAST_COST]
    keys = {(v["alternative"], v["operation"], v["bus"]) for v in twin["voltages"]}
    assert {key[0] for key in keys} == set(plans)
    assert {key[2] for key in keys} == {"S", "A", "B"}
    assert set(found) == keys
    for voltage in twin["voltages"]:
        row = found[voltage["alternative"], voltage["operation"], voltage["bus"]]
        if voltage["lowest_ac_pu"] is None:
            assert voltage["periods"] == 0
            assert row["When lowest"] == "without supply throughout"
            continue
        assert row["Lowest, linear (p.u.)"] == close(voltage["lowest_linear_pu"])
        assert row["Lowest, AC (p.u.)"] == close(voltage["lowest_ac_pu"])
        assert row["Highest, AC (p.u.)"] == close(voltage["highest_ac_pu"])
        # Without a loss allowance linear voltages of a fed part are never below the AC ones.
        assert voltage["lowest_linear_pu"] >= voltage["lowest_ac_pu"] - 1e-9
        assert voltage["periods_not_converged"] == 0


@pytest.mark.skipif(shutil.which("soffice") is None, reason="LibreOffice is not installed")
def test_a_spreadsheet_program_finds_every_stored_value_again(answer, tmp_path):
    """With recalculation forced; tests/report proves that a wrong value would be seen."""
    path, _ = answer
    user = tmp_path / "profile" / "user"
    user.mkdir(parents=True)
    (user / "registrymodifications.xcu").write_text(PROFILE, encoding="utf-8")
    command = [
        "soffice",
        f"-env:UserInstallation={(tmp_path / 'profile').as_uri()}",
        "--headless",
        "--convert-to",
        "xlsx",
        "--outdir",
        str(tmp_path / "out"),
        str(path),
    ]
    subprocess.run(command, check=True, capture_output=True, timeout=300)
    again = openpyxl.load_workbook(tmp_path / "out" / path.name, data_only=True)
    stored = openpyxl.load_workbook(path, data_only=True)
    n_compared = 0
    for sheet in openpyxl.load_workbook(path):
        for row in sheet.iter_rows():
            for cell in row:
                if cell.data_type != "f":
                    continue
                old = stored[sheet.title][cell.coordinate].value
                new = again[sheet.title][cell.coordinate].value
                place = f"{sheet.title}!{cell.coordinate} {cell.value}"
                assert (old == close(new)) if isinstance(new, int | float) else old == new, place
                n_compared += 1
    assert n_compared > 100


PROFILE = """<?xml version="1.0" encoding="UTF-8"?>
<oor:items xmlns:oor="http://openoffice.org/2001/registry"
 xmlns:xs="http://www.w3.org/2001/XMLSchema" xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance">
<item oor:path="/org.openoffice.Office.Calc/Formula/Load">
<prop oor:name="OOXMLRecalcMode" oor:op="fuse"><value>0</value></prop></item>
</oor:items>
"""


def test_checks_all_pass(answer):
    path, _ = answer
    sheet = openpyxl.load_workbook(path, data_only=True)["Checks"]
    verdicts = [[c.value for c in row][-1] for row in sheet.iter_rows()]
    assert verdicts.count("PASS") > 10
    assert "FAIL" not in verdicts


def test_both_methods_agree(answer):
    path, _twin = answer
    study = path.with_name("small.xlsx")
    write_study(study, hours=4)
    status, tree = solve(study, "--method", "tree")
    assert status == 0
    status, cut = solve(study, "--method", "decomposed", "--gap", "0.001")
    assert status == 0
    assert (tree["method"], cut["method"]) == ("tree", "decomposed")
    for name in (EXISTING, LEAST_COST):
        one, other = plan_of(tree, name), plan_of(cut, name)
        total = one["annual_cost"]["total"]
        assert other["annual_cost"]["total"] == pytest.approx(total, rel=1e-4)
    one, other = plan_of(tree, EXISTING), plan_of(cut, EXISTING)
    for key, value in one["reliability"].items():
        assert other["reliability"][key] == pytest.approx(value, rel=1e-6, abs=1e-12)


def test_same_seed_same_numbers(answer, tmp_path):
    _, twin = answer
    study = write_study(tmp_path / "study.xlsx")
    _, again = solve(study, "--method", "decomposed")
    for document in (twin, again):
        document.pop("seconds", None)
        document.pop("fingerprint", None)
    assert again == twin


# -- closed forms ------------------------------------------------------------------------------


@pytest.mark.parametrize("repair_h", [2, 4])
def test_one_radial_load(tmp_path, repair_h):
    """EENS = lambda r L, SAIFI = lambda, SAIDI = lambda r (half a percent: one thing at a time)."""
    lines = [
        {
            "line": "L1",
            "from_bus": "S",
            "to_bus": "A",
            "r_ohm": 0.1,
            "x_ohm": 0.1,
            "from_device": "breaker",
            "outage_class": "overhead",
        }
    ]
    sheets = {
        "Buses": [{"bus": "S"}, {"bus": "A"}],
        "Lines": lines,
        "Loads": [tables()["Loads"][0]],
        "Storage": [],
        "Hardening": [],
        "Outage assumptions": [
            {
                "outage_class": "overhead",
                "failures_per_year": 0.5,
                "repair_hours": repair_h,
                "switching_minutes": 60,
            }
        ],
    }
    study = write_study(tmp_path / "study.xlsx", 24, sheets)
    status, twin = solve(study)
    assert status == 0
    index = plan_of(twin, EXISTING)["reliability"]
    assert index["saifi"] == pytest.approx(0.5, rel=0.005)
    assert index["saidi_h"] == pytest.approx(0.5 * repair_h, rel=0.005)
    assert index["eens_kwh_per_year"] == pytest.approx(0.5 * repair_h * 200.0, rel=0.005)


def test_nothing_fails_and_nothing_to_buy(tmp_path):
    sheets: dict[str, Any] = {"Outage assumptions": [], "Storage": [], "Hardening": []}
    lines = [{**line, "outage_class": None} for line in tables()["Lines"]]
    study = write_study(tmp_path / "study.xlsx", 6, {**sheets, "Lines": lines})
    status, twin = solve(study)
    assert status == 0
    energy = 300.0 * 8760.0 * 0.1
    demand = 300.0 * 30.0
    for plan in twin["alternatives"]:
        assert plan["annual_cost"]["total"] == pytest.approx(energy + demand, rel=1e-6)
        assert plan["reliability"]["saifi"] == 0.0


# -- exit statuses and files -------------------------------------------------------------------


def test_faults_are_listed_with_their_cells(tmp_path, capsys):
    study = tmp_path / "study.xlsx"
    loads = [{**load, "peak_kw": -5} for load in tables()["Loads"]]
    write_study(study, 4, {"Loads": loads})
    assert main(["check", str(study)]) == 2
    printed = capsys.readouterr().out
    assert "Loads!" in printed
    assert "-5" in printed
    assert main(["solve", str(study)]) == 2
    assert not (tmp_path / "study-results.xlsx").exists()


def test_no_workbook_at_all(tmp_path, capsys):
    text = tmp_path / "text.xlsx"
    text.write_text("not a workbook", encoding="utf-8")
    assert main(["solve", str(text)]) == 2
    assert main(["solve", str(tmp_path / "absent.xlsx")]) == 1
    lines = capsys.readouterr().err.strip().splitlines()
    assert len(lines) == 2
    assert all(line.startswith("xlplan: ") for line in lines)


def test_nowhere_to_write(tmp_path):
    study = write_study(tmp_path / "study.xlsx", 4)
    before = study.read_bytes()
    assert main(["solve", str(study), "-o", str(tmp_path / "no" / "folder.xlsx")]) == 1
    assert main(["solve", str(study), "-o", str(study)]) == 1
    assert main(["solve", str(study), "--json", str(study)]) == 1
    assert study.read_bytes() == before


@pytest.mark.parametrize("words", [("solve", "--log"), ("solve", "--json"), ("solve", "-o"),
                                   ("check", "--json")])  # fmt: skip
@pytest.mark.parametrize("link", [None, os.symlink, os.link])
def test_the_study_is_never_written_to(tmp_path, words, link):
    study = write_study(tmp_path / "study.xlsx", 4)
    before = study.read_bytes()
    target = study
    if link is not None:
        target = tmp_path / "other name.xlsx"
        link(study, target)
    command, option = words
    assert main([command, str(study), option, str(target)]) == 1
    assert study.read_bytes() == before


def test_two_files_under_one_name(tmp_path, capsys):
    study = write_study(tmp_path / "study.xlsx", 4)
    both = tmp_path / "both.xlsx"
    assert main(["solve", str(study), "-o", str(both), "--json", str(both)]) == 1
    assert "two different files" in capsys.readouterr().err
    assert not both.exists()


@pytest.mark.parametrize("words", [("solve", "--json"), ("solve", "--log"), ("check", "--json")])
def test_a_workbook_is_never_replaced_by_a_text(tmp_path, capsys, words):
    study = write_study(tmp_path / "study.xlsx", 4)
    other = tmp_path / "other.xlsx"
    shutil.copy(study, other)
    before = other.read_bytes()
    command, option = words
    assert main([command, str(study), option, str(other)]) == 1
    assert "other.xlsx" in capsys.readouterr().err
    assert other.read_bytes() == before
    assert sorted(p.name for p in tmp_path.iterdir()) == ["other.xlsx", "study.xlsx"]


def test_results_are_named_as_a_workbook(tmp_path, capsys):
    """A workbook under another ending does not open."""
    study = write_study(tmp_path / "study.xlsx", 4)
    assert main(["solve", str(study), "-o", str(tmp_path / "results.txt")]) == 1
    assert "should end in .xlsx" in capsys.readouterr().err
    assert list(tmp_path.iterdir()) == [study]


@pytest.mark.parametrize(
    ("option", "typed", "said"),
    [
        ("--gap", "abc", "'abc' is not a number"),
        ("--time-limit", "-1", "-1 is not above 0"),
        ("--memory", "inf", "inf is without limit"),
        ("--gap", "nan", "nan is not above 0"),
        ("--workers", "1.5", "'1.5' is not a whole number"),
        ("--seed", "x", "'x' is not a whole number"),
    ],
)
def test_wrong_numbers_are_told_in_plain_words(capsys, option, typed, said):
    with pytest.raises(SystemExit) as stopped:
        main(["solve", "study.xlsx", option, typed])
    assert stopped.value.code == 1
    told = capsys.readouterr().err
    assert f"argument {option}: {said}" in told
    assert "_" not in told


def test_a_fault_of_our_own_is_one_plain_line_and_the_rest_in_the_log(tmp_path):
    """In a process of its own: what the terminal shows is more than what is printed."""
    study = write_study(tmp_path / "study.xlsx", 4)
    program = (
        "import sys; import xlplan.cli as cli; cli.solve_study = None; "
        "sys.exit(cli.main(sys.argv[1:]))"
    )
    log = tmp_path / "run.log"
    for more in ((), ("--log", str(log))):
        run = subprocess.run(
            [sys.executable, "-c", program, "solve", str(study), *more],
            capture_output=True,
            text=True,
            cwd=ROOT,
            check=False,
        )
        assert run.returncode == 1
        lines = run.stderr.strip().splitlines()
        assert len(lines) == 1
        assert lines[0].startswith("xlplan: something went wrong inside the program")
    assert "Traceback" in log.read_text("utf-8")


@pytest.mark.parametrize("command", ["check", "solve"])
def test_a_folder_is_no_study(tmp_path, capsys, monkeypatch, command):
    monkeypatch.chdir(tmp_path)
    assert main([command, "."]) == 1
    err = capsys.readouterr().err
    assert "is a folder" in err
    assert "Traceback" not in err


def test_wrong_arguments_are_status_1():
    with pytest.raises(SystemExit) as stopped:
        main(["solve"])
    assert stopped.value.code == 1


def test_a_missed_gap_is_status_3(tmp_path):
    study = write_study(tmp_path / "study.xlsx", 24)
    status, twin = solve(study, "--method", "decomposed", "--time-limit", "0.0005", "--gap", "1e-7")
    assert status == 3
    assert twin["status"] == "limit reached"
    plan = plan_of(twin, LEAST_COST)
    assert plan["lower_bound"] <= plan["cost_interval"][1]
    assert plan["gap_pct"] > 1e-7
    assert (tmp_path / "study-results.xlsx").exists()


def test_results_never_replace_a_file_unasked(tmp_path):
    study = write_study(tmp_path / "study.xlsx", 4)
    taken = tmp_path / "study-results.xlsx"
    taken.write_text("mine", encoding="utf-8")
    assert solve(study)[0] == 0
    assert taken.read_text(encoding="utf-8") == "mine"
    others = [p for p in tmp_path.glob("study-results*.xlsx") if p != taken]
    assert len(others) == 1
    assert solve(study, "--force")[0] == 0
    assert openpyxl.load_workbook(taken).sheetnames[0] == "Summary"


def test_quiet_prints_the_path_only(tmp_path, capsys):
    study = write_study(tmp_path / "study.xlsx", 4)
    log = tmp_path / "run.log"
    assert main(["solve", str(study), "--quiet", "--log", str(log)]) == 0
    out = capsys.readouterr()
    assert out.out.strip() == str(tmp_path / "study-results.xlsx")
    assert out.err == ""
    assert "solving" in log.read_text(encoding="utf-8")


def test_the_blank_template_says_what_is_missing(tmp_path, capsys):
    blank = tmp_path / "blank.xlsx"
    write_template(blank)
    assert main(["check", str(blank)]) == 2
    assert "Settings!" in capsys.readouterr().out


def run_installed(*words: str, **options: Any) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-m", "xlplan", *words],
        cwd=ROOT,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        **options,
    )


def test_a_piped_run_prints_plain_text(tmp_path):
    study = write_study(tmp_path / "study.xlsx", 4)
    process = run_installed("solve", str(study))
    out, err = process.communicate(timeout=300)
    assert process.returncode == 0
    assert "\x1b" not in out + err
    assert "\r" not in out + err
    assert out.strip().endswith("study-results.xlsx")


def test_a_second_interrupt_stops_at_once(tmp_path):
    """The demo is long enough to be caught before it has a plan."""
    study = tmp_path / "demo.xlsx"
    write_template(study, with_demo=True)
    log, twin = tmp_path / "run.log", tmp_path / "twin.json"
    process = run_installed(
        "solve", str(study), "--plan-only", "--log", str(log), "--json", str(twin)
    )
    deadline = time.monotonic() + 300
    while time.monotonic() < deadline and process.poll() is None:
        if log.exists() and "writing" not in log.read_text() and "reading" in log.read_text():
            break
        time.sleep(0.2)
    time.sleep(1.0)
    process.send_signal(signal.SIGINT)
    time.sleep(0.5)
    process.send_signal(signal.SIGINT)
    _out, err = process.communicate(timeout=300)
    # Twice Ctrl-C stops at once: no plan, one plain line, and nothing half-written.
    assert process.returncode == 1
    assert "stopped before there was a plan" in err
    assert "Traceback" not in err
    assert not list(tmp_path.glob("*results*"))
    assert not twin.exists()


def test_one_interrupt_keeps_the_plan(tmp_path):
    study = write_study(tmp_path / "study.xlsx", 96, period_minutes=60)
    log, twin = tmp_path / "run.log", tmp_path / "twin.json"
    process = run_installed(
        "solve", str(study), "--plan-only", "--log", str(log), "--json", str(twin),
        "--method", "decomposed", "--gap", "1e-7", "--workers", "2",
    )  # fmt: skip
    deadline = time.monotonic() + 300
    while time.monotonic() < deadline and process.poll() is None:
        if log.exists() and "Least-cost plan: solving, bound" in log.read_text():
            break
        time.sleep(0.05)
    assert process.poll() is None, "the run was over before it could be interrupted"
    process.send_signal(signal.SIGINT)
    _, err = process.communicate(timeout=300)
    assert "Traceback" not in err
    assert process.returncode == 3
    assert json.loads(twin.read_text(encoding="utf-8"))["status"] == "interrupted"
    assert (tmp_path / "study-results.xlsx").exists()


# -- alternatives of the user's, and the comparison pack ------------------------------------------


COMPARED: dict[str, list[dict[str, object]]] = {
    "Alternatives": [
        {"alternative": "Small money", "budget": 20_000},
        {"alternative": "One battery", "kind": "fixed"},
        {"alternative": "Recloser", "kind": "existing"},
    ],
    "Fixed purchases": [
        {"alternative": "One battery", "asset": "battery", "kw": 50, "kwh": 100},
    ],
    "Device changes": [
        {
            "alternative": "Recloser",
            "line": "L2",
            "from_device": "recloser",
            "capital_cost": 1000,
            "life_years": 25,
        }
    ],
    "Sensitivities": [
        {"parameter": "storage cost", "low": 0.5, "high": 2},
        {"parameter": "failure rates", "low": 0.5, "high": 2},
    ],
}


@pytest.fixture(scope="module")
def compared(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, Any]]:
    """The two villages with alternatives and sensitivities."""
    study = write_study(tmp_path_factory.mktemp("compared") / "study.xlsx", 4, COMPARED)
    twin = study.with_suffix(".json")
    assert main(["solve", str(study), "--json", str(twin), "--quiet"]) == 0
    return study.with_name("study-results.xlsx"), json.loads(twin.read_text(encoding="utf-8"))


def test_own_alternatives_stand_in_the_twin(compared):
    _, twin = compared
    assert set(twin) == TOP_KEYS
    names = [a["name"] for a in twin["alternatives"]]
    assert names[3:] == ["Small money", "One battery", "Recloser"]
    for plan in twin["alternatives"]:
        assert set(plan) == PLAN_KEYS
        cost = plan["annual_cost"]
        assert cost["total"] == pytest.approx(sum(cost[p] for p in PARTS), abs=0.01)
    assert plan_of(twin, "Small money")["capital_cost"] <= 20_000.01
    # 50 kW at 100 and 100 kWh at 60.
    assert plan_of(twin, "One battery")["capital_cost"] == pytest.approx(11_000.0)
    recloser, existing = plan_of(twin, "Recloser"), plan_of(twin, EXISTING)
    assert recloser["capital_cost"] == pytest.approx(1000.0)
    yearly = 1000.0 * 0.05 / (1.0 - 1.05**-25)
    assert recloser["annual_cost"]["investment"] == pytest.approx(yearly)
    assert recloser["reliability"]["saifi"] <= existing["reliability"]["saifi"]
    assert not [f for f in twin["findings"] if f["key"] == "alternative"]


def test_pack_stands_in_the_twin(compared):
    _, twin = compared
    assert len(twin["budget"]) >= 8
    totals = [point["annual_cost"] for point in twin["budget"]]
    assert totals == sorted(totals, reverse=True)
    assert totals[0] == pytest.approx(plan_of(twin, EXISTING)["annual_cost"]["total"])
    assert [point["factor"] for point in twin["repair_time"]] == [0.5, 0.75, 1.0, 1.5, 2.0]
    assert [row["measure"] for row in twin["hardening"]] == ["covered wire"]
    sides = [(one["parameter"], one["side"]) for one in twin["sensitivities"]]
    assert sides == [(p, s) for p in ("storage cost", "failure rates") for s in ("low", "high")]


def test_pack_stands_in_the_workbook(compared):
    """Every sheet has its table, with the figures of the twin, and all checks agree."""
    path, twin = compared
    book = openpyxl.load_workbook(path, data_only=True)
    assert not [
        cell.value
        for sheet in book
        for row in sheet.iter_rows()
        for cell in row
        if isinstance(cell.value, str) and cell.value.startswith("Not computed")
    ]
    words = [row[8] for row in book["Checks"].iter_rows(values_only=True)]
    assert "FAIL" not in words
    row = row_of(book["Line hardening"], 1)
    assert row["Net value (EUR/year)"] == close(twin["hardening"][0]["in_plan"]["net_value"])
    last = twin["budget"][-1]
    rows = [r for r in book["Budget"].iter_rows(values_only=True) if r[0] == close(last["budget"])]
    assert rows[0][2] == close(last["annual_cost"])


def test_plan_only_leaves_the_pack_out(answer):
    path, twin = answer
    assert twin["hardening"] == twin["budget"] == twin["repair_time"] == twin["sensitivities"] == []
    book = openpyxl.load_workbook(path, data_only=True)
    for name in ("Line hardening", "Repair time", "Budget", "Sensitivities"):
        assert "--plan-only" in book[name]["A4"].value


# -- a weight on bad outcomes ------------------------------------------------------------------


@pytest.fixture(scope="module")
def weighted(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, Any]]:
    """The two villages with 40 % on the worst 5 % of outcomes, the whole run."""
    study = write_study(
        tmp_path_factory.mktemp("weighted") / "study.xlsx", risk_weight_pct=40, risk_tail_pct=5
    )
    twin = study.with_suffix(".json")
    words = ["solve", str(study), "--json", str(twin), "--quiet", "--method", "decomposed"]
    assert main(words) == 0
    return study.with_name("study-results.xlsx"), json.loads(twin.read_text(encoding="utf-8"))


def test_weighted_cost_has_its_parts_bound_and_gap(weighted, answer):
    _, twin = weighted
    for plan in twin["alternatives"]:
        aim = plan["objective"]
        assert set(plan) == PLAN_KEYS | {"objective"}
        assert (aim["weight_pct"], aim["tail_pct"]) == (close(40.0), close(5.0))
        assert aim["expected_cost"] == close(plan["annual_cost"]["total"])
        parts = 0.6 * aim["expected_cost"] + 0.4 * aim["cvar"]
        assert aim["total"] == close(parts)
        assert aim["cvar"] >= aim["expected_cost"]
        low, high = aim["interval"]
        assert low <= aim["total"] <= high
        # One window, 1,095 times a year: what is not run is the same in mean and worst.
        n = 1095.0
        window = plan["windows"][0]
        fixed = plan["annual_cost"]["total"] - n * window["expected_cost"]
        assert aim["cvar"] == close(fixed + n * window["cvar"])
        if plan["lower_bound"] is not None:
            assert plan["lower_bound"] <= high
            gap = 100.0 * max(0.0, high - plan["lower_bound"]) / abs(aim["total"])
            assert plan["gap_pct"] == pytest.approx(gap, abs=1e-6)
    # Against the plan chosen by expected cost: no lower mean, no higher weighted cost.
    best, plain = plan_of(twin, LEAST_COST), plan_of(answer[1], LEAST_COST)
    assert best["objective"]["total"] <= plan_of(twin, EXISTING)["objective"]["total"]
    assert best["annual_cost"]["total"] >= plain["lower_bound"] - 0.01


def test_weight_is_said_and_what_it_leaves_out(weighted):
    path, twin = weighted
    messages = [f for f in twin["findings"] if f["key"] == "risk_weight_pct"]
    assert [f["level"] for f in messages] == ["note"]
    assert "left out" in messages[0]["message"]
    assert not any("no effect" in f["message"] for f in twin["findings"])
    assert twin["hardening"] == twin["budget"] == twin["sensitivities"] == []
    book = openpyxl.load_workbook(path, data_only=True)
    best = plan_of(twin, LEAST_COST)
    rows = [row for row in book["Convergence"].iter_rows(values_only=True) if row[0] == LEAST_COST]
    numbers = [cell for cell in rows[-1] if isinstance(cell, int | float)]
    aim = best["objective"]
    for figure in (best["lower_bound"], aim["expected_cost"], aim["cvar"], aim["total"]):
        assert any(number == close(figure) for number in numbers)
    for name in ("Summary", "Convergence"):
        texts = [str(c) for row in book[name].iter_rows(values_only=True) for c in row if c]
        assert any("Bad outcomes have a weight of 40 %" in text for text in texts), name
    risk = [str(c) for row in book["Risk"].iter_rows(values_only=True) for c in row if c]
    assert any("40 % of the mean of the worst 5 %" in text for text in risk)
    checks = list(book["Checks"].iter_rows(values_only=True))
    assert "FAIL" not in [row[8] for row in checks]
    assert any(str(row[1]).startswith("Outcomes of ") and row[8] == "PASS" for row in checks)


def test_both_methods_give_the_same_weighted_cost(tmp_path):
    found = {}
    for method in ("tree", "decomposed"):
        folder = tmp_path / method
        folder.mkdir()
        study = write_study(folder / "study.xlsx", hours=4, risk_weight_pct=100, risk_tail_pct=10)
        status, twin = solve(study, "--method", method, "--gap", "0.05")
        assert status == 0
        found[method] = plan_of(twin, LEAST_COST)["objective"]["total"]
        bound = plan_of(twin, LEAST_COST)["lower_bound"]
        assert bound <= found[method] * (1.0 + 1e-6)
    assert found["decomposed"] == pytest.approx(found["tree"], rel=5e-4)
