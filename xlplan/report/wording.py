"""The finding and the uncertainties in sentences, made from the numbers by rule.

A title is a claim. So the sentence says when the interval of the difference includes 0, when the
run stopped before its target, and when another alternative is just as cheap.
"""

from __future__ import annotations

from xlplan.base.names import LEAST_COST
from xlplan.base.units import pct_from_frac
from xlplan.compare.study_result import StudyResult
from xlplan.evaluate.results import PlanResult
from xlplan.report.money import baseline, buys_anything, money_words

GAP_REACHED = "gap reached"
SHED_SHOWN_KWH = 0.5
"""Below this a year's shedding in normal service would read as 0 kWh."""

LEAST_VALUE = 0.5
"""Money a year below which two plans cost the same in a sentence."""

POISSON_WARNING_FRAC = 0.05
"""Above this share the one-at-a-time rule hides too many events (model.md section 2)."""


def plan_words(plan: PlanResult) -> str:
    """How a sentence names a plan."""
    return (
        f"The {LEAST_COST[0].lower()}{LEAST_COST[1:]}"
        if plan.name == LEAST_COST
        else (f"“{plan.name}”")
    )


def includes_zero(interval: tuple[float, float]) -> bool:
    """True if a difference of 0 cannot be excluded."""
    return interval[0] <= 0.0 <= interval[1]


def stopped_early(result: StudyResult, plan: PlanResult) -> bool:
    """True if the run ended before its gap target, whatever it calls itself."""
    misses = plan.gap_frac is None or plan.gap_frac > result.gap_target_frac * (1.0 + 1e-9)
    return result.status != GAP_REACHED or misses


def headline(result: StudyResult) -> str:
    """The finding in one sentence (two where the run stopped early)."""
    best = result.plan(result.recommended)
    finding = _finding(result, best)
    if not stopped_early(result, best):
        return finding
    gap = "unknown" if best.gap_frac is None else f"{pct_from_frac(best.gap_frac):.1f} %"
    target = f"{pct_from_frac(result.gap_target_frac):.1f} %"
    return f"Stopped before its target (gap {gap}, target {target}); best plan so far: {finding}"


def _finding(result: StudyResult, best: PlanResult) -> str:
    base = baseline(result)
    currency = result.currency
    name = plan_words(best)
    if best.name == base.name or not buys_anything(best):
        what = "yearly cost" if best.aim is None else "weighted cost"
        return (
            f"{name} buys nothing: no purchase on offer was found to lower the {what}, "
            "customers' outage costs included."
        )
    low, high = best.difference_interval
    span = f"{money_words(low, currency)} to {money_words(high, currency)}"
    if includes_zero((low, high)):
        return (
            f"{name} and the existing feeder cannot be told apart on yearly cost: the 95 % "
            f"interval of the difference, {span}, includes 0.{_aimed_change(best, base, currency)}"
        )
    amount = money_words(abs(best.difference), currency)
    share = ""
    if base.costs.total > 0.0:
        share = f" ({pct_from_frac(abs(best.difference) / base.costs.total):.1f} %)"
    verb = "lowers" if high < 0.0 else "raises"
    return (
        f"{name} {verb} the yearly cost by {amount}{share}, customers' outage costs included."
        f"{_aimed_change(best, base, currency)}"
    )


def _aimed_change(best: PlanResult, base: PlanResult, currency: str) -> str:
    """What the plan does to the weighted cost, where plans are chosen by it."""
    if best.aim is None:
        return ""
    change = best.aimed_total - base.aimed_total
    verb = "lowers" if change < 0.0 else "raises"
    return (
        f" It {verb} the weighted cost, which counts bad outcomes more and by which it was chosen, "
        f"by {money_words(abs(change), currency)}."
    )


