"""Alternatives, fixed purchases, device changes, sensitivities: what is bought and varied.

Enters: a ``CheckedStudy`` with its names resolved. Leaves: findings.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

from xlplan.base.codes import Code
from xlplan.base.errors import Finding
from xlplan.base.hull import TOLERANCE
from xlplan.base.units import frac_from_pct
from xlplan.workbook.checked_study import CheckedStudy, fault, warning
from xlplan.workbook.field_checks import CheckedRow


def check_plans(study: CheckedStudy) -> Iterator[Finding]:
    """Findings about alternatives and what belongs to them."""
    yield from _alternatives(study)
    yield from _purchases(study)
    yield from _fixed_totals(study)
    yield from _device_changes(study)
    yield from _sensitivities(study)


def _alternatives(study: CheckedStudy) -> Iterator[Finding]:
    overall = study.settings.number("budget") if study.settings else None
    bought = {row.text("alternative") for row in study.rows("Fixed purchases")}
    for row in study.rows("Alternatives"):
        name, kind, budget = row.text("alternative"), row.text("kind"), row.number("budget")
        if budget is not None and overall is not None and budget > overall:
            yield warning(
                row,
                Code.BUDGET_ABOVE_STUDY,
                "budget",
                f"{budget:g} is more than the budget of the study, {overall:g} (Settings).",
                "This alternative is compared with plans that may spend less.",
            )
        if name is None:
            continue
        if kind == "fixed" and name not in bought:
            yield warning(
                row,
                Code.NO_PURCHASES,
                "kind",
                "a fixed alternative without any row in Fixed purchases buys nothing.",
                "Add its purchases, or call it existing.",
            )
        elif kind in ("optimise", "existing") and name in bought:
            yield warning(
                row,
                Code.NOT_USED,
                "kind",
                f"its rows in Fixed purchases are not used: its kind is {kind}.",
                "Call it fixed if they are to count.",
            )


def _purchases(study: CheckedStudy) -> Iterator[Finding]:
    """Each fixed purchase within what its asset allows."""
    assets = {
        name: (sheet, row)
        for sheet in ("Hardening", "Storage", "Generators")
        for name, row in study.by_id(sheet).items()
    }
    for row in study.rows("Fixed purchases"):
        sheet, asset = assets.get(row.text("asset") or "", ("", None))
        if asset is None:
            continue
        if not row.is_yes("buy") and (row.number("kw") or row.number("kwh")):
            yield warning(
                row,
                Code.NOT_USED,
                "buy",
                "the row gives a size but says that nothing is bought: nothing is.",
                "Say yes, or clear the size.",
            )
            continue
        if sheet == "Hardening":
            continue
        yield from _above(row, "kw", asset.number("max_new_kw"), "kW")
        largest_kwh = asset.number("max_new_kwh") if sheet == "Storage" else 0.0
        yield from _above(row, "kwh", largest_kwh, "kWh")
        yield from _off_step(row, asset)
        kw, kwh = row.number("kw"), row.number("kwh")
        if row.is_yes("buy") and not kw and not kwh and not row.faulty:
            yield warning(
                row,
                Code.NO_SIZE,
                "kw",
                f"no size is given for '{row.text('asset')}': nothing is bought.",
                "Give kW, and kWh for a store.",
            )
        longest = asset.number("longest_hours") if sheet == "Storage" else None
        if longest is None or kw is None or kwh is None:
            continue
        if kwh > longest * kw * (1.0 + TOLERANCE):
            yield fault(
                row,
                Code.PURCHASE_TOO_LARGE,
                "kwh",
                f"{kwh:g} kWh last longer at {kw:g} kW than the {longest:g} hours that "
                f"'{row.text('asset')}' allows.",
                "Buy less energy or more power.",
            )


def _above(row: CheckedRow, key: str, largest: float | None, unit: str) -> Iterator[Finding]:
    value = row.number(key)
    if value is not None and largest is not None and value > largest * (1.0 + TOLERANCE):
        yield fault(
            row,
            Code.PURCHASE_TOO_LARGE,
            key,
            f"{value:g} {unit} are more than the {largest:g} {unit} that can be added to "
            f"'{row.text('asset')}'.",
            "Buy less here, or allow more there.",
        )


def _off_step(row: CheckedRow, asset: CheckedRow) -> Iterator[Finding]:
    step, kw = asset.number("step_kw"), row.number("kw")
    if step and kw and abs(kw / step - round(kw / step)) > TOLERANCE * max(kw / step, 1.0):
        yield fault(
            row,
            Code.PURCHASE_OFF_STEP,
            "kw",
            f"{kw:g} kW is no multiple of the step of '{row.text('asset')}', {step:g} kW.",
            f"Give {step * math.floor(kw / step):g} or {step * math.ceil(kw / step):g}.",
        )


def _fixed_totals(study: CheckedStudy) -> Iterator[Finding]:
    """What a fixed alternative costs against its budget, and measures that exclude each other."""
    measures = study.by_id("Hardening")
    priced = {**study.by_id("Generators"), **study.by_id("Storage"), **measures}
    overall = study.settings.number("budget") if study.settings else None
    for name, alternative in study.by_id("Alternatives").items():
        if alternative.text("kind") != "fixed":
            continue
        rows = [
            row
            for row in study.rows("Fixed purchases")
            if row.text("alternative") == name and row.is_yes("buy")
        ]
        capital = sum(_capital(row, priced) for row in rows)
        own = alternative.number("budget")
        budget = own if own is not None else overall
        if budget is not None and capital > budget * (1.0 + TOLERANCE):
            message = (
                f"its purchases cost {capital:.0f} less grants, more than its budget of "
                f"{budget:g}{'' if own is not None else ' (Settings)'}."
            )
            make = fault if own is not None else warning
            yield make(
                alternative, Code.OVER_BUDGET, "budget", message, "Buy less or raise the budget."
            )
        taken: dict[str, str] = {}
        for row in rows:
            measure = row.text("asset") or ""
            lines = measures[measure].values.get("lines") if measure in measures else None
            for line in lines if isinstance(lines, tuple) else ():
                other = taken.setdefault(line, measure)
                if other != measure:
                    yield fault(
                        row,
                        Code.MEASURES_SHARE_LINE,
                        "asset",
                        f"'{measure}' and '{other}' both treat the line {line}: only one of them "
                        f"can be bought.",
                        "Delete one of the two rows.",
                    )
                    break


def _capital(row: CheckedRow, priced: dict[str, CheckedRow]) -> float:
    """Capital less grants of one fixed purchase."""
    asset = priced.get(row.text("asset") or "")
    if asset is None:
        return 0.0
    kw, kwh = row.number("kw") or 0.0, row.number("kwh") or 0.0
    if "measure" in asset.values:
        capital = asset.number("capital_cost") or 0.0
    else:
        site = (asset.number("site_cost") or 0.0) if kw or kwh else 0.0
        capital = (
            site
            + kw * (asset.number("capital_cost_per_kw") or 0.0)
            + kwh * (asset.number("capital_cost_per_kwh") or 0.0)
        )
    return capital * (1.0 - frac_from_pct(asset.number("grant_pct") or 0.0))


def _device_changes(study: CheckedStudy) -> Iterator[Finding]:
    for row in study.rows("Device changes"):
        keys = {"from_device", "to_device", "switching_minutes"}
        if not keys & (row.typed | row.faulty):
            yield warning(
                row,
                Code.NO_CHANGE,
                "from_device",
                "the row changes nothing.",
                "Give a device or a switching time.",
            )


def _sensitivities(study: CheckedStudy) -> Iterator[Finding]:
    rate = study.settings.number("real_discount_rate_pct") if study.settings else None
    for row in study.rows("Sensitivities"):
        low, high = row.number("low"), row.number("high")
        if low is not None and high is not None and low >= high:
            yield fault(
                row,
                Code.RANGE_REVERSED,
                "high",
                f"{high:g} is not above the low value, {low:g}.",
                "Swap or mend them.",
            )
        if low is None or row.text("parameter") is None:
            continue
        if row.text("parameter") != "discount rate":
            if low < 0:
                yield fault(
                    row,
                    Code.OUT_OF_BOUNDS,
                    "low",
                    f"{low:g} times is below 0.",
                    "Give a multiplier: 0.5 for half.",
                )
        elif rate is not None and rate + low < 0:
            yield fault(
                row,
                Code.OUT_OF_BOUNDS,
                "low",
                f"{low:g} points would bring the discount rate of {rate:g} % below 0.",
                "Give points that leave it at 0 or above.",
            )
