"""One change to a valid study at a time: which finding, of which level, at which cell.

The cells are counted in ``study_tables``; nothing here comes from what the checks print.
"""

from __future__ import annotations

import datetime as dt

import pytest

from tests.workbook.study_tables import (
    DAY,
    STORM,
    places,
    raw_study,
    with_cell,
    with_copied_row,
    without_row,
)
from xlplan.base.codes import Code
from xlplan.base.errors import Level
from xlplan.study.build import check_and_build

FAULT, WARNING, NOTE = Level.FAULT, Level.WARNING, Level.NOTE


def test_the_study_as_it_stands_has_no_findings() -> None:
    study, findings = check_and_build(raw_study())
    assert [finding.text() for finding in findings] == []
    assert study is not None


ONE_CHANGE = [
    # what is changed, to what, and the finding: level, code, cell
    ("Settings!B3", "X9", FAULT, Code.UNKNOWN_NAME, "Settings!B3"),
    ("Settings!B5", 1.055, FAULT, Code.SOURCE_VOLTAGE, "Settings!B5"),
    ("Settings!B5", 0.93, FAULT, Code.SOURCE_VOLTAGE, "Settings!B5"),
    ("Settings!B9", 1.05, FAULT, Code.BAND_REVERSED, "Settings!B9"),
    ("Settings!B12", 0.9, FAULT, Code.BAND_REVERSED, "Settings!B11"),
    ("Settings!B16", 0.1, FAULT, Code.SALE_PRICE, "Settings!B16"),
    ("Settings!B16", 0.2, FAULT, Code.SALE_PRICE, "Settings!B16"),
    # Highest price 0.15 in both windows' rows is only in Day; over 0.9 each way it is 0.1667.
    ("Settings!B18", 0.16, WARNING, Code.STORED_ENERGY_CHEAP, "Settings!B18"),
    ("Settings!B19", "Main", WARNING, Code.NEVER_FAILS, "Settings!B19"),
    # 500 kW x 0.8 x 1.1 x 1.03 = 453.2 kW in the storm.
    ("Settings!B6", 450, WARNING, Code.ABOVE_SUBSTATION, "Settings!B6"),
    ("Settings!B13", 0.04, WARNING, Code.UNLIKELY_VALUE, "Settings!B13"),
    ("Buses!A4", "b1", FAULT, Code.NAME_TWICE, "Buses!A4"),
    ("Buses!A4", "B 1", FAULT, Code.UNKNOWN_NAME, "Loads!B3"),
    ("Loads!B2", "b1", NOTE, Code.NAME_SPELLING, "Loads!B2"),
    ("Loads!C2", "Homs", FAULT, Code.UNKNOWN_NAME, "Loads!C2"),
    ("Loads!G2", "dya", FAULT, Code.UNKNOWN_NAME, "Loads!G2"),
    ("Loads!D2", 5000, WARNING, Code.UNLIKELY_VALUE, "Loads!D2"),
    ("Loads!D2", -1, FAULT, Code.OUT_OF_BOUNDS, "Loads!D2"),
    ("Loads!E2", 0.3, WARNING, Code.UNLIKELY_VALUE, "Loads!E2"),
    ("Loads!E2", 95, FAULT, Code.OUT_OF_BOUNDS, "Loads!E2"),
    ("Loads!H3", 0.2, WARNING, Code.UNLIKELY_VALUE, "Loads!H3"),
    ("Lines!A3", "L1", FAULT, Code.NAME_TWICE, "Lines!A3"),
    ("Lines!C2", "S", FAULT, Code.SELF_LOOP, "Lines!C2"),
    ("Lines!D2", -0.3, FAULT, Code.OUT_OF_BOUNDS, "Lines!D2"),
    ("Lines!D2", None, FAULT, Code.NO_LENGTH, "Lines!D2"),
    ("Lines!D2", 0, WARNING, Code.ZERO_LENGTH, "Lines!D2"),
    ("Lines!D2", 0, WARNING, Code.NEVER_FAILS, "Lines!O2"),
    ("Lines!E2", None, FAULT, Code.NO_IMPEDANCE, "Lines!E2"),
    ("Lines!E2", "Wyre", FAULT, Code.UNKNOWN_NAME, "Lines!E2"),
    ("Lines!E3", "Wire", FAULT, Code.IMPEDANCE_TWICE, "Lines!F3"),
    ("Lines!H3", 1.0, FAULT, Code.IMPEDANCE_TWICE, "Lines!H3"),
    ("Lines!G3", None, FAULT, Code.HALF_IMPEDANCE, "Lines!G3"),
    ("Lines!H4", None, FAULT, Code.HALF_IMPEDANCE, "Lines!H4"),
    ("Lines!L2", "circuit breaker", FAULT, Code.NOT_A_CHOICE, "Lines!L2"),
    ("Lines!N2", "perhaps", FAULT, Code.NOT_YES_OR_NO, "Lines!N2"),
    ("Neighbour supplies!B2", "B7", FAULT, Code.UNKNOWN_NAME, "Neighbour supplies!B2"),
    ("Generators!A3", "diesel", FAULT, Code.NAME_TWICE, "Generators!A3"),
    ("Generators!H2", None, FAULT, Code.NO_COST, "Generators!H2"),
    ("Generators!I2", None, FAULT, Code.NO_COST, "Generators!I2"),
    ("Generators!D3", None, FAULT, Code.NO_PROFILE, "Generators!D3"),
    ("Generators!D3", "price", WARNING, Code.OUTPUT_ABOVE_RATING, "Generators!D3"),
    ("Generators!D2", "sun", NOTE, Code.NOT_USED, "Generators!D2"),
    ("Generators!G2", 300, FAULT, Code.STEP_TOO_LARGE, "Generators!G2"),
    ("Generators!G2", 150, NOTE, Code.NOT_A_MULTIPLE, "Generators!F2"),
    ("Generators!E3", 0, WARNING, Code.NO_SIZE, "Generators!E3"),
    ("Generators!K2", None, NOTE, Code.NOT_USED, "Generators!L2"),
    ("Generators!N2", "Main", WARNING, Code.NEVER_FAILS, "Generators!N2"),
    ("Storage!A2", "Diesel", FAULT, Code.NAME_TWICE, "Storage!A2"),
    ("Storage!F2", 0, FAULT, Code.HALF_STORE, "Storage!F2"),
    ("Storage!E2", 0, FAULT, Code.HALF_STORE, "Storage!E2"),
    ("Storage!D3", None, FAULT, Code.HALF_STORE, "Storage!D3"),
    ("Storage!I2", None, FAULT, Code.NO_COST, "Storage!I2"),
    ("Storage!J2", None, FAULT, Code.NO_COST, "Storage!J2"),
    ("Storage!K2", 101, FAULT, Code.OUT_OF_BOUNDS, "Storage!K2"),
    ("Storage!L2", "Sells", FAULT, Code.UNKNOWN_NAME, "Storage!L2"),
    ("Storage!M2", 85, WARNING, Code.NOT_USED, "Storage!M2"),
    ("Storage!N3", 10, FAULT, Code.START_BELOW_LOWEST, "Storage!N3"),
    ("Storage!O3", 95, FAULT, Code.START_BELOW_LOWEST, "Windows!J3"),
    ("Storage curves!C3", 40, WARNING, Code.CURVE_NOT_CONCAVE, "Storage curves!C3"),
    ("Storage curves!C4", 101, FAULT, Code.CURVE_GAINS, "Storage curves!C4"),
    ("Storage curves!C2", -90, FAULT, Code.CURVE_GAINS, "Storage curves!C2"),
    ("Storage curves!B2", 92, FAULT, Code.CURVE_ONE_SIDED, "Storage curves!B2"),
    ("Storage curves!C3", -2, FAULT, Code.CURVE_ORIGIN, "Storage curves!C3"),
    ("Storage curves!B4", 50, FAULT, Code.ROW_TWICE, "Storage curves!B4"),
    ("Outage assumptions!D2", 0, FAULT, Code.OUT_OF_BOUNDS, "Outage assumptions!D2"),
    ("Outage assumptions!C2", 400, WARNING, Code.UNLIKELY_VALUE, "Outage assumptions!C2"),
    ("Outage assumptions!E2", 300, WARNING, Code.SWITCHING_LONG, "Outage assumptions!E2"),
    ("Outage assumptions!H2", "no", NOTE, Code.CLASS_LEFT_OUT, "Outage assumptions!H2"),
    ("Outage assumptions!H2", "no", WARNING, Code.NEVER_FAILS, "Hardening!B2"),
    ("Hardening!B2", "L1, L9", FAULT, Code.UNKNOWN_NAME, "Hardening!B2"),
    ("Hardening!B2", "L1, L3", WARNING, Code.NEVER_FAILS, "Hardening!B2"),
    ("Hardening!F2", 120, FAULT, Code.OUT_OF_BOUNDS, "Hardening!F2"),
    ("Hardening!D2", 120, FAULT, Code.OUT_OF_BOUNDS, "Hardening!D2"),
    ("Customer classes!D2", 0.4, FAULT, Code.COST_FALLS, "Customer classes!D2"),
    ("Customer classes!F3", 50, FAULT, Code.COST_FALLS, "Customer classes!F3"),
    ("Customer classes!D2", 0.55, WARNING, Code.SHEDDING_CHEAP, "Customer classes!D2"),
    ("Profiles!B7", -0.1, FAULT, Code.OUT_OF_BOUNDS, "Profiles!B7"),
    ("Profiles!B7", None, FAULT, Code.BLANK, "Profiles!B7"),
    ("Profiles!B7", 250, WARNING, Code.UNLIKELY_VALUE, "Profiles!B7"),
    ("Profiles!A7", DAY, FAULT, Code.TIME_TWICE, "Profiles!A7"),
    ("Profiles!A7", 4.5, FAULT, Code.TIMES_MIXED, "Profiles!A7"),
    ("Profiles!A7", DAY + dt.timedelta(hours=5, minutes=30), FAULT, Code.WRONG_STEP, "Profiles!A7"),
    ("Windows!C2", DAY + dt.timedelta(days=1), FAULT, Code.START_NOT_FOUND, "Windows!C2"),
    ("Windows!C2", 0, FAULT, Code.START_NOT_FOUND, "Windows!C2"),
    ("Windows!C3", STORM + dt.timedelta(hours=1), FAULT, Code.PROFILE_TOO_SHORT, "Windows!D3"),
    ("Windows!D3", 25, FAULT, Code.PROFILE_TOO_SHORT, "Windows!D3"),
    ("Windows!D2", 23.5, FAULT, Code.NOT_WHOLE_PERIODS, "Windows!D2"),
    # From the day's last row to the storm's first is no step of an hour.
    ("Windows!D2", 25, FAULT, Code.WRONG_STEP, "Profiles!A26"),
    ("Windows!B2", 300, WARNING, Code.NOT_A_YEAR, "Windows!B2"),
    ("Windows!J3", 15, FAULT, Code.START_BELOW_LOWEST, "Windows!J3"),
    ("Windows!K2", "no", WARNING, Code.DEMAND_NOWHERE, "Windows!K2"),
    ("Windows!I2", "gust", FAULT, Code.UNKNOWN_NAME, "Windows!I2"),
    ("Alternatives!A2", "existing feeder", FAULT, Code.NAME_RESERVED, "Alternatives!A2"),
    ("Alternatives!D2", 600000, WARNING, Code.BUDGET_ABOVE_STUDY, "Alternatives!D2"),
    # 0.75 x (100 kW x 300 + 400 kWh x 250) + 20000 = 117500 of fixed purchases.
    ("Alternatives!D3", 117000, FAULT, Code.OVER_BUDGET, "Alternatives!D3"),
    ("Alternatives!C3", "optimise", WARNING, Code.NOT_USED, "Alternatives!C3"),
    ("Alternatives!C2", "fixed", WARNING, Code.NO_PURCHASES, "Alternatives!C2"),
    ("Fixed purchases!A2", "Theirs", FAULT, Code.UNKNOWN_NAME, "Fixed purchases!A2"),
    ("Fixed purchases!B2", "Batery", FAULT, Code.UNKNOWN_NAME, "Fixed purchases!B2"),
    ("Fixed purchases!B2", "trees", FAULT, Code.ROW_TWICE, "Fixed purchases!B3"),
    ("Fixed purchases!C2", 250, FAULT, Code.PURCHASE_TOO_LARGE, "Fixed purchases!C2"),
    ("Fixed purchases!D2", 900, FAULT, Code.PURCHASE_TOO_LARGE, "Fixed purchases!D2"),
    ("Fixed purchases!D2", 700, FAULT, Code.PURCHASE_TOO_LARGE, "Fixed purchases!D2"),
    ("Fixed purchases!E2", "no", WARNING, Code.NOT_USED, "Fixed purchases!E2"),
    ("Device changes!B2", "L7", FAULT, Code.UNKNOWN_NAME, "Device changes!B2"),
    ("Sensitivities!B2", 3, FAULT, Code.RANGE_REVERSED, "Sensitivities!C2"),
    ("Sensitivities!B2", -1, FAULT, Code.OUT_OF_BOUNDS, "Sensitivities!B2"),
]