def consequence(result: StudyResult) -> str:
    """What the plan costs and what it does for customers, in one line."""
    best, base = result.plan(result.recommended), baseline(result)
    currency = result.currency
    if not buys_anything(best):
        return f"Customers are without supply for {best.indices.saidi_h:.2f} hours a year each."
    return (
        f"It takes {money_words(best.capital_cost, currency)} of capital after grants. Customers "
        f"are without supply for {best.indices.saidi_h:.2f} hours a year each, instead of "
        f"{base.indices.saidi_h:.2f} on the existing feeder. The utility itself pays "
        f"{_change(best.costs.utility - base.costs.utility, currency)}; outages cost customers "
        f"{_change(best.costs.customers - base.costs.customers, currency)}."
    )


def _change(amount: float, currency: str) -> str:
    return f"{money_words(abs(amount), currency)} a year {'more' if amount > 0.0 else 'less'}"


def basis(result: StudyResult) -> str:
    """Which study, whose, on which prices and discount rate."""
    year = "price year not given" if result.price_year is None else f"prices of {result.price_year}"
    author = f", prepared by {result.prepared_by}" if result.prepared_by else ""
    rate = pct_from_frac(result.real_discount_rate_frac)
    return (
        f"Study: {result.study_name}{author}. {year[0].upper()}{year[1:]}, {result.currency}; real "
        f"discount rate {rate:.2f} % a year. Peak load {result.peak_kw:,.0f} kW, "
        f"{result.customers:,.0f} customers."
    )


def uncertainties(result: StudyResult) -> list[str]:
    """What is uncertain, most telling first."""
    best, currency = result.plan(result.recommended), result.currency
    low, high = best.cost_interval
    said = []
    if best.is_enumerated:
        said.append("Every path was counted, so the yearly cost has no sampling error.")
    else:
        said.append(
            f"The plan's yearly cost is a statistical figure: {money_words(low, currency)} to "
            f"{money_words(high, currency)} (95 % interval, {best.n_sample:,} sampled histories)."
        )
    if best.aim is not None:
        said += aim_words(best, currency)
    elif best.lower_bound is not None and best.gap_frac is not None:
        said.append(
            f"No plan on offer costs less than {money_words(best.lower_bound, currency)} a year: "
            f"this one is within {pct_from_frac(best.gap_frac):.2f} % of that."
        )
    said += _rivals(result, best)
    said.append(outage_planning(result))
    said.append(
        f"Years differ: the mean is {money_words(best.risk.mean, currency)}, but one year in "
        f"twenty costs more than {money_words(best.risk.p95, currency)} ({best.risk.n_year:,} "
        "simulated years)."
    )
    said += _ac_words(result, best)
    said += _warnings(result, best)
    return said


def outage_planning(result: StudyResult) -> str:
    """What planning for outages is worth; nothing where the two plans cannot be told apart.

    The search may leave more open than the two plans differ: then it has found no value.
    """
    value, currency = result.value_of_outage_planning, result.currency
    span = result.value_of_outage_planning_interval
    words = f"95 % interval {money_words(span[0], currency)} to {money_words(span[1], currency)}"
    best = result.plan(LEAST_COST)
    left_open = abs(best.costs.total) * (best.gap_frac or 0.0)
    if includes_zero(span) and abs(value) < LEAST_VALUE:
        return (
            "Planning for outages is worth nothing here: the plan that ignores them costs the same."
        )
    if includes_zero(span):
        return (
            "Planning for outages is worth nothing here that can be told from 0: the plan that "
            f"ignores them costs {_change(value, currency)} ({words})."
        )
    if abs(value) <= left_open:
        return (
            "Planning for outages is worth nothing here: the plan that ignores them costs "
            f"{_change(value, currency)}, and the search leaves "
            f"{money_words(left_open, currency)} open."
        )
    return (
        f"Planning for outages is worth {money_words(value, currency)} a year against a plan that "
        f"ignores them ({words})."
    )


