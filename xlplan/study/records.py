"""One checked row to one record of the study: here percent, minutes and blanks become values.

Enters: ``CheckedRow``s without faults. Leaves: the records of ``study.study``, in kW, kWh,
hours and fractions. The functions stand in the order of the sheets.
"""

from __future__ import annotations

import re
from math import inf, sqrt

import numpy as np

from xlplan.base.errors import Origin
from xlplan.base.hull import upper_hull
from xlplan.base.units import frac_from_pct, hours_from_minutes, kva_from_ampere
from xlplan.study import study as parts
from xlplan.workbook.checked_study import CheckedStudy
from xlplan.workbook.field_checks import CheckedRow
from xlplan.workbook.folding import fold
from xlplan.workbook.profile_rows import profile_rows

# What a checked row holds under a key, in the type that a record wants


def _number(row: CheckedRow, key: str) -> float:
    value = row.number(key)
    if value is None:
        raise ValueError(f"{row.row.origin.cell(key)} of {row.row.sheet} holds no {key}")
    return value


def _number_or(row: CheckedRow, key: str, default: float) -> float:
    value = row.number(key)
    return default if value is None else value


def _frac(row: CheckedRow, key: str) -> float:
    return frac_from_pct(_number(row, key))


def _optional_frac(row: CheckedRow, key: str) -> float | None:
    value = row.number(key)
    return None if value is None else frac_from_pct(value)


def _text(row: CheckedRow, key: str) -> str:
    return row.text(key) or ""


def device_of(row: CheckedRow, key: str) -> parts.Device:
    return parts.Device(_text(row, key))


# One function a record


def study_settings(checked: CheckedStudy) -> parts.Settings:
    row = checked.settings
    if row is None:
        raise ValueError("the study has no settings")
    price_year = row.number("price_year")
    saidi_minutes = row.number("history_saidi_minutes")
    return parts.Settings(
        study_name=_text(row, "study_name"),
        prepared_by=_text(row, "prepared_by"),
        currency=_text(row, "currency"),
        price_year=None if price_year is None else int(price_year),
        source_bus=_text(row, "source_bus"),
        base_kv=_number(row, "base_kv"),
        source_voltage_pu=_number(row, "source_voltage_pu"),
        substation_limit_kva=_number(row, "substation_limit_kva"),
        length_unit=_text(row, "length_unit"),
        period_h=hours_from_minutes(_number(row, "period_minutes")),
        vmin_pu=_number(row, "vmin_pu"),
        vmax_pu=_number(row, "vmax_pu"),
        vmin_event_pu=_number(row, "vmin_event_pu"),
        vmax_event_pu=_number(row, "vmax_event_pu"),
        loss_allowance_frac=_frac(row, "loss_allowance_pct"),
        real_discount_rate_frac=_frac(row, "real_discount_rate_pct"),
        capital_budget=row.number("budget"),
        energy_price_per_kwh=_number(row, "energy_price_per_kwh"),
        export_price_per_kwh=row.number("export_price_per_kwh"),
        demand_charge_per_kw_year=_number(row, "demand_charge_per_kw_year"),
        stored_energy_price_per_kwh=row.number("stored_energy_price_per_kwh"),
        surplus_cost_per_kwh=_number(row, "surplus_cost_per_kwh"),
        rate_basis=parts.RateBasis(_text(row, "rate_basis")),
        bulk_supply_outage_class=row.text("bulk_supply_outage_class"),
        repair_spread=parts.RepairSpread(_text(row, "repair_spread")),
        load_control=parts.LoadControl(_text(row, "load_control")),
        island_ratio=_number(row, "island_ratio"),
        island_headroom_frac=_frac(row, "island_headroom_pct"),
        measured_peak_kw=row.number("measured_peak_kw"),
        history_saifi=row.number("history_saifi"),
        history_saidi_h=None if saidi_minutes is None else hours_from_minutes(saidi_minutes),
        gap_target_frac=_frac(row, "gap_target_pct"),
        time_limit_h=hours_from_minutes(_number(row, "time_limit_minutes")),
        samples=int(_number(row, "samples")),
        random_seed=int(_number(row, "random_seed")),
        risk_weight_frac=_frac(row, "risk_weight_pct"),
        risk_tail_frac=_frac(row, "risk_tail_pct"),
        origin_of=_settings_origins(row),
    )


