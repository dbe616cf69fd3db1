"""What the terminal says of a result, whatever is bought."""

from __future__ import annotations

from dataclasses import replace

import pytest

from xlplan.cli import print_summary
from xlplan.compare.study_result import StudyResult


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
