"""A study with changes: other devices, another budget, one assumption varied.

Enters: a study, and what to change. Leaves: a new study; nothing of the old one is touched.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TypeVar

from xlplan.base.units import frac_from_pct
from xlplan.study.study import (
    CustomerClass,
    DeviceChange,
    Generator,
    Measure,
    OutageClass,
    Storage,
    Study,
    Window,
)

Record = TypeVar("Record", CustomerClass, Generator, Measure, OutageClass, Storage, Window)

PRICE_PARAMETERS = ("storage cost", "generator cost", "hardening cost", "discount rate")
"""Assumptions that change what purchases cost and nothing of how the feeder runs."""

REPAIR_TIMES = "repair times"


def device_changes_of(study: Study, alternative: str) -> tuple[DeviceChange, ...]:
    """The device changes of one alternative, in the order of the rows."""
    return tuple(change for change in study.device_changes if change.alternative == alternative)


def with_devices(study: Study, changes: tuple[DeviceChange, ...]) -> Study:
    """The study with other devices on some lines.

    A new switching time holds for faults of its line alone: the line gets an outage class of its
    own, equal to the old one but for that time.
    """
    lines = {line.line: line for line in study.lines}
    classes = {one.outage_class: one for one in study.outage_classes}
    added: dict[str, OutageClass] = {}
    for change in changes:
        line = lines[change.line]
        if change.from_device is not None:
            line = replace(line, from_device=change.from_device)
        if change.to_device is not None:
            line = replace(line, to_device=change.to_device)
        if change.switching_h is not None and line.outage_class is not None:
            old = added.get(line.outage_class) or classes[line.outage_class]
            name = f"{old.outage_class} ({line.line})" if line.outage_class in classes else ""
            name = name or old.outage_class
            added[name] = replace(old, outage_class=name, switching_h=change.switching_h)
            line = replace(line, outage_class=name)
        lines[change.line] = line
    return replace(
        study,
        lines=tuple(lines[line.line] for line in study.lines),
        outage_classes=(*study.outage_classes, *added.values()),
    )


def with_budget(study: Study, capital_budget: float | None) -> Study:
    """The study with another budget; None: no limit."""
    return replace(study, settings=replace(study.settings, capital_budget=capital_budget))


def vary(study: Study, parameter: str, value: float) -> Study:
    """The study with one assumption changed.

    Parameters
    ----------
    study : Study
    parameter : str, as on the Sensitivities sheet
    value : float, multiplier; for the discount rate points (percent) added

    Returns
    -------
    Study

    Notes
    -----
    Costs of assets vary in capital only, not in O&M; the energy price varies with the sale price
    and the price of stored energy; load varies through the windows' multipliers.

    Raises ValueError for a parameter that is not on the sheet.
    """
    settings = study.settings
    if parameter == "failure rates":
        return replace(
            study,
            outage_classes=tuple(
                _scaled(one, value, "failures_per_year", "failures_per_length_year")
                for one in study.outage_classes
            ),
        )
    if parameter == REPAIR_TIMES:
        return replace(
            study,
            outage_classes=tuple(_scaled(one, value, "repair_h") for one in study.outage_classes),
        )
    if parameter == "interruption costs":
        return replace(
            study,
            customer_classes=tuple(
                _scaled(
                    one,
                    value,
                    "cost_0h_per_kw",
                    "cost_1h_per_kw",
                    "cost_4h_per_kw",
                    "cost_8h_per_kw",
                    "cost_after_8h_per_kwh",
                )
                for one in study.customer_classes
            ),
        )
    if parameter == "storage cost":
        return replace(
            study,
            storage=tuple(
                _scaled(
                    one, value, "capital_cost_per_kw", "capital_cost_per_kwh", "capital_site_cost"
                )
                for one in study.storage
            ),
        )
    if parameter == "generator cost":
        return replace(
            study,
            generators=tuple(
                _scaled(one, value, "capital_cost_per_kw", "capital_site_cost")
                for one in study.generators
            ),
        )
    if parameter == "hardening cost":
        return replace(
            study,
            measures=tuple(_scaled(one, value, "capital_cost") for one in study.measures),
        )
    if parameter == "energy price":
        sale, stored = settings.export_price_per_kwh, settings.stored_energy_price_per_kwh
        return replace(
            study,
            settings=replace(
                settings,
                energy_price_per_kwh=settings.energy_price_per_kwh * value,
                export_price_per_kwh=None if sale is None else sale * value,
                stored_energy_price_per_kwh=None if stored is None else stored * value,
            ),
        )
    if parameter == "load":
        return replace(
            study,
            windows=tuple(_scaled(one, value, "load_multiplier") for one in study.windows),
        )
    if parameter == "discount rate":
        rate = settings.real_discount_rate_frac + frac_from_pct(value)
        return replace(study, settings=replace(settings, real_discount_rate_frac=max(0.0, rate)))
    raise ValueError(f"'{parameter}' is no assumption of the Sensitivities sheet")


def _scaled(record: Record, value: float, *names: str) -> Record:
    """A record with some of its numbers multiplied."""
    return replace(record, **{name: getattr(record, name) * value for name in names})
