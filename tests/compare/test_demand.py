"""The demand limit that goes with a plan's purchases, against the peak that has to be bought."""

from __future__ import annotations

import numpy as np
import pytest

from tests.builders import (
    make_generator,
    make_load,
    make_outage_class,
    make_profiles,
    make_window,
    small_study,
)
from tests.compare.pack_study import solver
from xlplan.base.names import EXISTING

CHARGE = 60.0
PEAK_KW = 200.0
GAP = 0.01


@pytest.mark.parametrize("more", [{}, {"start_failure_frac": 0.05, "tank_h": 8.0}])
@pytest.mark.parametrize("method", ["tree", "decomposed"])
def test_the_existing_feeder_pays_for_its_peak_and_sheds_nothing_in_normal_service(method, more):
    """Without local sources the limit is the peak, however wide the gap.

    A kW less would be 60 a year less to pay, and at 2 per kWh, once a day, 720 of load shed.
    """
    periods = 8 if method == "decomposed" else 3
    shape = np.array([0.2, 0.5, 0.9, 1.0, 0.9, 0.7, 0.5, 0.3])
    study = small_study(
        loads=tuple(
            make_load(f"L{bus}", bus, load_profile="day", peak_kw=PEAK_KW / 2) for bus in "AB"
        ),
        profiles=make_profiles(periods, day=shape[-periods:] / shape[-periods:].max()),
        windows=(
            make_window("fair", n_period=periods, occurrences_per_year=360.0),
            make_window(
                "storm", n_period=periods, occurrences_per_year=5.0, failure_multiplier=20.0
            ),
        ),
        outage_classes=(
            make_outage_class(
                "overhead", 2.0, repair_h=4.0, switching_h=1.0, is_weather_exposed=True
            ),
        ),
        generators=(make_generator("engine", "B", is_outage_only=True, step_kw=25.0, **more),),
        demand_charge_per_kw_year=CHARGE,
        gap_target_frac=GAP,
    )
    with solver(study, method, GAP) as one:
        plans = {plan.result.name: plan.result for plan in one.solve()}
    assert plans[EXISTING].costs.demand == pytest.approx(CHARGE * PEAK_KW, rel=1e-8)
    assert plans[EXISTING].costs.normal_shedding == pytest.approx(0.0, abs=1e-3)
