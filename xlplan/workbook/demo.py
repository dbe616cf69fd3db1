"""The demo study: Quillmere Valley Power, an invented small utility with one feeder to harden.

Fourteen buses at 12.47 kV. The water works and the care home stand at the ends of two laterals
that a normally open tie can join; a sawmill stands at the end of the main line, where a
neighbouring feeder can lend some power. Every name, price, cost and rate here is invented: round
figures of a plausible size, no guide to anybody's own.

Values are as a person would type them; ``demo_profiles.py`` makes the sheet Profiles.
"""

from __future__ import annotations

from typing import Any

from xlplan.workbook.demo_profiles import (
    ORDINARY_START,
    PEAK_START,
    STORM_START,
    profile_rows,
)

Row = dict[str, Any]


def demo_settings() -> Row:
    """Settings of the demo study: key -> value as typed."""
    return {
        "study_name": "Quillmere Valley feeder 2",
        "prepared_by": "Planning desk, Quillmere Valley Power",
        "currency": "USD",
        "price_year": 2026,
        "source_bus": "S0",
        "base_kv": 12.47,
        "source_voltage_pu": 1.03,
        "substation_limit_kva": 5000,
        "length_unit": "km",
        "period_minutes": 30,
        "loss_allowance_pct": 3,
        "real_discount_rate_pct": 4,
        "budget": 700000,
        "energy_price_per_kwh": 0.1,
        "export_price_per_kwh": 0.03,
        "demand_charge_per_kw_year": 110,
        "rate_basis": "fair weather",
        "bulk_supply_outage_class": "Bulk supply",
        "repair_spread": "none",
        "load_control": "section",
        "island_headroom_pct": 10,
        "measured_peak_kw": 2950,
        "history_saifi": 1.4,
        "gap_target_pct": 1,
        "time_limit_minutes": 30,
        "samples": 200,
        "random_seed": 1,
    }


def demo_tables() -> dict[str, list[Row]]:
    """Tables of the demo study: sheet name -> rows, key -> value as typed."""
    return {
        "Buses": _buses(),
        "Loads": _loads(),
        "Lines": _lines(),
        "Neighbour supplies": [
            {
                "supply": "Eastmere tie",
                "bus": "B13",
                "spare_kw": 700,
                "spare_profile": "neighbour spare",
                "shares_bulk_supply": "no",
            }
        ],
        "Conductors": _conductors(),
        "Generators": _generators(),
        "Storage": _storage(),
        "Storage curves": _storage_curves(),
        "Outage assumptions": _outage_assumptions(),
        "Hardening": _hardening(),
        "Customer classes": _customer_classes(),
        "Profiles": profile_rows(),
        "Windows": _windows(),
        "Alternatives": _alternatives(),
        "Fixed purchases": _fixed_purchases(),
        "Device changes": [
            {
                "alternative": "Second recloser",
                "line": "L05",
                "from_device": "recloser",
                "switching_minutes": 30,
                "capital_cost": 48000,
                "life_years": 25,
            }
        ],
        "Sensitivities": _sensitivities(),
    }


def _table(keys: str, *rows: tuple[Any, ...]) -> list[Row]:
    """Rows from tuples in the order of the named keys; None leaves the cell blank."""
    names = keys.split()
    return [
        {name: value for name, value in zip(names, row, strict=True) if value is not None}
        for row in rows
    ]


def _buses() -> list[Row]:
    return _table(
        "bus name capacitor_kvar x y",
        ("S0", "Quillmere substation", None, 0, 0),
        ("B1", "Station road", None, 2, 0),
        ("B2", "Market square", 300, 4, 0),
        ("B3", "Long meadow", None, 6, 0),
        ("B4", "School corner", 300, 8, 0),
        ("B5", "Ridge crossing", None, 10, 0),
        ("B6", "Orchard lane", None, 2, 2),
        ("B7", "Hill farms", None, 2, 4),
        ("B8", "Weir street", None, 4, -2),
        ("B9", "Water works", None, 4, -4),
        ("B10", "Chapel row", None, 6, -2),
        ("B11", "Care home", None, 6, -4),
        ("B12", "Birch estate", None, 8, 2),
        ("B13", "Sawmill", None, 12, 0),
    )


