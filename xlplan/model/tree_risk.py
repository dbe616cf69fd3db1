"""The weight on bad outcomes in the whole tree (see ``risk_aim`` for what an outcome is).

``Outcomes`` is filled while the first plan of a window is built: ``pay`` after each of its periods,
``begin`` and ``close`` around everything that follows one first failure. It adds

    paid_k = paid_{k-1} + cost of period k
    after  = expected cost of what follows a failure
    excess >= paid_k + after - worst,  excess >= 0     for every outcome
    weight * n (worst + sum of chance * excess / tail) to the objective

where ``n`` is how often the window occurs. ``aimed_plan.py`` says the same in arrays, and shares
no code with this module.
"""

from __future__ import annotations

from dataclasses import replace

import pulp
from pulp import LpAffineExpression as Expression

from xlplan.model.risk_aim import RiskAim
from xlplan.model.tree_account import Account, Arrival


class Outcomes:
    """Outcomes of one occurrence of a window, and the mean of the worst of them."""

    def __init__(
        self,
        problem: pulp.LpProblem,
        i_window: int,
        aim: RiskAim,
        occurrences: float,
        objective: Account,
    ) -> None:
        self.problem, self.objective, self.aim = problem, objective, aim
        self.weight = aim.weight_frac * occurrences
        self.name = f"w{i_window}"
        self.worst = problem.add_variable(f"worst_{self.name}")
        objective.add(Expression(self.worst), self.weight)
        self.paid: pulp.LpVariable | None = None
        self.n_paid = self.n_outcome = 0

    def pay(self, cost: Expression) -> None:
        """A period of the first plan, or the end of the window, costs this."""
        paid = self.problem.add_variable(f"paid_{self.name}_{self.n_paid}")
        before = 0 if self.paid is None else self.paid
        self.problem += paid == before + cost, f"paying_{self.name}_{self.n_paid}"
        self.paid = paid
        self.n_paid += 1

    def begin(self, arrival: Arrival) -> Arrival:
        """The arrival at what follows a failure, with an account of its own."""
        return replace(arrival, account=Account(), weight=1.0)

    def close(self, arrival: Arrival, own: Arrival, chance: float) -> None:
        """All that follows a failure is in the account of ``own``; ``arrival`` led to it."""
        after = self.problem.add_variable(f"after_{self.name}_{self.n_outcome}")
        self.problem += after == own.account.expression(), f"following_{self.name}_{self.n_outcome}"
        arrival.account.add(Expression(after), arrival.weight)
        self._count(chance, after)

    def finish(self, chance: float) -> None:
        """Nothing failed."""
        self._count(chance, 0)

    def _count(self, chance: float, after: pulp.LpVariable | int) -> None:
        assert self.paid is not None
        name = f"{self.name}_{self.n_outcome}"
        excess = self.problem.add_variable(f"excess_{name}", 0)
        self.problem += excess >= self.paid + after - self.worst, f"exceeding_{name}"
        self.objective.add(Expression(excess), self.weight * chance / self.aim.tail_frac)
        self.n_outcome += 1
