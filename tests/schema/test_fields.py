"""The schema files: valid, complete, and consistent with one another."""

from __future__ import annotations

import json
import re

import pytest
from jsonschema import Draft202012Validator

from xlplan.schema.fields import SCHEMA_STEMS, Field, Kind, load_sheets, schema_text, sheet

KEYS = {
    "Settings": "study_name prepared_by currency price_year source_bus base_kv source_voltage_pu"
    " substation_limit_kva length_unit period_minutes vmin_pu vmax_pu vmin_event_pu vmax_event_pu"
    " loss_allowance_pct real_discount_rate_pct budget energy_price_per_kwh export_price_per_kwh"
    " demand_charge_per_kw_year stored_energy_price_per_kwh surplus_cost_per_kwh rate_basis"
    " bulk_supply_outage_class repair_spread load_control island_ratio island_headroom_pct"
    " measured_peak_kw history_saifi history_saidi_minutes gap_target_pct time_limit_minutes"
    " samples random_seed risk_weight_pct risk_tail_pct",
    "Buses": "bus name capacitor_kvar x y",
    "Loads": "load bus customer_class peak_kw power_factor customers load_profile"
    " remote_disconnect_pct",
    "Lines": "line from_bus to_bus length conductor r_ohm_per_length x_ohm_per_length r_ohm x_ohm"
    " rating_kva boost_pct from_device to_device normally_open outage_class",
    "Neighbour supplies": "supply bus spare_kw spare_profile shares_bulk_supply",
    "Conductors": "conductor r_ohm_per_length x_ohm_per_length ampacity_a",
    "Generators": "generator bus technology profile existing_kw max_new_kw step_kw"
    " capital_cost_per_kw site_cost grant_pct fixed_om_per_kw_year life_years running_cost_per_kwh"
    " outage_only ramp_pct_per_minute start_delay_minutes start_failure_pct tank_hours"
    " refill_delay_hours refill_pct_per_hour grid_forming outage_class",
    "Storage": "storage bus existing_kw existing_kwh max_new_kw max_new_kwh step_kw longest_hours"
    " capital_cost_per_kw capital_cost_per_kwh site_cost grant_pct fixed_om_per_kw_year life_years"
    " curve round_trip_efficiency_pct start_soc_pct min_soc_pct grid_forming outage_class",
    "Storage curves": "curve store_power_pct terminal_power_pct",
    "Outage assumptions": "outage_class failures_per_year failures_per_length_year repair_hours"
    " switching_minutes weather_exposed repair_cost_per_failure included figure_from",
    "Hardening": "measure lines capital_cost grant_pct life_years fixed_om_per_year"
    " failures_avoided_pct",
    "Customer classes": "customer_class critical cost_0h_per_kw cost_1h_per_kw cost_4h_per_kw"
    " cost_8h_per_kw cost_after_8h_per_kwh",
    "Profiles": "time",
    "Windows": "window occurrences_per_year starts_at hours load_multiplier price_profile"
    " failure_multiplier repair_multiplier failure_profile start_soc_pct counts_for_demand storm",
    "Alternatives": "alternative description kind budget ignores_outages",
    "Fixed purchases": "alternative asset kw kwh buy",
    "Device changes": "alternative line from_device to_device switching_minutes capital_cost"
    " life_years",
    "Sensitivities": "parameter low high",
}
"""The contract: every sheet, in workbook order, with its keys in column order."""

GROUPS = {
    "Study": "length_unit",
    "Money": "budget",
    "Outages": "rate_basis",
    "History": "history_saifi",
    "Advanced": "gap_target_pct",
}

ASKED_FOR = (
    ("Settings", "energy_price_per_kwh"),
    ("Generators", "capital_cost_per_kw"),
    ("Generators", "running_cost_per_kwh"),
    ("Storage", "capital_cost_per_kw"),
    ("Storage", "capital_cost_per_kwh"),
    ("Hardening", "capital_cost"),
    ("Device changes", "capital_cost"),
    ("Customer classes", "cost_0h_per_kw"),
    ("Customer classes", "cost_1h_per_kw"),
    ("Customer classes", "cost_4h_per_kw"),
    ("Customer classes", "cost_8h_per_kw"),
    ("Customer classes", "cost_after_8h_per_kwh"),
)
"""Prices, capital costs and interruption costs: none may have a default."""

ALL_FIELDS = [
    pytest.param(entry.name, field, id=f"{entry.key}-{field.key}")
    for entry in load_sheets()
    for field in entry.fields
]


def folded(text: str) -> str:
    return re.sub(r"[\W_]+", "", text.casefold())


