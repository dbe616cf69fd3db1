"""Writes the study of Wendlemoor, an invented village at the end of an invented line.

Run as a script to write the workbook again: ``python examples/wendlemoor/make_study.py``.
"""

from __future__ import annotations

import sys
from pathlib import Path

from xlplan.workbook.template import write_study_workbook

WORKBOOK = Path(__file__).resolve().parent / "wendlemoor.xlsx"

REMARK = "A small worked example. The village, its feeder and every figure are invented."

Rows = list[dict[str, object]]

HOURS = 24
"""One winter day, from midnight."""

LOAD_SHARE = (
    0.45,
    0.4,
    0.4,
    0.4,
    0.45,
    0.55,
    0.65,
    0.8,
    0.85,
    0.8,
    0.75,
    0.7,
    0.7,
    0.7,
    0.7,
    0.75,
    0.85,
    0.95,
    1.0,
    1.0,
    0.9,
    0.75,
    0.6,
    0.5,
)
"""Share of the peak in each hour; common practice has such a morning hump and evening peak."""

SUN_SHARE = (0.0,) * 8 + (0.05, 0.2, 0.35, 0.45, 0.45, 0.35, 0.2, 0.05) + (0.0,) * 8


def settings() -> dict[str, object]:
    """Sheet Settings: key -> value as typed."""
    return {
        "study_name": "Wendlemoor village",
        "prepared_by": "Planning desk",
        "currency": "EUR",
        "price_year": 2026,
        "source_bus": "Moor end",
        "base_kv": 11,
        "source_voltage_pu": 1.02,
        "substation_limit_kva": 1500,
        "length_unit": "km",
        "period_minutes": 60,
        "loss_allowance_pct": 2,
        "real_discount_rate_pct": 4,
        "budget": 300_000,
        "energy_price_per_kwh": 0.12,
        "export_price_per_kwh": 0.03,
        "demand_charge_per_kw_year": 40,
        "rate_basis": "fair weather",
        "load_control": "section",
        "gap_target_pct": 1,
        "time_limit_minutes": 5,
        "samples": 100,
        "random_seed": 1,
    }


def tables() -> dict[str, Rows]:
    """The other sheets: name -> rows, key -> value as typed."""
    return {
        "Buses": [
            {"bus": "Moor end", "name": "Source of the feeder"},
            {"bus": "Ford", "name": "Ford, start of the village lateral"},
            {"bus": "Green", "name": "Wendlemoor green"},
            {"bus": "Hall", "name": "Village hall and surgery"},
            {"bus": "Quarry", "name": "Slate quarry"},
        ],
        "Loads": [
            _load("Ford farms", "Ford", "Homes", 120, 40),
            _load("Village homes", "Green", "Homes", 180, 150),
            _load("Surgery", "Hall", "Care", 60, 2),
            _load("Slate quarry", "Quarry", "Works", 200, 1),
        ],
        "Lines": [
            _line("Moor line", "Moor end", "Ford", 6, "breaker", "none"),
            _line("Village lateral", "Ford", "Green", 3, "switch", "none"),
            _line("Hall line", "Green", "Hall", 1, "switch", "none"),
            _line("Quarry line", "Ford", "Quarry", 2, "fuse", "none"),
        ],
        "Conductors": [
            {
                "conductor": "Wire 50",
                "r_ohm_per_length": 0.55,
                "x_ohm_per_length": 0.37,
                "ampacity_a": 210,
            }
        ],
        "Generators": [
            {
                "generator": "Hall roof",
                "bus": "Hall",
                "technology": "solar",
                "profile": "sun",
                "existing_kw": 40,
                "max_new_kw": 0,
                "grid_forming": "no",
            }
        ],
        "Storage": [
            {
                "storage": "Hall battery",
                "bus": "Hall",
                "existing_kw": 0,
                "existing_kwh": 0,
                "max_new_kw": 300,
                "max_new_kwh": 1200,
                "longest_hours": 6,
                "capital_cost_per_kw": 120,
                "capital_cost_per_kwh": 70,
                "site_cost": 5000,
                "fixed_om_per_kw_year": 4,
                "life_years": 15,
                "round_trip_efficiency_pct": 85,
                "start_soc_pct": 60,
                "min_soc_pct": 10,
                "grid_forming": "yes",
            }
        ],
        "Outage assumptions": [
            {
                "outage_class": "Overhead",
                "failures_per_length_year": 0.2,
                "repair_hours": 4,
                "switching_minutes": 60,
                "weather_exposed": "yes",
                "repair_cost_per_failure": 1500,
                "figure_from": "invented",
            }
        ],
        "Hardening": [
            {
                "measure": "Covered wire on the moor",
                "lines": "Moor line",
                "capital_cost": 90_000,
                "life_years": 30,
                "failures_avoided_pct": 70,
            }
        ],
        "Customer classes": [
            _customer_class("Homes", "no", (0.5, 4, 14, 26, 3)),
            _customer_class("Care", "yes", (10, 60, 220, 420, 50)),
            _customer_class("Works", "no", (5, 25, 80, 150, 15)),
        ],
        "Profiles": [
            {"time": k, "village": LOAD_SHARE[k], "sun": SUN_SHARE[k]} for k in range(HOURS)
        ],
        "Windows": [
            {
                "window": "Winter day",
                "occurrences_per_year": 365,
                "starts_at": 0,
                "hours": HOURS,
                "counts_for_demand": "yes",
                "storm": "no",
            }
        ],
    }


def _load(
    name: str, bus: str, customer_class: str, peak_kw: float, customers: int
) -> dict[str, object]:
    return {
        "load": name,
        "bus": bus,
        "customer_class": customer_class,
        "peak_kw": peak_kw,
        "power_factor": 0.95,
        "customers": customers,
        "load_profile": "village",
        "remote_disconnect_pct": 0,
    }


def _line(
    name: str, from_bus: str, to_bus: str, length: float, from_device: str, to_device: str
) -> dict[str, object]:
    return {
        "line": name,
        "from_bus": from_bus,
        "to_bus": to_bus,
        "length": length,
        "conductor": "Wire 50",
        "from_device": from_device,
        "to_device": to_device,
        "outage_class": "Overhead",
    }


def _customer_class(name: str, critical: str, costs: tuple[float, ...]) -> dict[str, object]:
    """``costs``: at once, 1 h, 4 h, 8 h (per kW), then per kWh after that."""
    keys = ("cost_0h_per_kw", "cost_1h_per_kw", "cost_4h_per_kw", "cost_8h_per_kw")
    return {
        "customer_class": name,
        "critical": critical,
        **dict(zip((*keys, "cost_after_8h_per_kwh"), costs, strict=True)),
    }


def write_study(path: Path) -> None:
    """Writes the study workbook; a file already there is replaced."""
    write_study_workbook(path, tables(), settings(), REMARK)


if __name__ == "__main__":
    write_study(Path(sys.argv[1]) if len(sys.argv) > 1 else WORKBOOK)
