"""Checks: every reconciliation with its live formula, and one overall line.

First those of the run (the study's, then each plan's), then those of this workbook: its own sums
against what the run found. A word in capitals says what a difference means: FAIL, a fault of the
run; LOOK, for the planner to judge; CHANGED, a figure was altered after the run.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

from xlplan.base.names import IGNORING_OUTAGES, LEAST_COST
from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import CheckLine, PlanResult
from xlplan.report.grid import Cell, Formula, Grid, set_widths
from xlplan.report.money import baseline, formula_net_capital, formula_yearly
from xlplan.report.safe_book import SafeBook
from xlplan.report.sheets.alternatives import AlternativesCells
from xlplan.report.sheets.hardening import HardeningCells
from xlplan.report.sheets.reliability import ReliabilityCells
from xlplan.report.tables import CHECK_LINES, CHECKS, SENSITIVITIES

PASS, FAIL, LOOK, CHANGED = "PASS", "FAIL", "LOOK", "CHANGED"
ALL_PASS = "PASS: all checks agree"
SOME_LOOK = "LOOK: no check fails, some are for you to judge"
SOME_FAIL = "FAIL: some checks do not agree"
OVERALL_ROW, OVERALL_COL = 3, 1

CENT = 0.005
"""Half a cent: money that is equal to a cent."""

RELATIVE = 1e-6
"""Share by which sums may differ: far above rounding, far below what a reader could see."""


NEAR = 0.01
"""Share by which figures may differ that are not the same but should be near one another."""


@dataclass(frozen=True)
class ChecksCells:
    """The overall line: its address for other sheets, and its words."""

    overall: str
    words: str


@dataclass(frozen=True)
class PackCells:
    """Tables of the comparison pack; None where a sheet has none."""

    hardening: HardeningCells | None = None
    repair_time: Grid | None = None
    budget: Grid | None = None
    sensitivities: Grid | None = None


@dataclass(frozen=True)
class _Line:
    about: str
    name: str
    what: str
    left: Cell
    right: Cell
    tolerance: float
    otherwise: str


def write(
    book: SafeBook,
    result: StudyResult,
    alternatives: AlternativesCells,
    reliability: ReliabilityCells,
    pack: PackCells,
) -> ChecksCells:
    """Writes the sheet."""
    sheet = book.sheet(CHECKS)
    sheet.head(
        "Do the numbers agree with each other?",
        "Each row sets two figures that should agree side by side. FAIL: a fault of the run. LOOK: "
        "for you to judge. CHANGED: a figure of this workbook was altered after the run.",
    )
    set_widths(sheet, [22, 36, 56, 17, 17, 12, 12, 12, 11], CHECK_LINES)
    lines = [_run_line("Study", line) for line in result.checks]
    lines += [_run_line(plan.name, line) for plan in result.plans for line in plan.checks]
    lines += _money_lines(result, alternatives) + _energy_lines(result, reliability)
    lines += _planning_line(result, alternatives) + _pack_lines(result, alternatives, pack)
    grid = Grid(CHECKS, OVERALL_ROW + 2, CHECK_LINES, len(lines))
    rows = [_row(line, grid, i) for i, line in enumerate(lines)]
    grid.write(sheet, rows)
    outcomes = grid.span("outcome")
    words = _overall([_value(row["outcome"]) for row in rows])
    text = (
        f'=IF(COUNTIF({outcomes},"{FAIL}")>0,"{SOME_FAIL}",'
        f'IF(COUNTIF({outcomes},"{PASS}")=ROWS({outcomes}),"{ALL_PASS}","{SOME_LOOK}"))'
    )
    sheet.text(OVERALL_ROW, 0, "Overall", "status")
    sheet.formula(OVERALL_ROW, OVERALL_COL, text, words, "status")
    sheet.status_fill(OVERALL_ROW, OVERALL_ROW, OVERALL_COL, OVERALL_COL + 1)
    col = grid.col("outcome")
    sheet.status_fill(grid.row(0), grid.row(len(lines) - 1), col, col)
    sheet.freeze(grid.top + 1, 2)
    sheet.print_setup(grid.below - 1, len(CHECK_LINES) - 1, heading_row=grid.top)
    return ChecksCells(f"'{CHECKS}'!$B${OVERALL_ROW + 1}", words)


def _value(cell: Cell) -> str:
    return str(cell.value if isinstance(cell, Formula) else cell)


def _overall(outcomes: list[str]) -> str:
    if FAIL in outcomes:
        return SOME_FAIL
    return ALL_PASS if all(outcome == PASS for outcome in outcomes) else SOME_LOOK


def _run_line(about: str, line: CheckLine) -> _Line:
    otherwise = LOOK if line.is_warning else FAIL
    return _Line(about, line.name, line.what, line.left, line.right, line.tolerance, otherwise)


def _row(line: _Line, grid: Grid, i: int) -> dict[str, Cell]:
    """One check; a figure that is not finite cannot agree with anything."""
    row: dict[str, Cell] = {
        "about": line.about,
        "name": line.name,
        "what": line.what,
        "left": line.left,
        "right": line.right,
        "tolerance": line.tolerance,
        "otherwise": line.otherwise,
    }
    left, right = _number(line.left), _number(line.right)
    if not all(math.isfinite(number) for number in (left, right, line.tolerance)):
        return {**row, "difference": None, "outcome": line.otherwise}
    left_cell, right_cell = grid.here(i, "left"), grid.here(i, "right")
    test = f"ABS({left_cell}-{right_cell})<={grid.here(i, 'tolerance')}"
    agrees = abs(left - right) <= line.tolerance
    return {
        **row,
        "difference": Formula(f"=ABS({left_cell}-{right_cell})", abs(left - right)),
        "outcome": Formula(
            f'=IF({test},"{PASS}",{grid.here(i, "otherwise")})',
            PASS if agrees else line.otherwise,
        ),
    }


def _number(cell: Cell) -> float:
    if isinstance(cell, Formula):
        return float(cell.value)
    return float("nan") if cell is None else float(cell)


def _money_lines(result: StudyResult, cells: AlternativesCells) -> list[_Line]:
    """Totals of this workbook against the run, and parts against totals."""
    lines = []
    for i, plan in enumerate(result.plans):
        off_yearly, off_capital = _formula_errors(plan, result.real_discount_rate_frac)
        total = Formula(f"={cells.away('total', i)}", plan.costs.total)
        lines.append(
            _Line(
                plan.name,
                "Total of the Alternatives sheet",
                "Total yearly cost by the formulas, and as the run found it",
                Formula(total.text, plan.costs.total + off_yearly),
                plan.costs.total,
                CENT,
                FAIL if abs(off_yearly) > CENT else CHANGED,
            )
        )
        parts = (
            f"=SUM({cells.away('investment', i)},{cells.away('fixed_om', i)},"
            + ",".join(cells.away(key, i) for key in ("energy", "fuel", "demand", "repair"))
            + f",{cells.away('surplus', i)},{cells.away('end_of_window', i)},"
            f"{cells.away('interruption', i)},{cells.away('normal_shedding', i)})"
        )
        lines.append(
            _Line(
                plan.name,
                "Sum of the ten cost parts",
                "All cost parts one by one, and the total by way of the subtotals",
                Formula(parts, plan.costs.total),
                total,
                CENT,
                FAIL,
            )
        )
        lines.append(
            _Line(
                plan.name,
                "Difference to the existing feeder",
                "Difference taken path by path, and the difference of the two totals",
                plan.difference,
                plan.costs.total - baseline(result).costs.total,
                CENT,
                FAIL,
            )
        )
        low, high = plan.cost_interval
        rounding = max(CENT, RELATIVE * abs(plan.costs.total))
        lines.append(
            _Line(
                plan.name,
                "Total lies in its 95 % interval",
                "Sum of the cost parts, and the middle of the interval; allowed: half its width",
                plan.costs.total,
                (low + high) / 2.0,
                (high - low) / 2.0 + rounding,
                FAIL,
            )
        )
        capital = Formula(f"={cells.away('net', i)}", plan.capital_cost + off_capital)
        lines.append(
            _Line(
                plan.name,
                "Capital after grants",
                "Capital by the formulas of the Plan sheet, and as the run found it",
                capital,
                plan.capital_cost,
                CENT,
                FAIL if abs(off_capital) > CENT else CHANGED,
            )
        )
    return lines


def _planning_line(result: StudyResult, cells: AlternativesCells) -> list[_Line]:
    """What planning for outages is worth, which Summary states, against the two totals."""
    names = [plan.name for plan in result.plans]
    if IGNORING_OUTAGES not in names or LEAST_COST not in names:
        return []
    blind, best = names.index(IGNORING_OUTAGES), names.index(LEAST_COST)
    value = result.plans[blind].costs.total - result.plans[best].costs.total
    agrees = abs(value - result.value_of_outage_planning) <= CENT
    return [
        _Line(
            "Study",
            "Worth of planning for outages",
            "Plan ignoring outages less least-cost plan on Alternatives, and the worth that "
            "Summary states",
            Formula(f"={cells.away('total', blind)}-{cells.away('total', best)}", value),
            result.value_of_outage_planning,
            CENT,
            CHANGED if agrees else FAIL,
        )
    ]


def _formula_errors(plan: PlanResult, rate_frac: float) -> tuple[float, float]:
    """By how much formulas from prices miss what the run found: yearly cost, capital.

    Without this the stored results of the checks would compare the run's numbers with themselves.
    """
    assets = plan.purchases
    yearly = sum(
        formula_yearly(asset, rate_frac) - asset.investment - asset.fixed_om for asset in assets
    )
    capital = sum(formula_net_capital(asset) - asset.capital_net for asset in assets)
    fixed_om = sum(asset.fixed_om for asset in assets) - plan.costs.fixed_om
    return yearly + fixed_om, capital


def _energy_lines(result: StudyResult, cells: ReliabilityCells) -> list[_Line]:
    """Energy not supplied by bus, class and window, each against the index."""
    base, best = baseline(result), result.plan(result.recommended)
    lines = []
    first = 0
    for side, plan in (("base", base), ("plan", best)):
        if side == "plan" and plan.name == base.name:
            continue
        i_plan = [one.name for one in result.plans].index(plan.name)
        eens = plan.indices.eens_kwh
        index = Formula(f"={cells.indices.away(2 * i_plan, 'eens')}", eens)
        n_window = len(plan.windows)
        sums = (
            ("bus", cells.buses, f"eens_{side}", 0, len(plan.buses), plan.buses),
            ("customer class", cells.classes, f"eens_{side}", 0, len(plan.classes), plan.classes),
            ("window", cells.windows, "eens_year", first, n_window, plan.windows),
        )
        for word, grid, key, start, n, records in sums:
            if n == 0:
                continue
            value = sum(r.eens_kwh * getattr(r, "occurrences_per_year", 1.0) for r in records)
            lines.append(
                _Line(
                    plan.name,
                    f"Energy not supplied by {word}",
                    f"Sum over every {word} (kWh/year), and the index EENS",
                    Formula(f"=SUM({grid.span_away(key, start, n)})", value),
                    index,
                    max(CENT, RELATIVE * abs(eens)),
                    FAIL,
                )
            )
        first += n_window
        if plan.causes:
            lines.append(_section_line(plan, side, index, cells))
    return lines


def _section_line(plan: PlanResult, side: str, index: Formula, cells: ReliabilityCells) -> _Line:
    """Sections by what each first event does; what an earlier event leaves behind is not in them.

    So they are near the index and not equal to it: a difference is to be judged, not a fault.
    """
    grid = cells.sections
    return _Line(
        plan.name,
        "Energy not supplied by dead section",
        "Sum over every dead section, all events as first ones (kWh/year), and the index EENS, in "
        "which a store may not be full again; allowed: 1 %, and what is shed in normal service",
        Formula(
            f"=SUM({grid.span_away(f'eens_{side}')})", sum(one.eens_kwh for one in plan.causes)
        ),
        index,
        max(CENT, NEAR * abs(plan.indices.eens_kwh)) + plan.normal_shed_kwh,
        LOOK,
    )


def _pack_lines(
    result: StudyResult, alternatives: AlternativesCells, cells: PackCells
) -> list[_Line]:
    """The pack's own figures against the alternatives they rest on."""
    lines: list[_Line] = []
    pack = result.pack
    if not pack.is_asked:
        return lines
    names = [plan.name for plan in result.plans]
    i_best = names.index(pack.plan_name)
    best, base = result.plans[i_best], baseline(result)

    def total(i_plan: int) -> Formula:
        return Formula(f"={alternatives.away('total', i_plan)}", result.plans[i_plan].costs.total)

    def add(name: str, what: str, left: Cell, right: Cell, tolerance: float) -> None:
        # What agrees as the run left it can only differ because a figure was altered since.
        agrees = abs(_number(left) - _number(right)) <= tolerance
        word = CHANGED if agrees else FAIL
        lines.append(_Line("Comparison", name, what, left, right, tolerance, word))

    money = max(CENT, RELATIVE * abs(best.costs.total))
    if cells.sensitivities is not None:
        # The line above the table, two rows over its title.
        place = f"='{SENSITIVITIES}'!$D${cells.sensitivities.top - 2}"
        add(
            "Sensitivities begin at the study as given",
            "Yearly cost that changes are counted from, and the plan's on Alternatives",
            Formula(place, best.costs.total),
            total(i_best),
            money,
        )
    if cells.budget is not None:
        points = pack.budget
        add(
            "Budget curve begins at the existing feeder",
            "Yearly cost with nothing spent, and the existing feeder's on Alternatives",
            Formula(f"={cells.budget.away(0, 'total')}", points[0].plan.costs.total),
            total(names.index(base.name)),
            money,
        )
        rises = [
            max(0.0, after.plan.costs.total - before.plan.costs.total)
            for before, after in pairwise(points)
        ]
        add(
            "Budget curve never rises",
            "Most by which more money costs more, and 0: money need not be spent",
            max(rises, default=0.0),
            0.0,
            money,
        )
        over = max((point.plan.capital_cost - point.budget for point in points), default=0.0)
        add(
            "Budget curve keeps its budgets",
            "Most by which a point spends more than it may, and 0",
            max(0.0, over),
            0.0,
            max(CENT, RELATIVE * max(point.budget for point in points)),
        )
    if cells.repair_time is not None:
        at = [point.factor for point in pack.repair_time].index(1.0)
        add(
            "Repair times as given",
            "Yearly cost of the plan at the repair times given, and on Alternatives",
            Formula(
                f"={cells.repair_time.away(at, 'kept')}", pack.repair_time[at].kept.costs.total
            ),
            total(i_best),
            money,
        )
    if cells.hardening is not None:
        lowest = min(min(row.in_plan.interval[1], row.alone.interval[1]) for row in pack.hardening)
        add(
            "No measure does harm",
            "Upper end of the least worth of any measure where it is below 0, and 0",
            min(0.0, lowest),
            0.0,
            money,
        )
    for case in pack.sensitivities:
        # The plan kept is open to the search, so made anew can cost no more than it; unless at
        # these prices it is beyond the budget.
        above = case.anew.costs.total - case.kept.costs.total
        budget = result.capital_budget
        is_open = budget is None or case.kept.capital_cost <= budget * (1.0 + 1e-9)
        if is_open and above > money:
            add(
                f"Plan made anew, {case.parameter} {'high' if case.is_high else 'low'}",
                "Amount by which it costs more than the plan kept, and 0",
                above,
                0.0,
                money,
            )
    return lines
