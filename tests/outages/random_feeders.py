"""Random radial feeders for property tests: any device at any line end, ties, supplies, units."""

from __future__ import annotations

from hypothesis import strategies as st

from tests.builders import (
    change_study,
    make_generator,
    make_line,
    make_outage_class,
    make_storage,
    make_supply,
)
from tests.outages.hand_feeders import study_of
from xlplan.study.study import Device, Study

RATINGS = st.sampled_from([50.0, 100.0, 200.0, float("inf")])
DEVICES = st.sampled_from(list(Device))


@st.composite
def random_feeders(draw: st.DrawFn) -> Study:
    """A radial study of 2 to 8 buses in one to three levels, drawn in either direction."""
    n_bus = draw(st.integers(2, 8))
    buses = ["S"] + [f"B{i}" for i in range(1, n_bus)]
    lines = []

    def line(name: str, ends: tuple[str, str], **changes: object) -> None:
        ends = ends if draw(st.booleans()) else ends[::-1]
        devices = {"from_device": draw(DEVICES), "to_device": draw(DEVICES)}
        lines.append(make_line(name, *ends, **devices, **changes))

    for i in range(1, n_bus):
        line(f"L{i}", (buses[draw(st.integers(0, i - 1))], buses[i]))
    for i in range(draw(st.integers(0, 3)) if n_bus > 2 else 0):
        ends = draw(st.permutations(buses))[:2]
        line(f"T{i}", (ends[0], ends[1]), normally_open=True, rating_kva=draw(RATINGS))
    at_bus = st.sampled_from(buses)
    supplies = tuple(
        make_supply(f"N{i}", draw(at_bus), draw(RATINGS), shares_bulk_supply=draw(st.booleans()))
        for i in range(draw(st.integers(0, 2)))
    )
    generators = tuple(
        make_generator(
            f"G{i}",
            draw(at_bus),
            existing_kw=draw(st.sampled_from([0.0, 10.0])),
            start_delay_h=draw(st.sampled_from([0.0, 2.0])),
            start_failure_frac=draw(st.sampled_from([0.0, 0.1])),
            is_outage_only=draw(st.booleans()),
            is_grid_forming=draw(st.booleans()),
            outage_class="unit",
        )
        for i in range(draw(st.integers(0, 2)))
    )
    storage = tuple(
        make_storage(f"E{i}", draw(at_bus), is_grid_forming=draw(st.booleans()))
        for i in range(draw(st.integers(0, 1)))
    )
    study = study_of(lines)
    return change_study(
        study,
        supplies=supplies,
        generators=generators,
        storage=storage,
        outage_classes=(
            make_outage_class("overhead", 300.0, switching_h=draw(st.sampled_from([0.0, 1.0]))),
            make_outage_class("unit", 100.0),
            make_outage_class("bulk", 50.0, switching_h=1.0),
        ),
        bulk_supply_outage_class="bulk",
    )
