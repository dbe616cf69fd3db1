"""Plan: what each alternative buys, from prices to yearly cost, in live formulas.

Three tables: totals by alternative, one price list that all alternatives share, and one block of
purchases per alternative in the order of the price list. A price or the discount rate changed here
moves every total of the workbook; the purchases stay what the run found.
"""

from __future__ import annotations

from dataclasses import dataclass

from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import PlanResult, Purchase
from xlplan.report.grid import Cell, Formula, Grid, set_widths
from xlplan.report.money import buys_anything
from xlplan.report.safe_book import SafeBook
from xlplan.report.sheets.price_list import PriceList, place_prices
from xlplan.report.statement import statement_rows
from xlplan.report.tables import PLAN, PLAN_TOTALS, PRICES, PURCHASES

DISCOUNT_RATE = "discount_rate"
"""Name of the cell that holds the real discount rate; it stands on the Alternatives sheet."""

WIDTHS = (27, 18, 12, 12, 13, 13, 14, 14, 14, 14, 13, 13, 13)


@dataclass(frozen=True)
class PlanCells:
    """Where the totals stand: row i belongs to plan i of the result."""

    totals: Grid
    prices: Grid
    price_row: dict[str, int]
    price_list: PriceList

    def price(self, asset: str, key: str) -> str:
        """Address of one figure of the price list, for other sheets."""
        return self.prices.away(self.price_row[asset], key)


def write(book: SafeBook, result: StudyResult) -> PlanCells:
    """Writes the sheet; the place of its totals is needed by Alternatives and Checks."""
    sheet = book.sheet(PLAN)
    sheet.head(
        "What each alternative buys",
        "Blue figures on a pale fill were found by the run; black ones are formulas that follow "
        "them and the prices on the Alternatives sheet. Changing one searches for no new plan.",
    )
    set_widths(sheet, WIDTHS, PLAN_TOTALS, PRICES, PURCHASES)
    shown = [plan for plan in result.plans if buys_anything(plan)]
    # Prices are the study's, the same in every plan; they are typed on the Alternatives sheet.
    price_list = place_prices(result, statement_rows()[1] + 2)
    assets = price_list.assets
    price_row = {asset.asset: i for i, asset in enumerate(assets)}
    totals = Grid(PLAN, 4, PLAN_TOTALS, len(result.plans))
    prices = Grid(PLAN, totals.below + 2, PRICES, len(assets))
    n_row = sum(len(plan.purchases) for plan in shown)
    bought = Grid(PLAN, prices.below + 2, PURCHASES, n_row)

    sheet.text(totals.top - 1, 0, "Totals by alternative", "section")
    first_row = {}
    rows: list[dict[str, Cell]] = []
    for plan in shown:
        first_row[plan.name] = len(rows)
        for asset in plan.purchases:
            i_price = price_row[asset.asset]
            rows.append(_purchase_row(plan, asset, bought, len(rows), prices, i_price))
    total_rows = [
        _total_row(plan, i, totals, bought, first_row.get(plan.name))
        for i, plan in enumerate(result.plans)
    ]
    best = [i for i, plan in enumerate(result.plans) if plan.name == result.recommended]
    totals.write(sheet, total_rows, marked=best)

    sheet.text(prices.top - 1, 0, "Prices and lives, from the Alternatives sheet", "section")
    prices.write(sheet, [_price_row(a, prices, i, price_list) for i, a in enumerate(assets)])

    sheet.text(bought.top - 1, 0, "Purchases by alternative", "section")
    marked = [i for i, row in enumerate(rows) if row["is_bought"] == "yes"]
    bought.write(sheet, rows, marked=marked)
    sheet.text(bought.below + 1, 0, NOTE, "note")
    sheet.freeze(2, 1)
    sheet.print_setup(bought.below + 1, len(PURCHASES) - 1, heading_row=bought.top)
    return PlanCells(totals, prices, price_row, price_list)


NOTE = (
    "Capital recovery factor = r (1 + r)^n / ((1 + r)^n - 1), 1/n at r = 0, with each asset's own "
    "life n. Alternatives that buy nothing have no rows."
)


def _price_row(asset: Purchase, prices: Grid, i: int, price_list: PriceList) -> dict[str, Cell]:
    """One asset that can be bought: its prices, and the factor of its own life."""

    def figure(key: str, value: float) -> Cell:
        place = price_list.away(asset.asset, key)
        return value if place is None else Formula(f"={place}", value)

    return {
        "asset": asset.asset,
        "place": asset.place,
        "kind": asset.kind,
        "max_kw": asset.max_new_kw,
        "max_kwh": asset.max_new_kwh,
        "per_kw": figure("per_kw", asset.capital_per_kw),
        "per_kwh": figure("per_kwh", asset.capital_per_kwh),
        "site": figure("site", asset.capital_site),
        "grant": figure("grant", asset.grant_frac),
        "life": figure("life", asset.life_years),
        "om_rate": figure("om_rate", asset.fixed_om_rate),
        "crf": Formula(f"=-PMT({DISCOUNT_RATE},{prices.here(i, 'life')},1)", asset.crf),
    }


