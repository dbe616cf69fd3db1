"""Between cells of what stands or can be bought: generators, stores, loss curves, measures.

Enters: a ``CheckedStudy`` with its names resolved. Leaves: findings.
"""

from __future__ import annotations

from collections.abc import Iterator

from xlplan.base.codes import Code
from xlplan.base.errors import Finding
from xlplan.base.hull import TOLERANCE, points_below_hull
from xlplan.workbook.checked_study import CheckedStudy, fault, note, warning
from xlplan.workbook.field_checks import CheckedRow
from xlplan.workbook.folding import fold


def check_assets(study: CheckedStudy) -> Iterator[Finding]:
    """Findings about generators, storage, curves and measures."""
    for row in study.rows("Generators"):
        yield from _generator(row)
    for row in study.rows("Storage"):
        yield from _storage(row)
    yield from _curves(study)
    yield from _measures(study)
    yield from _nothing_to_buy(study)


def _size(row: CheckedRow, key: str) -> float:
    return row.number(key) or 0.0


def _cost_needed(row: CheckedRow, size_key: str, cost_key: str) -> Iterator[Finding]:
    """A candidate without a price."""
    if _size(row, size_key) > 0 and cost_key not in row.typed and cost_key not in row.faulty:
        size = row.row.cell(size_key)
        yield fault(
            row,
            Code.NO_COST,
            cost_key,
            f"this can be bought ({size.typed} in {size.address}) but has no cost.",
            "Give the cost; 0 is allowed.",
        )


def _step(row: CheckedRow) -> Iterator[Finding]:
    step, largest = row.number("step_kw"), _size(row, "max_new_kw")
    if step is None or largest <= 0:
        return
    if step > largest:
        yield fault(
            row,
            Code.STEP_TOO_LARGE,
            "step_kw",
            f"a step of {step:g} kW is more than the {largest:g} kW that can be added: nothing "
            f"could be bought.",
            "Make the step smaller or the limit larger.",
        )
        return
    n_step = largest / step
    if abs(n_step - round(n_step)) > TOLERANCE * max(n_step, 1.0):
        yield note(
            row,
            Code.NOT_A_MULTIPLE,
            "max_new_kw",
            f"{largest:g} kW is no multiple of the step of {step:g} kW: at most "
            f"{step * int(n_step):g} kW can be bought.",
        )


def _generator(row: CheckedRow) -> Iterator[Finding]:
    technology = row.text("technology")
    has_size = _size(row, "existing_kw") > 0 or _size(row, "max_new_kw") > 0
    yield from _cost_needed(row, "max_new_kw", "capital_cost_per_kw")
    yield from _step(row)
    if not has_size and not row.faulty & {"existing_kw", "max_new_kw"}:
        yield warning(
            row,
            Code.NO_SIZE,
            "existing_kw",
            "nothing exists here and nothing can be added.",
            "Give a size, or delete the row.",
        )
    if technology == "dispatchable":
        if (
            has_size
            and "running_cost_per_kwh" not in row.typed
            and "running_cost_per_kwh" not in row.faulty
        ):
            yield fault(
                row,
                Code.NO_COST,
                "running_cost_per_kwh",
                "a unit that burns fuel needs a running cost.",
                "Give it per kWh; 0 is allowed.",
            )
        if "profile" in row.typed:
            yield note(
                row,
                Code.NOT_USED,
                "profile",
                "a dispatchable unit has no output profile: this one is not used.",
            )
    elif technology and "profile" not in row.typed and "profile" not in row.faulty:
        yield fault(
            row,
            Code.NO_PROFILE,
            "profile",
            f"a {technology} unit needs an output profile.",
            "Name a column of Profiles.",
        )
    if "tank_hours" not in row.typed and "refill_pct_per_hour" in row.typed:
        yield note(
            row,
            Code.NOT_USED,
            "refill_pct_per_hour",
            "there is no tank in this row, so its refill is not used.",
        )


def _storage(row: CheckedRow) -> Iterator[Finding]:
    yield from _cost_needed(row, "max_new_kw", "capital_cost_per_kw")
    yield from _cost_needed(row, "max_new_kwh", "capital_cost_per_kwh")
    yield from _step(row)
    yield from _power_and_energy(row)
    if {"curve", "round_trip_efficiency_pct"} <= row.typed:
        yield warning(
            row,
            Code.NOT_USED,
            "round_trip_efficiency_pct",
            f"the loss curve '{row.text('curve')}' is used; this efficiency is not.",
            "Clear one of the two.",
        )
    start, lowest = row.number("start_soc_pct"), row.number("min_soc_pct")
    if start is not None and lowest is not None and start < lowest:
        yield fault(
            row,
            Code.START_BELOW_LOWEST,
            "start_soc_pct",
            f"a charge of {start:g} % at the start is below the lowest charge, {lowest:g} %.",
            "Raise the one or lower the other.",
        )


