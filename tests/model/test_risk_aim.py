"""Mean of the worst outcomes: by hand, as a linear program, and its limits."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import linprog

from tests.builders import small_study
from xlplan.model.risk_aim import MOST_WEIGHT, RiskAim, aim_of, tail_mean, tail_share


def draw(seed: int) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    n = int(rng.integers(1, 12))
    chance = rng.random(n)
    return chance / chance.sum(), np.round(rng.normal(0.0, 10.0, n))


def test_tail_mean_by_hand():
    chance, cost = np.array([0.5, 0.2, 0.2, 0.1]), np.array([1.0, 5.0, 3.0, 9.0])
    # Worst quarter: 0.1 at 9 and 0.15 of the 0.2 at 5.
    assert tail_mean(chance, cost, 0.25) == pytest.approx((0.1 * 9 + 0.15 * 5) / 0.25)
    # Worst tenth: 9 alone. All of it: the mean.
    assert tail_mean(chance, cost, 0.1) == pytest.approx(9.0)
    assert tail_mean(chance, cost, 1.0) == pytest.approx(0.5 + 1.0 + 0.6 + 0.9)


@pytest.mark.parametrize("seed", range(20))
def test_tail_mean_is_the_optimum_of_its_linear_program(seed):
    chance, cost = draw(seed)
    tail = float(np.random.default_rng(seed + 100).uniform(0.02, 1.0))
    n = len(chance)
    # min eta + sum p u / tail,  u >= cost - eta,  u >= 0  (Rockafellar and Uryasev 2000, recalled)
    found = linprog(
        np.concatenate([[1.0], chance / tail]),
        A_ub=np.hstack([-np.ones((n, 1)), -np.eye(n)]),
        b_ub=-cost,
        bounds=[(None, None)] + [(0.0, None)] * n,
    )
    assert found.status == 0
    assert tail_mean(chance, cost, tail) == pytest.approx(found.fun, abs=1e-8)
    share = tail_share(chance, cost, tail)
    assert float(chance @ share) == pytest.approx(min(tail, 1.0))
    assert ((share >= 0.0) & (share <= 1.0 + 1e-12)).all()


@pytest.mark.parametrize("seed", range(10))
def test_slope_is_the_derivative(seed):
    chance, cost = draw(seed)
    cost = cost + np.random.default_rng(seed).random(len(cost))  # no ties: a derivative exists
    aim = RiskAim(0.4, 0.3)
    step = 1e-6
    for i in range(len(cost)):
        up, down = cost.copy(), cost.copy()
        up[i] += step
        down[i] -= step
        slope = (aim.value(chance, up) - aim.value(chance, down)) / (2.0 * step)
        assert aim.slope(chance, cost)[i] * chance[i] == pytest.approx(slope, abs=1e-6)
    assert aim.slope(chance, cost).max() <= aim.most_weight + 1e-12


def test_aim_of_settings():
    assert aim_of(small_study().settings) is None
    aim = aim_of(small_study(risk_weight_frac=0.3, risk_tail_frac=0.1).settings)
    assert aim == RiskAim(0.3, 0.1)
    assert aim_of(small_study(risk_weight_frac=1.0).settings) == RiskAim(MOST_WEIGHT, 0.05)