@pytest.mark.parametrize(
    ("place", "value", "level", "code", "cell"),
    ONE_CHANGE,
    ids=[f"{place} {value}" for place, value, *_ in ONE_CHANGE],
)
def test_one_change_is_found_at_its_cell(
    place: str, value: object, level: Level, code: Code, cell: str
) -> None:
    study, findings = check_and_build(with_cell(raw_study(), place, value))
    assert (str(code), cell) in places(findings, level)
    assert (study is None) == any(finding.level is FAULT for finding in findings)


HARMLESS = [
    ("Settings!B5", 1.05),  # at the edge of a band is inside it
    ("Settings!B16", 0.0999),
    ("Settings!B18", 0.167),
    ("Settings!B6", 454),
    ("Lines!O3", None),
    ("Generators!G2", None),
    ("Generators!G2", 50),
    ("Customer classes!D2", 0.6),
    ("Storage!N3", 20),
    ("Storage curves!C3", 46),
    ("Windows!B2", 345),
    ("Windows!C2", None),  # the first row
    ("Alternatives!D3", 117500),
]


@pytest.mark.parametrize(("place", "value"), HARMLESS)
def test_values_at_the_edge_are_no_fault(place: str, value: object) -> None:
    study, findings = check_and_build(with_cell(raw_study(), place, value))
    never_on_trees = {("never fails", "Hardening!B2")}  # a measure on the line without a class
    assert study is not None
    assert places(findings) <= (never_on_trees if place == "Lines!O3" else set())


