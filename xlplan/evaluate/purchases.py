"""What a plan buys and what that costs: from the first stage's columns back to assets.

The capital, grants and yearly cost are worked out again from the study, not read off the program's
costs, so that the two can be held against each other.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from xlplan.base.units import minutes_from_hours
from xlplan.evaluate.results import Purchase
from xlplan.model.dispatch import Purchases
from xlplan.model.purchase import FirstStage
from xlplan.study.economics import capital_recovery_factor
from xlplan.study.study import Device, DeviceChange, Study

FloatArray = NDArray[np.float64]

DEVICE = "device"
"""Kind of a purchase that is another device on a line."""

BOUGHT_TOLERANCE = 1e-6
"""kW or kWh below this are rounding of the solver, not a purchase."""


def read_purchases(first_stage: FirstStage, x: FloatArray) -> Purchases:
    """Purchases from a solution of the first stage; rounding below a watt is dropped."""

    def pick(columns: tuple[int, ...]) -> FloatArray:
        values = np.array([x[c] if c >= 0 else 0.0 for c in columns], dtype=float)
        return np.where(np.abs(values) < BOUGHT_TOLERANCE, 0.0, values)

    return Purchases(
        generator_kw=pick(first_stage.generator_kw),
        storage_kw=pick(first_stage.storage_kw),
        storage_kwh=pick(first_stage.storage_kwh),
        is_hardened=pick(first_stage.hardening) > 0.5,
        demand_kw=float(x[first_stage.demand_kw]),
    )


def price_purchases(
    study: Study, bought: Purchases, device_changes: Sequence[DeviceChange] = ()
) -> tuple[Purchase, ...]:
    """Every asset that can be bought, with what is bought of it and what that costs.

    A site cost is paid where anything is bought there. ``device_changes`` are always bought.
    """
    rate = study.settings.real_discount_rate_frac
    rows: list[Purchase] = []

    def add(
        asset: str,
        kind: str,
        place: str,
        kw: float,
        kwh: float,
        most: tuple[float, float],
        unit_costs: tuple[float, float, float],
        grant: float,
        life: float,
        om_rate: float,
        is_bought: bool,
    ) -> None:
        per_kw, per_kwh, site = unit_costs
        factor = capital_recovery_factor(rate, life)
        gross = per_kw * kw + per_kwh * kwh + (site if is_bought else 0.0)
        net = gross * (1.0 - grant)
        om = om_rate * (float(is_bought) if kind == "hardening" else kw)
        rows.append(
            Purchase(
                asset=asset,
                kind=kind,
                place=place,
                kw=kw,
                kwh=kwh,
                is_bought=is_bought,
                max_new_kw=most[0],
                max_new_kwh=most[1],
                capital_per_kw=per_kw,
                capital_per_kwh=per_kwh,
                capital_site=site,
                grant_frac=grant,
                life_years=life,
                crf=factor,
                fixed_om_rate=om_rate,
                capital_gross=gross,
                capital_net=net,
                investment=net * factor,
                fixed_om=om,
            )
        )

    for i, store in enumerate(study.storage):
        if store.max_new_kw > 0.0 or store.max_new_kwh > 0.0:
            kw, kwh = float(bought.storage_kw[i]), float(bought.storage_kwh[i])
            add(
                store.storage,
                "storage",
                store.bus,
                kw,
                kwh,
                (store.max_new_kw, store.max_new_kwh),
                (store.capital_cost_per_kw, store.capital_cost_per_kwh, store.capital_site_cost),
                store.grant_frac,
                store.life_years,
                store.fixed_om_per_kw,
                kw > 0.0 or kwh > 0.0,
            )
    for i, unit in enumerate(study.generators):
        if unit.max_new_kw > 0.0:
            kw = float(bought.generator_kw[i])
            add(
                unit.generator,
                "generator",
                unit.bus,
                kw,
                0.0,
                (unit.max_new_kw, 0.0),
                (unit.capital_cost_per_kw, 0.0, unit.capital_site_cost),
                unit.grant_frac,
                unit.life_years,
                unit.fixed_om_per_kw,
                kw > 0.0,
            )
    for i, measure in enumerate(study.measures):
        add(
            measure.measure,
            "hardening",
            ", ".join(measure.lines),
            0.0,
            0.0,
            (0.0, 0.0),
            (0.0, 0.0, measure.capital_cost),
            measure.grant_frac,
            measure.life_years,
            measure.fixed_om,
            bool(bought.is_hardened[i]),
        )
    for change in device_changes:
        add(
            device_words(change),
            DEVICE,
            change.line,
            0.0,
            0.0,
            (0.0, 0.0),
            (0.0, 0.0, change.capital_cost),
            0.0,
            change.life_years,
            0.0,
            True,
        )
    return tuple(rows)


def device_words(change: DeviceChange) -> str:
    """A device change as an asset: ``L05: recloser at the from end``."""
    parts = [
        f"{device.value if device is not Device.NONE else 'no device'} at the {end} end"
        for device, end in ((change.from_device, "from"), (change.to_device, "to"))
        if device is not None
    ]
    if change.switching_h is not None:
        parts.append(f"switching in {minutes_from_hours(change.switching_h):g} minutes")
    return f"{change.line}: {', '.join(parts) or 'unchanged'}"


def net_capital(purchases: Sequence[Purchase]) -> float:
    """Capital less grants."""
    return sum(p.capital_net for p in purchases)
