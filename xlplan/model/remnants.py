"""Purchases that are no purchases: remnants of a solver's tolerance, and what is free and idle.

A search that stops within a gap may leave 0.0015 kWh of a store in its plan, and it may as well
buy power that costs nothing for a store without energy. Neither is worth a line in a plan. Here
they are only found and ruled out; whether the plan without them is as good is for the caller to
solve, follow and compare: nothing is rounded in a plan that was already evaluated.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from xlplan.model.dispatch import Purchases
from xlplan.model.purchase import FirstStage
from xlplan.study.study import Study

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

REMNANT_FRAC = 1e-4
"""A purchase of less than this share of the most that can be added is no size that anybody
offers; what it does to the cost is far below any gap that is asked for."""


@dataclass(frozen=True)
class Remnants:
    """What to keep at 0: generator_kw (n_generator,), storage_kw and storage_kwh (n_storage,)."""

    generator_kw: BoolArray
    storage_kw: BoolArray
    storage_kwh: BoolArray


def find_remnants(study: Study, bought: Purchases) -> Remnants | None:
    """The purchases to do without, None where there are none.

    Parameters
    ----------
    study : Study
    bought : Purchases, without what is below the solver's rounding

    Returns
    -------
    Remnants or None; sizes that come in steps are whole purchases, however small
    """
    generator_kw = np.array(
        [
            unit.step_kw is None and _is_remnant(kw, unit.max_new_kw)
            for unit, kw in zip(study.generators, bought.generator_kw, strict=True)
        ],
        dtype=bool,
    )
    storage_kw = np.zeros(len(study.storage), dtype=bool)
    storage_kwh = np.zeros(len(study.storage), dtype=bool)
    for i, store in enumerate(study.storage):
        kw, kwh = float(bought.storage_kw[i]), float(bought.storage_kwh[i])
        storage_kw[i] = store.step_kw is None and _is_remnant(kw, store.max_new_kw)
        storage_kwh[i] = _is_remnant(kwh, store.max_new_kwh)
        paid = 1.0 - store.grant_frac
        is_power_free = store.capital_cost_per_kw * paid + store.fixed_om_per_kw == 0.0
        is_energy_free = store.capital_cost_per_kwh * paid == 0.0
        has_power = store.existing_kw > 0.0 or (kw > 0.0 and not storage_kw[i])
        has_energy = store.existing_kwh > 0.0 or (kwh > 0.0 and not storage_kwh[i])
        storage_kw[i] |= kw > 0.0 and is_power_free and not has_energy
        storage_kwh[i] |= kwh > 0.0 and is_energy_free and not has_power
    if not (generator_kw.any() or storage_kw.any() or storage_kwh.any()):
        return None
    return Remnants(generator_kw, storage_kw, storage_kwh)


def study_without(study: Study, remnants: Remnants) -> Study:
    """The study where these cannot be bought."""
    return replace(
        study,
        generators=tuple(
            replace(unit, max_new_kw=0.0) if is_out else unit
            for unit, is_out in zip(study.generators, remnants.generator_kw, strict=True)
        ),
        storage=tuple(
            replace(
                store,
                max_new_kw=0.0 if without_kw else store.max_new_kw,
                max_new_kwh=0.0 if without_kwh else store.max_new_kwh,
            )
            for store, without_kw, without_kwh in zip(
                study.storage, remnants.storage_kw, remnants.storage_kwh, strict=True
            )
        ),
    )


def bounds_without(
    first_stage: FirstStage, bounds: tuple[FloatArray, FloatArray], remnants: Remnants
) -> tuple[FloatArray, FloatArray]:
    """Bounds of the first stage's columns, each (n_x,), where these cannot be bought.

    Sites and steps follow: they cost without a purchase, so that the search leaves them at 0.
    """
    upper = bounds[1].copy()
    for columns, are_out in (
        (first_stage.generator_kw, remnants.generator_kw),
        (first_stage.storage_kw, remnants.storage_kw),
        (first_stage.storage_kwh, remnants.storage_kwh),
    ):
        for column, is_out in zip(columns, are_out, strict=True):
            if is_out and column >= 0:
                upper[column] = 0.0
    return bounds[0], upper


def _is_remnant(amount: float, most: float) -> bool:
    return 0.0 < amount < REMNANT_FRAC * most