def test_a_sale_price_is_compared_with_the_cheapest_hour() -> None:
    raw = with_cell(raw_study(), "Profiles!D10", 0.15)
    assert ("sale price", "Settings!B16") in places(check_and_build(raw)[1], FAULT)
    # The same low price in a row of the storm, which has no price profile, is never charged.
    raw = with_cell(raw_study(), "Profiles!D30", 0.15)
    assert check_and_build(raw)[0] is not None


def test_a_failure_profile_that_is_zero_throughout_a_window_is_a_fault() -> None:
    raw = raw_study()
    for row in range(26, 50):
        raw = with_cell(raw, f"Profiles!E{row}", 0)
    assert places(check_and_build(raw)[1], FAULT) == {("profile all zero", "Windows!I3")}


def test_measures_that_share_a_line_exclude_one_another() -> None:
    raw = with_copied_row(raw_study(), "Hardening", 2, measure="Poles", lines="L2")
    study, findings = check_and_build(raw)
    assert study is not None
    assert places(findings) == {("measures share line", "Hardening!B3")}
    raw = with_copied_row(raw, "Fixed purchases", 3, asset="Poles")
    study, findings = check_and_build(raw)
    assert study is None
    assert places(findings, FAULT) == {("measures share line", "Fixed purchases!B4")}


