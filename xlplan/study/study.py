"""What the planner meant: one frozen record per row of the workbook, in kW, kWh, hours, fractions.

``build.py`` makes these from tables and alone converts units. Values are validated before they get
here; ``None`` means "no limit" or "not given" exactly where a field says so. Money is real, before
tax; per year unless the name starts with ``capital_``; a price says per what.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from xlplan.base.errors import Origin

FloatArray = NDArray[np.float64]

NOWHERE = Origin(sheet="", row=0)


class Device(StrEnum):
    """What a line end carries."""

    BREAKER = "breaker"
    RECLOSER = "recloser"
    FUSE = "fuse"
    SWITCH = "switch"
    NONE = "none"

    @property
    def is_protective(self) -> bool:
        """True if the device opens by itself on a fault beyond it."""
        return self in (Device.BREAKER, Device.RECLOSER, Device.FUSE)


class Technology(StrEnum):
    """How a generator's output is decided."""

    DISPATCHABLE = "dispatchable"
    SOLAR = "solar"
    WIND = "wind"


class RateBasis(StrEnum):
    """What the typed yearly failure rates refer to (model.md section 2)."""

    FAIR_WEATHER = "fair weather"
    ALL_YEAR = "all year"


class RepairSpread(StrEnum):
    """Whether repair times are single numbers or spread over three points."""

    NONE = "none"
    THREE_POINT = "three point"


class LoadControl(StrEnum):
    """Whether loads are shed by section, in one share, or freely by bus."""

    SECTION = "section"
    BUS = "bus"


@dataclass(frozen=True)
class Settings:
    """The Settings sheet. ``None``: budget without limit, no sale, no measured history."""

    study_name: str
    prepared_by: str
    currency: str
    price_year: int | None
    source_bus: str
    base_kv: float
    source_voltage_pu: float
    substation_limit_kva: float
    length_unit: str
    period_h: float
    vmin_pu: float
    vmax_pu: float
    vmin_event_pu: float
    vmax_event_pu: float
    loss_allowance_frac: float
    real_discount_rate_frac: float
    capital_budget: float | None
    energy_price_per_kwh: float
    export_price_per_kwh: float | None
    demand_charge_per_kw_year: float
    stored_energy_price_per_kwh: float | None
    surplus_cost_per_kwh: float
    rate_basis: RateBasis
    bulk_supply_outage_class: str | None
    repair_spread: RepairSpread
    load_control: LoadControl
    island_ratio: float
    island_headroom_frac: float
    measured_peak_kw: float | None
    history_saifi: float | None
    history_saidi_h: float | None
    gap_target_frac: float
    time_limit_h: float
    samples: int
    random_seed: int
    risk_weight_frac: float
    risk_tail_frac: float
    origin_of: dict[str, Origin] = field(default_factory=dict)
    """Where each key stands (``Origin.cell(key)`` gives its cell)."""


@dataclass(frozen=True)
class Bus:
    """A bus; capacitors give between 0 and their kvar."""

    bus: str
    name: str
    capacitor_kvar: float
    x: float | None
    y: float | None
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class Load:
    """A group of customers at a bus, all of one class."""

    load: str
    bus: str
    customer_class: str
    peak_kw: float
    power_factor: float
    customers: float
    load_profile: str | None
    remote_disconnect_frac: float
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class Line:
    """A line section, transformer or tie; ``r_ohm`` and ``x_ohm`` are totals.

    ``rating_kva`` is ``inf`` where none is given (nor a conductor's ampacity).
    """

    line: str
    from_bus: str
    to_bus: str
    length: float
    r_ohm: float
    x_ohm: float
    rating_kva: float
    boost_frac: float
    from_device: Device
    to_device: Device
    normally_open: bool
    outage_class: str | None
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class NeighbourSupply:
    """A normally open tie to another source, at a bus."""

    supply: str
    bus: str
    spare_kw: float
    spare_profile: str | None
    shares_bulk_supply: bool
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class Generator:
    """What exists and what can be bought in one row: one unit. kVA = kW.

    ``ramp_frac_per_period`` None: no ramp limit (also where a period allows the whole rating);
    ``tank_h`` None: fuel without limit; ``refill_frac_per_h`` None: refills at once when it may;
    ``step_kw`` None: continuous; ``site_cost`` 0: no binary.
    """

    generator: str
    bus: str
    technology: Technology
    profile: str | None
    existing_kw: float
    max_new_kw: float
    step_kw: float | None
    capital_cost_per_kw: float
    capital_site_cost: float
    grant_frac: float
    fixed_om_per_kw: float
    life_years: float
    running_cost_per_kwh: float
    is_outage_only: bool
    ramp_frac_per_period: float | None
    start_delay_h: float
    start_failure_frac: float
    tank_h: float | None
    refill_delay_h: float
    refill_frac_per_h: float | None
    is_grid_forming: bool
    outage_class: str | None
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class Storage:
    """What exists and what can be bought in one row: one unit. Inverter kVA = kW.

    ``curve`` holds the points of the concave loss curve, ascending in store power, as (store
    power, terminal power) shares of the rating, discharge positive, (0, 0) among them; two straight
    edges from the round-trip efficiency where the study names no curve.
    ``longest_h`` None: no limit on kWh per kW; it binds what is bought.
    """

    storage: str
    bus: str
    existing_kw: float
    existing_kwh: float
    max_new_kw: float
    max_new_kwh: float
    step_kw: float | None
    longest_h: float | None
    capital_cost_per_kw: float
    capital_cost_per_kwh: float
    capital_site_cost: float
    grant_frac: float
    fixed_om_per_kw: float
    life_years: float
    curve: tuple[tuple[float, float], ...]
    start_soc_frac: float
    min_soc_frac: float
    is_grid_forming: bool
    outage_class: str | None
    origin: Origin = NOWHERE

    @property
    def edges(self) -> tuple[tuple[float, float], ...]:
        """(m, n) of every edge of the curve: terminal <= m * store + n * kW."""
        lines = []
        for (z0, b0), (z1, b1) in zip(self.curve, self.curve[1:], strict=False):
            slope = (b1 - b0) / (z1 - z0)
            lines.append((slope, b0 - slope * z0))
        return tuple(lines)

    @property
    def charging_efficiency(self) -> float:
        """Energy stored per energy taken in at the least efficient charging point."""
        return min((z / b for z, b in self.curve if b < 0), default=1.0)