@pytest.mark.parametrize("stem", SCHEMA_STEMS)
def test_each_file_is_a_valid_schema_of_the_declared_draft(stem: str) -> None:
    schema = json.loads(schema_text(stem))
    assert schema["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    Draft202012Validator.check_schema(schema)
    assert set(schema["required"]) <= set(schema["properties"])


def test_sheets_and_keys_are_those_of_the_contract_in_its_order() -> None:
    found = {entry.name: " ".join(f.key for f in entry.fields) for entry in load_sheets()}
    assert found == KEYS
    assert list(found) == list(KEYS)


def test_titles_stay_apart_when_case_spaces_punctuation_and_units_are_dropped() -> None:
    for entry in load_sheets():
        titles = [folded(field.title) for field in entry.fields]
        assert len(set(titles)) == len(titles), entry.name
        assert all(titles), entry.name
        assert not any("(" in field.title for field in entry.fields)


@pytest.mark.parametrize(("sheet_name", "field"), ALL_FIELDS)
def test_default_and_example_obey_the_field_s_own_schema(sheet_name: str, field: Field) -> None:
    schema = json.loads(schema_text(sheet(sheet_name).key))["properties"][field.key]
    validator = Draft202012Validator(schema)
    assert field.example is not None
    validator.validate(field.example)
    if field.default is not None:
        assert not field.is_required
        validator.validate(field.default)


@pytest.mark.parametrize(("sheet_name", "field"), ALL_FIELDS)
def test_a_default_or_example_is_never_called_unlikely(sheet_name: str, field: Field) -> None:
    values = [field.example, field.default]
    for number in [v for v in values if isinstance(v, int | float)]:
        assert field.likely_min is None or number >= field.likely_min
        assert field.likely_max is None or number <= field.likely_max
    has_range = field.likely_min is not None or field.likely_max is not None
    assert has_range == bool(field.likely_text)


@pytest.mark.parametrize(("sheet_name", "field"), ALL_FIELDS)
def test_references_name_sheets_that_have_ids(sheet_name: str, field: Field) -> None:
    for target in field.refers_to:
        assert sheet(target).id_field is not None
    if field.kind in (Kind.REFERENCE, Kind.ID_LIST):
        assert field.refers_to


@pytest.mark.parametrize(("sheet_name", "field"), ALL_FIELDS)
def test_every_field_explains_itself(sheet_name: str, field: Field) -> None:
    assert field.help.endswith(".")
    assert field.kind not in (Kind.CHOICE, Kind.YES_NO) or field.choices
    is_setting = sheet_name == "Settings"
    assert (field.group in GROUPS) == is_setting


@pytest.mark.parametrize(("sheet_name", "key"), ASKED_FOR)
def test_prices_capital_and_interruption_costs_have_no_default(sheet_name: str, key: str) -> None:
    assert sheet(sheet_name).field(key).default is None


def test_units_of_keys_and_fields_agree() -> None:
    """The unit that a key ends with is the unit that people see."""
    endings = {"_kw": "kW", "_kwh": "kWh", "_kvar": "kvar", "_kva": "kVA", "_kv": "kV", "_a": "A"}
    endings |= {"_ohm": "ohm", "_minutes": "minutes", "_hours": "hours", "_years": "years"}
    exceptions = {"tank_hours", "history_saidi_minutes"}
    for entry in load_sheets():
        for field in entry.fields:
            if field.key in exceptions or "_per_" in field.key:
                continue
            for ending, unit in endings.items():
                if field.key.endswith(ending):
                    assert field.unit == unit, (entry.name, field.key)
            if field.key.endswith("_pct"):
                assert field.unit.startswith("%"), (entry.name, field.key)


def test_default_voltage_bands_are_the_service_ranges_of_ansi_c84_1() -> None:
    """Ranges A and B up to 600 V on a 120 V base: 114 to 126 V and 110 to 127 V (from memory)."""
    settings = sheet("Settings")
    volts = {"vmin_pu": 114, "vmax_pu": 126, "vmin_event_pu": 110, "vmax_event_pu": 127}
    for key, volt in volts.items():
        assert settings.field(key).default == pytest.approx(volt / 120, abs=5e-4)
        assert "C84.1" in settings.field(key).source


def test_an_improbable_value_of_each_kind_named_in_the_contract_is_unlikely() -> None:
    peak = sheet("Loads").field("peak_kw")
    assert peak.likely_max is not None
    assert peak.likely_max < 5000
    power_factor = sheet("Loads").field("power_factor")
    assert power_factor.likely_min is not None
    assert power_factor.likely_min > 0.3
    failures = sheet("Outage assumptions").field("failures_per_length_year")
    assert failures.likely_max is not None
    assert failures.likely_max < 400


def test_time_step_is_between_5_and_60_minutes() -> None:
    field = sheet("Settings").field("period_minutes")
    assert (field.minimum, field.maximum) == (5, 60)


def test_headings_carry_the_unit() -> None:
    assert sheet("Settings").field("substation_limit_kva").heading == "Substation limit (kVA)"
    assert sheet("Storage").field("min_soc_pct").heading == "Lowest charge (%)"
    assert sheet("Loads").field("bus").heading == "Bus"


def test_unknown_names_are_refused() -> None:
    with pytest.raises(KeyError, match="Pylons"):
        sheet("Pylons")
    with pytest.raises(KeyError, match="colour"):
        sheet("Lines").field("colour")


def test_only_profiles_take_columns_of_the_user_s_own() -> None:
    for entry in load_sheets():
        assert (entry.other_columns is not None) == (entry.name == "Profiles")
    own = sheet("Profiles").other_columns
    assert own is not None
    assert own.kind is Kind.NUMBER
    assert own.minimum == 0
