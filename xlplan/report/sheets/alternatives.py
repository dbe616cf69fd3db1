"""Alternatives side by side: from cost parts to totals, present value and payback.

A statement: one row per figure, one column per alternative. Parts that evaluation found are
numbers; investment and fixed O&M are taken from the Plan sheet; everything else is a formula.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

from xlsxwriter.utility import xl_rowcol_to_cell

from xlplan.base.units import minutes_from_hours
from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import PlanResult
from xlplan.report import money
from xlplan.report.grid import Cell, Formula, write_cell
from xlplan.report.room import BODY_CHARS, HEADING_CHARS, LINE_POINTS, lines_needed
from xlplan.report.safe_book import SafeBook
from xlplan.report.sheets.plan import DISCOUNT_RATE, PlanCells
from xlplan.report.sheets.price_list import write_prices
from xlplan.report.sheets.reliability import ReliabilityCells
from xlplan.report.statement import HEAD_ROW, STATEMENT, statement_rows
from xlplan.report.tables import ALTERNATIVES

STUDY_LIFE = "study_life_years"
RATE_ROW, LIFE_ROW = 3, 4
FIRST_PLAN_COL = 2
LABEL_WIDTH, UNIT_WIDTH, PLAN_WIDTH, NOTE_WIDTH = 38, 14, 14, 66
NUMBER_PARTS = (
    "energy",
    "fuel",
    "demand",
    "repair",
    "surplus",
    "end_of_window",
    "interruption",
    "normal_shedding",
)


@dataclass(frozen=True)
class AlternativesCells:
    """Where each figure stands: ``here(key, i_plan)`` on the sheet, ``away`` for others."""

    row_of: dict[str, int]
    content: list[dict[str, Cell]] = field(default_factory=list)
    """What each plan's column holds, by key."""

    def here(self, key: str, i_plan: int) -> str:
        """Relative address on the sheet."""
        return str(xl_rowcol_to_cell(self.row_of[key], FIRST_PLAN_COL + i_plan))

    def base(self, key: str) -> str:
        """The existing feeder's figure: the column stays where the formula is copied."""
        return str(xl_rowcol_to_cell(self.row_of[key], FIRST_PLAN_COL, False, True))

    def away(self, key: str, i_plan: int) -> str:
        """Address for other sheets."""
        cell = xl_rowcol_to_cell(self.row_of[key], FIRST_PLAN_COL + i_plan, True, True)
        return f"'{ALTERNATIVES}'!{cell}"


def write(
    book: SafeBook, result: StudyResult, plan_cells: PlanCells, reliability: ReliabilityCells
) -> AlternativesCells:
    """Writes the sheet; Summary and Checks refer to its cells."""
    sheet = book.sheet(ALTERNATIVES)
    sheet.head(
        "Alternatives side by side",
        "Yearly cost from its parts to totals, then capital, payback and present value, against "
        "the existing feeder. Blue figures (rates, and prices at the end) can be changed.",
    )
    _write_assumptions(book, result)
    row_of, _ = statement_rows()
    cells = AlternativesCells(row_of)
    note_col = FIRST_PLAN_COL + len(result.plans)
    for i, plan in enumerate(result.plans):
        sheet.text(HEAD_ROW, FIRST_PLAN_COL + i, plan.name, "heading_right")
    for col, title in ((0, "Figure"), (1, "Unit")):
        sheet.text(HEAD_ROW, col, title, "heading")
    sheet.text(HEAD_ROW, note_col, "What it is", "heading", "indent")
    room = HEADING_CHARS * PLAN_WIDTH - 1
    lines_of_names = max(lines_needed(plan.name, room) for plan in result.plans)
    sheet.height(HEAD_ROW, LINE_POINTS * lines_of_names + 4)
    content = [
        {
            **_cost_cells(plan, i, cells, plan_cells),
            **_worth_cells(result, plan, i, cells),
            **_minute_cells(result, plan, i, cells, plan_cells, reliability),
        }
        for i, plan in enumerate(result.plans)
    ]
    for block in STATEMENT:
        sheet.text(cells.row_of[block.title], 0, block.title, "section")
        for line in block.lines:
            row = cells.row_of[line.key]
            lines = lines_needed(line.note, BODY_CHARS * NOTE_WIDTH)
            if lines > 1:
                sheet.height(row, LINE_POINTS * lines + 3)
            extra = (
                *((line.modifier,) if line.modifier else ()),
                *(("top",) if lines > 1 else ()),
            )
            sheet.text(row, 0, line.label, "text", *extra)
            sheet.text(row, 1, book.words(line.unit), "subtitle", *extra)
            for i, by_key in enumerate(content):
                write_cell(sheet, row, FIRST_PLAN_COL + i, by_key[line.key], line.look, *extra)
            note_looks = ("remark", "wrapped", *(("top",) if lines > 1 else ()))
            sheet.text(row, note_col, line.note, *note_looks)
    unit = max(UNIT_WIDTH, len(result.currency) + 7)
    sheet.widths([LABEL_WIDTH, unit] + [PLAN_WIDTH] * len(result.plans) + [NOTE_WIDTH])
    sheet.freeze(HEAD_ROW + 1, FIRST_PLAN_COL)
    write_prices(sheet, plan_cells.price_list)
    prices = plan_cells.price_list
    breaks = [prices.top] if prices.assets else []
    sheet.print_setup(prices.below, note_col, heading_row=HEAD_ROW, breaks=breaks)
    return replace(cells, content=content)


