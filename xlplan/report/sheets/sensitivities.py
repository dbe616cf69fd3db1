"""Sensitivities: range of the cost per assumption, what the plan becomes, least regret."""

from __future__ import annotations

from dataclasses import dataclass

from xlplan.compare.pack_result import SensitivityCase
from xlplan.compare.study_result import StudyResult
from xlplan.report import charts, pack_wording
from xlplan.report.grid import Cell, Column, Formula, Grid, set_widths
from xlplan.report.looks import BLUE, ORANGE
from xlplan.report.safe_book import SafeBook, SafeSheet
from xlplan.report.sheets.absent import say_absent
from xlplan.report.tables import REGRETS, SENSITIVITIES, SENSITIVITY_PARTS, SENSITIVITY_ROWS

WIDTHS = (30, 13, 13, 13, 13, 13, 13, 13, 32, 32, 18)
CHART_ROWS, ROWS_PER_BAR = 9, 1.7
MOST_BESIDE_CHART = 3
"""Rows of the tables that fit on the page of the chart."""

CHART_TOP = 5
AS_GIVEN = "as given"


@dataclass(frozen=True)
class _Pair:
    """Low and high of one assumption; either may be missing."""

    parameter: str
    low: SensitivityCase | None
    high: SensitivityCase | None

    def span(self, base: float) -> tuple[float, float]:
        """Lowest and highest cost of the best plan, the study's own among them."""
        costs = [base] + [c.anew.costs.total for c in (self.low, self.high) if c is not None]
        return min(costs), max(costs)


def write(book: SafeBook, result: StudyResult) -> Grid | None:
    """Writes the sheet; the table for Checks, None where there is none."""
    sheet = book.sheet(SENSITIVITIES)
    sheet.head(
        "What would change our mind",
        "One assumption varied at a time, as the study asks. Best plan: made anew for the case; "
        f"plan kept: the purchases of the {result.pack.plan_name or 'plan'}.",
    )
    set_widths(sheet, WIDTHS, SENSITIVITY_ROWS, SENSITIVITY_PARTS, REGRETS)
    cases = result.pack.sensitivities
    if not cases:
        say_absent(sheet, result, "rows on its Sensitivities sheet")
        return None
    base = result.plan(result.pack.plan_name).costs.total
    pairs = sorted(_pairs(cases), key=lambda one: one.span(base)[0] - one.span(base)[1])
    words = pack_wording.sensitivities(result)
    sheet.paragraph(3, 0, len(WIDTHS) - 1, words, sum(WIDTHS), "text", "bold")
    n_row = CHART_ROWS + round(ROWS_PER_BAR * len(pairs))
    base_row = CHART_TOP + n_row + 1
    sheet.text(base_row, 0, f"Yearly cost as given: {result.pack.plan_name}")
    sheet.number(base_row, 3, base, "money")
    grid = Grid(SENSITIVITIES, base_row + 3, SENSITIVITY_ROWS, len(pairs))
    sheet.text(grid.top - 1, 0, "By assumption, the widest range first", "section")
    base_cell = f"$D${base_row + 1}"
    parts = Grid(SENSITIVITIES, grid.below + 2, SENSITIVITY_PARTS, len(pairs))
    grid.write(sheet, [_row(pair, grid, parts, i, base, base_cell) for i, pair in enumerate(pairs)])
    title = "The same: the utility's own part and the customers', and the plan kept"
    sheet.text(parts.top - 1, 0, title, "section")
    parts.write(sheet, [_parts_row(pair) for pair in pairs])
    chart = charts.bars(
        book,
        "Yearly cost of the best plan against the study as given, sorted by range",
        grid.chart_values("name"),
        [
            charts.Series(grid.chart_name("low_change"), grid.chart_values("low_change"), BLUE),
            charts.Series(grid.chart_name("high_change"), grid.chart_values("high_change"), ORANGE),
        ],
        "Assumption",
        book.words("Change of the yearly cost ({money}/year)"),
        overlap=100,
    )
    alt = "Bars to both sides: change of the yearly cost at the low and high value of each row."
    width = sheet.pixels(0, len(WIDTHS) - 1) - 10
    sheet.chart(CHART_TOP, 0, chart, width, n_row * charts.PIXELS_PER_ROW - 10, alt)
    row = _regrets(sheet, result, parts.below + 2)
    notes: tuple[str, ...] = (
        "The plan changes where another asset is bought or a size moves by more than 10 %. Kept "
        "plan no worse: the loss by keeping it is within its interval.",
        "Regret: yearly cost of an alternative's purchases less that of the best plan of the case. "
        "Alternatives with other devices, and those that ignore outages, are left out.",
        "Asset costs vary in capital, not in O&M; the energy price varies with the sale price and "
        "the price of stored energy; load varies in every window alike.",
    )
    if result.capital_budget is not None:
        notes += (
            "A plan that is kept may cost more than the budget where assets are dearer; a plan "
            "made anew keeps within it, and may then be the dearer one a year.",
        )
    for i, note in enumerate(notes):
        sheet.text(row + i, 0, note, "note")
    sheet.freeze(2, 1)
    breaks = [*([] if len(pairs) <= MOST_BESIDE_CHART else [base_row]), parts.below + 2]
    last_col = max(len(WIDTHS), len(result.pack.regrets) + 3) - 1
    sheet.print_setup(row + len(notes), last_col, breaks=breaks)
    return grid


