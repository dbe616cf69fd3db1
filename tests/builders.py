"""Studies for tests, made directly as records: no workbook takes part.

``small_study`` is easy to reason about by hand. ``random_study`` draws small radial studies;
``feature_names`` says which features of ``FEATURES`` a study uses. The ``make_*`` functions make
one record each from defaults that do nothing special. All are imported from here.
"""

from __future__ import annotations

from tests.random_studies import random_study, tree_periods
from tests.study_features import ALWAYS_DRAWN, FEATURES, feature_names
from tests.study_records import (
    change_study,
    curve_of_efficiency,
    make_bus,
    make_customer_class,
    make_generator,
    make_line,
    make_load,
    make_measure,
    make_outage_class,
    make_profiles,
    make_settings,
    make_storage,
    make_supply,
    make_window,
)
from xlplan.study.study import Device, Study

__all__ = [
    "ALWAYS_DRAWN",
    "FEATURES",
    "change_study",
    "curve_of_efficiency",
    "feature_names",
    "make_bus",
    "make_customer_class",
    "make_generator",
    "make_line",
    "make_load",
    "make_measure",
    "make_outage_class",
    "make_profiles",
    "make_settings",
    "make_storage",
    "make_supply",
    "make_window",
    "random_study",
    "small_study",
    "tree_periods",
]


def small_study(**changes: object) -> Study:
    """Three buses in a row, S - A - B, 100 kW flat at A and at B, nothing to buy.

    Line ``SA`` starts with a breaker and ``AB`` with a fuse, so that a fault on ``AB`` leaves A
    served. Lines fail once a year each, for 2 hours without isolation time. One window ``day`` of
    4 hours, 100 times a year; energy at 0.1, interruptions at 2 per kWh. Changes are those of
    ``change_study``: fields of ``Study``, or settings.

    >>> small_study(energy_price_per_kwh=0.2).settings.energy_price_per_kwh
    0.2
    """
    study = Study(
        settings=make_settings(),
        buses=(make_bus("S"), make_bus("A"), make_bus("B")),
        loads=(make_load("LA", "A"), make_load("LB", "B")),
        lines=(make_line("SA", "S", "A"), make_line("AB", "A", "B", from_device=Device.FUSE)),
        supplies=(),
        generators=(),
        storage=(),
        outage_classes=(make_outage_class("overhead", 1.0),),
        measures=(),
        customer_classes=(make_customer_class(),),
        profiles=make_profiles(4),
        windows=(make_window(),),
    )
    return change_study(study, **changes)
