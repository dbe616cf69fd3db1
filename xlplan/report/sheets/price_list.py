"""The prices that all formulas follow: typed figures on the Alternatives sheet, one row each.

They stand under the statement, so that a changed price or life moves the totals on the same sheet.
The Plan sheet refers to them.
"""

from __future__ import annotations

from dataclasses import dataclass

from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import Purchase
from xlplan.report.room import BODY_CHARS, LINE_POINTS, lines_needed
from xlplan.report.safe_book import SafeSheet
from xlplan.report.tables import ALTERNATIVES

VALUE_COL = 2
SHEET_OF = {
    "storage": "Storage",
    "generator": "Generators",
    "hardening": "Hardening",
    "device": "Device changes",
}

UNITS = ("storage", "generator")
FIGURES = (
    # key, attribute, what it is, unit, look, kinds that have it
    ("per_kw", "capital_per_kw", "capital per kW", "{money}/kW", "price", UNITS),
    ("per_kwh", "capital_per_kwh", "capital per kWh", "{money}/kWh", "price", ("storage",)),
    ("site", "capital_site", "site cost", "{money}", "money", UNITS),
    ("site", "capital_site", "cost", "{money}", "money", ("hardening", "device")),
    ("grant", "grant_frac", "grant", "share of capital", "percent", (*UNITS, "hardening")),
    ("life", "life_years", "life", "years", "years", tuple(SHEET_OF)),
    ("om_rate", "fixed_om_rate", "fixed O&M", "{money}/year, kW", "price", UNITS),
    ("om_rate", "fixed_om_rate", "fixed O&M", "{money}/year", "price", ("hardening",)),
)


@dataclass(frozen=True)
class PriceList:
    """Assets for sale, each once, and the row of each of their figures."""

    assets: tuple[Purchase, ...]
    row_of: dict[tuple[str, str], int]
    top: int
    below: int

    def away(self, asset: str, key: str) -> str | None:
        """Address of a figure for other sheets; None where the asset has no such figure."""
        row = self.row_of.get((asset, key))
        return None if row is None else f"'{ALTERNATIVES}'!$C${row + 1}"


def place_prices(result: StudyResult, top: int) -> PriceList:
    """Places the list from a row on; the first mention of an asset counts."""
    by_name: dict[str, Purchase] = {}
    for plan in result.plans:
        for asset in plan.purchases:
            by_name.setdefault(asset.asset, asset)
    row_of = {}
    row = top + 1
    for asset in by_name.values():
        for key, _, _, _, _, kinds in FIGURES:
            if asset.kind in kinds:
                row_of[asset.asset, key] = row
                row += 1
    return PriceList(tuple(by_name.values()), row_of, top, row)


def write_prices(sheet: SafeSheet, prices: PriceList) -> None:
    """Writes the list: figure, unit, value, and where the study gives it."""
    if not prices.assets:
        return
    title = "Prices and lives, as given in the study: change them, and the figures above follow"
    sheet.text(prices.top, 0, title, "section")
    for asset in prices.assets:
        for key, attribute, label, unit, look, kinds in FIGURES:
            if asset.kind not in kinds:
                continue
            row = prices.row_of[asset.asset, key]
            words = f"{asset.asset}: {label}"
            lines = lines_needed(words, BODY_CHARS * sheet.width(0))
            if lines > 1:
                sheet.height(row, LINE_POINTS * lines + 3)
            sheet.text(row, 0, words, "wrap")
            sheet.text(row, 1, sheet.book.words(unit), "subtitle")
            sheet.number(row, VALUE_COL, getattr(asset, attribute), look, "input")
            origin = f"Sheet {SHEET_OF.get(asset.kind, asset.kind)} of the study, {asset.place}"
            sheet.text(row, VALUE_COL + 1, origin, "remark")