def aim_words(plan: PlanResult, currency: str) -> list[str]:
    """What a plan minimises where bad outcomes have a weight, and how close it comes."""
    aim = plan.aim
    if aim is None:
        return []
    weight, tail = pct_from_frac(aim.weight_frac), pct_from_frac(aim.tail_frac)
    said = (
        f"Bad outcomes have a weight of {weight:g} %: the plan is chosen by its weighted cost, "
        f"{money_words(aim.total, currency)} a year = {100.0 - weight:g} % of the expected cost "
        f"{money_words(aim.expected, currency)} + {weight:g} % of "
        f"{money_words(aim.tail, currency)}, which a year would cost if every occurrence of every "
        f"window cost the mean of its worst {tail:g} % (CVaR)"
    )
    if plan.lower_bound is not None and plan.gap_frac is not None:
        said += (
            f"; no plan on offer has a weighted cost below "
            f"{money_words(plan.lower_bound, currency)}, this one is within "
            f"{pct_from_frac(plan.gap_frac):.2f} % of that"
        )
    return [f"{said}. All other costs and differences are expected ones."]


def _ac_words(result: StudyResult, best: PlanResult) -> list[str]:
    """What the AC power flow says of the plan, and which other alternatives break limits."""
    said = [_ac_verdict(best)]
    others = [
        plan.name
        for plan in result.plans
        if plan.name != best.name and plan.ac is not None and not plan.ac.holds
    ]
    if others:
        said.append(f"Beyond limits in the AC power flow, or not solved: {'; '.join(others)}.")
    return said


def _ac_verdict(best: PlanResult) -> str:
    """One sentence; a plan that breaks limits, or has no solution, is never called fine."""
    check = best.ac
    if check is None:
        return "LOOK: voltages and loadings were not checked by an AC power flow."
    if check.holds:
        loss, allowance, served, _ = check.losses_per_year()
        words = "Voltages and loadings keep within limits in an AC power flow"
        if served > 0.0:
            words += (
                f"; losses of normal service {pct_from_frac(loss / served):.1f} % of load, loss "
                f"allowance {pct_from_frac(allowance / served):.1f} %"
            )
        return f"{words} (Voltages sheet)."
    broken, advice = [], check.advice
    if check.n_not_converged:
        broken.append(f"{check.n_not_converged:,} of {check.n_period:,} periods have no solution")
    buses = {bus.bus for is_event in (False, True) for bus in check.broken_buses(is_event)}
    if buses:
        margin = max(
            advice.low_normal_pu,
            advice.high_normal_pu,
            advice.low_event_pu,
            advice.high_event_pu,
        )
        broken.append(
            f"{len(buses)} buses leave the voltage limits (a margin of {margin:.4f} p.u. would "
            "have covered it)"
        )
    if loaded := check.broken_loadings():
        broken.append(
            f"{len(loaded)} assets pass their rating (a loss allowance of "
            f"{pct_from_frac(advice.allowance_frac):.1f} % would have covered it)"
        )
    return f"LOOK: in an AC power flow {'; '.join(broken)}: see the Voltages sheet."


def _rivals(result: StudyResult, best: PlanResult) -> list[str]:
    """Other alternatives that are as cheap, within the interval or the gap."""
    gap = abs(best.aimed_total) * (best.gap_frac or 0.0)
    reach = max(best.aimed_interval[1], best.aimed_total + gap)
    near = [
        plan.name
        for plan in result.plans
        if plan.name != best.name and plan.aimed_interval[0] <= reach
    ]
    if not near:
        return []
    return [f"As cheap as this plan within what the run leaves open: {'; '.join(near)}."]


def _warnings(result: StudyResult, best: PlanResult) -> list[str]:
    said = []
    history = [line for line in result.checks if line.is_warning]
    missed = [line.name for line in history if not line.passes]
    if missed:
        said.append(f"STOP and look: far from the feeder's own records: {'; '.join(missed)}.")
    elif not history:
        said.append(
            "The study gives no past peak, SAIFI or SAIDI to hold the existing feeder against."
        )
    for window in best.windows:
        if window.poisson_events > window.expected_events * (1.0 + POISSON_WARNING_FRAC):
            said.append(
                f"In window {window.window} failures often overlap; the model takes one at a time."
            )
    if best.normal_shed_kwh > SHED_SHOWN_KWH:
        said.append(
            f"Planning violation: {best.normal_shed_kwh:,.0f} kWh a year are shed in normal "
            "service."
        )
    if best.numerical_events:
        n = best.numerical_events
        said.append(f"The solver met {n} numerically difficult problem{'' if n == 1 else 's'}.")
    return said