def _loads() -> list[Row]:
    return _table(
        "load bus customer_class peak_kw power_factor customers load_profile remote_disconnect_pct",
        ("Station road homes", "B1", "Homes", 260, 0.96, 118, "homes", None),
        ("Market shops", "B2", "Trade", 320, 0.93, 46, "trade", None),
        ("Long meadow homes", "B3", "Homes", 240, 0.96, 109, "homes", None),
        ("School corner homes", "B4", "Homes", 280, 0.96, 131, "homes", None),
        ("Ridge workshops", "B5", "Trade", 310, 0.92, 22, "trade", None),
        ("Orchard homes", "B6", "Homes", 300, 0.96, 142, "homes", None),
        ("Hill farms", "B7", "Trade", 180, 0.92, 17, "trade", None),
        ("Weir street homes", "B8", "Homes", 270, 0.96, 124, "homes", 30),
        ("Water works", "B9", "Critical", 360, 0.9, 1, "steady", None),
        ("Chapel row homes", "B10", "Homes", 230, 0.96, 104, "homes", 30),
        ("Care home", "B11", "Critical", 260, 0.95, 2, "steady", None),
        ("Birch homes", "B12", "Homes", 250, 0.96, 115, "homes", None),
        ("Sawmill", "B13", "Trade", 380, 0.88, 1, "trade", 50),
    )


def _lines() -> list[Row]:
    main, lateral = "Main wire", "Lateral wire"
    return _table(
        "line from_bus to_bus length conductor boost_pct from_device to_device normally_open"
        " outage_class",
        ("L01", "S0", "B1", 1.6, main, None, "breaker", None, None, "Main line"),
        ("L02", "B1", "B2", 2.0, main, None, "switch", None, None, "Main line"),
        ("L03", "B2", "B3", 2.3, main, 1.25, "recloser", None, None, "Main line"),
        ("L04", "B3", "B4", 1.9, main, None, None, None, None, "Main line"),
        ("L05", "B4", "B5", 2.2, main, None, "switch", None, None, "Main line"),
        ("L06", "B1", "B6", 1.8, lateral, None, "fuse", None, None, "Lateral"),
        ("L07", "B6", "B7", 2.6, lateral, None, None, None, None, "Lateral"),
        ("L08", "B2", "B8", 1.2, lateral, None, "fuse", None, None, "Lateral"),
        ("L09", "B8", "B9", 1.7, lateral, None, None, "switch", None, "Lateral"),
        ("L10", "B3", "B10", 1.4, lateral, None, "fuse", None, None, "Lateral"),
        ("L11", "B10", "B11", 1.5, lateral, None, None, "switch", None, "Lateral"),
        ("L12", "B4", "B12", 1.9, lateral, None, "fuse", None, None, "Lateral"),
        ("L13", "B5", "B13", 1.7, main, None, "switch", None, None, "Main line"),
        ("T1", "B9", "B11", 0.9, lateral, None, "switch", None, "yes", "Lateral"),
    )


def _conductors() -> list[Row]:
    return _table(
        "conductor r_ohm_per_length x_ohm_per_length ampacity_a",
        ("Main wire", 0.19, 0.39, 520),
        ("Lateral wire", 0.7, 0.52, 225),
    )


def _generators() -> list[Row]:
    diesel = {
        "generator": "Water works diesel",
        "bus": "B9",
        "technology": "dispatchable",
        "existing_kw": 300,
        "running_cost_per_kwh": 0.34,
        "outage_only": "yes",
        "ramp_pct_per_minute": 5,
        "start_delay_minutes": 30,
        "start_failure_pct": 3,
        "tank_hours": 20,
        "refill_delay_hours": 8,
        "refill_pct_per_hour": 20,
        "grid_forming": "yes",
        "outage_class": "Diesel",
    }
    solar = {
        "generator": "School roof solar",
        "bus": "B4",
        "technology": "solar",
        "profile": "sun",
        "existing_kw": 250,
        "running_cost_per_kwh": 0,
        "grid_forming": "no",
    }
    candidate = {
        "generator": "Ridge gas engine",
        "bus": "B5",
        "technology": "dispatchable",
        "max_new_kw": 600,
        "step_kw": 200,
        "capital_cost_per_kw": 780,
        "site_cost": 60000,
        "grant_pct": 15,
        "fixed_om_per_kw_year": 14,
        "life_years": 20,
        "running_cost_per_kwh": 0.24,
        "outage_only": "yes",
        "start_delay_minutes": 30,
        "grid_forming": "yes",
    }
    return [diesel, solar, candidate]


