"""The features of the model that a study can use, and which ones a given study really uses."""

from __future__ import annotations

import math

from xlplan.study.study import Device, LoadControl, RateBasis, RepairSpread, Study, Technology

FEATURES = (
    "storage",
    "storage curve",
    "existing storage",
    "storage steps",
    "storage site cost",
    "longest hours",
    "start charge by window",
    "generator",
    "existing generator",
    "ramp",
    "start delay",
    "start failure",
    "tank",
    "refill",
    "outage only",
    "generator steps",
    "generator site cost",
    "solar",
    "wind",
    "grant",
    "budget",
    "demand charge",
    "substation limit",
    "first-moment cost",
    "bus load control",
    "remote disconnection",
    "forming storage",
    "forming generator",
    "following unit",
    "island headroom",
    "boost",
    "sale",
    "loss allowance",
    "several windows",
    "load multiplier",
    "price profile",
    "load profile",
    "tie",
    "neighbour supply",
    "neighbour supply sharing the bulk supply",
    "supply profile",
    "bulk supply failure",
    "generator failure",
    "storage failure",
    "three-point repair",
    "weather exposure",
    "failure profile",
    "failure multiplier",
    "repair multiplier",
    "all-year rates",
    "capacitor",
    "line rating",
    "tight voltage",
    "reactive load",
    "breaker",
    "recloser",
    "fuse",
    "switch",
    "bare line end",
    "reversed line",
    "isolation",
    "hardening",
    "exclusive hardening",
    "stored-energy price",
    "default stored-energy price",
    "repair outlasting the window",
    "repair cost",
    "no discount",
)
"""What a study can use; every one is used by some seed below 30 (tests/test_builders.py)."""

ALWAYS_DRAWN = frozenset({"breaker", "repair outlasting the window"})
"""Present in every random study: the source's breaker; failures strike in the last period too."""


def feature_names(study: Study) -> set[str]:
    """Features of ``FEATURES`` that a study really uses.

    Parameters
    ----------
    study : Study

    Returns
    -------
    set of names; read off the records, so that a study made any other way can be asked too
    """
    used = {name for name, is_used in _unit_features(study).items() if is_used}
    used |= {name for name, is_used in _network_features(study).items() if is_used}
    return used | {name for name, is_used in _money_features(study).items() if is_used}


def _unit_features(study: Study) -> dict[str, bool]:
    settings, stores = study.settings, study.storage
    fuelled = [u for u in study.generators if u.technology is Technology.DISPATCHABLE]
    followers = [u for u in (*stores, *study.generators) if not u.is_grid_forming]
    formers = [u for u in (*stores, *study.generators) if u.is_grid_forming]
    classes = {c.outage_class for c in study.outage_classes if c.is_included}
    return {
        "storage": bool(stores),
        "storage curve": any(len(u.curve) > 3 for u in stores),
        "existing storage": any(u.existing_kw > 0 and u.existing_kwh > 0 for u in stores),
        "storage steps": any(u.step_kw and u.max_new_kw for u in stores),
        "storage site cost": any(u.capital_site_cost and u.max_new_kw for u in stores),
        "longest hours": any(u.longest_h and u.max_new_kw for u in stores),
        "start charge by window": bool(stores)
        and any(w.start_soc_frac is not None for w in study.windows),
        "generator": bool(fuelled),
        "existing generator": any(u.existing_kw > 0 for u in fuelled),
        "ramp": any(u.ramp_frac_per_period is not None for u in fuelled),
        "start delay": any(u.start_delay_h > 0 for u in fuelled),
        "start failure": any(u.start_failure_frac > 0 for u in fuelled),
        "tank": any(u.tank_h is not None for u in fuelled),
        "refill": any(u.tank_h is not None and u.refill_frac_per_h is not None for u in fuelled),
        "outage only": any(u.is_outage_only for u in fuelled),
        "generator steps": any(u.step_kw and u.max_new_kw for u in fuelled),
        "generator site cost": any(u.capital_site_cost and u.max_new_kw for u in fuelled),
        "solar": any(u.technology is Technology.SOLAR for u in study.generators),
        "wind": any(u.technology is Technology.WIND for u in study.generators),
        "forming storage": any(u.is_grid_forming for u in stores),
        "forming generator": any(u.is_grid_forming for u in fuelled),
        "following unit": bool(followers) and bool(formers),
        "island headroom": settings.island_headroom_frac > 0 and bool(formers),
        "generator failure": any(u.outage_class in classes and u.existing_kw > 0 for u in fuelled),
        "storage failure": any(u.outage_class in classes and u.existing_kw > 0 for u in stores),
        "stored-energy price": bool(stores) and settings.stored_energy_price_per_kwh is not None,
        "default stored-energy price": bool(stores)
        and settings.stored_energy_price_per_kwh is None,
    }