def _settings_origins(row: CheckedRow) -> dict[str, Origin]:
    origins = {}
    for key, cell in row.row.cells.items():
        match = re.fullmatch(r"([A-Z]+)([0-9]+)", cell.address)
        if match:
            origins[key] = Origin(row.row.sheet, int(match[2]), {key: match[1]})
    return origins


def bus_of(row: CheckedRow) -> parts.Bus:
    return parts.Bus(
        bus=_text(row, "bus"),
        name=_text(row, "name"),
        capacitor_kvar=_number(row, "capacitor_kvar"),
        x=row.number("x"),
        y=row.number("y"),
        origin=row.row.origin,
    )


def load_of(row: CheckedRow) -> parts.Load:
    return parts.Load(
        load=_text(row, "load"),
        bus=_text(row, "bus"),
        customer_class=_text(row, "customer_class"),
        peak_kw=_number(row, "peak_kw"),
        power_factor=_number(row, "power_factor"),
        customers=_number(row, "customers"),
        load_profile=row.text("load_profile"),
        remote_disconnect_frac=_frac(row, "remote_disconnect_pct"),
        origin=row.row.origin,
    )


def line_of(row: CheckedRow, conductors: dict[str, CheckedRow], base_kv: float) -> parts.Line:
    """Impedance as totals; the rating typed, else of the conductor's ampacity, else none."""
    length = _number(row, "length")
    conductor = conductors.get(_text(row, "conductor"))
    per_length = conductor if conductor is not None else row
    if "r_ohm" in row.typed:
        r_ohm, x_ohm = _number(row, "r_ohm"), _number(row, "x_ohm")
    else:
        r_ohm = length * _number(per_length, "r_ohm_per_length")
        x_ohm = length * _number(per_length, "x_ohm_per_length")
    rating_kva = row.number("rating_kva")
    ampacity_a = conductor.number("ampacity_a") if conductor is not None else None
    if rating_kva is None:
        rating_kva = inf if ampacity_a is None else kva_from_ampere(ampacity_a, base_kv)
    return parts.Line(
        line=_text(row, "line"),
        from_bus=_text(row, "from_bus"),
        to_bus=_text(row, "to_bus"),
        length=length,
        r_ohm=r_ohm,
        x_ohm=x_ohm,
        rating_kva=rating_kva,
        boost_frac=_frac(row, "boost_pct"),
        from_device=device_of(row, "from_device"),
        to_device=device_of(row, "to_device"),
        normally_open=row.is_yes("normally_open"),
        outage_class=row.text("outage_class"),
        origin=row.row.origin,
    )


def supply_of(row: CheckedRow) -> parts.NeighbourSupply:
    return parts.NeighbourSupply(
        supply=_text(row, "supply"),
        bus=_text(row, "bus"),
        spare_kw=_number(row, "spare_kw"),
        spare_profile=row.text("spare_profile"),
        shares_bulk_supply=row.is_yes("shares_bulk_supply"),
        origin=row.row.origin,
    )


def generator_of(row: CheckedRow, period_minutes: float) -> parts.Generator:
    """Costs that only a candidate, or only a unit that burns fuel, needs are 0 where blank."""
    technology = parts.Technology(_text(row, "technology"))
    tank_h = row.number("tank_hours")
    ramp_frac = _optional_frac(row, "ramp_pct_per_minute")
    if ramp_frac is not None:
        ramp_frac *= period_minutes
    return parts.Generator(
        generator=_text(row, "generator"),
        bus=_text(row, "bus"),
        technology=technology,
        profile=None if technology is parts.Technology.DISPATCHABLE else row.text("profile"),
        existing_kw=_number(row, "existing_kw"),
        max_new_kw=_number(row, "max_new_kw"),
        step_kw=row.number("step_kw"),
        capital_cost_per_kw=_number_or(row, "capital_cost_per_kw", 0.0),
        capital_site_cost=_number(row, "site_cost"),
        grant_frac=_frac(row, "grant_pct"),
        fixed_om_per_kw=_number(row, "fixed_om_per_kw_year"),
        life_years=_number(row, "life_years"),
        running_cost_per_kwh=_number_or(row, "running_cost_per_kwh", 0.0),
        is_outage_only=row.is_yes("outage_only"),
        ramp_frac_per_period=None if ramp_frac is None or ramp_frac >= 1.0 else ramp_frac,
        start_delay_h=hours_from_minutes(_number(row, "start_delay_minutes")),
        start_failure_frac=_frac(row, "start_failure_pct"),
        tank_h=tank_h,
        refill_delay_h=_number(row, "refill_delay_hours"),
        refill_frac_per_h=None if tank_h is None else _optional_frac(row, "refill_pct_per_hour"),
        is_grid_forming=row.is_yes("grid_forming"),
        outage_class=row.text("outage_class"),
        origin=row.row.origin,
    )


