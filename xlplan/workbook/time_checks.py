"""Between profiles, windows and prices: lengths, steps, hours of a year, what is never sensible.

Enters: a ``CheckedStudy`` with its names resolved. Leaves: findings.
"""

from __future__ import annotations

from collections.abc import Iterator

from xlplan.base.codes import Code
from xlplan.base.errors import Finding
from xlplan.base.hull import upper_hull
from xlplan.base.units import (
    HOURS_PER_YEAR,
    frac_from_pct,
    hours_from_minutes,
    minutes_from_hours,
    pct_from_frac,
)
from xlplan.workbook.checked_study import CheckedStudy, fault, warning
from xlplan.workbook.field_checks import CheckedRow
from xlplan.workbook.folding import fold
from xlplan.workbook.profile_rows import (
    TIME_TOLERANCE_H,
    ProfileRows,
    hours_between,
    profile_rows,
)

YEAR_TOLERANCE_FRAC = 0.03
"""How far the windows' hours may be from a year before it is said: a storm or two."""

WHOLE_TOLERANCE = 1e-6
"""Periods closer than this to a whole number are whole."""


def check_times(study: CheckedStudy) -> Iterator[Finding]:
    """Findings about profiles, windows and prices."""
    profiles = profile_rows(study)
    yield from _doubled_times(profiles)
    stretches: list[tuple[CheckedRow, slice]] = []
    period_h = _period_h(study)
    for row in study.rows("Windows"):
        found, stretch = _window(row, profiles, period_h)
        yield from found
        if stretch is not None:
            stretches.append((row, stretch))
            yield from _window_profiles(row, profiles, stretch)
    yield from _hours_of_a_year(study)
    yield from _weather(study)
    yield from _start_charges(study)
    yield from _sale_price(study, profiles, stretches)
    yield from _stored_energy_price(study, profiles, stretches)
    yield from _renewable_output(study, profiles, stretches)
    yield from _demand(study)
    yield from _substation(study, profiles, stretches)


def _period_h(study: CheckedStudy) -> float | None:
    minutes = study.settings.number("period_minutes") if study.settings else None
    return None if minutes is None else hours_from_minutes(minutes)


def _doubled_times(profiles: ProfileRows) -> Iterator[Finding]:
    """A window could start at either of two equal times; mixed kinds cannot be compared."""
    first: dict[tuple[str, float], CheckedRow] = {}
    kind = None
    for row, time in zip(profiles.rows, profiles.hours, strict=True):
        if time is None:
            continue
        kind = kind or time[0]
        if time[0] != kind:
            yield fault(
                row,
                Code.TIMES_MIXED,
                "time",
                f"this is a {time[0]}, while the first row holds a {kind}.",
                "Use dates and times, or clock times, or numbers throughout.",
            )
            return
        other = first.setdefault((time[0], round(time[1], 6)), row)
        if other is not row:
            yield fault(
                row,
                Code.TIME_TWICE,
                "time",
                f"this time also stands in {other.row.cell('time').address}.",
                "Give every row a time of its own.",
            )


def _window(
    row: CheckedRow, profiles: ProfileRows, period_h: float | None
) -> tuple[list[Finding], slice | None]:
    """Findings about where a window lies, and its rows if it lies well."""
    hours = row.number("hours")
    if hours is None or period_h is None or not profiles.rows or "starts_at" in row.faulty:
        return [], None
    exact = hours / period_h
    n_period = round(exact)
    if abs(exact - n_period) > WHOLE_TOLERANCE or n_period < 1:
        message = f"{hours:g} hours are {exact:.6g} periods, not a whole number of them."
        hint = f"A period is {minutes_from_hours(period_h):g} minutes (Settings)."
        return [fault(row, Code.NOT_WHOLE_PERIODS, "hours", message, hint)], None
    start = profiles.row_at(row.values.get("starts_at"))
    if start is None and any(time is None for time in profiles.times):
        return [], None  # it may be one of the times that are faulty themselves
    if start is None:
        first, last = profiles.rows[0].row.cell("time"), profiles.rows[-1].row.cell("time")
        message = f"{row.row.cell('starts_at').typed} is no time of Profiles."
        hint = f"Their times run from {first.typed} ({first.address}) to {last.typed}."
        return [fault(row, Code.START_NOT_FOUND, "starts_at", message, hint)], None
    n_row = len(profiles.rows)
    if start + n_period > n_row:
        message = (
            f"{hours:g} hours from {profiles.rows[start].row.cell('time').address} of Profiles "
            f"need {n_period} rows; there are {n_row - start}."
        )
        hint = "Shorten the window, start it earlier, or add rows to Profiles."
        return [fault(row, Code.PROFILE_TOO_SHORT, "hours", message, hint)], None
    stretch = slice(start, start + n_period)
    return _wrong_step(row, profiles, stretch, period_h), stretch


