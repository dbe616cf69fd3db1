"""One record of a study each, from defaults that do nothing special, and changes to a study."""

from __future__ import annotations

import math
from dataclasses import fields, replace

import numpy as np

from xlplan.study.study import (
    Bus,
    CustomerClass,
    Device,
    Generator,
    Line,
    Load,
    LoadControl,
    Measure,
    NeighbourSupply,
    OutageClass,
    Profiles,
    RateBasis,
    RepairSpread,
    Settings,
    Storage,
    Study,
    Technology,
    Window,
)


def make_settings(**changes: object) -> Settings:
    """Settings of a flat, simple study: hourly periods, wide limits, no demand charge, no sale."""
    plain: dict[str, object] = {
        "study_name": "test",
        "prepared_by": "",
        "currency": "EUR",
        "price_year": None,
        "source_bus": "S",
        "base_kv": 10.0,
        "source_voltage_pu": 1.0,
        "substation_limit_kva": 10_000.0,
        "length_unit": "km",
        "period_h": 1.0,
        "vmin_pu": 0.9,
        "vmax_pu": 1.1,
        "vmin_event_pu": 0.85,
        "vmax_event_pu": 1.1,
        "loss_allowance_frac": 0.0,
        "real_discount_rate_frac": 0.05,
        "capital_budget": None,
        "energy_price_per_kwh": 0.1,
        "export_price_per_kwh": None,
        "demand_charge_per_kw_year": 0.0,
        "stored_energy_price_per_kwh": None,
        "surplus_cost_per_kwh": 0.001,
        "rate_basis": RateBasis.FAIR_WEATHER,
        "bulk_supply_outage_class": None,
        "repair_spread": RepairSpread.NONE,
        "load_control": LoadControl.SECTION,
        "island_ratio": 1.0,
        "island_headroom_frac": 0.0,
        "measured_peak_kw": None,
        "history_saifi": None,
        "history_saidi_h": None,
        "gap_target_frac": 0.01,
        "time_limit_h": 0.25,
        "samples": 100,
        "random_seed": 1,
        "risk_weight_frac": 0.0,
        "risk_tail_frac": 0.05,
    }
    return Settings(**{**plain, **changes})  # type: ignore[arg-type]


def make_bus(bus: str, capacitor_kvar: float = 0.0) -> Bus:
    """A bus, without capacitor unless given."""
    return Bus(bus=bus, name=bus, capacitor_kvar=capacitor_kvar, x=None, y=None)


def make_load(load: str, bus: str, peak_kw: float = 100.0, **changes: object) -> Load:
    """A flat load at unity power factor with ten customers of class ``homes``."""
    plain: dict[str, object] = {
        "customer_class": "homes",
        "power_factor": 1.0,
        "customers": 10.0,
        "load_profile": None,
        "remote_disconnect_frac": 0.0,
    }
    return Load(load=load, bus=bus, peak_kw=peak_kw, **{**plain, **changes})  # type: ignore[arg-type]


def make_line(line: str, from_bus: str, to_bus: str, **changes: object) -> Line:
    """A closed line of 1 km and 0.1 + j0.1 ohm, breaker at its start, class ``overhead``."""
    plain: dict[str, object] = {
        "length": 1.0,
        "r_ohm": 0.1,
        "x_ohm": 0.1,
        "rating_kva": math.inf,
        "boost_frac": 0.0,
        "from_device": Device.BREAKER,
        "to_device": Device.NONE,
        "normally_open": False,
        "outage_class": "overhead",
    }
    return Line(line=line, from_bus=from_bus, to_bus=to_bus, **{**plain, **changes})  # type: ignore[arg-type]


def make_supply(
    supply: str, bus: str, spare_kw: float = 100.0, **changes: object
) -> NeighbourSupply:
    """A neighbour supply of its own bulk supply."""
    plain: dict[str, object] = {"spare_profile": None, "shares_bulk_supply": False}
    return NeighbourSupply(supply=supply, bus=bus, spare_kw=spare_kw, **{**plain, **changes})  # type: ignore[arg-type]


def make_generator(generator: str, bus: str, **changes: object) -> Generator:
    """A dispatchable grid-forming candidate of up to 100 kW, without ramp limit, delay or tank."""
    plain: dict[str, object] = {
        "technology": Technology.DISPATCHABLE,
        "profile": None,
        "existing_kw": 0.0,
        "max_new_kw": 100.0,
        "step_kw": None,
        "capital_cost_per_kw": 500.0,
        "capital_site_cost": 0.0,
        "grant_frac": 0.0,
        "fixed_om_per_kw": 5.0,
        "life_years": 20.0,
        "running_cost_per_kwh": 0.3,
        "is_outage_only": False,
        "ramp_frac_per_period": None,
        "start_delay_h": 0.0,
        "start_failure_frac": 0.0,
        "tank_h": None,
        "refill_delay_h": 0.0,
        "refill_frac_per_h": None,
        "is_grid_forming": True,
        "outage_class": None,
    }
    return Generator(generator=generator, bus=bus, **{**plain, **changes})  # type: ignore[arg-type]


