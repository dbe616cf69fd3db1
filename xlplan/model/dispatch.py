"""Results of a solved tree as named arrays: what is bought, and how everything runs.

Nothing here is solved or built; evaluation and audits read these records and never a name.
Positions follow the rows of the study (generators, storage, loads, buses, lines, supplies).
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class Purchases:
    """The decision ``x``: new capacity, hardening, and the yearly demand that is paid for.

    generator_kw : (n_generator,); storage_kw, storage_kwh : (n_storage,), new only
    is_hardened : (n_measure,); demand_kw : float, ``D`` (not used where purchases are given)
    """

    generator_kw: FloatArray
    storage_kw: FloatArray
    storage_kwh: FloatArray
    is_hardened: BoolArray
    demand_kw: float = 0.0


class SegmentKind(StrEnum):
    """A node of the tree: all in service until something fails, or one outage event."""

    PLAN = "plan"
    EVENT = "event"


@dataclass(frozen=True)
class Dispatch:
    """Operation in consecutive periods; arrays are (n_period,) or (n_period, n_asset).

    Flows of lines are positive from their from bus to their to bus, 0 where not live;
    ``v_sq_pu`` is nan at a dead bus. ``storage_kw`` is the terminal power ``b`` (discharge
    positive), ``storage_draw_kw`` the power drawn from the store ``z``. ``energy_kwh`` and
    ``fuel_kwh`` (kWh of output left in the tank, nan where there is no tank) hold at the end of
    each period. ``shed_kw`` is per load and includes the loss allowance, as the load does.
    """

    import_kw: FloatArray
    export_kw: FloatArray
    source_kvar: FloatArray
    supply_kw: FloatArray
    supply_kvar: FloatArray
    generator_kw: FloatArray
    generator_kvar: FloatArray
    storage_kw: FloatArray
    storage_draw_kw: FloatArray
    storage_kvar: FloatArray
    energy_kwh: FloatArray
    fuel_kwh: FloatArray
    trip_kw: FloatArray
    shed_kw: FloatArray
    surplus_kw: FloatArray
    capacitor_kvar: FloatArray
    line_kw: FloatArray
    line_kvar: FloatArray
    v_sq_pu: FloatArray


@dataclass(frozen=True)
class TreeSegment:
    """One node of the tree that the plan can reach, with its operation.

    ``i_parent``: position of the segment it follows, -1 at the start of a window.
    ``start_period``: first period of the segment, ``n_period`` of the window or more in an event
    that begins at, or runs on beyond, its end. ``weight``: chance that the segment is reached.
    ``period_weight``: (n_period,), chance that each period of it is lived through.
    ``end_weight``: chance that the window ends with the state this segment leaves.
    ``i_scenario``: None in a plan.
    """

    i_window: int
    kind: SegmentKind
    i_scenario: int | None
    i_parent: int
    start_period: int
    n_period: int
    weight: float
    period_weight: FloatArray
    end_weight: float
    dispatch: Dispatch