def _wrong_step(
    row: CheckedRow, profiles: ProfileRows, stretch: slice, period_h: float
) -> list[Finding]:
    """The first step within a window that is not one period long, where times are times."""
    for i in range(stretch.start + 1, stretch.stop):
        before, after = profiles.hours[i - 1], profiles.hours[i]
        if before is None or after is None or "number" in (before[0], after[0]):
            continue
        step_h = hours_between(before, after)
        if abs(step_h - period_h) > 2.0 * TIME_TOLERANCE_H:
            return [
                fault(
                    profiles.rows[i],
                    Code.WRONG_STEP,
                    "time",
                    f"{minutes_from_hours(step_h):g} minutes after the row before, within the "
                    f"window '{row.text('window')}'; a period is "
                    f"{minutes_from_hours(period_h):g} minutes (Settings).",
                    "Mend the times, or the time step in Settings.",
                )
            ]
    return []


def _values(profiles: ProfileRows, name: str | None, stretch: slice) -> list[float] | None:
    """A profile within a window; ones for none; None where any value is faulty."""
    if name is None:
        return [1.0] * (stretch.stop - stretch.start)
    if name not in profiles.values:
        return None
    values = [value for value in profiles.values[name][stretch] if value is not None]
    return values if len(values) == stretch.stop - stretch.start else None


def _window_profiles(row: CheckedRow, profiles: ProfileRows, stretch: slice) -> Iterator[Finding]:
    name = row.text("failure_profile")
    shape = _values(profiles, name, stretch) if name else None
    if shape is not None and sum(shape) <= 0:
        yield fault(
            row,
            Code.PROFILE_ALL_ZERO,
            "failure_profile",
            f"'{name}' is 0 throughout this window, so that failures have no time to happen.",
            "Give it a value above 0 somewhere; only its shape counts.",
        )


def _hours_of_a_year(study: CheckedStudy) -> Iterator[Finding]:
    rows = study.rows("Windows")
    if not rows or any(row.faulty & {"occurrences_per_year", "hours"} for row in rows):
        return
    total = sum(
        (row.number("occurrences_per_year") or 0.0) * (row.number("hours") or 0.0) for row in rows
    )
    if abs(total / HOURS_PER_YEAR - 1.0) > YEAR_TOLERANCE_FRAC:
        yield warning(
            rows[0],
            Code.NOT_A_YEAR,
            "occurrences_per_year",
            f"the windows make up {total:g} hours a year, "
            f"{pct_from_frac(total / HOURS_PER_YEAR):.0f} % of {HOURS_PER_YEAR:g}.",
            "Yearly figures count only what the windows hold.",
        )


def _weather(study: CheckedStudy) -> Iterator[Finding]:
    """A storm's multipliers and failure profile act on exposed classes alone."""
    classes = study.rows("Outage assumptions")
    if any("weather_exposed" in row.faulty or "included" in row.faulty for row in classes):
        return
    if not classes or any(r.is_yes("weather_exposed") and r.is_yes("included") for r in classes):
        return
    for row in study.rows("Windows"):
        for key in ("failure_multiplier", "repair_multiplier", "failure_profile"):
            is_given = row.text(key) is not None or row.number(key) not in (None, 1.0)
            if is_given:
                yield warning(
                    row,
                    Code.NOT_USED,
                    key,
                    "this has no effect: no outage class that is included is exposed to weather.",
                    "Mark the classes that storms reach in Outage assumptions, or leave this "
                    "blank.",
                )


def _start_charges(study: CheckedStudy) -> Iterator[Finding]:
    for row in study.rows("Windows"):
        start = row.number("start_soc_pct")
        if start is None:
            continue
        for unit in study.rows("Storage"):
            lowest = unit.number("min_soc_pct")
            if lowest is not None and start < lowest:
                yield fault(
                    row,
                    Code.START_BELOW_LOWEST,
                    "start_soc_pct",
                    f"a charge of {start:g} % at the start is below the lowest charge of "
                    f"'{unit.text('storage')}', {lowest:g} %.",
                    "Raise the one or lower the other.",
                )


def _prices(
    study: CheckedStudy, profiles: ProfileRows, stretches: list[tuple[CheckedRow, slice]]
) -> Iterator[tuple[CheckedRow, list[float]]]:
    """Purchase prices of each window whose figures are all sound."""
    base = study.settings.number("energy_price_per_kwh") if study.settings else None
    for row, stretch in stretches:
        if base is None or "price_profile" in row.faulty:
            continue
        shape = _values(profiles, row.text("price_profile"), stretch)
        if shape is not None:
            yield row, [base * value for value in shape]


def _sale_price(
    study: CheckedStudy, profiles: ProfileRows, stretches: list[tuple[CheckedRow, slice]]
) -> Iterator[Finding]:
    """Buying and selling at once must never pay."""
    sale = study.settings.number("export_price_per_kwh") if study.settings else None
    if sale is None or study.settings is None:
        return
    prices_by_window = _prices(study, profiles, stretches)
    lowest = min(((min(p), str(row.text("window"))) for row, p in prices_by_window), default=None)
    if lowest is not None and sale >= lowest[0]:
        yield fault(
            study.settings,
            Code.SALE_PRICE,
            "export_price_per_kwh",
            f"{sale:g} is not below the lowest purchase price, {lowest[0]:g} in the window "
            f"'{lowest[1]}'.",
            "Lower it, or leave it blank: then nothing is sold.",
        )


