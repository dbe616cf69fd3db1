"""Audit of a scenario tree: every segment that the plan can reach, from its parent's state."""

from __future__ import annotations

from collections.abc import Sequence

from xlplan.evaluate.audit import audit_dispatch
from xlplan.evaluate.violations import (
    UnitState,
    Violation,
    capacities_in_service,
    start_of_window,
    state_after,
)
from xlplan.model.dispatch import Purchases, SegmentKind, TreeSegment
from xlplan.network.feeder import Feeder
from xlplan.outages.records import ServicePeriod
from xlplan.outages.sections import build_sections
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study


def audit_tree(
    study: Study,
    feeder: Feeder,
    windows: Sequence[WindowModel],
    purchases: Purchases,
    segments: Sequence[TreeSegment],
) -> list[tuple[int, Violation]]:
    """Violations of all segments, each with the position of its segment.

    Parameters
    ----------
    study, feeder : of one study
    windows : sequence of WindowModel, in the order of the study's windows
    purchases : Purchases
    segments : sequence of TreeSegment, parents before children

    Returns
    -------
    list of (position in ``segments``, Violation); empty if everything is feasible
    """
    capacities = capacities_in_service(study, purchases)
    section_of_bus = build_sections(feeder).section_of_bus
    found: list[tuple[int, Violation]] = []
    for position, segment in enumerate(segments):
        window = windows[segment.i_window]
        before: UnitState
        if segment.i_parent < 0:
            before = start_of_window(study, capacities, window.series.start_soc_frac)
        else:
            parent = segments[segment.i_parent]
            last = segment.start_period - parent.start_period - 1
            before = state_after(parent.dispatch, last, _service(window, parent)[last])
        # Only the plan that starts a window is bound by the demand that is paid for.
        is_first_plan = segment.i_parent < 0 and window.series.counts_for_demand
        found += [
            (position, violation)
            for violation in audit_dispatch(
                study,
                feeder,
                section_of_bus,
                window.series,
                _service(window, segment),
                segment.dispatch,
                capacities,
                before,
                segment.start_period,
                segment.kind is SegmentKind.EVENT,
                purchases.demand_kw if is_first_plan else None,
            )
        ]
    return found


def _service(window: WindowModel, segment: TreeSegment) -> Sequence[ServicePeriod]:
    """What can run in each period of a segment."""
    if segment.i_scenario is None:
        return [window.normal] * segment.n_period
    return window.scenarios[segment.i_scenario].service