def _power_and_energy(row: CheckedRow) -> Iterator[Finding]:
    """Power is of no use without energy, nor energy without power."""
    keys = ("existing_kw", "existing_kwh", "max_new_kw", "max_new_kwh")
    if row.faulty & set(keys):
        return
    power = _size(row, "existing_kw") + _size(row, "max_new_kw")
    energy = _size(row, "existing_kwh") + _size(row, "max_new_kwh")
    if power == 0 and energy == 0:
        yield warning(
            row,
            Code.NO_SIZE,
            "existing_kw",
            "nothing exists here and nothing can be added.",
            "Give a size, or delete the row.",
        )
    elif energy == 0:
        is_new = _size(row, "max_new_kw") > 0
        yield fault(
            row,
            Code.HALF_STORE,
            "max_new_kwh" if is_new else "existing_kwh",
            f"there are {power:g} kW of power but no energy.",
            "Give the energy in kWh.",
        )
    elif power == 0:
        is_new = _size(row, "max_new_kwh") > 0
        yield fault(
            row,
            Code.HALF_STORE,
            "max_new_kw" if is_new else "existing_kw",
            f"there are {energy:g} kWh of energy but no power.",
            "Give the power in kW.",
        )


def _curves(study: CheckedStudy) -> Iterator[Finding]:
    """Each loss curve: charging and discharging points, nothing gained, concave."""
    curves: dict[str, list[CheckedRow]] = {}
    for row in study.rows("Storage curves"):
        name = row.text("curve")
        if name is not None:
            curves.setdefault(fold(name), []).append(row)
    for rows in curves.values():
        if not any(row.faulty for row in rows):
            yield from _curve(rows)


def _curve(rows: list[CheckedRow]) -> Iterator[Finding]:
    points = [(_size(row, "store_power_pct"), _size(row, "terminal_power_pct")) for row in rows]
    is_physical = True
    for row, (store, terminal) in zip(rows, points, strict=True):
        if terminal > store + TOLERANCE:
            is_physical = False
            yield fault(
                row,
                Code.CURVE_GAINS,
                "terminal_power_pct",
                f"{terminal:g} at the terminal is more than {store:g} drawn from the store.",
                "Losses make it less: 100 drawn may give 92; charging, -92 stored takes -100.",
            )
        elif store == 0 and terminal < 0:
            is_physical = False
            yield fault(
                row,
                Code.CURVE_ORIGIN,
                "terminal_power_pct",
                "the curve must go through 0 and 0.",
                "Give 0 here, or delete the row: standing losses are left out.",
            )
        elif store > 0 and terminal < 0:
            is_physical = False
            yield fault(
                row,
                Code.CURVE_ORIGIN,
                "terminal_power_pct",
                f"{store:g} drawn from the store would take {-terminal:g} at the terminal.",
                "Give what comes out, 0 or more: standing losses are left out.",
            )
    for sign, what in ((1, "discharging (above 0)"), (-1, "charging (below 0)")):
        if not any(store * sign > 0 for store, _ in points):
            is_physical = False
            yield fault(
                rows[0],
                Code.CURVE_ONE_SIDED,
                "store_power_pct",
                f"the curve '{rows[0].text('curve')}' has no point for {what}.",
                "Add one.",
            )
    if not is_physical:
        return
    below = points_below_hull([*points, (0.0, 0.0)])
    for row, point in zip(rows, points, strict=True):
        if point in below:
            yield warning(
                row,
                Code.CURVE_NOT_CONCAVE,
                "terminal_power_pct",
                "this point lies below the line between its neighbours: the curve is not concave.",
                "That line is used instead (the curve's upper hull).",
            )


def _measures(study: CheckedStudy) -> Iterator[Finding]:
    lines = study.by_id("Lines")
    classes = study.by_id("Outage assumptions")
    first: dict[str, CheckedRow] = {}
    for row in study.rows("Hardening"):
        names = row.values.get("lines")
        if not isinstance(names, tuple):
            continue
        idle = [name for name in names if not _can_fail(lines.get(name), classes)]
        if idle:
            yield warning(
                row,
                Code.NEVER_FAILS,
                "lines",
                f"nothing fails on {', '.join(idle)}: this measure avoids nothing there.",
                "Give the line an outage class that counts, or leave the line out.",
            )
        shared = {first[name].text("measure") for name in names if name in first}
        for name in names:
            first.setdefault(name, row)
        if shared:
            others = ", ".join(sorted(str(name) for name in shared))
            yield note(
                row,
                Code.MEASURES_SHARE_LINE,
                "lines",
                f"shares a line with {others}: at most one of them is bought.",
            )


def _can_fail(line: CheckedRow | None, classes: dict[str, CheckedRow]) -> bool:
    """False where a line's failures are certainly none; a faulty row gets no second complaint."""
    if line is None or "outage_class" in line.faulty:
        return True
    outage_class = classes.get(line.text("outage_class") or "")
    if outage_class is None or line.is_yes("normally_open"):
        return False
    if outage_class.faulty or line.faulty:
        return True
    rate = (outage_class.number("failures_per_year") or 0.0) + (
        outage_class.number("failures_per_length_year") or 0.0
    ) * _size(line, "length")
    return rate > 0 and outage_class.is_yes("included")


def _nothing_to_buy(study: CheckedStudy) -> Iterator[Finding]:
    sizes = [
        row.number(key)
        for sheet, key in (("Generators", "max_new_kw"), ("Storage", "max_new_kw"))
        for row in study.rows(sheet)
    ]
    if study.settings is not None and not study.rows("Hardening") and not any(sizes):
        yield note(
            study.settings,
            Code.NOTHING_TO_BUY,
            "study_name",
            "there is nothing to buy: the plan is the feeder as it stands.",
        )
