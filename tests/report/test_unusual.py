"""What terminal and Checks say of results that are not the usual ones."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest
from openpyxl import load_workbook

from xlplan.cli import print_summary
from xlplan.compare.study_result import StudyResult
from xlplan.report.writer import write_results


def test_every_plan_can_be_the_recommended_one(
    result: StudyResult, capsys: pytest.CaptureFixture[str]
) -> None:
    kinds = set()
    for plan in result.plans:
        print_summary(replace(result, recommended=plan.name))
        said = capsys.readouterr().out
        for purchase in plan.purchases:
            if purchase.is_bought:
                assert purchase.asset in said
                kinds.add(purchase.kind)
    assert "device" in kinds


@pytest.mark.parametrize("is_open", [True, False])
def test_a_plan_kept_beyond_the_budget_is_not_open_to_the_search(
    result: StudyResult, tmp_path: Path, is_open: bool
) -> None:
    case = result.pack.sensitivities[0]
    costs = case.kept.costs
    dearer = replace(case.anew, costs=replace(costs, energy=costs.energy + 1e6))
    spoilt = replace(case, anew=dearer)
    pack = replace(result.pack, sensitivities=(spoilt, *result.pack.sensitivities[1:]))
    budget = case.kept.capital_cost * (1.0 if is_open else 0.5)
    changed = replace(result, pack=pack, capital_budget=budget)
    path = write_results(changed, tmp_path / "o.xlsx", False, tmp_path / "s.xlsx")
    book = load_workbook(path, read_only=True)
    words = [str(cell) for row in book["Checks"].iter_rows(values_only=True) for cell in row]
    assert case.kept.capital_cost > 0.0
    assert any(word.startswith("Plan made anew, ") for word in words) == is_open


@pytest.mark.parametrize("budget", [None, 1_500_000.0])
def test_a_kept_plan_beyond_the_budget_is_explained_where_there_is_one(
    result: StudyResult, tmp_path: Path, budget: float | None
) -> None:
    changed = replace(result, capital_budget=budget)
    path = write_results(changed, tmp_path / "o.xlsx", False, tmp_path / "s.xlsx")
    book = load_workbook(path, read_only=True)
    words = [str(row[0]) for row in book["Sensitivities"].iter_rows(values_only=True)]
    assert any("more than the budget" in word for word in words) == (budget is not None)
