"""What can run in each period of an event: delays, islands, refilling."""

from __future__ import annotations

import pytest

from tests.builders import make_generator, make_storage, make_supply
from tests.outages.hand_feeders import tie, town
from xlplan.network.feeder import build_feeder
from xlplan.outages.faults import bulk_supply_stages, isolation_and_repair
from xlplan.outages.sections import build_sections
from xlplan.outages.service import n_period_of, normal_service, service_periods
from xlplan.study.study import Study, Technology


def service_of(study: Study, line: str | None, n_isolation: int = 1, n_period: int = 4):
    """Service of a fault on a line, or of a failed bulk supply."""
    feeder = build_feeder(study)
    sections = build_sections(feeder)
    if line is None:
        stages = bulk_supply_stages(study, feeder, sections, n_isolation, n_period)
    else:
        section = int(sections.section_of_line[feeder.line_ids.index(line)])
        stages = isolation_and_repair(study, feeder, sections, section, n_isolation, n_period)
    return feeder, service_periods(study, feeder, stages, n_isolation)


def flags(service, name: str, i: int = 0) -> list[bool]:
    """One unit's flag by period."""
    return [bool(getattr(period, name)[i]) for period in service]


@pytest.mark.parametrize(
    ("hours", "period_h", "n_period"),
    [(4.0, 0.25, 16), (1.0, 5.0 / 60.0, 12), (0.3, 0.25, 2), (0.0, 0.5, 0), (0.5, 0.5, 1)],
)
def test_times_become_whole_periods(hours, period_h, n_period):
    assert n_period_of(hours, period_h) == n_period


def test_normal_service():
    study = town(
        tie("T", "C", "D"),
        supplies=(make_supply("N", "C"),),
        generators=(make_generator("G1", "B"), make_generator("G2", "B", is_outage_only=True)),
    )
    period = normal_service(study, build_feeder(study))
    assert period.line_live.tolist() == [True] * 4 + [False]
    assert period.bus_live.all()
    assert period.source_live
    assert not period.supply_closed.any()
    assert period.generator_live.all()
    assert period.generator_may_run.tolist() == [True, False]
    assert period.generator_refills.all()
    assert period.islands == ()


def test_an_island_without_a_forming_unit_is_dead():
    study = town(
        generators=(make_generator("G", "C", is_grid_forming=False),),
        storage=(make_storage("E", "C", is_grid_forming=False),),
    )
    feeder, service = service_of(study, "M2")
    c = feeder.bus_ids.index("C")
    assert [bool(period.bus_live[c]) for period in service] == [False] * 4
    assert flags(service, "generator_live") == flags(service, "storage_live") == [False] * 4
    assert all(period.islands == () for period in service)


def test_a_unit_that_cannot_exist_forms_nothing():
    study = town(storage=(make_storage("E", "C", existing_kw=0.0, max_new_kw=0.0),))
    _, service = service_of(study, "M2")
    assert all(period.islands == () for period in service)


def test_storage_forms_the_island_as_soon_as_the_fault_is_isolated():
    feeder, service = service_of(town(storage=(make_storage("E", "C"),)), "M2")
    c = feeder.bus_ids.index("C")
    assert [bool(period.bus_live[c]) for period in service] == [False, True, True, True]
    assert [period.clock_h for period in service] == [0.0, 1.0, 2.0, 3.0]
    (island,) = service[1].islands
    assert (island.buses, island.forming_generators, island.forming_storage) == ((c,), (), (0,))


def test_a_start_delay_runs_from_the_event_and_counts_the_isolation():
    # 2.5 h in hourly periods: max(1, 3) periods without it, so it runs in the 4th.
    study = town(generators=(make_generator("G", "C", start_delay_h=2.5),))
    feeder, service = service_of(study, "M2", n_isolation=1, n_period=5)
    c = feeder.bus_ids.index("C")
    live = [False, False, False, True, True]
    assert [bool(period.bus_live[c]) for period in service] == live
    assert flags(service, "generator_live") == flags(service, "generator_may_run") == live
    assert [len(period.islands) for period in service] == [0, 0, 0, 1, 1]


def test_a_delayed_unit_in_an_island_that_another_forms_stands_ready():
    study = town(
        generators=(make_generator("G", "C", start_delay_h=3.0),),
        storage=(make_storage("E", "B"),),
    )
    feeder, service = service_of(study, "M1", n_isolation=1, n_period=5)
    assert flags(service, "generator_live") == [False, True, True, True, True]
    assert flags(service, "generator_may_run") == [False, False, False, True, True]
    forming = [[island.forming_generators for island in period.islands] for period in service]
    assert forming == [[], [()], [()], [(0,)], [(0,)]]  # D alone is never formed
    bc = tuple(feeder.bus_ids.index(bus) for bus in "BC")
    assert service[1].islands[0].buses == bc


def test_no_delay_where_a_source_feeds_the_unit():
    delayed = make_generator("G", "C", start_delay_h=9.0, is_outage_only=True)
    for more, supplies in (([tie("T", "C", "D")], ()), ([], (make_supply("N", "C"),))):
        _, service = service_of(town(*more, supplies=supplies, generators=(delayed,)), "M2")
        # C is dead while isolating, fed through the tie or by the neighbour afterwards.
        assert flags(service, "generator_may_run") == [False, True, True, True]
        assert all(period.islands == () for period in service)


def test_tanks_refill_where_the_bulk_supply_is_live_and_the_delay_is_over():
    def refills(line, supplies=(), bus="A", delay_h=2.0):
        unit = make_generator("G", bus, refill_delay_h=delay_h)
        return flags(
            service_of(town(supplies=supplies, generators=(unit,)), line)[1], "generator_refills"
        )

    assert refills("M2") == [False, False, True, True]  # A stays on the source; 2 h delay
    assert refills("M2", delay_h=0.0) == [True] * 4
    assert refills("M2", bus="C", delay_h=0.0) == [False] * 4  # in an island
    neighbour = (make_supply("N", "C"),)
    assert refills("M2", neighbour, bus="C", delay_h=0.0) == [False] * 4  # not the bulk supply
    assert refills("M3", bus="B", delay_h=0.0) == [False, True, True, True]  # dead, then back
    assert refills(None, neighbour, bus="C", delay_h=0.0) == [False] * 4


def test_solar_forms_too_and_a_failed_bulk_supply_leaves_one_island():
    solar = make_generator("P", "B", technology=Technology.SOLAR)
    feeder, service = service_of(town(generators=(solar,)), None)
    assert not any(period.source_live for period in service)
    assert not service[0].bus_live.any()
    assert service[1].bus_live.all()
    assert service[1].islands[0].buses == tuple(range(feeder.n_bus))
    assert service[1].islands[0].forming_generators == (0,)
