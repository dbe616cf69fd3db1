"""Yearly indices from expected metrics per load (IEEE Std 1366 where shares shed are 0 or 1)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from xlplan.base.units import HOURS_PER_YEAR
from xlplan.evaluate.metrics import Slots
from xlplan.evaluate.results import BusResult, ClassResult, Indices
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]


def indices(customers: FloatArray, slots: Slots, yearly: FloatArray) -> Indices:
    """Indices of the whole feeder.

    Parameters
    ----------
    customers : array, shape (n_load,)
    slots : Slots
    yearly : array, shape (n_slot,), expected metrics of a year

    Returns
    -------
    Indices; 0 where there are no customers, CAIDI 0 where nobody is interrupted
    """
    n = float(customers.sum())
    if n > 0.0:
        saifi = float(customers @ yearly[slots.per_load("sustained")]) / n
        maifi = float(customers @ yearly[slots.per_load("momentary")]) / n
        saidi = float(customers @ yearly[slots.per_load("hours")]) / n
    else:
        saifi = maifi = saidi = 0.0
    return Indices(
        eens_kwh=float(yearly[slots.per_load("ens_kwh")].sum()),
        saifi=saifi,
        maifi=maifi,
        saidi_h=saidi,
        caidi_h=saidi / saifi if saifi > 0.0 else 0.0,
        asai=1.0 - saidi / HOURS_PER_YEAR,
    )


def by_bus(study: Study, slots: Slots, yearly: FloatArray) -> tuple[BusResult, ...]:
    """Unserved energy, interruptions and hours of every bus with a load.

    Interruptions and hours are those of the bus's average customer (of its average kW where the
    study gives no customers).
    """
    rows = []
    for bus in study.buses:
        at = [i for i, load in enumerate(study.loads) if load.bus == bus.bus]
        if not at:
            continue
        customers = np.array([study.loads[i].customers for i in at], dtype=float)
        peak = np.array([study.loads[i].peak_kw for i in at], dtype=float)
        weight = customers if customers.sum() > 0.0 else peak
        weight = weight / weight.sum() if weight.sum() > 0.0 else np.full(len(at), 1.0 / len(at))
        rows.append(
            BusResult(
                bus=bus.bus,
                customers=float(customers.sum()),
                peak_kw=float(peak.sum()),
                eens_kwh=float(yearly[slots.per_load("ens_kwh")][at].sum()),
                interruptions=float(weight @ yearly[slots.per_load("sustained")][at]),
                outage_h=float(weight @ yearly[slots.per_load("hours")][at]),
            )
        )
    return tuple(rows)


def by_class(study: Study, slots: Slots, yearly: FloatArray) -> tuple[ClassResult, ...]:
    """Unserved energy, interruption cost and indices of every customer class."""
    rows = []
    for customer_class in study.customer_classes:
        name = customer_class.customer_class
        at = [i for i, load in enumerate(study.loads) if load.customer_class == name]
        customers = np.array([study.loads[i].customers for i in at], dtype=float)
        n = float(customers.sum())
        rows.append(
            ClassResult(
                customer_class=name,
                is_critical=customer_class.is_critical,
                customers=n,
                eens_kwh=float(yearly[slots.per_load("ens_kwh")][at].sum()),
                interruption_cost=float(yearly[slots.per_load("cost")][at].sum()),
                saifi=float(customers @ yearly[slots.per_load("sustained")][at]) / n if n else 0.0,
                saidi_h=float(customers @ yearly[slots.per_load("hours")][at]) / n if n else 0.0,
            )
        )
    return tuple(rows)