def _write_assumptions(book: SafeBook, result: StudyResult) -> None:
    """The two figures that formulas of several sheets use, each with a name."""
    sheet = book.sheet(ALTERNATIVES)
    rate, years = result.real_discount_rate_frac, money.STUDY_LIFE_YEARS
    sheet.text(RATE_ROW, 0, "Real discount rate (per year)")
    sheet.number(RATE_ROW, 1, rate, "percent", "input")
    sheet.text(RATE_ROW, 2, "As given in the study", "remark")
    sheet.text(LIFE_ROW, 0, "Years that present values cover")
    sheet.number(LIFE_ROW, 1, years, "years", "input")
    sheet.text(LIFE_ROW, 2, "Common practice; not an input of the study", "remark")
    book.define_name(DISCOUNT_RATE, ALTERNATIVES, f"$B${RATE_ROW + 1}")
    book.define_name(STUDY_LIFE, ALTERNATIVES, f"$B${LIFE_ROW + 1}")


OF_WEIGHTED_COST = "see Convergence"
"""Bound and gap belong to the weighted cost where bad outcomes have a weight."""


def _cost_cells(
    plan: PlanResult, i: int, cells: AlternativesCells, plan_cells: PlanCells
) -> dict[str, Cell]:
    """Cost parts, subtotals and total."""
    costs = plan.costs

    def column_sum(first: str, last: str, value: float) -> Formula:
        return Formula(f"=SUM({cells.here(first, i)}:{cells.here(last, i)})", value)

    parts: dict[str, Cell] = {key: getattr(costs, key) for key in NUMBER_PARTS}
    totals = plan_cells.totals
    return {
        **parts,
        "investment": Formula(f"={totals.away(i, 'investment')}", costs.investment),
        "fixed_om": Formula(f"={totals.away(i, 'fixed_om')}", costs.fixed_om),
        "utility": column_sum("investment", "end_of_window", costs.utility),
        "customers": column_sum("interruption", "normal_shedding", costs.customers),
        "total": Formula(f"={cells.here('utility', i)}+{cells.here('customers', i)}", costs.total),
        "low": plan.cost_interval[0],
        "high": plan.cost_interval[1],
        "bound": plan.lower_bound if plan.aim is None else OF_WEIGHTED_COST,
        "demand_kw": plan.demand_kw,
        "shed_kwh": plan.normal_shed_kwh,
        "burnt_kwh": plan.burnt_kwh,
        "own_clock": plan.interruption_own_clock,
        "gap": plan.gap_frac if plan.aim is None else OF_WEIGHTED_COST,
        "gross": Formula(f"={totals.away(i, 'gross')}", plan.capital_gross),
        "net": Formula(f"={totals.away(i, 'net')}", plan.capital_cost),
        "grants": Formula(
            f"={cells.here('gross', i)}-{cells.here('net', i)}",
            plan.capital_gross - plan.capital_cost,
        ),
    }


