"""The aim with a weight on bad outcomes: mean and CVaR of one occurrence of a window.

The *outcomes* of an occurrence are: nothing fails; or the first potential failure strikes in some
period and is some scenario (and, with hardening, falls to the share that measures avoid or to the
share that stays). The cost of an outcome is what the plan has cost up to there plus the expected
cost of what follows; so it is itself an expectation over what may still come, and that is run at
least expected cost. For the share that a bought measure avoids what follows is the value of going
on in service. With chances ``p`` and costs ``c`` of the outcomes the aim is

    (1 - weight) sum p c + weight CVaR,    CVaR = min over eta of eta + sum p max(0, c - eta) / tail

the mean of the worst share ``tail`` of outcomes (Rockafellar and Uryasev 2000, recalled).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.study.study import Settings

FloatArray = NDArray[np.float64]

MOST_WEIGHT = 0.9999
"""The mean keeps at least one part in ten thousand of the aim: among plans whose worst outcomes
cost the same the cheapest is then taken, and outcomes that are not bad are still run well."""


@dataclass(frozen=True)
class RiskAim:
    """How much bad outcomes count: ``weight_frac`` of the aim is the CVaR over ``tail_frac``."""

    weight_frac: float
    tail_frac: float

    @property
    def most_weight(self) -> float:
        """Largest factor by which the cost of an outcome can count beyond its chance."""
        return 1.0 - self.weight_frac + self.weight_frac / self.tail_frac

    def value(self, chance: FloatArray, cost: FloatArray) -> float:
        """The aim at given outcomes; arrays of one shape (n_outcome,), chances add up to 1."""
        mean = float(chance @ cost)
        tail = tail_mean(chance, cost, self.tail_frac)
        return (1.0 - self.weight_frac) * mean + self.weight_frac * tail

    def slope(self, chance: FloatArray, cost: FloatArray) -> FloatArray:
        """By how much the aim moves with each outcome's cost, over its chance, (n_outcome,)."""
        inside = tail_share(chance, cost, self.tail_frac)
        return 1.0 - self.weight_frac + self.weight_frac / self.tail_frac * inside


def aim_of(settings: Settings) -> RiskAim | None:
    """The aim that a study's settings ask for; None for the expected cost alone."""
    if settings.risk_weight_frac <= 0.0:
        return None
    return RiskAim(min(settings.risk_weight_frac, MOST_WEIGHT), settings.risk_tail_frac)


def tail_share(chance: FloatArray, cost: FloatArray, tail_frac: float) -> FloatArray:
    """Share of each outcome's chance that lies in the worst ``tail_frac``, (n_outcome,).

    >>> tail_share(np.array([0.8, 0.1, 0.1]), np.array([1.0, 3.0, 2.0]), 0.15).round(3).tolist()
    [0.0, 1.0, 0.5]
    """
    order = np.argsort(-cost, kind="stable")
    before = np.concatenate([[0.0], np.cumsum(chance[order])[:-1]])
    share = np.zeros(len(cost))
    taken = np.clip(tail_frac - before, 0.0, chance[order])
    has_chance = chance[order] > 0.0
    share[order[has_chance]] = taken[has_chance] / chance[order][has_chance]
    return share


def tail_mean(chance: FloatArray, cost: FloatArray, tail_frac: float) -> float:
    """CVaR: mean cost of the worst share of outcomes.

    Parameters
    ----------
    chance, cost : arrays, shape (n_outcome,); chances add up to 1
    tail_frac : float, above 0, at most 1

    Returns
    -------
    float

    >>> round(tail_mean(np.array([0.8, 0.1, 0.1]), np.array([1.0, 3.0, 2.0]), 0.15), 4)
    2.6667
    """
    return float((chance * tail_share(chance, cost, tail_frac)) @ cost) / tail_frac