@dataclass(frozen=True)
class OutageClass:
    """How often and how long a kind of component fails. ``repair_h`` runs from the failure."""

    outage_class: str
    failures_per_year: float
    failures_per_length_year: float
    repair_h: float
    switching_h: float
    is_weather_exposed: bool
    repair_cost_per_failure: float
    is_included: bool
    figure_from: str
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class Measure:
    """A hardening measure: avoids a share of the failures of its lines."""

    measure: str
    lines: tuple[str, ...]
    capital_cost: float
    grant_frac: float
    life_years: float
    fixed_om: float
    failures_avoided_frac: float
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class CustomerClass:
    """Cost of an interruption to customers: totals per kW at 0, 1, 4, 8 h, per kWh after that."""

    customer_class: str
    is_critical: bool
    cost_0h_per_kw: float
    cost_1h_per_kw: float
    cost_4h_per_kw: float
    cost_8h_per_kw: float
    cost_after_8h_per_kwh: float
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class Profiles:
    """Profile columns by name, all of one length; ``times`` as typed, in row order."""

    times: tuple[object, ...]
    values: dict[str, FloatArray]
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class Window:
    """A stretch of ``n_period`` periods from profile row ``start_row`` (0-based)."""

    window: str
    occurrences_per_year: float
    start_row: int
    n_period: int
    load_multiplier: float
    price_profile: str | None
    failure_multiplier: float
    repair_multiplier: float
    failure_profile: str | None
    start_soc_frac: float | None
    counts_for_demand: bool
    is_storm: bool
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class Alternative:
    """An alternative of the user's; ``kind`` is optimise, fixed or existing."""

    alternative: str
    description: str
    kind: str
    capital_budget: float | None
    ignores_outages: bool
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class FixedPurchase:
    """One purchase of a fixed alternative; ``asset`` is a generator, storage or measure."""

    alternative: str
    asset: str
    kw: float
    kwh: float
    is_bought: bool
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class DeviceChange:
    """Other devices on one line, in one alternative."""

    alternative: str
    line: str
    from_device: Device | None
    to_device: Device | None
    switching_h: float | None
    capital_cost: float
    life_years: float
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class Sensitivity:
    """What to vary, as multipliers (the discount rate in points)."""

    parameter: str
    low: float
    high: float
    origin: Origin = NOWHERE


@dataclass(frozen=True)
class Study:
    """One study workbook, understood. Order within each tuple is the order of the rows."""

    settings: Settings
    buses: tuple[Bus, ...]
    loads: tuple[Load, ...]
    lines: tuple[Line, ...]
    supplies: tuple[NeighbourSupply, ...]
    generators: tuple[Generator, ...]
    storage: tuple[Storage, ...]
    outage_classes: tuple[OutageClass, ...]
    measures: tuple[Measure, ...]
    customer_classes: tuple[CustomerClass, ...]
    profiles: Profiles
    windows: tuple[Window, ...]
    alternatives: tuple[Alternative, ...] = ()
    fixed_purchases: tuple[FixedPurchase, ...] = ()
    device_changes: tuple[DeviceChange, ...] = ()
    sensitivities: tuple[Sensitivity, ...] = ()
    fingerprint: str = ""
    """``sha256:...`` of the study file."""
