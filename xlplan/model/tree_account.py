"""Where costs of the whole tree go, and how a node of it is reached."""

from __future__ import annotations

from dataclasses import dataclass, replace

import pulp
from pulp import LpAffineExpression as Expression


class Account:
    """A sum of costs that grows by thousands of terms; expressions would be copied each time."""

    def __init__(self) -> None:
        self.terms: dict[pulp.LpVariable, float] = {}
        self.constant = 0.0

    def add(self, cost: Expression, weight: float) -> None:
        """Adds ``weight * cost``."""
        for variable, coefficient in cost.items():
            self.terms[variable] = self.terms.get(variable, 0.0) + weight * coefficient
        self.constant += weight * cost.constant

    def expression(self) -> Expression:
        """The sum."""
        return Expression(self.terms, constant=self.constant)


@dataclass(frozen=True)
class Gate:
    """A branch that is followed only if one of the measures is bought, or only if none is."""

    measures: tuple[int, ...]
    is_avoided: bool


@dataclass(frozen=True)
class Arrival:
    """How a node is reached, and where its cost goes.

    ``weight`` multiplies its cost in ``account``; ``chance`` is that of being reached where every
    gate on the way stands as noted.
    """

    account: Account
    weight: float
    chance: float
    gates: tuple[Gate, ...]
    i_parent: int

    def times(self, chance: float) -> Arrival:
        """The same, with a further chance on the way."""
        return replace(self, weight=self.weight * chance, chance=self.chance * chance)