def _pairs(cases: tuple[SensitivityCase, ...]) -> list[_Pair]:
    """Cases of a row side by side; a row that stands twice on the sheet stays two rows."""
    pairs: list[_Pair] = []
    for case in cases:
        last = pairs[-1] if pairs else None
        is_second = case.is_high and last is not None and last.high is None
        if is_second and last is not None and last.parameter == case.parameter:
            pairs[-1] = _Pair(case.parameter, last.low, case)
            continue
        low, high = (None, case) if case.is_high else (case, None)
        pairs.append(_Pair(case.parameter, low, high))
    return pairs


def _parts_row(pair: _Pair) -> dict[str, Cell]:
    """The utility's own part and the customers' of the best plan, low and high."""
    row: dict[str, Cell] = {"name": pair.parameter}
    for side, case in (("low", pair.low), ("high", pair.high)):
        row[f"{side}_utility"] = None if case is None else case.anew.costs.utility
        row[f"{side}_customers"] = None if case is None else case.anew.costs.customers
        row[f"{side}_kept"] = None if case is None else case.kept.costs.total
    return row


def _row(
    pair: _Pair, grid: Grid, parts: Grid, i: int, base: float, base_cell: str
) -> dict[str, Cell]:
    def change(case: SensitivityCase | None, side: str) -> Cell:
        if case is None:
            return None
        return Formula(f"={grid.here(i, f'{side}_anew')}-{base_cell}", case.anew.costs.total - base)

    def total(case: SensitivityCase | None, side: str) -> Cell:
        if case is None:
            return None
        text = f"={parts.here(i, f'{side}_utility')}+{parts.here(i, f'{side}_customers')}"
        return Formula(text, case.anew.costs.total)

    low, high = pair.span(base)
    reach = f"{grid.here(i, 'low_anew')},{grid.here(i, 'high_anew')},{base_cell}"
    return {
        "name": pair.parameter,
        "low_value": None if pair.low is None else pair.low.value,
        "high_value": None if pair.high is None else pair.high.value,
        "low_anew": total(pair.low, "low"),
        "high_anew": total(pair.high, "high"),
        "low_change": change(pair.low, "low"),
        "high_change": change(pair.high, "high"),
        "range": Formula(f"=MAX({reach})-MIN({reach})", high - low),
        "low_plan": None if pair.low is None else pair.low.changes,
        "high_plan": None if pair.high is None else pair.high.changes,
        "verdict": _verdict([c for c in (pair.low, pair.high) if c is not None]),
    }