def curve_of_efficiency(round_trip_frac: float) -> tuple[tuple[float, float], ...]:
    """Two straight edges: the square root of the round-trip efficiency each way."""
    one_way = math.sqrt(round_trip_frac)
    return ((-one_way, -1.0), (0.0, 0.0), (1.0 / one_way, 1.0))


def make_storage(storage: str, bus: str, **changes: object) -> Storage:
    """A grid-forming candidate of up to 100 kW and 200 kWh, 81 % round trip, half full."""
    plain: dict[str, object] = {
        "existing_kw": 0.0,
        "existing_kwh": 0.0,
        "max_new_kw": 100.0,
        "max_new_kwh": 200.0,
        "step_kw": None,
        "longest_h": None,
        "capital_cost_per_kw": 200.0,
        "capital_cost_per_kwh": 300.0,
        "capital_site_cost": 0.0,
        "grant_frac": 0.0,
        "fixed_om_per_kw": 5.0,
        "life_years": 15.0,
        "curve": curve_of_efficiency(0.81),
        "start_soc_frac": 0.5,
        "min_soc_frac": 0.1,
        "is_grid_forming": True,
        "outage_class": None,
    }
    return Storage(storage=storage, bus=bus, **{**plain, **changes})  # type: ignore[arg-type]


def make_outage_class(
    outage_class: str, failures_per_year: float, **changes: object
) -> OutageClass:
    """Two hours of repair, no isolation time, not exposed to weather, no repair cost."""
    plain: dict[str, object] = {
        "failures_per_length_year": 0.0,
        "repair_h": 2.0,
        "switching_h": 0.0,
        "is_weather_exposed": False,
        "repair_cost_per_failure": 0.0,
        "is_included": True,
        "figure_from": "invented",
    }
    return OutageClass(
        outage_class=outage_class,
        failures_per_year=failures_per_year,
        **{**plain, **changes},  # type: ignore[arg-type]
    )


def make_measure(measure: str, lines: tuple[str, ...], **changes: object) -> Measure:
    """A measure of 10,000 over 30 years that avoids half the failures of its lines."""
    plain: dict[str, object] = {
        "capital_cost": 10_000.0,
        "grant_frac": 0.0,
        "life_years": 30.0,
        "fixed_om": 0.0,
        "failures_avoided_frac": 0.5,
    }
    return Measure(measure=measure, lines=lines, **{**plain, **changes})  # type: ignore[arg-type]


def make_customer_class(customer_class: str = "homes", **changes: object) -> CustomerClass:
    """Costs 2 per kWh however long it lasts, nothing in the first moment."""
    plain: dict[str, object] = {
        "is_critical": False,
        "cost_0h_per_kw": 0.0,
        "cost_1h_per_kw": 2.0,
        "cost_4h_per_kw": 8.0,
        "cost_8h_per_kw": 16.0,
        "cost_after_8h_per_kwh": 2.0,
    }
    return CustomerClass(customer_class=customer_class, **{**plain, **changes})  # type: ignore[arg-type]


def make_window(window: str = "day", n_period: int = 4, **changes: object) -> Window:
    """A window from the first profile row, a hundred times a year, counting for demand."""
    plain: dict[str, object] = {
        "occurrences_per_year": 100.0,
        "start_row": 0,
        "load_multiplier": 1.0,
        "price_profile": None,
        "failure_multiplier": 1.0,
        "repair_multiplier": 1.0,
        "failure_profile": None,
        "start_soc_frac": None,
        "counts_for_demand": True,
        "is_storm": False,
    }
    return Window(window=window, n_period=n_period, **{**plain, **changes})  # type: ignore[arg-type]


def make_profiles(n_row: int, **columns: object) -> Profiles:
    """Profiles of ``n_row`` rows, one column per keyword; times are row numbers."""
    values = {name: np.asarray(column, dtype=float) for name, column in columns.items()}
    return Profiles(times=tuple(range(n_row)), values=values)


def change_study(study: Study, **changes: object) -> Study:
    """The study with other fields; a key of ``Settings`` changes that setting."""
    of_study = {field.name for field in fields(Study)}
    direct = {key: value for key, value in changes.items() if key in of_study}
    settings = {key: value for key, value in changes.items() if key not in of_study}
    study = replace(study, **direct)  # type: ignore[arg-type]
    return replace(study, settings=replace(study.settings, **settings))  # type: ignore[arg-type]
