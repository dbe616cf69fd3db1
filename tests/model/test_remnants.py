"""Which purchases are remnants of a search: worked out by hand from shares of the most for sale."""

from __future__ import annotations

import numpy as np
import pytest

from tests.builders import make_generator, make_storage, small_study
from xlplan.model.dispatch import Purchases
from xlplan.model.layout import build_layout
from xlplan.model.purchase import build_first_stage
from xlplan.model.remnants import REMNANT_FRAC, bounds_without, find_remnants, study_without
from xlplan.study.windows import build_window_series

MOST_KW, MOST_KWH = 100.0, 200.0
"""What ``make_storage`` and the generators here offer."""


def bought(generator_kw: float, storage_kw: float, storage_kwh: float) -> Purchases:
    return Purchases(
        np.array([generator_kw]), np.array([storage_kw]), np.array([storage_kwh]), np.zeros(0, bool)
    )


def study(step_kw=None, **storage):
    return small_study(
        generators=(make_generator("engine", "A", max_new_kw=MOST_KW, step_kw=step_kw),),
        storage=(make_storage("battery", "B", **storage),),
    )


def found(of, purchases):
    remnants = find_remnants(of, purchases)
    if remnants is None:
        return None
    return tuple(
        bool(flags[0])
        for flags in (remnants.generator_kw, remnants.storage_kw, remnants.storage_kwh)
    )


JUST_BELOW, JUST_ABOVE = 0.99 * REMNANT_FRAC, 1.01 * REMNANT_FRAC


@pytest.mark.parametrize(
    ("purchases", "expected"),
    [
        (bought(0.0, 0.0, 0.0), None),
        (bought(50.0, 20.0, 40.0), None),
        (bought(JUST_ABOVE * MOST_KW, JUST_ABOVE * MOST_KW, JUST_ABOVE * MOST_KWH), None),
        (bought(JUST_BELOW * MOST_KW, 0.0, 0.0), (True, False, False)),
        (bought(0.0, 20.0, JUST_BELOW * MOST_KWH), (False, False, True)),
        (bought(0.0, JUST_BELOW * MOST_KW, 40.0), (False, True, False)),
    ],
)
def test_a_small_share_of_what_is_for_sale_is_a_remnant(purchases, expected):
    assert found(study(), purchases) == expected


def test_whole_steps_are_purchases_however_small():
    small = bought(JUST_BELOW * MOST_KW, 0.0, 0.0)
    assert found(study(step_kw=JUST_BELOW * MOST_KW), small) is None


@pytest.mark.parametrize(
    ("storage", "expected"),
    [
        ({"capital_cost_per_kw": 0.0, "fixed_om_per_kw": 0.0}, (False, True, False)),
        ({"grant_frac": 1.0, "fixed_om_per_kw": 0.0}, (False, True, False)),
        ({"capital_cost_per_kw": 0.0, "fixed_om_per_kw": 1.0}, None),
        ({"capital_cost_per_kw": 0.0, "fixed_om_per_kw": 0.0, "existing_kwh": 9.0}, None),
    ],
)
def test_free_power_of_a_store_without_energy_is_a_remnant(storage, expected):
    assert found(study(**storage), bought(0.0, 80.0, 0.0)) == expected


def test_free_energy_of_a_store_without_power_is_a_remnant():
    free = study(capital_cost_per_kwh=0.0)
    assert found(free, bought(0.0, 0.0, 150.0)) == (False, False, True)
    assert found(free, bought(0.0, 10.0, 150.0)) is None


def test_remnants_are_ruled_out_in_both_forms():
    one = study()
    remnants = find_remnants(one, bought(JUST_BELOW * MOST_KW, 20.0, JUST_BELOW * MOST_KWH))
    without = study_without(one, remnants)
    assert without.generators[0].max_new_kw == 0.0
    assert (without.storage[0].max_new_kw, without.storage[0].max_new_kwh) == (MOST_KW, 0.0)
    all_series = [build_window_series(one, window) for window in one.windows]
    first_stage = build_first_stage(one, build_layout(one, all_series))
    lower, upper = bounds_without(first_stage, first_stage.bounds(), remnants)
    was = first_stage.bounds()[1]
    changed = [first_stage.generator_kw[0], first_stage.storage_kwh[0]]
    assert (upper[changed] == 0.0).all()
    assert (was[changed] > 0.0).all()
    others = np.setdiff1d(np.arange(len(upper)), changed)
    assert (upper[others] == was[others]).all()
    assert (lower <= upper).all()
