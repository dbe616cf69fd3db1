"""When failures strike: survival, the first failure, and how often in a window.

Enters: the scenarios of one window with their rates by period. Leaves: a ``Clock``, the chances of
model.md section 2:

    q_k = 1 - exp(-sum_w rate_w(k) dt / 8760)     a failure strikes in period k, if in service
    p_kw = rate_w(k) / sum rate                   and it is scenario w
    S_{u,k} = prod_{u <= i < k} (1 - q_i)         none strikes in u..k-1

A failure in period ``k`` blocks periods ``k+1 .. k+tau``: one thing fails at a time.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from xlplan.base.units import HOURS_PER_YEAR
from xlplan.outages.records import Scenario
from xlplan.study.windows import WindowSeries

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class Clock:
    """Chances of failure in one window.

    rate_per_year : (n_period, n_scenario)
    period_h : float
    failure_chance : (n_period,), ``q_k``
    scenario_chance : (n_period, n_scenario), ``p_kw``; rows sum to 1, or to 0 where ``q_k`` is 0
    survival : (n_period + 1,), ``S_{0,k}``
    event_periods : (n_scenario,), ``tau``: periods from a failure's next to the end of its repair
    """

    rate_per_year: FloatArray
    period_h: float
    failure_chance: FloatArray
    scenario_chance: FloatArray
    survival: FloatArray
    event_periods: IntArray

    @staticmethod
    def of(scenarios: Sequence[Scenario], series: WindowSeries) -> Clock:
        """Clock of a window's scenarios, in their order."""
        rate = np.zeros((series.n_period, len(scenarios)))
        for i_scenario, scenario in enumerate(scenarios):
            rate[:, i_scenario] = scenario.rate_per_year
        tau = np.array([scenario.n_period for scenario in scenarios], dtype=np.int64)
        return Clock.of_rates(rate, series.period_h, tau)

    @staticmethod
    def of_rates(rate_per_year: ArrayLike, period_h: float, event_periods: ArrayLike) -> Clock:
        """Clock of given rates, shape (n_period, n_scenario).

        Raises ValueError if a rate is negative or an event shorter than one period.
        """
        rate = np.asarray(rate_per_year, dtype=float)
        tau = np.asarray(event_periods, dtype=np.int64)
        if (rate < 0.0).any():
            raise ValueError("a failure rate is negative")
        if (tau < 1).any():
            raise ValueError("an outage event lasts at least one period")
        total = rate.sum(axis=1)
        chance = -np.expm1(-total * period_h / HOURS_PER_YEAR)
        share = np.divide(rate, total[:, None], out=np.zeros_like(rate), where=total[:, None] > 0.0)
        return Clock(rate, period_h, chance, share, _survival(chance), tau)

    @property
    def n_period(self) -> int:
        """Periods of the window."""
        return len(self.failure_chance)

    @property
    def n_scenario(self) -> int:
        """Number of scenarios."""
        return int(self.rate_per_year.shape[1])

    def thinned(self, avoided_frac: ArrayLike) -> Clock:
        """Clock of the real failures, where a share of each scenario's potential ones is avoided.

        A potential failure still strikes with chance ``q_k``; with ``sum_w p_kw a_w`` it does not
        happen, and service goes on in the next period. So a real one strikes with chance
        ``q_k (1 - sum p a)``: not ``1 - exp`` of the thinned rates.

        Parameters
        ----------
        avoided_frac : (n_scenario,), 0 to 1

        Returns
        -------
        Clock; its ``rate_per_year`` are the thinned rates (their sum is the Poisson mean)
        """
        kept = 1.0 - np.asarray(avoided_frac, dtype=float)
        real = self.scenario_chance * kept
        happens = real.sum(axis=1)
        chance = self.failure_chance * happens
        share = np.divide(
            real, happens[:, None], out=np.zeros_like(real), where=happens[:, None] > 0.0
        )
        return Clock(
            rate_per_year=self.rate_per_year * kept,
            period_h=self.period_h,
            failure_chance=chance,
            scenario_chance=share,
            survival=_survival(chance),
            event_periods=self.event_periods,
        )

    def survival_from(self, u: int) -> FloatArray:
        """``S_{u,k}`` for k = u..n_period: no failure in u..k-1; shape (n_period - u + 1,)."""
        return _survival(self.failure_chance[u:])

    def first_failure_from(self, u: int) -> FloatArray:
        """``f_{u,k} = S_{u,k} q_k`` for k = u..n_period-1; shape (n_period - u,)."""
        return self.survival_from(u)[:-1] * self.failure_chance[u:]

    def occupancy(self, event_periods: ArrayLike | None = None) -> tuple[FloatArray, FloatArray]:
        """Chance of being in service at each period's start, and failures by period and scenario.

        Forward renewal: all in service at 0; a failure in ``k`` comes back into service at
        ``k + 1 + tau``.

        Parameters
        ----------
        event_periods : (n_scenario,), ``tau``; the clock's own by default

        Returns
        -------
        in_service : (n_period + 1,)
        events : (n_period, n_scenario), expected number of failures, ``A_k q_k p_kw``
        """
        tau = self.event_periods if event_periods is None else np.asarray(event_periods, dtype=int)
        in_service = np.zeros(self.n_period + 1)
        events = np.zeros((self.n_period, self.n_scenario))
        back = np.zeros(self.n_period + 1)
        in_service[0] = 1.0
        for k in range(self.n_period):
            events[k] = in_service[k] * self.failure_chance[k] * self.scenario_chance[k]
            again = k + 1 + tau
            is_inside = again <= self.n_period
            np.add.at(back, again[is_inside], events[k][is_inside])
            in_service[k + 1] = in_service[k] * (1.0 - self.failure_chance[k]) + back[k + 1]
        return in_service, events

    def expected_events(self, event_periods: ArrayLike | None = None) -> float:
        """Expected number of outage events in one occurrence of the window."""
        return float(self.occupancy(event_periods)[1].sum())

    def poisson_mean(self) -> float:
        """Expected number of failures without the one-at-a-time rule, ``sum rate dt / 8760``."""
        return float(self.rate_per_year.sum() * self.period_h / HOURS_PER_YEAR)


def _survival(chance: FloatArray) -> FloatArray:
    """Chance of no failure before each period, shape (len + 1,)."""
    return np.concatenate([[1.0], np.cumprod(1.0 - chance)])