def _network_features(study: Study) -> dict[str, bool]:
    settings, lines, windows = study.settings, study.lines, study.windows
    classes = {c.outage_class: c for c in study.outage_classes if c.is_included}
    failing = [x for x in lines if x.outage_class in classes and not x.normally_open]
    devices = {end for line in lines for end in (line.from_device, line.to_device)}
    exposed = any(classes[x.outage_class or ""].is_weather_exposed for x in failing)
    has_failures = bool(failing) or settings.bulk_supply_outage_class in classes
    shared = [
        line
        for line in failing
        if sum(line.line in measure.lines for measure in study.measures) > 1
    ]
    is_hardened = any(x.line in measure.lines for x in failing for measure in study.measures)
    return {
        "boost": any(line.boost_frac != 0 for line in lines),
        "tie": any(line.normally_open for line in lines),
        "neighbour supply": any(not s.shares_bulk_supply for s in study.supplies),
        "neighbour supply sharing the bulk supply": any(
            s.shares_bulk_supply for s in study.supplies
        ),
        "supply profile": any(s.spare_profile is not None for s in study.supplies),
        "bulk supply failure": settings.bulk_supply_outage_class in classes,
        "three-point repair": settings.repair_spread is RepairSpread.THREE_POINT and has_failures,
        "weather exposure": exposed,
        "failure profile": exposed and any(w.failure_profile is not None for w in windows),
        "failure multiplier": exposed and any(w.failure_multiplier != 1 for w in windows),
        "repair multiplier": exposed and any(w.repair_multiplier != 1 for w in windows),
        "all-year rates": settings.rate_basis is RateBasis.ALL_YEAR and has_failures,
        "capacitor": any(bus.capacitor_kvar > 0 for bus in study.buses),
        "line rating": any(math.isfinite(x.rating_kva) and not x.normally_open for x in lines),
        "tight voltage": settings.vmin_pu >= 0.95,
        "breaker": Device.BREAKER in devices,
        "recloser": Device.RECLOSER in devices,
        "fuse": Device.FUSE in devices,
        "switch": Device.SWITCH in devices,
        "bare line end": any(
            Device.NONE in (x.from_device, x.to_device) for x in lines if not x.normally_open
        ),
        "reversed line": any(x.to_bus == settings.source_bus for x in lines),
        "isolation": any(c.switching_h > 0 for c in classes.values()),
        "hardening": is_hardened,
        "exclusive hardening": bool(shared),
        "repair outlasting the window": has_failures,
        "repair cost": any(c.repair_cost_per_failure > 0 for c in classes.values()),
    }


def _money_features(study: Study) -> dict[str, bool]:
    settings, windows = study.settings, study.windows
    assets = (*study.storage, *study.generators, *study.measures)
    return {
        "grant": any(asset.grant_frac > 0 for asset in assets),
        "budget": settings.capital_budget is not None and bool(assets),
        "demand charge": settings.demand_charge_per_kw_year > 0,
        "substation limit": settings.substation_limit_kva
        < 1.5 * sum(load.peak_kw for load in study.loads),
        "first-moment cost": any(c.cost_0h_per_kw > 0 for c in study.customer_classes),
        "bus load control": settings.load_control is LoadControl.BUS,
        "remote disconnection": settings.load_control is LoadControl.SECTION
        and any(load.remote_disconnect_frac > 0 for load in study.loads),
        "sale": settings.export_price_per_kwh is not None,
        "loss allowance": settings.loss_allowance_frac > 0,
        "several windows": len(windows) > 1,
        "load multiplier": any(w.load_multiplier != 1 for w in windows),
        "price profile": any(w.price_profile is not None for w in windows),
        "load profile": any(load.load_profile is not None for load in study.loads),
        "reactive load": any(load.power_factor < 1 for load in study.loads),
        "no discount": settings.real_discount_rate_frac == 0,
    }