def _stored_energy_price(
    study: CheckedStudy, profiles: ProfileRows, stretches: list[tuple[CheckedRow, slice]]
) -> Iterator[Finding]:
    """Below the default it pays to drain a store by the end of a window (model.md section 3)."""
    price = study.settings.number("stored_energy_price_per_kwh") if study.settings else None
    if price is None or study.settings is None or not study.rows("Storage"):
        return
    efficiency = min(_charging_efficiency(study, row) for row in study.rows("Storage"))
    for row, prices in _prices(study, profiles, stretches):
        usual = max(prices) / efficiency
        if price < usual * (1.0 - WHOLE_TOLERANCE):
            yield warning(
                study.settings,
                Code.STORED_ENERGY_CHEAP,
                "stored_energy_price_per_kwh",
                f"{price:g} is below {usual:.4g}, what it costs to charge at the highest price of "
                f"the window '{row.text('window')}': it pays to drain the store.",
                "Leave it blank to use that price.",
            )
            return


def _charging_efficiency(study: CheckedStudy, unit: CheckedRow) -> float:
    """Share of the energy taken in that is stored, at the worst charging point."""
    name = unit.text("curve")
    points = [(0.0, 0.0)]
    for row in study.rows("Storage curves"):
        store, terminal = row.number("store_power_pct"), row.number("terminal_power_pct")
        if name is None or fold(row.text("curve") or "") != fold(name):
            continue
        if store is not None and terminal is not None and terminal <= store:
            points.append((store, terminal))
    shares = [store / terminal for store, terminal in upper_hull(points) if store < 0]
    if shares:
        return min(shares)
    round_trip = unit.number("round_trip_efficiency_pct")
    return 1.0 if round_trip is None else frac_from_pct(round_trip) ** 0.5


def _renewable_output(
    study: CheckedStudy, profiles: ProfileRows, stretches: list[tuple[CheckedRow, slice]]
) -> Iterator[Finding]:
    for unit in study.rows("Generators"):
        name = unit.text("profile")
        if unit.text("technology") not in ("solar", "wind") or name is None:
            continue
        highest = 0.0
        for _, stretch in stretches:
            highest = max(highest, max(_values(profiles, name, stretch) or [0.0]))
        if highest > 1.0 + WHOLE_TOLERANCE:
            yield warning(
                unit,
                Code.OUTPUT_ABOVE_RATING,
                "profile",
                f"'{name}' reaches {highest:g}: more than the unit's rating.",
                "An output profile is a share of the rating, 0 to 1.",
            )


def _demand(study: CheckedStudy) -> Iterator[Finding]:
    rows = study.rows("Windows")
    charge = study.settings.number("demand_charge_per_kw_year") if study.settings else None
    if charge and rows and not any(row.is_yes("counts_for_demand") for row in rows):
        yield warning(
            rows[0],
            Code.DEMAND_NOWHERE,
            "counts_for_demand",
            "there is a demand charge, but no window counts for demand.",
            "Say yes for the windows that set the peak.",
        )


def _substation(
    study: CheckedStudy, profiles: ProfileRows, stretches: list[tuple[CheckedRow, slice]]
) -> Iterator[Finding]:
    """Load above the substation limit is cut in normal service, which is seldom meant."""
    settings = study.settings
    limit = settings.number("substation_limit_kva") if settings else None
    loads = study.rows("Loads")
    if settings is None or limit is None or any(row.faulty for row in loads):
        return
    allowance = 1.0 + frac_from_pct(settings.number("loss_allowance_pct") or 0.0)
    peaks: dict[str | None, float] = {}
    for load in loads:
        name = load.text("load_profile")
        peaks[name] = peaks.get(name, 0.0) + (load.number("peak_kw") or 0.0)
    worst = (0.0, "")
    for row, stretch in stretches:
        total = [0.0] * (stretch.stop - stretch.start)
        scale = allowance * (row.number("load_multiplier") or 0.0)
        for name, peak_kw in peaks.items():
            shape = _values(profiles, name, stretch)
            if shape is None:
                break
            weight = peak_kw * scale
            total = [kw + weight * value for kw, value in zip(total, shape, strict=True)]
        else:
            worst = max(worst, (max(total), str(row.text("window"))))
    if worst[0] > limit:
        yield warning(
            settings,
            Code.ABOVE_SUBSTATION,
            "substation_limit_kva",
            f"the loads reach {worst[0]:.0f} kW together in the window '{worst[1]}', above the "
            f"substation limit of {limit:g} kVA.",
            "Without local sources load is cut in normal service there.",
        )
