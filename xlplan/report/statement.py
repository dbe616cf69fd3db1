"""Rows of the Alternatives sheet: blocks of figures, each with its unit and what it is."""

from __future__ import annotations

from dataclasses import dataclass

HEAD_ROW = 6
"""Row of the heading, on the Alternatives sheet."""

YEARLY = "{money}/year"
MONEY = "{money}"


@dataclass(frozen=True)
class Line:
    """One figure; ``look`` and ``modifier`` are formats, ``{money}`` is the study's currency."""

    key: str
    label: str
    note: str
    unit: str = YEARLY
    look: str = "money"
    modifier: str = ""


@dataclass(frozen=True)
class Block:
    """Figures under one heading."""

    title: str
    lines: tuple[Line, ...]


STATEMENT = (
    Block(
        "Yearly cost that the utility bears",
        (
            Line(
                "investment",
                "Investment",
                "From the Plan sheet: capital after grants times each asset's capital "
                "recovery factor",
            ),
            Line(
                "fixed_om",
                "Fixed O&M of what is bought",
                "From the Plan sheet; what exists already is sunk and not counted",
            ),
            Line(
                "energy",
                "Energy bought less energy sold",
                "Grid and neighbour supplies at the purchase price",
            ),
            Line("fuel", "Fuel and other running cost", "Generators' energy at their running cost"),
            Line(
                "demand",
                "Demand charge",
                "On the highest grid purchase planned in the windows that count for demand",
            ),
            Line("repair", "Repairs", "Repair cost per failure times failures"),
            Line("surplus", "Surplus and tripping", "Energy that finds no use, at its small price"),
            Line(
                "end_of_window",
                "Stored energy at the end of windows",
                "Energy missing against the start; below 0 where repairs outlast a window",
            ),
            Line("utility", "Utility's own cost", "Sum of the parts above", modifier="total"),
        ),
    ),
    Block(
        "Yearly cost that customers bear",
        (
            Line(
                "interruption",
                "Interruptions by outages",
                "By customer class and by hours since the outage began; survey averages",
            ),
            Line(
                "normal_shedding",
                "Load shed in normal service",
                "Priced as the first hour of an interruption; a planning violation where above 0",
            ),
            Line("customers", "Customers' outage cost", "Sum of the parts above", modifier="total"),
        ),
    ),
    Block(
        "Total and how sure it is",
        (
            Line(
                "total",
                "Total yearly cost",
                "Utility's own cost and customers' outage cost",
                modifier="total",
            ),
            Line(
                "low",
                "95 % interval of the total: low",
                "Statistical figure of the run; it does not follow changed cells",
            ),
            Line(
                "high",
                "95 % interval of the total: high",
                "Both ends are equal where every path was counted",
            ),
            Line(
                "difference",
                "Against the existing feeder",
                "Below 0: cheaper than the existing feeder",
                look="change",
                modifier="bold",
            ),
            Line(
                "difference_low",
                "95 % interval of the difference: low",
                "Same random numbers for all alternatives, differences taken path by path",
                look="change",
            ),
            Line(
                "difference_high",
                "95 % interval of the difference: high",
                "If 0 lies in the interval, the two cannot be told apart",
                look="change",
            ),
            Line(
                "to_best",
                "Against the recommended alternative",
                "Above 0: dearer than the recommended alternative",
                look="change",
            ),
            Line(
                "to_best_low",
                "95 % interval of that: low",
                "Differences taken path by path; they do not follow changed cells",
                look="change",
            ),
            Line(
                "to_best_high",
                "95 % interval of that: high",
                "If 0 lies in the interval, the two cannot be told apart",
                look="change",
            ),
            Line(
                "bound",
                "Lower bound",
                "No plan that the alternative allows costs less; none for a plan that "
                "is no optimum",
            ),
            Line(
                "gap",
                "Gap",
                "Upper end of the interval less the lower bound, over the cost",
                unit="share of cost",
                look="percent",
            ),
        ),
    ),
    Block(
        "Capital",
        (
            Line("gross", "Capital before grants", "From the Plan sheet", unit=MONEY),
            Line("grants", "Grants", "Capital before less capital after grants", unit=MONEY),
            Line(
                "net",
                "Capital after grants",
                "From the Plan sheet; this is what a budget caps",
                unit=MONEY,
                modifier="total",
            ),
            Line(
                "extra_capital",
                "Extra capital against existing",
                "Capital after grants less that of the existing feeder",
                unit=MONEY,
                look="change",
            ),
        ),
    ),
    Block(
        "Is it worth it",
        (
            Line(
                "saving",
                "Yearly saving before investment",
                "All costs but investment, existing feeder less this alternative, "
                "customers included",
                look="change",
            ),
            Line(
                "payback",
                "Simple payback, customers included",
                "Extra capital over that saving, without interest",
                unit="years",
                look="years",
            ),
            Line(
                "own_saving",
                "Utility's own saving before investment",
                "The same without customers' outage cost",
                look="change",
            ),
            Line(
                "own_payback",
                "Simple payback on the utility's own money",
                "Extra capital over the utility's own saving, without interest",
                unit="years",
                look="years",
            ),
            Line(
                "extra_investment",
                "Extra yearly investment",
                "Investment less that of the existing feeder",
                look="change",
            ),
            Line(
                "ratio",
                "Benefit-cost ratio",
                "Yearly saving before investment over extra yearly investment; above 1 "
                "it earns its keep",
                unit="ratio",
                look="hours",
            ),
            Line(
                "total_gross",
                "Total yearly cost before grants",
                "As if grants were not given: what the purchases cost society",
            ),
            Line(
                "ratio_gross",
                "Benefit-cost ratio before grants",
                "The same saving over extra yearly investment before grants",
                unit="ratio",
                look="hours",
            ),
            Line(
                "minutes",
                "Customer-minutes avoided",
                "Outage hours per customer less than on the existing feeder, times customers, in "
                "minutes",
                unit="minutes/year",
                look="whole",
            ),
            Line(
                "per_minute",
                "Cost per avoided customer-minute",
                "Extra cost of the utility a year over those minutes; below 0: it saves as well",
                unit="{money}/minute",
                look="per_minute",
            ),
            Line(
                "present_total",
                "Present value of the total yearly cost",
                "Over the years and at the discount rate above, end-of-year; assets "
                "renewed at the same real price",
                unit=MONEY,
            ),
            Line(
                "present_difference",
                "Present value against existing",
                "Below 0: cheaper than the existing feeder over those years",
                unit=MONEY,
                look="change",
            ),
        ),
    ),
    Block(
        "Behind the figures",
        (
            Line(
                "customers_served",
                "Customers",
                "Sum over the loads, as given in the study",
                unit="number",
                look="whole",
            ),
            Line(
                "saidi",
                "Outage hours per customer",
                "SAIDI of the Reliability sheet, everything counted",
                unit="h/year",
                look="hours",
            ),
            Line(
                "demand_kw",
                "Grid purchase that the demand charge is on",
                "Highest of the first plans of the windows that count for demand",
                unit="kW",
                look="power",
            ),
            Line(
                "shed_kwh",
                "Energy shed in normal service",
                "A planning violation where above 0: the feeder cannot carry its load",
                unit="kWh/year",
                look="energy",
            ),
            Line(
                "burnt_kwh",
                "Energy burnt in the loss curves",
                "Stored energy thrown away by the relaxed loss curves; should be small",
                unit="kWh/year",
                look="energy",
            ),
            Line(
                "own_clock",
                "Interruption cost on each load's own clock",
                "Priced from each load group's own start, not from the start of the outage event",
            ),
        ),
    ),
    Block(
        "Verdicts in words",
        (
            Line(
                "verdict",
                "Verdict against the existing feeder",
                "Undecided where 0 lies in the interval: such a difference is not ranked",
                unit="",
                look="verdict",
                modifier="bold",
            ),
            Line(
                "to_best_verdict",
                "Verdict against the recommended one",
                "Dearer, cheaper or undecided, by the interval",
                unit="",
                look="verdict",
            ),
        ),
    ),
)


def statement_rows() -> tuple[dict[str, int], int]:
    """Row of every block and figure, and the last row."""
    row_of: dict[str, int] = {}
    row = HEAD_ROW + 1
    for block in STATEMENT:
        row_of[block.title] = row
        for line in block.lines:
            row += 1
            row_of[line.key] = row
        row += 2
    return row_of, row - 2