def storage_of(
    row: CheckedRow, curves: dict[str, tuple[tuple[float, float], ...]]
) -> parts.Storage:
    name = row.text("curve")
    return parts.Storage(
        storage=_text(row, "storage"),
        bus=_text(row, "bus"),
        existing_kw=_number(row, "existing_kw"),
        existing_kwh=_number(row, "existing_kwh"),
        max_new_kw=_number(row, "max_new_kw"),
        max_new_kwh=_number(row, "max_new_kwh"),
        step_kw=row.number("step_kw"),
        longest_h=row.number("longest_hours"),
        capital_cost_per_kw=_number_or(row, "capital_cost_per_kw", 0.0),
        capital_cost_per_kwh=_number_or(row, "capital_cost_per_kwh", 0.0),
        capital_site_cost=_number(row, "site_cost"),
        grant_frac=_frac(row, "grant_pct"),
        fixed_om_per_kw=_number(row, "fixed_om_per_kw_year"),
        life_years=_number(row, "life_years"),
        curve=curves[name]
        if name is not None
        else round_trip_curve(_frac(row, "round_trip_efficiency_pct")),
        start_soc_frac=_frac(row, "start_soc_pct"),
        min_soc_frac=_frac(row, "min_soc_pct"),
        is_grid_forming=row.is_yes("grid_forming"),
        outage_class=row.text("outage_class"),
        origin=row.row.origin,
    )


def round_trip_curve(round_trip_frac: float) -> tuple[tuple[float, float], ...]:
    """Loss curve of a round-trip efficiency: its square root is lost each way (model.md 4).

    The end points are those at which the terminal is at its rating.

    >>> round_trip_curve(0.81)
    ((-0.9, -1.0), (0.0, 0.0), (1.1111111111111112, 1.0))
    """
    one_way = sqrt(round_trip_frac)
    if one_way == 1.0:
        return ((-1.0, -1.0), (0.0, 0.0), (1.0, 1.0))
    return ((-one_way, -1.0), (0.0, 0.0), (1.0 / one_way, 1.0))


def curves_of(checked: CheckedStudy) -> dict[str, tuple[tuple[float, float], ...]]:
    """Upper hull of each loss curve's points and (0, 0), which is kept as a point."""
    points: dict[str, list[tuple[float, float]]] = {}
    spelling: dict[str, str] = {}
    for row in checked.rows("Storage curves"):
        name = spelling.setdefault(fold(_text(row, "curve")), _text(row, "curve"))
        point = (_frac(row, "store_power_pct"), _frac(row, "terminal_power_pct"))
        points.setdefault(name, [(0.0, 0.0)]).append(point)
    return {name: _with_origin(upper_hull(found)) for name, found in points.items()}


def _with_origin(hull: tuple[tuple[float, float], ...]) -> tuple[tuple[float, float], ...]:
    """A hull that is straight through (0, 0), as without losses, leaves it out."""
    return tuple(sorted({*hull, (0.0, 0.0)}))


def outage_class_of(row: CheckedRow) -> parts.OutageClass:
    return parts.OutageClass(
        outage_class=_text(row, "outage_class"),
        failures_per_year=_number(row, "failures_per_year"),
        failures_per_length_year=_number(row, "failures_per_length_year"),
        repair_h=_number(row, "repair_hours"),
        switching_h=hours_from_minutes(_number(row, "switching_minutes")),
        is_weather_exposed=row.is_yes("weather_exposed"),
        repair_cost_per_failure=_number(row, "repair_cost_per_failure"),
        is_included=row.is_yes("included"),
        figure_from=_text(row, "figure_from"),
        origin=row.row.origin,
    )


