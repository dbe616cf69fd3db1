"""The command from workbook to results: files read back, exit statuses, closed forms."""

from __future__ import annotations

import hashlib
import json
import os
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


def numbers_of(sheet: Any) -> list[float]:
    return [
        float(cell.value)
        for row in sheet.iter_rows()
        for cell in row
        if isinstance(cell.value, int | float) and not isinstance(cell.value, bool)
    ]


def test_workbook_holds_the_numbers_of_the_twin(answer):
    path, twin = answer
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

    def shows(sheet: str, number: float) -> None:
        found = numbers_of(values[sheet])
        assert any(v == pytest.approx(number, rel=1e-9, abs=1e-6) for v in found), (sheet, number)

    for plan in twin["alternatives"]:
        shows("Summary", plan["annual_cost"]["total"])
        for part in ("total", *PARTS):
            shows("Alternatives", plan["annual_cost"][part])
        shows("Alternatives", plan["capital_cost"])
        for name in ("eens_kwh_per_year", "saifi", "saidi_h", "caidi_h", "asai"):
            shows("Reliability", plan["reliability"][name])
        for purchase in plan["purchases"]:
            shows("Plan", purchase["kw"])
            shows("Plan", purchase["kwh"])
    for plan in (plan_of(twin, LEAST_COST),):
        shows("Convergence", plan["lower_bound"])
    checks = [c.value for row in values["Checks"].iter_rows() for c in row]
    assert "PASS" in checks


def test_checks_all_pass(answer, capsys):
    path, _ = answer
    sheet = openpyxl.load_workbook(path, data_only=True)["Checks"]
    verdicts = [[c.value for c in row][-1] for row in sheet.iter_rows()]
    assert verdicts.count("PASS") > 10
    assert "FAIL" not in verdicts


def test_both_methods_agree(answer):
    path, twin = answer
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
    assert "Loads!" in printed and "-5" in printed
    assert main(["solve", str(study)]) == 2
    assert not (tmp_path / "study-results.xlsx").exists()


def test_no_workbook_at_all(tmp_path, capsys):
    text = tmp_path / "text.xlsx"
    text.write_text("not a workbook", encoding="utf-8")
    assert main(["solve", str(text)]) == 2
    assert main(["solve", str(tmp_path / "absent.xlsx")]) == 1
    lines = capsys.readouterr().err.strip().splitlines()
    assert len(lines) == 2 and all(line.startswith("xlplan: ") for line in lines)


def test_nowhere_to_write(tmp_path):
    study = write_study(tmp_path / "study.xlsx", 4)
    before = study.read_bytes()
    assert main(["solve", str(study), "-o", str(tmp_path / "no" / "folder.xlsx")]) == 1
    assert main(["solve", str(study), "-o", str(study)]) == 1
    assert main(["solve", str(study), "--json", str(study)]) == 1
    assert study.read_bytes() == before


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
    environment = {**os.environ, "OMP_NUM_THREADS": "1"}
    return subprocess.Popen(
        [sys.executable, "-m", "xlplan", *words],
        cwd=ROOT,
        env=environment,
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
    assert "\x1b" not in out + err and "\r" not in out + err
    assert out.strip().endswith("study-results.xlsx")


def test_an_interrupted_run_ends_with_its_best_plan(tmp_path):
    """The demo is long enough to be caught while it is being solved."""
    study = tmp_path / "demo.xlsx"
    write_template(study, with_demo=True)
    log, twin = tmp_path / "run.log", tmp_path / "twin.json"
    # Nothing but the first window's size matters here: a wide gap ends the other steps early.
    process = run_installed(
        "solve", str(study), "--plan-only", "--log", str(log), "--json", str(twin), "--gap", "0.001"
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
    out, err = process.communicate(timeout=300)
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
    process.send_signal(signal.SIGINT)
    _, err = process.communicate(timeout=300)
    assert "Traceback" not in err
    assert process.returncode == 3
    assert json.loads(twin.read_text(encoding="utf-8"))["status"] == "interrupted"
    assert (tmp_path / "study-results.xlsx").exists()