def _storage() -> list[Row]:
    common = {"fixed_om_per_kw_year": 6, "life_years": 15, "min_soc_pct": 10, "start_soc_pct": 50}
    mill = {
        "storage": "Sawmill battery",
        "bus": "B13",
        "max_new_kw": 600,
        "max_new_kwh": 2400,
        "longest_hours": 6,
        "capital_cost_per_kw": 260,
        "capital_cost_per_kwh": 250,
        "site_cost": 40000,
        "round_trip_efficiency_pct": 86,
        "grid_forming": "yes",
    }
    care = {
        "storage": "Care home battery",
        "bus": "B11",
        "max_new_kw": 500,
        "max_new_kwh": 3000,
        "longest_hours": 8,
        "capital_cost_per_kw": 280,
        "capital_cost_per_kwh": 240,
        "site_cost": 35000,
        "grant_pct": 20,
        "curve": "Lossy cells",
        "grid_forming": "yes",
    }
    school = {
        "storage": "School battery",
        "bus": "B4",
        "max_new_kw": 400,
        "max_new_kwh": 1600,
        "longest_hours": 4,
        "capital_cost_per_kw": 240,
        "capital_cost_per_kwh": 260,
        "site_cost": 25000,
        "round_trip_efficiency_pct": 88,
        "grid_forming": "no",
    }
    return [{**unit, **common} for unit in (mill, care, school)]


def _storage_curves() -> list[Row]:
    return _table(
        "curve store_power_pct terminal_power_pct",
        ("Lossy cells", -91, -100),
        ("Lossy cells", -47, -50),
        ("Lossy cells", 0, 0),
        ("Lossy cells", 53.5, 50),
        ("Lossy cells", 110, 100),
    )


def _outage_assumptions() -> list[Row]:
    return _table(
        "outage_class failures_per_year failures_per_length_year repair_hours switching_minutes"
        " weather_exposed repair_cost_per_failure included figure_from",
        ("Main line", None, 0.07, 3.5, 30, "yes", 2400, "yes", "invented for this example"),
        ("Lateral", None, 0.13, 3, 30, "yes", 1500, "yes", "invented for this example"),
        ("Bulk supply", 0.25, None, 2, 30, "no", None, "yes", "invented for this example"),
        ("Diesel", 0.5, None, 12, 30, "no", 3000, "yes", "invented for this example"),
    )


def _hardening() -> list[Row]:
    return _table(
        "measure lines capital_cost grant_pct life_years fixed_om_per_year failures_avoided_pct",
        ("Clear trees main line", "L03, L04", 30000, None, 6, 1200, 35),
        ("Covered wire main line", "L04, L05", 170000, 25, 40, None, 70),
        ("Clear trees water works", "L08, L09", 12000, None, 6, 900, 40),
        ("Stronger poles care home", "L10, L11", 85000, 10, 40, None, 50),
    )


def _customer_classes() -> list[Row]:
    return _table(
        "customer_class critical cost_0h_per_kw cost_1h_per_kw cost_4h_per_kw cost_8h_per_kw"
        " cost_after_8h_per_kwh",
        ("Homes", "no", 0.4, 3, 11, 24, 3.5),
        ("Trade", "no", 6, 26, 90, 170, 18),
        ("Critical", "yes", 25, 85, 290, 600, 80),
    )


def _windows() -> list[Row]:
    return _table(
        "window occurrences_per_year starts_at hours load_multiplier price_profile"
        " failure_multiplier repair_multiplier failure_profile start_soc_pct counts_for_demand"
        " storm",
        ("Ordinary day", 302, ORDINARY_START, 24, 1, "price", None, None, None, None, "yes", "no"),
        ("Peak day", 60, PEAK_START, 24, 1, "price", None, None, None, None, "yes", "no"),
        ("Storm", 2, STORM_START, 36, 1, "price", 40, 1.5, "gusts", 90, "no", "yes"),
    )


def _alternatives() -> list[Row]:
    return _table(
        "alternative description kind budget ignores_outages",
        ("Half the money", "Least cost with half the budget", "optimise", 350000, "no"),
        ("Care home first", "One battery and clear trees", "fixed", None, "no"),
        ("Second recloser", "Least cost, and a recloser on L05", "optimise", None, "no"),
    )


def _fixed_purchases() -> list[Row]:
    return _table(
        "alternative asset kw kwh buy",
        ("Care home first", "Care home battery", 300, 1500, "yes"),
        ("Care home first", "Clear trees water works", None, None, "yes"),
    )


def _sensitivities() -> list[Row]:
    return _table(
        "parameter low high",
        ("failure rates", 0.5, 2),
        ("repair times", 0.5, 2),
        ("interruption costs", 0.5, 2),
        ("storage cost", 0.7, 1.3),
        ("generator cost", 0.8, 1.2),
        ("hardening cost", 0.8, 1.2),
        ("energy price", 0.8, 1.3),
        ("load", 0.9, 1.1),
        ("discount rate", -2, 2),
    )
