"""Every conversion of units, once.

Conventions after reading: kW, kvar, kVA, kWh, kV, ohm, hours, kilometres or miles as the study
says (never mixed), fractions instead of percent.
"""

from __future__ import annotations

import math

HOURS_PER_YEAR = 8760.0
"""Hours in a year of 365 days, the base of yearly failure rates (common practice)."""

MINUTES_PER_HOUR = 60.0

BYTES_PER_GIB = 1024.0**3


def frac_from_pct(pct: float) -> float:
    """Fraction from percent."""
    return pct / 100.0


def pct_from_frac(frac: float) -> float:
    """Percent from a fraction."""
    return frac * 100.0


def hours_from_minutes(minutes: float) -> float:
    """Hours from minutes."""
    return minutes / MINUTES_PER_HOUR


def minutes_from_hours(hours: float) -> float:
    """Minutes from hours."""
    return hours * MINUTES_PER_HOUR


def v_sq_drop_per_kw(ohm: float, base_kv: float) -> float:
    """Drop of the squared voltage (p.u.) per kW over a resistance, or per kvar over a reactance.

    ``v_j = v_i - 2 (r P + x Q) / (1000 kV^2)`` (linearised DistFlow, Baran and Wu 1989, losses
    dropped): with kW, ohm and kV (line to line) the base impedance times the base power is
    ``1000 kV^2`` kW ohm.
    """
    return 2.0 * ohm / (1000.0 * base_kv * base_kv)


def power_base_kva(base_kv: float) -> float:
    """Power on which ohm are per unit: ``1000 kV^2`` kVA (kV line to line)."""
    return 1000.0 * base_kv * base_kv


def kva_from_ampere(ampere: float, base_kv: float) -> float:
    """Three-phase apparent power of a current at a line-to-line voltage: sqrt(3) kV A."""
    return math.sqrt(3.0) * base_kv * ampere
