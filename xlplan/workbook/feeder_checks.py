"""Between cells of the feeder's sheets: impedances, voltages, loads, customers, outages.

Enters: a ``CheckedStudy`` with its names resolved. Leaves: findings. Whether the feeder is radial
is for ``network`` to say, which has it as a graph.
"""

from __future__ import annotations

from collections.abc import Iterator

from xlplan.base.codes import Code
from xlplan.base.errors import Finding
from xlplan.base.hull import TOLERANCE
from xlplan.base.units import hours_from_minutes
from xlplan.workbook.checked_study import CheckedStudy, fault, note, warning
from xlplan.workbook.field_checks import CheckedRow

IMPEDANCE_WAYS: tuple[tuple[str, ...], ...] = (
    ("conductor",),
    ("r_ohm_per_length", "x_ohm_per_length"),
    ("r_ohm", "x_ohm"),
)
"""A line's impedance is given in exactly one of these ways, each of them whole."""

_NEEDS_LENGTH = frozenset(key for way in IMPEDANCE_WAYS[:2] for key in way)
"""With one of these a missing length is a fault by itself."""


def check_feeder(study: CheckedStudy) -> Iterator[Finding]:
    """Findings about settings of voltage, lines, loads and classes."""
    if study.settings is not None:
        yield from _voltages(study.settings)
    yield from _lines(study)
    yield from _loads(study)
    yield from _interruption_costs(study)
    yield from _outage_class_use(study)


def _voltages(settings: CheckedRow) -> Iterator[Finding]:
    """Bands the right way round, and the source within both (with no load that is the voltage)."""
    source = settings.number("source_voltage_pu")
    for low_key, high_key, what in (
        ("vmin_pu", "vmax_pu", "in normal service"),
        ("vmin_event_pu", "vmax_event_pu", "during an outage"),
    ):
        low, high = settings.number(low_key), settings.number(high_key)
        if low is None or high is None:
            continue
        if low >= high:
            yield fault(
                settings,
                Code.BAND_REVERSED,
                low_key,
                f"the lowest voltage {what}, {low:g}, is not below the highest, {high:g}.",
                "Mend one of the two.",
            )
        elif source is not None and not low <= source <= high:
            yield fault(
                settings,
                Code.SOURCE_VOLTAGE,
                "source_voltage_pu",
                f"{source:g} p.u. at the source is outside {low:g} to {high:g}, the limits {what}.",
                "Mend the voltage or the limits.",
            )


def _lines(study: CheckedStudy) -> Iterator[Finding]:
    classes = study.by_id("Outage assumptions")
    for row in study.rows("Lines"):
        yield from _impedance(row)
        ends = row.text("from_bus"), row.text("to_bus")
        if ends[0] is not None and ends[0] == ends[1]:
            yield fault(
                row,
                Code.SELF_LOOP,
                "to_bus",
                f"both ends of the line are at '{ends[1]}'.",
                "Name the bus at the other end.",
            )
        outage_class = classes.get(row.text("outage_class") or "")
        is_told = "length" in row.typed or not row.typed & _NEEDS_LENGTH
        if outage_class is not None and row.number("length") == 0 and is_told:
            per_length = outage_class.number("failures_per_length_year") or 0.0
            if per_length > 0 and not outage_class.number("failures_per_year"):
                yield warning(
                    row,
                    Code.NEVER_FAILS,
                    "outage_class",
                    f"'{row.text('outage_class')}' counts failures by length, and this line has "
                    f"none: it would never fail.",
                    "Give a length, or a class with failures of each unit.",
                )


def _impedance(row: CheckedRow) -> Iterator[Finding]:
    """Exactly one way of giving the impedance, and what it needs."""
    keys = [key for way in IMPEDANCE_WAYS for key in way]
    if row.faulty & {*keys, "length"}:
        return
    ways = [way for way in IMPEDANCE_WAYS if row.typed & set(way)]
    if not ways:
        yield fault(
            row,
            Code.NO_IMPEDANCE,
            "conductor",
            "the line has no impedance.",
            "Give a conductor and a length, or ohms per length and a length, or totals in ohm.",
        )
        return
    if len(ways) > 1:
        used = ", ".join(row.row.cell(key).address for key in keys if key in row.typed)
        yield fault(
            row,
            Code.IMPEDANCE_TWICE,
            next(key for key in ways[1] if key in row.typed),
            f"the impedance is given in more than one way ({used}).",
            "Keep one: a conductor, or ohms per length, or totals in ohm.",
        )
        return
    for key in ways[0]:
        if key not in row.typed:
            yield fault(
                row,
                Code.HALF_IMPEDANCE,
                key,
                "resistance and reactance are needed together, and this one is blank.",
                "Give it too; 0 is allowed.",
            )
    if ways[0] == IMPEDANCE_WAYS[2]:
        return
    if "length" not in row.typed:
        yield fault(
            row,
            Code.NO_LENGTH,
            "length",
            "a length is needed with a conductor or with ohms per length.",
            "Give it in the unit of length of Settings.",
        )
    elif row.number("length") == 0:
        yield warning(
            row,
            Code.ZERO_LENGTH,
            "length",
            "0 would mean a line without any impedance.",
            "It is used as it stands.",
        )


