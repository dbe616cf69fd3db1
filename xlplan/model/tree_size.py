"""How large the whole tree would be, counted without building it.

A *node* is one plan (all in service until something fails) or one outage event, as in
``whole_tree.py``; its *period copies* are the periods it holds. Branches that cannot happen
(chance 0) are not counted, avoided failures count both of their subtrees.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from xlplan.outages.records import Scenario
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study

MAX_COLUMNS = 30_000
"""Most columns for which the whole tree is chosen by itself. Built through PuLP at that size the
tree takes some seconds and one linear program some ten; with measures or sites the integer search
solves several, and it grows fast from there (measured on one core)."""

SMALLEST_SHARE = 1e-12
"""Shares of failures below this are rounding of differences like ``1 - 0.7 - 0.3``."""


@dataclass(frozen=True)
class TreeSize:
    """Nodes of the tree and the period copies they hold."""

    n_node: int
    n_period_copies: int

    def __add__(self, other: TreeSize) -> TreeSize:
        return TreeSize(self.n_node + other.n_node, self.n_period_copies + other.n_period_copies)


NOTHING = TreeSize(0, 0)


@dataclass(frozen=True)
class Slice:
    """A share of a scenario's failures, and the measures of which any one avoids it.

    ``avoided_by`` empty: these failures always happen.
    """

    share: float
    avoided_by: tuple[int, ...]


def hardening_slices(scenario: Scenario) -> tuple[Slice, ...]:
    """Splits a scenario by what avoids it; the shares add up to 1.

    Parameters
    ----------
    scenario : Scenario; its measures exclude one another, shares ascending

    Returns
    -------
    tuple of Slice, the share that always happens first; slices without a share are left out

    Notes: with shares ``a_1 <= a_2`` the part ``a_1`` is avoided by either measure,
    ``a_2 - a_1`` by the second only (model.md section 2).
    """
    measures = scenario.hardening
    largest = measures[-1][1] if measures else 0.0
    slices = [Slice(1.0 - largest, ())]
    below = 0.0
    for i, (_, share) in enumerate(measures):
        slices.append(Slice(share - below, tuple(position for position, _ in measures[i:])))
        below = share
    return tuple(part for part in slices if part.share > SMALLEST_SHARE)


def count_nodes(windows: Sequence[WindowModel]) -> TreeSize:
    """Size of the whole tree over all windows.

    Parameters
    ----------
    windows : WindowModel of each window

    Returns
    -------
    TreeSize; grows exponentially with periods per repair, so the numbers can be huge (exact ints)
    """
    total = NOTHING
    for window in windows:
        total += count_window(window)
    return total


@dataclass(frozen=True)
class TreeFit:
    """Whether the whole tree is small enough to be chosen by itself, and why, in words."""

    size: TreeSize
    n_column: int
    fits: bool
    reason: str


def judge_size(study: Study, windows: Sequence[WindowModel]) -> TreeFit:
    """Size of the whole tree against what can be solved at once.

    Parameters
    ----------
    study : Study
    windows : WindowModel of each window

    Returns
    -------
    TreeFit
    """
    size = count_nodes(windows)
    n_column = size.n_period_copies * columns_per_period(study)
    counted = f"{_in_words(size.n_node)} nodes, about {_in_words(n_column)} columns"
    if n_column <= MAX_COLUMNS:
        reason = f"the whole tree fits in one program ({counted}; limit {MAX_COLUMNS:,})"
    else:
        reason = f"the whole tree is too large for one program ({counted}; limit {MAX_COLUMNS:,})"
    return TreeFit(size, n_column, n_column <= MAX_COLUMNS, reason)


def columns_per_period(study: Study) -> int:
    """Columns of one period with everything live: the most that a period copy adds."""
    return (
        3
        + 2 * len(study.buses)
        + sum(bus.capacitor_kvar > 0 for bus in study.buses)
        + 2 * len(study.lines)
        + 2 * len(study.loads)
        + 2 * len(study.supplies)
        + 4 * len(study.generators)
        + 4 * len(study.storage)
    )


def _in_words(count: int) -> str:
    """A count with separators, or its power of ten where nobody would read the digits."""
    return f"{count:,}" if count < 10**9 else f"10^{len(str(count)) - 1}"


def count_window(window: WindowModel) -> TreeSize:
    """Size of the tree of one window, by recursion from its last period to its first."""
    n_period = window.series.n_period
    slices = [hardening_slices(scenario) for scenario in window.scenarios]
    plan = [NOTHING] * (n_period + 1)
    below = [NOTHING] * n_period
    for start in range(n_period - 1, -1, -1):
        below[start] = _failures_in(window, slices, plan, start)
        size = TreeSize(1, n_period - start)
        for k in range(start, n_period):
            size += below[k]
            if window.clock.failure_chance[k] >= 1.0:
                break
        plan[start] = size
    return plan[0]


def _failures_in(
    window: WindowModel,
    slices: list[tuple[Slice, ...]],
    plan: list[TreeSize],
    k: int,
) -> TreeSize:
    """Size of all subtrees that begin with a failure in period ``k``."""
    total = NOTHING
    if window.clock.failure_chance[k] <= 0.0:
        return total
    for i_scenario, scenario in enumerate(window.scenarios):
        if window.clock.scenario_chance[k, i_scenario] <= 0.0:
            continue
        end = k + 1 + scenario.n_period
        after = plan[end] if end < len(plan) else NOTHING
        for part in slices[i_scenario]:
            total += TreeSize(1, scenario.n_period) + after
            if part.avoided_by:
                total += plan[k + 1]
    return total