def test_a_duplicate_names_both_cells_and_spellings() -> None:
    _, findings = check_and_build(with_cell(raw_study(), "Buses!A4", "b1"))
    text = next(f.text() for f in findings if f.code == Code.NAME_TWICE)
    assert "Buses!A4" in text
    assert "A3" in text
    assert "'b1'" in text
    assert "'B1'" in text


def test_an_unknown_name_offers_the_closest() -> None:
    _, findings = check_and_build(with_cell(raw_study(), "Loads!C2", "Homs"))
    [finding] = [f for f in findings if f.code == Code.UNKNOWN_NAME]
    assert finding.value == "Homs"
    assert finding.key == "customer_class"
    assert "Did you mean Homes?" in finding.text()


def test_the_text_of_a_finding_names_cell_key_value_and_what_to_do() -> None:
    _, findings = check_and_build(with_cell(raw_study(), "Lines!D2", -0.3))
    [finding] = [f for f in findings if f.level is FAULT]
    assert finding.text() == "Lines!D2 length: -0.3 is below 0. Give it in km or mi."


def test_every_fault_of_several_is_found_in_one_pass() -> None:
    raw = with_cell(raw_study(), "Lines!D2", -1)
    raw = with_cell(raw, "Loads!C2", "Homs")
    raw = with_cell(raw, "Settings!B5", 2)
    raw = with_cell(raw, "Windows!D2", 23.5)
    study, findings = check_and_build(raw)
    assert study is None
    assert places(findings, FAULT) == {
        ("out of bounds", "Lines!D2"),
        ("unknown name", "Loads!C2"),
        ("source voltage", "Settings!B5"),
        ("not whole periods", "Windows!D2"),
    }