def _loads(study: CheckedStudy) -> Iterator[Finding]:
    rows = study.rows("Loads")
    if not rows or any(row.faulty & {"customers", "peak_kw"} for row in rows):
        return
    if not any(row.number("customers") for row in rows):
        yield warning(
            rows[0],
            Code.NO_CUSTOMERS,
            "customers",
            "no load has any customers: SAIFI and SAIDI could not be told.",
            "Give the number of customers of each load.",
        )
    if not any(row.number("peak_kw") for row in rows):
        yield warning(
            rows[0], Code.NO_LOAD, "peak_kw", "every load is 0.", "Give the peaks of the loads."
        )


COST_KEYS = ("cost_0h_per_kw", "cost_1h_per_kw", "cost_4h_per_kw", "cost_8h_per_kw")
"""Total costs of an interruption, by length: none may be below the one before."""


def _interruption_costs(study: CheckedStudy) -> Iterator[Finding]:
    price = study.settings.number("energy_price_per_kwh") if study.settings else None
    for row in study.rows("Customer classes"):
        costs = [row.number(key) for key in COST_KEYS]
        for i in range(1, len(costs)):
            shorter, longer = costs[i - 1], costs[i]
            if shorter is not None and longer is not None and longer < shorter:
                yield fault(
                    row,
                    Code.COST_FALLS,
                    COST_KEYS[i],
                    f"{longer:g} is below the cost of a shorter interruption, {shorter:g} in "
                    f"{row.row.cell(COST_KEYS[i - 1]).address}.",
                    "Give the total cost of an interruption that long, not the cost of its last "
                    "hours.",
                )
        if costs[0] is None or costs[1] is None or price is None:
            continue
        first_hour = costs[1] - costs[0]
        if 0 <= first_hour < price * (1.0 - TOLERANCE):
            yield warning(
                row,
                Code.SHEDDING_CHEAP,
                "cost_1h_per_kw",
                f"in the first hour a kWh not supplied costs {first_hour:g}, less than a kWh "
                f"bought ({price:g}): cutting load would be cheaper than supplying it.",
                "Check both figures.",
            )


def _outage_class_use(study: CheckedStudy) -> Iterator[Finding]:
    """Classes left out on purpose, and classes of units that count failures by length only."""
    classes = study.by_id("Outage assumptions")
    for name, row in classes.items():
        if row.values.get("included") is False:
            yield note(row, Code.CLASS_LEFT_OUT, "included", f"failures of '{name}' are left out.")
        repair, switching = row.number("repair_hours"), row.number("switching_minutes")
        # Isolation counts inside the repair time (model.md section 2).
        if repair is not None and switching is not None and "switching_minutes" in row.typed:
            from_minutes = hours_from_minutes(switching)
            if from_minutes > repair:
                yield warning(
                    row,
                    Code.SWITCHING_LONG,
                    "switching_minutes",
                    f"{switching:g} minutes are longer than the repair ({repair:g} hours), which "
                    f"includes them.",
                    "The repair is taken to last as long as the switching.",
                )
    users: list[tuple[CheckedRow, str]] = [
        (row, "outage_class") for sheet in ("Generators", "Storage") for row in study.rows(sheet)
    ]
    if study.settings is not None:
        users.append((study.settings, "bulk_supply_outage_class"))
    for row, key in users:
        outage_class = classes.get(row.text(key) or "")
        if outage_class is None or outage_class.faulty:
            continue
        by_unit = outage_class.number("failures_per_year")
        if not by_unit and outage_class.number("failures_per_length_year"):
            yield warning(
                row,
                Code.NEVER_FAILS,
                key,
                f"'{row.text(key)}' counts failures by length only: this would never fail.",
                "Name a class with failures of each unit.",
            )
