"""Convergence: how far the solver got, and what each of its numbers means."""

from __future__ import annotations

import math

from xlplan.base.units import pct_from_frac
from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import ConvergenceRow, PlanResult
from xlplan.report import charts, wording
from xlplan.report.grid import Cell, Formula, Grid, set_widths
from xlplan.report.looks import BLACK, BLUE, VERMILION
from xlplan.report.safe_book import SafeBook
from xlplan.report.tables import AIMS, CONVERGENCE, METHODS, PASSES

WIDTHS = (26, 17, 17, 17, 17, 17, 15, 15, 13, 30, 12)
CHART_ROWS = 19

MEANINGS = (
    "Lower bound: no plan on offer costs less a year than this; it is proven, not sampled.",
    "Cost of following the plan: what the plan is expected to cost when it is run without knowing "
    "when something will fail. Where it is sampled it is a statistical figure with a 95 % "
    "interval: in about 19 of 20 runs with other seeds the interval would hold the true cost.",
    "Gap: upper end of that interval less the lower bound, as a share of the cost; what a better "
    "plan could at most still save. It is in part statistical where the cost is.",
    "Bound from above: with these purchases the feeder can be run for no more than this; it is "
    "proven, not sampled, and left blank where working it out would take too long.",
    "A run that was stopped gives its best plan with the gap it had; nothing is rounded in its "
    "favour.",
)


SEE_BELOW = "see below"
"""In the place of figures that are those of the weighted cost."""


def write(book: SafeBook, result: StudyResult) -> None:
    """Writes the sheet."""
    sheet = book.sheet(CONVERGENCE)
    best = result.plan(result.recommended)
    target = f"target {pct_from_frac(result.gap_target_frac):.2f} %"
    sheet.head("How far the solver got", f"Status: {result.status}; {target}; seed {result.seed}.")
    set_widths(sheet, WIDTHS, METHODS)
    row = 3
    for meaning in (*wording.aim_words(best, result.currency), *_aim_meaning(best), *MEANINGS):
        sheet.paragraph(row, 0, len(WIDTHS) - 1, meaning, 205)
        row += 1
    chart_row = row + 1
    row += 2 + (CHART_ROWS if len(best.convergence) > 1 else 0)
    sheet.text(row, 0, "Alternatives", "section")
    methods = Grid(CONVERGENCE, row + 1, METHODS, len(result.plans))
    marked = [i for i, plan in enumerate(result.plans) if plan.name == best.name]
    methods.write(sheet, [_method_row(plan) for plan in result.plans], marked)
    sheet.text(methods.below, 0, f"Why this method: {result.method_reason}", "note")
    row = methods.below + 2
    if best.aim is not None:
        aimed = [plan for plan in result.plans if plan.aim is not None]
        sheet.text(row, 0, "Weighted cost: what plans are chosen by", "section")
        aims = Grid(CONVERGENCE, row + 1, AIMS, len(aimed))
        marked = [i for i, plan in enumerate(aimed) if plan.name == best.name]
        aims.write(sheet, [_aim_row(plan, aims, i) for i, plan in enumerate(aimed)], marked)
        row = aims.below + 1
    passes = Grid(CONVERGENCE, row + 1, PASSES, len(best.convergence))
    sheet.text(row, 0, f"Passes of the solver: {best.name}", "section")
    passes.write(sheet, [_pass_row(one) for one in best.convergence])
    _write_chart(book, best, passes, chart_row)
    sheet.freeze(2, 0)
    sheet.print_setup(passes.below, len(METHODS) - 1, heading_row=passes.top)


def _aim_meaning(best: PlanResult) -> tuple[str, ...]:
    """What the figures below are where bad outcomes have a weight."""
    if best.aim is None:
        return ()
    return (
        "Lower bound, gap and the passes of the solver are those of the weighted cost. Outcomes of "
        "a window are: nothing fails, or the first failure with the expected cost of what follows. "
        "Where that is sampled the mean of the worst comes out a little too high, so the upper end "
        "is on the safe side.",
    )


def _aim_row(plan: PlanResult, grid: Grid, i: int) -> dict[str, Cell]:
    aim = plan.aim
    assert aim is not None
    expected, tail = grid.here(i, "expected"), grid.here(i, "tail")
    weight = f"{aim.weight_frac:.6g}"
    return {
        "name": plan.name,
        "bound": plan.lower_bound,
        "expected": aim.expected,
        "tail": aim.tail,
        "total": Formula(f"=(1-{weight})*{expected}+{weight}*{tail}", aim.total),
        "low": aim.interval[0],
        "high": aim.interval[1],
        "ceiling": plan.bound_upper,
        "gap": plan.gap_frac,
    }


def _method_row(plan: PlanResult) -> dict[str, Cell]:
    counted = "every path counted" if plan.is_enumerated else f"{plan.n_sample:,} sampled histories"
    return {
        "name": plan.name,
        "bound": plan.lower_bound if plan.aim is None else SEE_BELOW,
        "cost": plan.costs.total,
        "low": plan.cost_interval[0],
        "high": plan.cost_interval[1],
        "ceiling": plan.bound_upper if plan.aim is None else SEE_BELOW,
        "gap": plan.gap_frac if plan.aim is None else SEE_BELOW,
        "status": plan.status,
        "method": plan.method,
        "counted": counted,
        "seconds": plan.solve_seconds,
    }


def _known(number: float) -> Cell:
    """A number, or a blank where a pass has none (text would be drawn as 0)."""
    return number if math.isfinite(number) else ""


def _pass_row(one: ConvergenceRow) -> dict[str, Cell]:
    return {
        "seconds": one.seconds,
        "bound": _known(one.lower_bound),
        "estimate": _known(one.estimate),
        "upper": _known(one.upper_end),
        "gap": _known(one.gap_frac),
        "note": one.note,
    }


def _write_chart(book: SafeBook, best: PlanResult, passes: Grid, row: int) -> None:
    """Bound and cost against solving time; the axis holds what came within sight of the end."""
    if len(best.convergence) < 2:
        return
    # The first bounds are far off and would flatten the rest of the picture.
    seen = best.convergence[len(best.convergence) // 4 :]
    known = [
        number
        for one in seen
        for number in (one.lower_bound, one.estimate, one.upper_end)
        if math.isfinite(number)
    ]
    if not known:
        return
    low, high = _axis_range(min(known), max(known))
    series = [
        charts.Series(
            passes.chart_name("upper"), passes.chart_values("upper"), VERMILION, (), dash="dash"
        ),
        charts.Series(passes.chart_name("estimate"), passes.chart_values("estimate"), BLACK),
        charts.Series(
            passes.chart_name("bound"), passes.chart_values("bound"), BLUE, (), width_pt=3
        ),
    ]
    chart = charts.lines_over_numbers(
        book,
        "Lower bound and cost of following the plan, by solving time",
        passes.chart_values("seconds"),
        series,
        "Solving time (s)",
        book.words("Yearly cost ({money}/year), axis not from 0"),
        (low, high),
    )
    alt = (
        "Lines against solving time: the lower bound rising, the cost of following the plan and "
        "the upper end of its interval coming down towards it."
    )
    book.sheet(CONVERGENCE).chart(
        row, 0, chart, 1150, (CHART_ROWS - 1) * charts.PIXELS_PER_ROW, alt
    )


def _axis_range(low: float, high: float) -> tuple[float, float]:
    """Round ends of an axis that holds all values."""
    span = max(high - low, abs(high) * 1e-3, 1.0)
    step = 10.0 ** math.floor(math.log10(span))
    return math.floor(low / step) * step, math.ceil(high / step) * step
