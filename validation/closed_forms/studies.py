"""One load behind one line, with nothing, with a store that exists, or with one to be bought."""

from __future__ import annotations

import json
import tempfile
from functools import cache
from pathlib import Path
from typing import Any

from xlplan.cli import main
from xlplan.workbook.template import write_study_workbook

FAILURES_PER_YEAR = 0.5
REPAIR_H = 4.0
LOAD_KW = 100.0
PRICE_UNSERVED = 120.0
STORE_COST_PER_KWH_YEAR = 30.0
BACK_UP_H = 2.0
WINDOW_H = 12

Rows = list[dict[str, object]]


def study_tables(existing_kwh: float, max_new_kwh: float) -> dict[str, Rows]:
    """Sheets by name; a lossless, grid-forming store of 100 kW at the load's bus."""
    storage: Rows = []
    if existing_kwh or max_new_kwh:
        has_existing = existing_kwh > 0.0
        storage = [
            {
                "storage": "Store",
                "bus": "A",
                "existing_kw": LOAD_KW if has_existing else 0,
                "existing_kwh": existing_kwh,
                "max_new_kw": 0 if has_existing else LOAD_KW,
                "max_new_kwh": max_new_kwh,
                "capital_cost_per_kw": 0,
                "capital_cost_per_kwh": STORE_COST_PER_KWH_YEAR,
                "life_years": 1,
                "round_trip_efficiency_pct": 100,
                "start_soc_pct": 100,
                "min_soc_pct": 0,
                "grid_forming": "yes",
            }
        ]
    return {
        "Buses": [{"bus": "S"}, {"bus": "A"}],
        "Loads": [
            {
                "load": "Load",
                "bus": "A",
                "customer_class": "Customers",
                "peak_kw": LOAD_KW,
                "power_factor": 1,
                "customers": 1,
            }
        ],
        "Lines": [
            {
                "line": "Line",
                "from_bus": "S",
                "to_bus": "A",
                "length": 1,
                "r_ohm": 0.001,
                "x_ohm": 0.001,
                "from_device": "breaker",
                "to_device": "breaker",
                "outage_class": "Overhead",
            }
        ],
        "Storage": storage,
        "Outage assumptions": [
            {
                "outage_class": "Overhead",
                "failures_per_year": FAILURES_PER_YEAR,
                "repair_hours": REPAIR_H,
                "switching_minutes": 0,
                "figure_from": "assumed for this comparison",
            }
        ],
        "Customer classes": [
            {
                "customer_class": "Customers",
                "cost_0h_per_kw": 0,
                "cost_1h_per_kw": PRICE_UNSERVED,
                "cost_4h_per_kw": 4 * PRICE_UNSERVED,
                "cost_8h_per_kw": 8 * PRICE_UNSERVED,
                "cost_after_8h_per_kwh": PRICE_UNSERVED,
            }
        ],
        "Profiles": [{"time": k, "flat": 1} for k in range(WINDOW_H)],
        "Windows": [
            {
                "window": "Every hour of the year",
                "occurrences_per_year": 8760 / WINDOW_H,
                "starts_at": 0,
                "hours": WINDOW_H,
            }
        ],
    }


def study_settings(spread: str) -> dict[str, object]:
    """Lossless, without discounting, so that yearly costs are the capital costs."""
    return {
        "study_name": "One load behind one line",
        "currency": "EUR",
        "source_bus": "S",
        "base_kv": 10,
        "source_voltage_pu": 1,
        "substation_limit_kva": 10_000,
        "length_unit": "km",
        "period_minutes": 60,
        "loss_allowance_pct": 0,
        "real_discount_rate_pct": 0,
        "energy_price_per_kwh": 0.1,
        "rate_basis": "fair weather",
        "repair_spread": spread,
        "island_headroom_pct": 0,
        "gap_target_pct": 0.01,
        "random_seed": 1,
    }


@cache
def run_program(existing_kwh: float, max_new_kwh: float, spread: str) -> dict[str, Any]:
    """Alternatives of the whole program's answer, by name."""
    with tempfile.TemporaryDirectory() as folder:
        study, twin = Path(folder) / "study.xlsx", Path(folder) / "results.json"
        write_study_workbook(study, study_tables(existing_kwh, max_new_kwh), study_settings(spread))
        arguments = ["solve", str(study), "--json", str(twin), "--method", "decomposed"]
        status = main([*arguments, "--plan-only", "--quiet", "--workers", "1"])
        if status != 0:
            raise RuntimeError(f"the study was not solved: exit status {status}")
        answer = json.loads(twin.read_text("utf-8"))
        return {plan["name"]: plan for plan in answer["alternatives"]}
