"""What a check by nonlinear power flow found of one plan's operation.

Voltages in p.u., shares as fractions. nan where nothing is known: a bus that is never live in the
stretches checked, or only in periods that did not converge.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class VoltageRange:
    """ANSI C84.1, Range A, service voltage: what customers are to be given in normal operation."""

    low_pu: float
    high_pu: float
    what: str


@dataclass(frozen=True)
class BusVoltage:
    """Lowest and highest voltage of one bus, in normal service or in the outage events checked.

    ``low_when``, ``high_when``: the period of the lowest and highest AC voltage (of the linear one
    where no AC voltage is known). ``low_limit_pu``, ``high_limit_pu``: the study's.
    """

    bus: str
    is_event: bool
    low_linear_pu: float
    low_ac_pu: float
    low_when: str
    high_linear_pu: float
    high_ac_pu: float
    high_when: str
    low_limit_pu: float
    high_limit_pu: float
    breaks_limits: bool
    is_outside_range_a: bool
    """Of ANSI C84.1 for service up to 600 V."""
    is_outside_range_a_above_600_v: bool
    n_period: int
    """Periods in which the bus is live."""
    n_not_converged: int


@dataclass(frozen=True)
class AssetLoading:
    """Highest loading of one line, source, supply or island-forming unit, as a share of its rating.

    ``kind``: line, substation, neighbour supply, or forming unit.
    """

    asset: str
    kind: str
    is_event: bool
    rating: float
    unit: str
    linear_frac: float
    ac_frac: float
    when: str
    breaks_limits: bool


@dataclass(frozen=True)
class AcStretch:
    """One stretch of operation solved: a window's plan, or an outage event.

    Energy of one occurrence, over the periods that converged; ``allowance_kwh`` is what the study's
    loss allowance adds to the load served, ``loss_kwh`` the losses. ``highest_loss_frac`` of the
    load served, in the worst period. ``cost_beyond``: what the losses beyond the allowance
    cost at the purchase price (negative where the allowance is ample).
    """

    title: str
    is_event: bool
    occurrences_per_year: float
    n_topology: int
    n_period: int
    n_not_converged: int
    served_kwh: float
    loss_kwh: float
    allowance_kwh: float
    highest_loss_frac: float
    cost_beyond: float


@dataclass(frozen=True)
class MarginAdvice:
    """What would have covered the limits broken; 0 where none is.

    Voltage margins are what the study's limits would have to be tightened by (p.u.); the allowance
    is the share of load that the linear flows would have to be raised by (fraction).
    """

    low_normal_pu: float
    high_normal_pu: float
    low_event_pu: float
    high_event_pu: float
    allowance_frac: float


@dataclass(frozen=True)
class AcCheck:
    """The whole check of one plan."""

    range_a: VoltageRange
    range_a_above_600_v: VoltageRange
    buses: tuple[BusVoltage, ...]
    loadings: tuple[AssetLoading, ...]
    stretches: tuple[AcStretch, ...]
    advice: MarginAdvice
    allowance_frac: float
    """The study's loss allowance."""

    @property
    def n_not_converged(self) -> int:
        """Periods for which no AC solution was found."""
        return sum(stretch.n_not_converged for stretch in self.stretches)

    @property
    def n_period(self) -> int:
        """Periods solved."""
        return sum(stretch.n_period for stretch in self.stretches)

    @property
    def holds(self) -> bool:
        """True if every period converged and no limit of the study is broken."""
        breaks = [bus.breaks_limits for bus in self.buses]
        breaks += [one.breaks_limits for one in self.loadings]
        return self.n_not_converged == 0 and not any(breaks)

    def broken_buses(self, is_event: bool) -> tuple[BusVoltage, ...]:
        """Buses beyond the study's limits."""
        return tuple(b for b in self.buses if b.breaks_limits and b.is_event == is_event)

    def broken_loadings(self) -> tuple[AssetLoading, ...]:
        """Assets beyond their ratings."""
        return tuple(one for one in self.loadings if one.breaks_limits)

    def outside_range_a(self) -> tuple[BusVoltage, ...]:
        """Buses outside Range A, in normal service and in events."""
        return tuple(b for b in self.buses if b.is_outside_range_a)

    def losses_per_year(self) -> tuple[float, float, float, float]:
        """kWh lost, kWh of the allowance, kWh served, cost beyond the allowance: per year.

        Of all windows run by their first plans, as if nothing failed.
        """
        plans = [s for s in self.stretches if not s.is_event]

        def year(key: str) -> float:
            return float(sum(s.occurrences_per_year * getattr(s, key) for s in plans))

        return year("loss_kwh"), year("allowance_kwh"), year("served_kwh"), year("cost_beyond")