def _verdict(cases: list[SensitivityCase]) -> str:
    if not any(case.does_change for case in cases):
        return "no"
    if any(case.does_change and case.is_decided for case in cases):
        return "yes"
    return "kept plan no worse"


def _regrets(sheet: SafeSheet, result: StudyResult, row: int) -> int:
    """Costs of every alternative in every case, and their regrets in formulas; next free row."""
    names = [regret.name for regret in result.pack.regrets]
    as_given = {r.name: r.base_total for r in result.pack.regrets}
    cases: list[tuple[str, dict[str, float], float | None]] = [(AS_GIVEN, as_given, None)]
    for case in result.pack.sensitivities:
        word = f"{case.parameter} {'high' if case.is_high else 'low'}"
        cases.append((word, dict(case.totals), case.anew.costs.total))
    columns = [Column("case", "Case", "wrap")]
    columns += [Column(f"cost {n}", f"{n} ({{money}}/year)", "money") for n in names]
    columns.append(Column("anew", "Plan made anew ({money}/year)", "money"))
    columns.append(Column("best", "Best of the row ({money}/year)", "money"))
    lost = [Column("case", "Case", "wrap")]
    lost += [Column(f"regret {n}", f"Regret: {n} ({{money}}/year)", "money") for n in names]
    top = Grid(SENSITIVITIES, row + 1, REGRETS, len(names))
    table = Grid(SENSITIVITIES, top.below + 2, tuple(columns), len(cases))
    losses = Grid(SENSITIVITIES, table.below + 2, tuple(lost), len(cases))
    rows: list[dict[str, Cell]] = []
    loss_rows: list[dict[str, Cell]] = []
    regret_of: dict[str, list[float]] = {name: [] for name in names}
    for i, (word, totals, anew) in enumerate(cases):
        known = [*totals.values(), *([] if anew is None else [anew])]
        first, last = table.here(i, f"cost {names[0]}"), table.here(i, "anew")
        cells: dict[str, Cell] = {
            "case": word,
            "anew": "" if anew is None else anew,
            "best": Formula(f"=MIN({first}:{last})", min(known)),
        }
        loss_cells: dict[str, Cell] = {"case": word}
        for name in names:
            regret = totals[name] - min(known)
            regret_of[name].append(regret)
            cells[f"cost {name}"] = totals[name]
            text = f"={table.here(i, f'cost {name}')}-{table.here(i, 'best')}"
            loss_cells[f"regret {name}"] = Formula(text, regret)
        rows.append(cells)
        loss_rows.append(loss_cells)
    largest = {name: max(values) for name, values in regret_of.items()}
    summary: list[dict[str, Cell]] = []
    for i, name in enumerate(names):
        span = losses.span(f"regret {name}")
        values = regret_of[name]
        worst = cases[values.index(largest[name])][0]
        place = f"=INDEX({losses.span('case')},MATCH({top.here(i, 'largest')},{span},0))"
        rank = 1 + sum(one < largest[name] for one in largest.values())
        summary.append(
            {
                "name": name,
                "base": result.pack.regrets[i].base_total,
                "largest": Formula(f"=MAX({span})", largest[name]),
                "case": Formula(place, worst),
                "mean": Formula(f"=AVERAGE({span})", sum(values) / len(values)),
                "rank": Formula(
                    f"=RANK({top.here(i, 'largest')},{top.span('largest')},1)", float(rank)
                ),
            }
        )
    sheet.text(top.top - 1, 0, "Least regret over all cases", "section")
    top.write(sheet, summary, marked=[0])
    sheet.text(table.top - 1, 0, "Yearly cost of every alternative in every case", "section")
    table.write(sheet, rows)
    title = "Regret: yearly cost less that of the best plan of the row"
    sheet.text(losses.top - 1, 0, title, "section")
    losses.write(sheet, loss_rows)
    return losses.below + 1
