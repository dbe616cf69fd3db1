"""Every example: its workbook is what its script makes, it has no fault, and it solves."""

from __future__ import annotations

import importlib.util
import json
import shutil
from pathlib import Path
from types import ModuleType

import openpyxl
import pytest

from xlplan.cli import main

SCRIPTS = sorted(Path(__file__).resolve().parent.glob("*/make_study.py"))


def load(script: Path) -> ModuleType:
    spec = importlib.util.spec_from_file_location(script.parent.name, script)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def cells(path: Path) -> dict[tuple[str, str], object]:
    """Every value of a workbook by sheet and cell."""
    return {
        (sheet.title, cell.coordinate): cell.value
        for sheet in openpyxl.load_workbook(path)
        for row in sheet.iter_rows()
        for cell in row
        if cell.value is not None
    }


def test_there_are_examples():
    assert SCRIPTS


@pytest.mark.parametrize("script", SCRIPTS, ids=lambda s: s.parent.name)
def test_the_workbook_is_what_the_script_makes(script, tmp_path):
    module = load(script)
    module.write_study(tmp_path / "made.xlsx")
    assert cells(tmp_path / "made.xlsx") == cells(module.WORKBOOK)


@pytest.mark.slow
@pytest.mark.parametrize("script", SCRIPTS, ids=lambda s: s.parent.name)
def test_the_example_solves(script, tmp_path):
    study = tmp_path / "study.xlsx"
    shutil.copy(load(script).WORKBOOK, study)
    assert main(["check", str(study)]) == 0
    assert main(["solve", str(study), "--json", str(tmp_path / "twin.json"), "--quiet"]) == 0
    twin = json.loads((tmp_path / "twin.json").read_text(encoding="utf-8"))
    assert twin["status"] == "gap reached"
    totals = {a["name"]: a["annual_cost"]["total"] for a in twin["alternatives"]}
    best = totals[twin["recommended"]]
    assert best <= min(totals.values()) * 1.01