def _purchase_row(
    plan: PlanResult, asset: Purchase, bought: Grid, i: int, prices: Grid, i_price: int
) -> dict[str, Cell]:
    """What a plan buys of one asset: capital, grant, factor, yearly cost."""

    def price(key: str) -> str:
        return prices.fixed(i_price, key)

    is_bought, kw, kwh = (bought.here(i, key) for key in ("is_bought", "kw", "kwh"))
    capital = f"{price('site')}+{kw}*{price('per_kw')}+{kwh}*{price('per_kwh')}"
    om_units = f'=IF({is_bought}="yes",IF({bought.here(i, "kind")}="hardening",1,{kw}),0)'
    net, crf = bought.here(i, "net"), bought.here(i, "crf")
    investment, fixed_om = bought.here(i, "investment"), bought.here(i, "fixed_om")
    units = 0.0 if not asset.is_bought else 1.0 if asset.kind == "hardening" else asset.kw
    return {
        "name": plan.name,
        "asset": asset.asset,
        "kind": asset.kind,
        "is_bought": "yes" if asset.is_bought else "no",
        "kw": asset.kw,
        "kwh": asset.kwh,
        "om_units": Formula(om_units, units),
        "gross": Formula(f'=IF({is_bought}="yes",{capital},0)', asset.capital_gross),
        "net": Formula(f"={bought.here(i, 'gross')}*(1-{price('grant')})", asset.capital_net),
        "crf": Formula(f"={price('crf')}", asset.crf),
        "investment": Formula(f"={net}*{crf}", asset.investment),
        "fixed_om": Formula(
            f"={bought.here(i, 'om_units')}*{price('om_rate')}",
            asset.fixed_om,
        ),
        "yearly": Formula(f"={investment}+{fixed_om}", asset.investment + asset.fixed_om),
    }


def _total_row(
    plan: PlanResult, i: int, totals: Grid, bought: Grid, first: int | None
) -> dict[str, Cell]:
    """Sums over a plan's block of purchases, device changes among them."""
    assets = plan.purchases
    n = len(assets)

    def block_sum(key: str, value: float) -> Formula:
        if first is None or n == 0:
            return Formula("=0", value)
        return Formula(f"=SUM({bought.span(key, first, n)})", value)

    def sum_of_kind(kind: str, key: str) -> Formula:
        value = sum((getattr(a, key) for a in assets if a.kind == kind and a.is_bought), 0.0)
        if first is None or n == 0:
            return Formula("=0", value)
        kinds, numbers = bought.span("kind", first, n), bought.span(key, first, n)
        yes = bought.span("is_bought", first, n)
        return Formula(f'=SUMIFS({numbers},{kinds},"{kind}",{yes},"yes")', value)

    measures = float(sum(a.is_bought for a in assets if a.kind == "hardening"))
    count = Formula("=0", measures)
    if first is not None and n:
        kinds, yes = bought.span("kind", first, n), bought.span("is_bought", first, n)
        count = Formula(f'=COUNTIFS({kinds},"hardening",{yes},"yes")', measures)
    gross_yearly = sum(a.capital_gross * a.crf for a in assets)
    devices = Formula("=0", 0.0)
    if first is not None and n:
        kinds, net = bought.span("kind", first, n), bought.span("net", first, n)
        value = sum(a.capital_net for a in assets if a.kind == "device")
        devices = Formula(f'=SUMIFS({net},{kinds},"device")', value)
    before_grants = Formula("=0", gross_yearly)
    if first is not None and n:
        spans = f"{bought.span('gross', first, n)},{bought.span('crf', first, n)}"
        before_grants = Formula(f"=SUMPRODUCT({spans})", gross_yearly)
    return {
        "name": plan.name,
        "place": plan.kind,
        "storage_kw": sum_of_kind("storage", "kw"),
        "storage_kwh": sum_of_kind("storage", "kwh"),
        "generator_kw": sum_of_kind("generator", "kw"),
        "measures": count,
        "devices": devices,
        "gross": block_sum("gross", plan.capital_gross),
        "net": block_sum("net", plan.capital_cost),
        "investment_gross": before_grants,
        "investment": block_sum("investment", plan.costs.investment),
        "fixed_om": block_sum("fixed_om", plan.costs.fixed_om),
        "yearly": Formula(
            f"={totals.here(i, 'investment')}+{totals.here(i, 'fixed_om')}",
            plan.costs.investment + plan.costs.fixed_om,
        ),
    }
