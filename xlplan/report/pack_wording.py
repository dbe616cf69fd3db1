"""Sentences of the comparison pack, made from its numbers by rule."""

from __future__ import annotations

from xlplan.base.units import pct_from_frac
from xlplan.compare.pack_result import SensitivityCase
from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import PlanResult
from xlplan.report.money import money_words

N_THINGS = 3
MOST_NAMED = 6
"""Assets named in a list of purchases; more would not fit a cell."""


def bought(plan: PlanResult) -> str:
    """What a plan buys, with sizes, in one line."""
    words = []
    for asset in plan.purchases:
        if asset.is_bought:
            size = f" {asset.kw:,.0f} kW" if asset.kw > 0.0 else ""
            size += f" {asset.kwh:,.0f} kWh" if asset.kwh > 0.0 else ""
            words.append(f"{asset.asset}{size}")
    if len(words) > MOST_NAMED:
        words = [*words[:MOST_NAMED], f"and {len(words) - MOST_NAMED} more"]
    return "; ".join(words) or "nothing"


def knee(result: StudyResult) -> str:
    """Where the budget curve bends, and what the money beyond it brings."""
    points, at, currency = result.pack.budget, result.pack.knee, result.currency
    if not points:
        return ""
    last = points[-1]
    if at is None:
        return (
            "No amount of money tried lowers the yearly cost beyond doubt (by more than the "
            "interval of the saving)."
        )
    free = ""
    if result.capital_budget is not None and result.capital_budget > last.budget:
        free = (
            f" The study's budget, {money_words(result.capital_budget, currency)}, is more than "
            "any plan would spend."
        )
    here = points[at]
    share = pct_from_frac(here.saving / last.saving)
    if at == len(points) - 1:
        return (
            f"Money goes on paying up to {money_words(last.budget, currency)}, which saves "
            f"{money_words(last.saving, currency)} a year: the curve has no bend before that.{free}"
        )
    rest = (last.saving - here.saving) / (last.budget - here.budget) * 1000.0
    first = here.saving / here.budget * 1000.0 if here.budget > 0.0 else 0.0
    return (
        f"The first {money_words(here.budget, currency)} of capital bring {share:.0f} % of what "
        f"{money_words(last.budget, currency)} bring: up to there each 1,000 {currency} saves "
        f"{money_words(first, currency)} a year net of its own cost; beyond, the curve bends and "
        f"each saves {money_words(rest, currency)}.{free}"
    )


def hour_faster(result: StudyResult) -> str:
    """What repairs faster by one hour are worth a year."""
    value, currency = result.pack.hour_faster, result.currency
    if value is None:
        return (
            "What an hour is worth cannot be said: with shorter repair times no outage is shorter "
            "by a whole period."
        )
    low, high = (money_words(one, currency) for one in value.interval)
    zero = ", so perhaps nothing" if value.interval[0] <= 0.0 <= value.interval[1] else ""
    return (
        f"Repairs faster by one hour are worth {money_words(value.value, currency)} a year beside "
        f"what the plan buys (interval {low} to {high}{zero})."
    )


def case_words(case: SensitivityCase) -> str:
    """A case in words: ``storage cost at 1.3 times``."""
    if case.parameter == "discount rate":
        return f"{case.parameter} {case.value:+g} points"
    return f"{case.parameter} at {case.value:g} times"


def sensitivities(result: StudyResult) -> str:
    """Which assumption moves the cost most, and which change the plan beyond the interval."""
    cases, currency = result.pack.sensitivities, result.currency
    if not cases:
        return ""
    base = result.plan(result.pack.plan_name).costs.total
    widest = max(cases, key=lambda case: abs(case.anew.costs.total - base))
    change = widest.anew.costs.total - base
    first = (
        f"The yearly cost moves most with {case_words(widest)}: "
        f"{'up' if change > 0.0 else 'down'} {money_words(abs(change), currency)}."
    )
    return f"{first} {plan_changes(result)}"


def plan_changes(result: StudyResult) -> str:
    """Which cases call for another plan, by what keeping this one would lose."""
    cases = result.pack.sensitivities
    changed = [case for case in cases if case.does_change and case.is_decided]
    if not changed:
        return "In no case tried is another plan cheaper beyond doubt."
    worst = max(changed, key=lambda case: case.loss)
    return (
        f"In {len(changed)} of {len(cases)} cases another plan is cheaper beyond doubt; keeping "
        f"this one loses most with {case_words(worst)}: "
        f"{money_words(worst.loss, result.currency)} a year."
    )


def by_parameter(
    cases: tuple[SensitivityCase, ...], base: float
) -> list[tuple[str, list[SensitivityCase]]]:
    """Cases of each assumption, the one that moves the yearly cost over the widest range first."""
    found: dict[str, list[SensitivityCase]] = {}
    for case in cases:
        found.setdefault(case.parameter, []).append(case)

    def reach(item: tuple[str, list[SensitivityCase]]) -> float:
        costs = [base, *(case.anew.costs.total for case in item[1])]
        return min(costs) - max(costs)

    return sorted(found.items(), key=reach)


def _assumption(name: str, cases: list[SensitivityCase], base: float, currency: str) -> str:
    """What one assumption does to the yearly cost, and whether the plan holds."""
    moves = []
    for case in sorted(cases, key=lambda one: one.value):
        change = case.anew.costs.total - base
        where = f"{case.value:+g} points" if name == "discount rate" else f"{case.value:g} times"
        sign = "+" if change > 0.0 else "-" if change < 0.0 else ""
        moves.append(f"{sign}{money_words(abs(change), currency)} at {where}")
    changed = any(case.does_change and case.is_decided for case in cases)
    holds = "another plan would then be better" if changed else "the plan holds"
    return f"{name[:1].upper()}{name[1:]}: yearly cost {', '.join(moves)}; {holds}."


def three_things(result: StudyResult) -> list[str]:
    """What matters most to the result: the assumptions that move the yearly cost most.

    Where the study varies fewer than three, what the comparisons found fills the rest.
    """
    return _things(result)[:N_THINGS]


def findings(result: StudyResult) -> list[str]:
    """What else the comparisons found: money, hardening, repair."""
    return _things(result)[N_THINGS:]


def _things(result: StudyResult) -> list[str]:
    pack, currency = result.pack, result.currency
    said = []
    if pack.sensitivities:
        base = result.plan(pack.plan_name).costs.total
        ranked = by_parameter(pack.sensitivities, base)[:N_THINGS]
        said += [_assumption(name, cases, base, currency) for name, cases in ranked]
    if pack.budget:
        said.append(knee(result))
    worth = [row for row in pack.hardening if row.in_plan.interval[0] > row.yearly_cost]
    if worth:
        best = max(worth, key=lambda row: row.in_plan.value - row.yearly_cost)
        net = best.in_plan.value - best.yearly_cost
        state = "bought" if best.is_in_plan else "not bought"
        said.append(
            f"{best.measure} ({state}) is worth {money_words(net, currency)} a year more than it "
            "costs: no line measure is worth more."
        )
    if pack.hour_faster is not None:
        said.append(hour_faster(result))
    if pack.sensitivities:
        said.append(plan_changes(result))
    return said