def _worth_cells(
    result: StudyResult, plan: PlanResult, i: int, cells: AlternativesCells
) -> dict[str, Cell]:
    """Difference to the existing feeder, saving, payback, benefit-cost ratio, present value."""
    base = money.baseline(result)
    extra_capital = plan.capital_cost - base.capital_cost
    extra_investment = plan.costs.investment - base.costs.investment
    factor = money.annuity_factor(result.real_discount_rate_frac, money.STUDY_LIFE_YEARS)
    difference = plan.costs.total - base.costs.total

    def less_base(key: str, value: float) -> Formula:
        return Formula(f"={cells.here(key, i)}-{cells.base(key)}", value)

    def saving_on(key: str, base_cost: float, cost: float) -> tuple[Formula, float]:
        value = money.saving(base_cost, base.costs.investment, cost, plan.costs.investment)
        text = (
            f"=({cells.base(key)}-{cells.base('investment')})"
            f"-({cells.here(key, i)}-{cells.here('investment', i)})"
        )
        return Formula(text, value), value

    saving_cell, saving = saving_on("total", base.costs.total, plan.costs.total)
    own_cell, own_saving = saving_on("utility", base.costs.utility, plan.costs.utility)

    def payback(saving_key: str, value: float) -> Cell:
        if not money.buys_anything(plan):
            return money.NOTHING_BOUGHT
        saved = cells.here(saving_key, i)
        text = f'=IF({saved}<=0,"{money.NO_PAYBACK}",{cells.here("extra_capital", i)}/{saved})'
        return Formula(text, money.payback_years(extra_capital, value))

    ratio: Cell = money.NOTHING_BOUGHT
    if extra_investment > 0.0:
        text = f"={cells.here('saving', i)}/{cells.here('extra_investment', i)}"
        ratio = Formula(text, saving / extra_investment)
    present = f"=-PV({DISCOUNT_RATE},{STUDY_LIFE},{cells.here('total', i)})"
    return {
        "difference": less_base("total", difference),
        "difference_low": plan.difference_interval[0],
        "difference_high": plan.difference_interval[1],
        "verdict": _verdict(cells, i, "difference", plan.difference_interval, plan.name, base.name),
        "to_best": plan.difference_to_best,
        "to_best_low": plan.difference_to_best_interval[0],
        "to_best_high": plan.difference_to_best_interval[1],
        "to_best_verdict": _verdict(
            cells, i, "to_best", plan.difference_to_best_interval, plan.name, result.recommended
        ),
        "extra_capital": less_base("net", extra_capital),
        "extra_investment": less_base("investment", extra_investment),
        "saving": saving_cell,
        "payback": payback("saving", saving),
        "own_saving": own_cell,
        "own_payback": payback("own_saving", own_saving),
        "ratio": ratio,
        "present_total": Formula(present, plan.costs.total * factor),
        "present_difference": less_base("present_total", difference * factor),
    }


def _verdict(
    cells: AlternativesCells, i: int, key: str, span: tuple[float, float], name: str, other: str
) -> Cell:
    """Cheaper, dearer or undecided by the interval; nothing to say of a plan against itself."""
    if name == other:
        return "-"
    low, high = cells.here(f"{key}_low", i), cells.here(f"{key}_high", i)
    cent = money.HALF_CENT
    text = (
        f'=IF({low}>{cent},"{money.DEARER}",'
        f'IF({high}<-{cent},"{money.CHEAPER}","{money.UNDECIDED}"))'
    )
    return Formula(text, money.verdict(span))


def _minute_cells(
    result: StudyResult,
    plan: PlanResult,
    i: int,
    cells: AlternativesCells,
    plan_cells: PlanCells,
    reliability: ReliabilityCells,
) -> dict[str, Cell]:
    """Customer-minutes avoided and what one costs; totals as if there were no grants."""
    base = money.baseline(result)
    saved_h = base.indices.saidi_h - plan.indices.saidi_h
    minutes = minutes_from_hours(saved_h) * result.customers
    minutes_text = (
        f"=({cells.base('saidi')}-{cells.here('saidi', i)})*{cells.here('customers_served', i)}*60"
    )
    extra = plan.costs.utility - base.costs.utility
    per_minute: Cell = "none avoided"
    if minutes > money.LEAST_MINUTES:
        text = f"=({cells.here('utility', i)}-{cells.base('utility')})/{cells.here('minutes', i)}"
        per_minute = Formula(text, extra / minutes)
    gross = sum(a.capital_gross * a.crf for a in plan.purchases)
    base_gross = sum(a.capital_gross * a.crf for a in base.purchases)
    totals = plan_cells.totals
    ratio: Cell = money.NOTHING_BOUGHT
    if gross - base_gross > 0.0:
        saved = money.saving(
            base.costs.total, base.costs.investment, plan.costs.total, plan.costs.investment
        )
        less = f"({totals.away(i, 'investment_gross')}-{totals.away(0, 'investment_gross')})"
        ratio = Formula(f"={cells.here('saving', i)}/{less}", saved / (gross - base_gross))
    total_gross = (
        f"={cells.here('total', i)}+{totals.away(i, 'investment_gross')}"
        f"-{totals.away(i, 'investment')}"
    )
    return {
        "customers_served": result.customers,
        "saidi": Formula(f"={reliability.indices.away(2 * i, 'saidi')}", plan.indices.saidi_h),
        "minutes": Formula(minutes_text, minutes),
        "per_minute": per_minute,
        "total_gross": Formula(total_gross, plan.costs.total + gross - plan.costs.investment),
        "ratio_gross": ratio,
    }
