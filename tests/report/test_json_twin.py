"""The JSON twin has exactly the keys of the contract, and no number that JSON does not know."""

from __future__ import annotations

import dataclasses
import json
from pathlib import Path
from typing import Any

import pytest

from xlplan.base.errors import ResultFileError
from xlplan.compare.pack_result import Pack
from xlplan.compare.study_result import StudyResult
from xlplan.report.json_twin import json_document, write_json

COST = {
    "total",
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
}
# The document of the workbook contract ("The JSON twin"), as nested sets of keys.
TOP = {
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
ALTERNATIVE: dict[str, Any] = {
    "name": None,
    "kind": None,
    "annual_cost": COST,
    "capital_cost": None,
    "lower_bound": None,
    "cost_interval": None,
    "gap_pct": None,
    "purchases": {"asset", "type", "kw", "kwh", "bought"},
    "reliability": {"eens_kwh_per_year", "saifi", "maifi", "saidi_h", "caidi_h", "asai"},
    "windows": {"window", "expected_cost", "expected_events", "eens_kwh"},
    "buses": {"bus", "eens_kwh_per_year", "interruptions_per_year", "outage_h_per_year"},
    "classes": {"customer_class", "eens_kwh_per_year"},
    "bound_upper": None,
    "risk": {"mean", "p50", "p95", "cvar95"},
    "against_existing": {"difference", "interval"},
}


VOLTAGE = {
    "alternative",
    "bus",
    "operation",
    "lowest_linear_pu",
    "lowest_ac_pu",
    "lowest_when",
    "highest_linear_pu",
    "highest_ac_pu",
    "highest_when",
    "lowest_limit_pu",
    "highest_limit_pu",
    "within_limits",
    "outside_range_a",
    "periods",
    "periods_not_converged",
}


def test_keys_are_those_of_the_contract(result: StudyResult) -> None:
    document = json_document(result)
    assert set(document) == TOP
    assert set(document["seconds"]) == {"read", "solve", "write"}
    assert set(document["findings"][0]) == {"level", "sheet", "cell", "key", "value", "message"}
    assert len(document["alternatives"]) == 4
    for alternative in document["alternatives"]:
        assert set(alternative) == set(ALTERNATIVE)
        for key, keys in ALTERNATIVE.items():
            if keys is None:
                continue
            value = alternative[key]
            records = value if isinstance(value, list) else [value]
            assert records, key
            for record in records:
                assert set(record) == keys, key


def test_values(result: StudyResult) -> None:
    document = json_document(result)
    assert document["schema"] == 1
    assert document["study"] == "=1+1"
    best = document["alternatives"][2]
    assert best["name"] == document["recommended"] == "Least-cost plan"
    assert best["gap_pct"] == pytest.approx(0.8)
    parts = [value for key, value in best["annual_cost"].items() if key != "total"]
    assert sum(parts) == pytest.approx(best["annual_cost"]["total"], abs=0.005)
    bought = {one["asset"]: one for one in best["purchases"]}
    assert len(bought) == 5
    assert bought["BAT-NORTH"]["bought"] is True
    assert bought["BAT-NORTH"]["kwh"] == 1261.5
    assert bought["BAT-SOUTH"]["bought"] is False
    assert bought["BAT-SOUTH"]["kw"] == 0.0
    assert {one["type"] for one in best["purchases"]} == {"storage", "generator", "hardening"}
    naive = document["alternatives"][1]
    assert naive["lower_bound"] is None
    assert naive["gap_pct"] is None


def test_voltages(result: StudyResult) -> None:
    rows = json_document(result)["voltages"]
    assert len(rows) == 4 * 2 * 15
    assert all(set(row) == VOLTAGE for row in rows)
    low = rows[14]
    assert (low["alternative"], low["bus"]) == ("Existing feeder", "=1+1 bus")
    assert low["operation"] == "normal service"
    assert low["lowest_ac_pu"] == pytest.approx(0.981)
    assert low["lowest_linear_pu"] == pytest.approx(0.983)
    assert low["within_limits"] is True
    dead = next(row for row in rows if row["bus"] == "B04" and row["operation"] != "normal service")
    assert dead["lowest_ac_pu"] is None
    assert dead["periods"] == 0


def test_pack(result: StudyResult) -> None:
    """The comparison pack: its lists, and no device change among the purchases."""
    document = json_document(result)
    ridge = document["hardening"][0]
    assert ridge["measure"] == "Tree wire, ridge"
    assert ridge["in_plan"]["value"] == 9_000.0
    assert ridge["in_plan"]["net_value"] == pytest.approx(9_000.0 - ridge["yearly_cost"])
    assert len(document["budget"]) == 8
    assert document["budget"][0]["purchases"] == []
    assert [point["factor"] for point in document["repair_time"]] == [0.5, 0.75, 1.0, 1.5, 2.0]
    sides = [(one["parameter"], one["side"]) for one in document["sensitivities"]]
    assert sides[:2] == [("=failure rates", "low"), ("=failure rates", "high")]
    own = document["alternatives"][3]
    assert {one["type"] for one in own["purchases"]} == {"storage", "generator", "hardening"}
    assert own["capital_cost"] == pytest.approx(0.8 * (40e3 + 248e3 + 864e3) + 260e3 + 18e3)
    empty = json_document(dataclasses.replace(result, pack=Pack()))
    for key in ("hardening", "repair_time", "budget", "sensitivities"):
        assert empty[key] == []


def test_numbers_that_are_not_known_are_null(result: StudyResult, tmp_path: Path) -> None:
    plan = dataclasses.replace(
        result.plans[2], gap_frac=float("nan"), cost_interval=(1.0, float("inf"))
    )
    odd = dataclasses.replace(result, plans=(*result.plans[:2], plan))
    write_json(odd, tmp_path / "out.json")
    text = (tmp_path / "out.json").read_text(encoding="utf-8")
    assert "NaN" not in text
    assert "Infinity" not in text
    read = json.loads(text)["alternatives"][2]
    assert read["gap_pct"] is None
    assert read["cost_interval"] == [1.0, None]


def test_replaces_in_one_step(
    result: StudyResult, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "out.json"
    path.write_text("old", encoding="utf-8")

    def full_disk(*_: object) -> None:
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr("xlplan.report.target.os.replace", full_disk)
        with pytest.raises(ResultFileError, match="No space left"):
            write_json(result, path)
    assert path.read_text(encoding="utf-8") == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["out.json"]
    write_json(result, path)
    assert json.loads(path.read_text(encoding="utf-8")) == json_document(result)
    assert [p.name for p in tmp_path.iterdir()] == ["out.json"]
