"""The three standing alternatives of a study, on the same windows and random numbers.

``Existing feeder`` buys nothing; ``Plan ignoring outages`` buys for normal service as if nothing
could fail, and in an event plans as if nothing more could; ``Least-cost plan`` minimises the
expected yearly cost, or mean and worst outcomes where these have a weight. All are followed
through the same failures.
"""

from __future__ import annotations

from dataclasses import replace

from xlplan.base.errors import NoPlanError
from xlplan.base.names import EXISTING, IGNORING_OUTAGES, LEAST_COST
from xlplan.compare.plan_solver import (
    PlanSolver,
    Progress,
    SolvedPlan,
    SolveOptions,
    Wish,
    choose_method,
)

__all__ = [
    "NoPlanError",
    "Progress",
    "SolveOptions",
    "SolvedPlan",
    "StandingAlternatives",
    "against",
    "choose_method",
]

KINDS = {EXISTING: "existing", IGNORING_OUTAGES: "optimise", LEAST_COST: "optimise"}
DESCRIPTIONS = {
    EXISTING: "Nothing is bought; what exists is run as well as it can be.",
    IGNORING_OUTAGES: (
        "Bought for normal service as if nothing could fail; in an outage event planned as if "
        "nothing more could fail."
    ),
    LEAST_COST: "The purchases with the lowest expected yearly cost, outages included.",
}
AIMED = "The purchases with the lowest weighted cost: expected yearly cost and worst outcomes."
"""What the least-cost plan is where bad outcomes have a weight."""

CENT = 0.01
"""Plans whose costs differ by less are equal."""


class StandingAlternatives(PlanSolver):
    """Solves one study's standing alternatives."""

    def solve(self) -> tuple[SolvedPlan, ...]:
        """The three alternatives, in the order in which they are reported."""
        best = self._optimise(LEAST_COST)
        existing = self._optimise(EXISTING)
        ignoring = self._optimise(IGNORING_OUTAGES)
        for other in (existing, ignoring):
            is_cheaper = other.result.aimed_total < best.result.aimed_total - CENT
            if is_cheaper and self.method == "decomposed" and not self.should_stop():
                best = self._try_purchases(best, other)
        plans = (existing, ignoring, best)
        return tuple(against(plan, existing) for plan in plans)

    def _try_purchases(self, best: SolvedPlan, other: SolvedPlan) -> SolvedPlan:
        """Takes another plan's purchases, run for outages, where they cost less.

        Within the target gap the search may stop at purchases that are not the best; those of a
        plan that turned out cheaper are worth trying.
        """
        wish = replace(self._wish(LEAST_COST), fixed=other.bought)
        tried = self._by_decomposition(wish, best)
        return tried if tried.result.aimed_total < best.result.aimed_total else best

    def _optimise(self, name: str) -> SolvedPlan:
        """One of the three."""
        return self.solve_wish(self._wish(name))

    def _wish(self, name: str) -> Wish:
        is_aimed = name == LEAST_COST and self.study.settings.risk_weight_frac > 0.0
        return Wish(
            name=name,
            kind=KINDS[name],
            description=AIMED if is_aimed else DESCRIPTIONS[name],
            capital_budget=self.study.settings.capital_budget,
            fixed=self.nothing_bought() if name == EXISTING else None,
            ignores_outages=name == IGNORING_OUTAGES,
        )


def against(plan: SolvedPlan, existing: SolvedPlan) -> SolvedPlan:
    """The plan with its paired difference to the existing feeder."""
    difference = plan.result.costs.total - existing.result.costs.total
    half = plan.follow.difference_half_width(existing.follow) if plan is not existing else 0.0
    return replace(
        plan,
        result=replace(
            plan.result,
            difference=difference,
            difference_interval=(difference - half, difference + half),
        ),
    )
