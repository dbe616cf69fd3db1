"""The textbook's indices, by sums worked out here and by the whole program."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from tests.builders import (
    make_bus,
    make_line,
    make_load,
    make_outage_class,
    make_profiles,
    make_supply,
    make_window,
    small_study,
)
from validation.reliability.build_study import (
    CASES,
    Case,
    read_rows,
    study_settings,
    study_tables,
)
from xlplan.cli import main
from xlplan.network.feeder import build_feeder
from xlplan.outages.window_model import build_window_models
from xlplan.study.study import Device, Study
from xlplan.workbook.template import write_study_workbook

SWITCHING_H = 0.5
TOLERANCE_PRINTED = 0.005
TOLERANCE_SUMS = 0.0015
"""Reasons in source.md."""

TREE_WINDOW_H = 3
"""A window short enough for the whole tree: six periods."""


def load_point_sums(case: Case) -> dict[str, tuple[float, float]]:
    """Failures a year and outage hours a year of each load point, by the textbook's reasoning.

    A main fault interrupts everybody, a lateral fault only its own load point where fused. With
    disconnects, who lies nearer to the source than a faulted main section waits for switching only;
    with back-feed so does who lies beyond it.
    """
    sections = read_rows("billinton_allan_sections.csv")
    mains = [row for row in sections if row["kind"] == "main"]
    order = [row["load_point_fed"] for row in mains]
    sums = {}
    for position, point in enumerate(order):
        failures = hours = 0.0
        for row in sections:
            rate = float(row["failure_rate_per_yr"])
            repair_h = float(row["repair_time_h"])
            if row["kind"] == "lateral":
                if case.has_fuses and row["load_point_fed"] != point:
                    continue
                outage_h = repair_h
            else:
                faulted = order.index(row["load_point_fed"])
                is_switched = case.has_disconnects and (
                    faulted > position or (case.has_back_feed and faulted < position)
                )
                outage_h = SWITCHING_H if is_switched else repair_h
            failures += rate
            hours += rate * outage_h
        sums[point] = (failures, hours)
    return sums


def indices(case: Case) -> dict[str, float]:
    """SAIFI, SAIDI (h), CAIDI (h) and ENS (MWh) from the sums by load point."""
    sums = load_point_sums(case)
    points = read_rows("billinton_allan_load_points.csv")
    customers = {row["load_point"]: float(row["customers"]) for row in points}
    load_kw = {row["load_point"]: float(row["average_load_kw"]) for row in points}
    total = sum(customers.values())
    saifi = sum(customers[point] * failures for point, (failures, _) in sums.items()) / total
    saidi = sum(customers[point] * hours for point, (_, hours) in sums.items()) / total
    ens_mwh = sum(load_kw[point] * hours for point, (_, hours) in sums.items()) / 1000
    return {"SAIFI": saifi, "SAIDI": saidi, "CAIDI": saidi / saifi, "ENS": ens_mwh}


def published(case: Case) -> dict[str, float]:
    return {
        row["index"]: float(row["published_value"])
        for row in read_rows("billinton_allan_results.csv")
        if row["case"] == case.name and row["index"] in ("SAIFI", "SAIDI", "CAIDI", "ENS")
    }


@pytest.mark.parametrize("case", CASES, ids=lambda case: f"case {case.number}")
def test_sums_give_the_published_indices(case: Case) -> None:
    """The reading of the example that build_study.py rests on is the textbook's."""
    by_point = {
        row["load_point"]: (
            float(row["failure_rate_per_yr"]),
            float(row["unavailability_h_per_yr"]),
        )
        for row in read_rows("billinton_allan_load_point_indices.csv")
        if row["case"] == case.name
    }
    sums = load_point_sums(case)
    assert set(sums) == set(by_point)
    for point, expected in by_point.items():
        assert sums[point] == pytest.approx(expected, rel=1e-9)
    assert indices(case) == pytest.approx(published(case), rel=TOLERANCE_PRINTED)


def study_records(case: Case) -> Study:
    """The tables as records, without a workbook: hours of half-hour periods, rates per km."""
    tables = study_tables(case)
    return small_study(
        period_h=0.5,
        buses=tuple(make_bus(str(row["bus"])) for row in tables["Buses"]),
        loads=tuple(make_load(str(row["load"]), str(row["bus"])) for row in tables["Loads"]),
        lines=tuple(
            make_line(
                str(row["line"]),
                str(row["from_bus"]),
                str(row["to_bus"]),
                length=row["length"],
                from_device=Device(str(row["from_device"])),
                outage_class=row["outage_class"],
            )
            for row in tables["Lines"]
        ),
        supplies=tuple(
            make_supply(str(row["supply"]), str(row["bus"])) for row in tables["Neighbour supplies"]
        ),
        outage_classes=tuple(
            make_outage_class(
                str(row["outage_class"]),
                0.0,
                failures_per_length_year=row["failures_per_length_year"],
                repair_h=row["repair_hours"],
                switching_h=SWITCHING_H,
            )
            for row in tables["Outage assumptions"]
        ),
        profiles=make_profiles(48),
        windows=(make_window("day", 48, occurrences_per_year=365.0),),
    )


@pytest.mark.parametrize("case", CASES, ids=lambda case: f"case {case.number}")
def test_stages_give_the_sums(case: Case) -> None:
    """Sections, isolation, repair and back-feed leave each load point dead as long as summed."""
    study = study_records(case)
    feeder = build_feeder(study)
    scenarios = build_window_models(study, feeder)[0].scenarios
    for point, expected in load_point_sums(case).items():
        bus = feeder.bus_ids.index(point)
        failures = hours = 0.0
        for scenario in scenarios:
            n_dead = sum(not period.bus_live[bus] for period in scenario.service)
            failures += float(scenario.rate_per_year[0]) * (n_dead > 0)
            hours += float(scenario.rate_per_year[0]) * n_dead * study.settings.period_h
        assert (failures, hours) == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(
    ("method", "window_h"),
    [("tree", TREE_WINDOW_H), ("decomposed", TREE_WINDOW_H), ("decomposed", 24)],
)
@pytest.mark.parametrize("case", CASES, ids=lambda case: f"case {case.number}")
def test_program_gives_the_published_indices(
    case: Case, method: str, window_h: int, tmp_path: Path
) -> None:
    study = tmp_path / "study.xlsx"
    twin = tmp_path / "results.json"
    write_study_workbook(study, study_tables(case, window_h), study_settings(case))
    arguments = ["solve", str(study), "--json", str(twin), "--method", method]
    assert main([*arguments, "--plan-only", "--quiet"]) == 0
    results = json.loads(twin.read_text("utf-8"))
    assert results["method"] == method
    existing = next(a for a in results["alternatives"] if a["name"] == "Existing feeder")
    reliability = existing["reliability"]
    found = {
        "SAIFI": reliability["saifi"],
        "SAIDI": reliability["saidi_h"],
        "CAIDI": reliability["caidi_h"],
        "ENS": reliability["eens_kwh_per_year"] / 1000,
    }
    assert found == pytest.approx(indices(case), rel=TOLERANCE_SUMS)
    assert found == pytest.approx(published(case), rel=TOLERANCE_PRINTED)
    # By bus as well: the load points hang at buses of their names.
    hours = {bus["bus"]: bus["outage_h_per_year"] for bus in existing["buses"]}
    for point, (_, expected_h) in load_point_sums(case).items():
        assert hours[point] == pytest.approx(expected_h, rel=TOLERANCE_SUMS)