def measure_of(row: CheckedRow) -> parts.Measure:
    lines = row.values["lines"]
    return parts.Measure(
        measure=_text(row, "measure"),
        lines=lines if isinstance(lines, tuple) else (),
        capital_cost=_number(row, "capital_cost"),
        grant_frac=_frac(row, "grant_pct"),
        life_years=_number(row, "life_years"),
        fixed_om=_number(row, "fixed_om_per_year"),
        failures_avoided_frac=_frac(row, "failures_avoided_pct"),
        origin=row.row.origin,
    )


def customer_class_of(row: CheckedRow) -> parts.CustomerClass:
    return parts.CustomerClass(
        customer_class=_text(row, "customer_class"),
        is_critical=row.is_yes("critical"),
        cost_0h_per_kw=_number(row, "cost_0h_per_kw"),
        cost_1h_per_kw=_number(row, "cost_1h_per_kw"),
        cost_4h_per_kw=_number(row, "cost_4h_per_kw"),
        cost_8h_per_kw=_number(row, "cost_8h_per_kw"),
        cost_after_8h_per_kwh=_number(row, "cost_after_8h_per_kwh"),
        origin=row.row.origin,
    )


def profiles_of(checked: CheckedStudy) -> parts.Profiles:
    columns = profile_rows(checked)
    return parts.Profiles(
        times=columns.times,
        values={
            name: np.array([0.0 if value is None else value for value in values])
            for name, values in columns.values.items()
        },
        origin=columns.rows[0].row.origin,
    )


def windows_of(checked: CheckedStudy, period_h: float) -> tuple[parts.Window, ...]:
    profiles = profile_rows(checked)
    windows = []
    for row in checked.rows("Windows"):
        start_row = profiles.row_at(row.values.get("starts_at"))
        if start_row is None:
            raise ValueError(f"window {row.text('window')} starts nowhere")
        windows.append(
            parts.Window(
                window=_text(row, "window"),
                occurrences_per_year=_number(row, "occurrences_per_year"),
                start_row=start_row,
                n_period=round(_number(row, "hours") / period_h),
                load_multiplier=_number(row, "load_multiplier"),
                price_profile=row.text("price_profile"),
                failure_multiplier=_number(row, "failure_multiplier"),
                repair_multiplier=_number(row, "repair_multiplier"),
                failure_profile=row.text("failure_profile"),
                start_soc_frac=_optional_frac(row, "start_soc_pct"),
                counts_for_demand=row.is_yes("counts_for_demand"),
                is_storm=row.is_yes("storm"),
                origin=row.row.origin,
            )
        )
    return tuple(windows)


def alternative_of(row: CheckedRow) -> parts.Alternative:
    return parts.Alternative(
        alternative=_text(row, "alternative"),
        description=_text(row, "description"),
        kind=_text(row, "kind"),
        capital_budget=row.number("budget"),
        ignores_outages=row.is_yes("ignores_outages"),
        origin=row.row.origin,
    )


def purchase_of(row: CheckedRow) -> parts.FixedPurchase:
    return parts.FixedPurchase(
        alternative=_text(row, "alternative"),
        asset=_text(row, "asset"),
        kw=_number(row, "kw"),
        kwh=_number(row, "kwh"),
        is_bought=row.is_yes("buy"),
        origin=row.row.origin,
    )


def device_change_of(row: CheckedRow) -> parts.DeviceChange:
    switching_minutes = row.number("switching_minutes")
    return parts.DeviceChange(
        alternative=_text(row, "alternative"),
        line=_text(row, "line"),
        from_device=device_of(row, "from_device") if "from_device" in row.typed else None,
        to_device=device_of(row, "to_device") if "to_device" in row.typed else None,
        switching_h=None if switching_minutes is None else hours_from_minutes(switching_minutes),
        capital_cost=_number(row, "capital_cost"),
        life_years=_number(row, "life_years"),
        origin=row.row.origin,
    )


def sensitivity_of(row: CheckedRow) -> parts.Sensitivity:
    return parts.Sensitivity(
        parameter=_text(row, "parameter"),
        low=_number(row, "low"),
        high=_number(row, "high"),
        origin=row.row.origin,
    )
