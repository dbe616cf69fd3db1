"""The first plan of a window under an aim with a weight on bad outcomes (``risk_aim``).

``AimedPlanFamily`` has one member, the plan from the window's start; every later plan, and every
event, is the one that least expected cost asks for. To the program of ``PlanFamily`` come

    paid_k = paid_{k-1} + cost_k(y_k)                 what periods 0..k cost, the end of the window
                                                      behind the last one
    u_e >= paid_k(e) + theta_e - eta,  u_e >= 0       by how much an exit is beyond eta
    u_T >= paid_T - eta,               u_T >= 0       likewise if nothing fails

and its objective is ``(1 - weight)`` times that of ``PlanFamily`` plus
``weight (eta + (sum_e f_e u_e + S_T u_T) / tail)``. The chain of ``paid`` keeps the rows short, and
those of the exits are lazy: few outcomes are in the tail. ``theta_e`` is a column of the program
here (``Family.exit_columns``).

``whole_tree.py`` states the same aim a second time without this module.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from xlplan.model.linear_program import INF, LinearProgram
from xlplan.model.risk_aim import RiskAim
from xlplan.model.subproblem import PlanFamily
from xlplan.model.value_graph import Outcomes

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass
class AimedPlanFamily(PlanFamily):
    """First plans under an aim; member 0 alone. See ``PlanFamily`` and ``Family``.

    expected_cost : (n_col,), costs of the plan's own periods weighted by the chance to get there
    paid_columns : (n_period + 1,), the last one with the end of the window
    """

    exit_columns: IntArray | None = None
    aim: RiskAim | None = None
    expected_cost: FloatArray | None = None
    paid_columns: IntArray | None = None

    def outcomes(self, y: FloatArray) -> Outcomes | None:
        """See ``Family``."""
        assert self.aim is not None
        assert self.paid_columns is not None
        paid = y[self.paid_columns]
        return Outcomes(
            aim=self.aim,
            chance=np.append(self.exit_weight, self.survival[-1]),
            cost=np.append(paid[self.exit_period], paid[-1]),
        )


def aimed_plan(
    plan: PlanFamily, aim: RiskAim, theta_lower: FloatArray, theta_upper: FloatArray
) -> AimedPlanFamily:
    """The first plan of a family under an aim.

    Parameters
    ----------
    plan : PlanFamily of a window in which something can fail
    aim : RiskAim
    theta_lower, theta_upper : arrays, shape (n_exit,), bounds of the values at the exits

    Returns
    -------
    AimedPlanFamily
    """
    program, n_period, n_exit = plan.program, plan.n_period, len(plan.exit_gate)
    n_col, n_row = program.n_col, program.n_row
    paid = n_col + np.arange(n_period + 1)
    eta = n_col + n_period + 1
    theta = eta + 1 + np.arange(n_exit)
    beyond = eta + 1 + n_exit + np.arange(n_exit + 1)
    # Periods' costs as if they were sure to be reached, and what they can add up to.
    sure = np.zeros(n_col)
    inside = (plan.col_period >= 0) & (plan.col_period <= n_period)
    sure[inside] = program.cost[inside] / plan.survival[plan.col_period[inside]]
    low_term = np.minimum(sure * program.col_lower, sure * program.col_upper)
    high_term = np.maximum(sure * program.col_lower, sure * program.col_upper)
    period = np.clip(plan.col_period, 0, n_period)
    paid_low = np.cumsum(np.bincount(period, np.where(inside, low_term, 0.0), n_period + 1))
    paid_high = np.cumsum(np.bincount(period, np.where(inside, high_term, 0.0), n_period + 1))
    low = min(paid_low[-1], float((paid_low[plan.exit_period] + theta_lower).min(initial=INF)))
    high = max(paid_high[-1], float((paid_high[plan.exit_period] + theta_upper).max(initial=-INF)))
    by_tail = aim.weight_frac / aim.tail_frac
    no_failure = float(plan.survival[-1])
    rows = [
        (
            [*np.flatnonzero(inside & (plan.col_period == k) & (sure != 0.0)).tolist()],
            [int(paid[k])] + ([int(paid[k - 1])] if k else []),
        )
        for k in range(n_period + 1)
    ]
    start, index, value = [int(program.start[-1])], [], []
    for costs, chain in rows:
        index += costs + chain
        value += (-sure[costs]).tolist() + [1.0, -1.0][: len(chain)]
        start.append(start[-1] + len(costs) + len(chain))
    for e in range(n_exit):
        index += [int(beyond[e]), int(paid[plan.exit_period[e]]), int(theta[e]), eta]
        value += [1.0, -1.0, -1.0, 1.0]
        start.append(start[-1] + 4)
    index += [int(beyond[-1]), int(paid[-1]), eta]
    value += [1.0, -1.0, 1.0]
    start.append(start[-1] + 3)
    n_tail = n_exit + 1
    aimed = LinearProgram(
        cost=np.concatenate(
            [
                (1.0 - aim.weight_frac) * program.cost,
                np.zeros(n_period + 1),
                [aim.weight_frac],
                -aim.weight_frac * plan.exit_weight,
                by_tail * plan.exit_weight,
                [by_tail * no_failure],
            ]
        ),
        col_lower=np.concatenate(
            [program.col_lower, paid_low, [low], theta_lower, np.zeros(n_tail)]
        ),
        col_upper=np.concatenate(
            [program.col_upper, paid_high, [high], theta_upper, np.full(n_tail, high - low)]
        ),
        row_lower=np.concatenate([program.row_lower, np.zeros(n_period + 1 + n_tail)]),
        row_upper=np.concatenate([program.row_upper, np.zeros(n_period + 1), np.full(n_tail, INF)]),
        start=np.concatenate([program.start[:-1], start]).astype(np.int64),
        index=np.concatenate([program.index, index]).astype(np.int64),
        value=np.concatenate([program.value, value]),
        is_integer=np.concatenate(
            [program.is_integer, np.zeros(len(paid) + 1 + n_exit + n_tail, dtype=bool)]
        ),
        is_lazy=np.concatenate(
            [program.is_lazy, np.zeros(n_period + 1, bool), np.ones(n_exit, bool), [False]]
        ),
        offset=program.offset,
        col_names=(
            *program.col_names,
            *[f"paid [{k}]" for k in range(n_period + 1)],
            "eta",
            *[f"value of exit {e}" for e in range(n_exit)],
            *[f"beyond eta {e}" for e in range(n_tail)],
        ),
        row_names=(
            *program.row_names,
            *[f"paid [{k}]" for k in range(n_period + 1)],
            *[f"tail {e}" for e in range(n_tail)],
        ),
        folds=program.folds,
    )
    always = n_period + 1
    own = {f.name: getattr(plan, f.name) for f in fields(plan)}
    return AimedPlanFamily(
        **{
            **own,
            "name": f"first {plan.name}",
            "program": aimed,
            "n_member": 1,
            "nest": None,
            "value_upper": np.array([high]),
            "col_period": np.append(plan.col_period, np.full(aimed.n_col - n_col, always)),
            "row_period": np.append(plan.row_period, np.full(aimed.n_row - n_row, always)),
            "aim": aim,
            "exit_columns": theta,
            "expected_cost": np.append(program.cost, np.zeros(aimed.n_col - n_col)),
            "paid_columns": paid,
        }
    )