def test_very_many_unknown_names_are_cut_short_and_counted() -> None:
    raw = raw_study()
    for _ in range(70):
        raw = with_copied_row(raw, "Neighbour supplies", 2, bus="nowhere")
    _, findings = check_and_build(raw)
    unknown = [finding for finding in findings if finding.code == Code.UNKNOWN_NAME]
    assert len(unknown) == 50
    assert "20 other cells" in unknown[-1].message


def test_findings_come_in_workbook_order() -> None:
    raw = with_cell(with_cell(raw_study(), "Windows!D2", 23.5), "Lines!D3", -1)
    raw = with_cell(raw, "Lines!D2", -1)
    faults = [f"{f.sheet}!{f.cell}" for f in check_and_build(raw)[1] if f.level is FAULT]
    assert faults == ["Lines!D2", "Lines!D3", "Windows!D2"]


@pytest.mark.parametrize(
    ("sheet", "numbers"), [("Loads", (2, 3)), ("Windows", (2, 3)), ("Customer classes", (2, 3))]
)
def test_a_needed_sheet_without_rows_is_a_fault(sheet: str, numbers: tuple[int, ...]) -> None:
    raw = raw_study()
    for number in numbers:
        raw = without_row(raw, sheet, number)
    assert ("sheet empty", f"{sheet}!A2") in places(check_and_build(raw)[1], FAULT)


def test_a_study_with_nothing_to_buy_is_a_note() -> None:
    raw = with_cell(raw_study(), "Generators!F2", None)
    raw = without_row(without_row(raw, "Storage", 2), "Hardening", 2)
    raw = without_row(without_row(raw, "Fixed purchases", 2), "Fixed purchases", 3)
    study, findings = check_and_build(raw)
    assert study is not None
    assert ("nothing to buy", "Settings!B2") in places(findings, NOTE)


def test_customers_and_loads_that_are_all_zero_are_warned_about() -> None:
    raw = with_cell(with_cell(raw_study(), "Loads!F2", 0), "Loads!F3", None)
    raw = with_cell(with_cell(raw, "Loads!D2", 0), "Loads!D3", 0)
    found = places(check_and_build(raw)[1], WARNING)
    assert {("no customers", "Loads!F2"), ("no load", "Loads!D2")} <= found


@pytest.mark.parametrize("place", ["Outage assumptions!F2", "Outage assumptions!H2"])
def test_a_storm_that_reaches_no_class_is_warned_about(place: str) -> None:
    """Main is the one exposed class: without it the storm's three columns act on nothing."""
    found = places(check_and_build(with_cell(raw_study(), place, "no"))[1], WARNING)
    cells = {cell for code, cell in found if code == Code.NOT_USED}
    assert cells == {"Windows!G3", "Windows!H3", "Windows!I3"}
