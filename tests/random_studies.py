"""Small random studies whose whole scenario tree stays tiny.

Failures are so frequent that second failures matter; together a few dozen seeds use every feature
of the model (``tests.study_features``).
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import ClassVar

import numpy as np

from tests.study_features import FEATURES
from tests.study_records import (
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
from xlplan.base.rng import stream
from xlplan.base.units import HOURS_PER_YEAR
from xlplan.study.study import (
    Bus,
    CustomerClass,
    Device,
    Generator,
    Line,
    Load,
    LoadControl,
    Measure,
    NeighbourSupply,
    OutageClass,
    Profiles,
    RateBasis,
    RepairSpread,
    Settings,
    Storage,
    Study,
    Technology,
    Window,
)

MAX_TREE_PERIODS = 600
"""Periods in the whole scenario tree of a random study, by an estimate that merges nothing."""

LIKELY = {"storage": 0.75, "generator": 0.65, "forming storage": 0.6, "forming generator": 0.6}
"""Chance that a feature is drawn, 0.45 for all others: units and islands are what matters most."""


def random_study(seed: int, n_period: int | None = None, features: set[str] | None = None) -> Study:
    """A small valid radial study.

    Parameters
    ----------
    seed : int; the same seed, period count and features give the same study
    n_period : int or None, periods of every window; drawn from 3 to 6 if None (fewer where the
        scenario tree would grow too large)
    features : set of names of ``FEATURES`` or None; exactly these are used (with
        ``ALWAYS_DRAWN``, and what they need); each is drawn by chance if None

    Returns
    -------
    Study with 2 to 5 buses, 30- or 60-minute periods, chances of failure of 5 to 40 % a period
    """
    return _Draw(seed, n_period, features).study()


class _Draw:
    """One random study in the making: every method draws one kind of record."""

    def __init__(self, seed: int, n_period: int | None, features: set[str] | None) -> None:
        self.rng = stream(seed, "random study")
        if features is not None and not features <= set(FEATURES):
            raise ValueError(f"unknown features: {sorted(features - set(FEATURES))}")
        drawn = {name for name in FEATURES if self.rng.random() < LIKELY.get(name, 0.45)}
        self.asked_periods = n_period
        self.is_drawn = features is None
        self.period_h = float(self.rng.choice([0.5, 1.0]))
        if features is None:
            drawn |= {self.pick(["storage", "generator", "hardening"])}  # something to decide
            self.features = self._without_orphans(drawn)
        else:
            self.features = self._with_needs(set(features))

    def _without_orphans(self, drawn: set[str]) -> set[str]:
        """Drops the features of parts that were not drawn."""
        for part, users in self.NEEDS.items():
            if part not in drawn:
                drawn = drawn - users
        return drawn

    def _with_needs(self, asked: set[str]) -> set[str]:
        """Adds the parts that the features asked for belong to."""
        for part, users in reversed(self.NEEDS.items()):
            if asked & users:
                asked = asked | {part}
        return asked

    NEEDS: ClassVar[dict[str, set[str]]] = {
        "storage": {
            "storage curve",
            "existing storage",
            "storage steps",
            "storage site cost",
            "longest hours",
            "start charge by window",
            "forming storage",
            "storage failure",
            "stored-energy price",
        },
        "generator": {
            "existing generator",
            "ramp",
            "start delay",
            "start failure",
            "tank",
            "refill",
            "outage only",
            "generator steps",
            "generator site cost",
            "forming generator",
            "generator failure",
        },
        "existing storage": {"storage failure"},
        "existing generator": {"generator failure"},
        "tank": {"refill"},
        "hardening": {"exclusive hardening"},
        "neighbour supply": {"supply profile"},
    }

    def has(self, feature: str) -> bool:
        return feature in self.features

    def uniform(self, low: float, high: float, digits: int = 3) -> float:
        """A short decimal number, so that failing cases can be read."""
        return round(float(self.rng.uniform(low, high)), digits)

    def chance(self, share: float) -> bool:
        return bool(self.rng.random() < share)

    def pick(self, items: list[str]) -> str:
        return items[int(self.rng.integers(len(items)))]

    def study(self) -> Study:
        """The records in the order in which they depend on one another."""
        self.buses = self._buses()
        self.away = [bus.bus for bus in self.buses[1:]]
        self.loads = self._loads()
        self.storage = self._storage()
        self.generators = self._generators()
        self.lines = self._lines()
        self.supplies = self._supplies()
        self.measures = self._measures()
        self.bulk = "bulk" if self.has("bulk supply failure") else None
        self._keep_failures_few()
        self.windows = self._windows()
        self.profiles = self._profiles()
        classes = self._outage_classes()
        return Study(
            settings=self._settings(),
            buses=self.buses,
            loads=self.loads,
            lines=self.lines,
            supplies=self.supplies,
            generators=self.generators,
            storage=self.storage,
            outage_classes=classes,
            measures=self.measures,
            customer_classes=self._customer_classes(),
            profiles=self.profiles,
            windows=self.windows,
        )

    def _buses(self) -> tuple[Bus, ...]:
        least = 3 if self.features & {"tie", "exclusive hardening", "remote disconnection"} else 2
        n_bus = int(self.rng.integers(least, 6))
        ids = ["S", *[f"B{i}" for i in range(1, n_bus)]]
        chosen = int(self.rng.integers(1, n_bus)) if self.has("capacitor") else -1
        return tuple(
            make_bus(bus, self.uniform(20, 80, 0) if i == chosen else 0.0)
            for i, bus in enumerate(ids)
        )

    def _loads(self) -> tuple[Load, ...]:
        """A load at every bus away from the source, now and then two at one bus."""
        buses = list(self.away)
        if self.chance(0.3):
            buses.append(self.pick(self.away))
        loads = []
        for i, bus in enumerate(buses):
            load = make_load(
                f"L{i + 1}",
                bus,
                peak_kw=self.uniform(50, 250, 0),
                customer_class="shops" if i % 2 else "homes",
                customers=float(self.rng.integers(5, 60)),
                power_factor=self.uniform(0.88, 0.98) if self.has("reactive load") else 1.0,
                load_profile="demand" if self.has("load profile") and i % 3 != 2 else None,
            )
            if self.has("remote disconnection") and self.chance(0.7 if i else 1.0):
                load = replace(load, remote_disconnect_frac=self.uniform(0.3, 1.0, 1))
            loads.append(load)
        return tuple(loads)

    def _storage(self) -> tuple[Storage, ...]:
        if not self.has("storage"):
            return ()
        units = []
        for i in range(1 + self.chance(0.25)):
            floor = self.uniform(0.0, 0.2, 2)
            exists = self.has("existing storage") and i == 0
            can_grow = not exists or self.chance(0.6)
            size = self.uniform(60, 250, 0)
            unit = make_storage(
                f"ES{i + 1}",
                self.pick(self.away),
                existing_kw=self.uniform(30, 80, 0) if exists else 0.0,
                existing_kwh=self.uniform(40, 160, 0) if exists else 0.0,
                max_new_kw=size if can_grow else 0.0,
                max_new_kwh=round(size * self.uniform(1, 3), 0) if can_grow else 0.0,
                capital_cost_per_kw=self.uniform(30, 200, 0),
                capital_cost_per_kwh=self.uniform(30, 250, 0),
                fixed_om_per_kw=self.uniform(0, 8, 1),
                life_years=float(self.rng.integers(8, 20)),
                curve=curve_of_efficiency(self.uniform(0.75, 0.95, 2)),
                min_soc_frac=floor,
                start_soc_frac=round(floor + self.uniform(0.0, 0.7, 2), 2),
                is_grid_forming=self.has("forming storage") and i == 0,
                grant_frac=self.uniform(0.1, 0.4, 2) if self.has("grant") else 0.0,
            )
            if self.has("storage curve") and i == 0:
                unit = replace(
                    unit,
                    curve=((-0.9, -1.0), (-0.45, -0.48), (0.0, 0.0), (0.5, 0.47), (1.05, 0.9)),
                )
            if can_grow and self.has("storage steps"):
                unit = replace(unit, step_kw=round(size / 3, 0))
            if can_grow and self.has("storage site cost"):
                unit = replace(unit, capital_site_cost=self.uniform(2000, 20_000, 0))
            if can_grow and self.has("longest hours"):
                unit = replace(unit, longest_h=self.uniform(0.5, 2.5, 1))
            if exists and self.has("storage failure"):
                unit = replace(unit, outage_class="unit")
            units.append(unit)
        return tuple(units)

    def _generators(self) -> tuple[Generator, ...]:
        units = []
        if self.has("generator"):
            units.append(self._dispatchable())
        for technology in (Technology.SOLAR, Technology.WIND):
            if self.has(str(technology)):
                units.append(
                    make_generator(
                        "PV" if technology is Technology.SOLAR else "WT",
                        self.pick(self.away),
                        technology=technology,
                        profile=str(technology),
                        existing_kw=self.uniform(20, 80, 0) if self.chance(0.4) else 0.0,
                        max_new_kw=self.uniform(50, 150, 0),
                        capital_cost_per_kw=self.uniform(100, 600, 0),
                        fixed_om_per_kw=self.uniform(0, 5, 1),
                        running_cost_per_kwh=0.0,
                        is_grid_forming=False,
                    )
                )
        return tuple(units)

    def _dispatchable(self) -> Generator:
        exists = self.has("existing generator")
        can_grow = not exists or self.chance(0.6)
        size = self.uniform(60, 250, 0)
        unit = make_generator(
            "G1",
            self.pick(self.away),
            existing_kw=self.uniform(40, 120, 0) if exists else 0.0,
            max_new_kw=size if can_grow else 0.0,
            capital_cost_per_kw=self.uniform(100, 500, 0),
            fixed_om_per_kw=self.uniform(0, 8, 1),
            life_years=float(self.rng.integers(10, 25)),
            running_cost_per_kwh=self.uniform(0.08, 0.4),
            is_outage_only=self.has("outage only"),
            is_grid_forming=self.has("forming generator"),
            grant_frac=self.uniform(0.1, 0.3, 2) if self.has("grant") else 0.0,
        )
        if self.has("ramp"):
            unit = replace(unit, ramp_frac_per_period=self.uniform(0.25, 0.7, 2))
        if self.has("start delay"):
            unit = replace(unit, start_delay_h=self.period_h)
        if self.has("start failure"):
            unit = replace(unit, start_failure_frac=self.uniform(0.05, 0.3, 2))
        if self.has("tank"):
            unit = replace(unit, tank_h=round(self.period_h * self.uniform(0.8, 2.0, 1), 2))
        if self.has("refill"):
            unit = replace(
                unit,
                refill_frac_per_h=round(self.uniform(0.1, 0.5, 2) / self.period_h, 3),
                refill_delay_h=self.period_h * int(self.rng.integers(0, 3)),
            )
        if can_grow and self.has("generator steps"):
            unit = replace(unit, step_kw=round(size / 3, 0))
        if can_grow and self.has("generator site cost"):
            unit = replace(unit, capital_site_cost=self.uniform(2000, 20_000, 0))
        if exists and self.has("generator failure"):
            unit = replace(unit, outage_class="unit")
        return unit

    def _lines(self) -> tuple[Line, ...]:
        """A random tree from the source, each line from the nearer bus unless reversed; one tie."""
        lines = []
        ids = [bus.bus for bus in self.buses]
        total_kva = sum(load.peak_kw / load.power_factor for load in self.loads)
        ohm = 8.0 if self.has("tight voltage") else 1.0
        for i in range(1, len(ids)):
            parent = ids[int(self.rng.integers(max(0, i - 2), i))]
            line = make_line(
                f"{parent}-{ids[i]}",
                parent,
                ids[i],
                length=self.uniform(0.5, 3.0, 1),
                r_ohm=round(ohm * self.uniform(0.3, 1.0), 3),
                x_ohm=round(ohm * self.uniform(0.3, 1.0), 3),
                from_device=Device.BREAKER if parent == "S" else self._device(),
                to_device=self._far_device(),
            )
            if self.has("line rating") and self.chance(0.5 if i > 1 else 1.0):
                line = replace(line, rating_kva=round(total_kva * self.uniform(0.6, 1.2), 0))
            if self.has("boost") and i == len(ids) - 1:
                line = replace(line, boost_frac=0.025)
            elif self.has("reversed line") and (i == 1 or self.chance(0.3)):
                line = replace(
                    line,
                    from_bus=line.to_bus,
                    to_bus=line.from_bus,
                    from_device=line.to_device,
                    to_device=line.from_device,
                )
            lines.append(line)
        if self.has("tie"):
            lines.append(self._tie(ids, lines))
        return tuple(lines)

    def _device(self) -> Device:
        """What the near end of a line carries: one of the kinds drawn for this study."""
        kinds = [Device.NONE] if self.has("bare line end") or self.chance(0.3) else []
        for kind in (Device.BREAKER, Device.RECLOSER, Device.FUSE, Device.SWITCH):
            if self.has(str(kind)):
                kinds.append(kind)
        return Device(self.pick([str(kind) for kind in kinds or [Device.NONE]]))

    def _far_device(self) -> Device:
        return Device.SWITCH if self.has("switch") and self.chance(0.4) else Device.NONE

    def _tie(self, ids: list[str], lines: list[Line]) -> Line:
        """A normally open line between two buses that no line joins directly."""
        joined = {frozenset((line.from_bus, line.to_bus)) for line in lines}
        pairs = [
            (a, b)
            for i, a in enumerate(ids)
            for b in ids[i + 1 :]
            if frozenset((a, b)) not in joined
        ] or [(ids[0], ids[-1])]
        from_bus, to_bus = pairs[int(self.rng.integers(len(pairs)))]
        ends = Device.NONE if self.chance(0.2) else Device.SWITCH
        return make_line(
            "T1",
            from_bus,
            to_bus,
            r_ohm=self.uniform(0.3, 1.0),
            x_ohm=self.uniform(0.3, 1.0),
            rating_kva=self.uniform(60, 250, 0),
            from_device=ends,
            to_device=ends,
            normally_open=True,
        )

    def _supplies(self) -> tuple[NeighbourSupply, ...]:
        supplies = []
        if self.has("neighbour supply"):
            supplies.append(
                make_supply(
                    "N1",
                    self.pick(self.away),
                    spare_kw=self.uniform(50, 200, 0),
                    spare_profile="spare" if self.has("supply profile") else None,
                )
            )
        if self.has("neighbour supply sharing the bulk supply"):
            supplies.append(
                make_supply(
                    "N2",
                    self.pick(self.away),
                    spare_kw=self.uniform(50, 200, 0),
                    shares_bulk_supply=True,
                )
            )
        return tuple(supplies)

    def _measures(self) -> tuple[Measure, ...]:
        if not self.has("hardening"):
            return ()
        closed = [line.line for line in self.lines if not line.normally_open]
        first = self.pick(closed)
        measures = [
            make_measure(
                "M1",
                (first,),
                capital_cost=self.uniform(5_000, 60_000, 0),
                failures_avoided_frac=self.uniform(0.3, 0.7, 1),
                grant_frac=self.uniform(0.1, 0.3, 2) if self.has("grant") else 0.0,
                fixed_om=self.uniform(0, 200, 0),
            )
        ]
        if self.has("exclusive hardening"):
            others = [line for line in closed if line != first]
            lines = (first, self.pick(others)) if others and self.chance(0.5) else (first,)
            measures.append(
                make_measure(
                    "M2",
                    lines,
                    capital_cost=self.uniform(20_000, 120_000, 0),
                    failures_avoided_frac=self.uniform(0.7, 1.0, 1),
                )
            )
        return tuple(measures)

    def _keep_failures_few(self) -> None:
        """Cuts periods, failing lines and drawn features until the whole tree is tiny.

        Hardened lines keep their class, and what was asked for is kept.
        """
        self.n_window = 2 if self.has("several windows") else 1
        self.n_period = self.asked_periods or int(self.rng.integers(3, 9 - 2 * self.n_window))
        self.repair_periods = int(self.rng.integers(1, 4))
        self.repair_multiplier = self.uniform(1.2, 2.0, 1) if self.has("repair multiplier") else 1.0
        while self._tree_periods() > MAX_TREE_PERIODS and self._cut_something():
            pass

    def _tree_periods(self) -> int:
        """Estimated periods of the whole tree; every component counts as a scenario."""
        failing = self._failing_lines()
        hardened = [line for line in failing if line in self._hardened_lines()]
        plain = len(failing) - len(hardened) + (self.bulk is not None)
        plain += sum(unit.outage_class is not None for unit in (*self.storage, *self.generators))
        copies = 1 + sum(unit.start_failure_frac > 0 for unit in self.generators)
        slices = len(self.measures) * len(hardened)
        longest = math.ceil(self.repair_periods * self.repair_multiplier)
        repairs = [longest]
        if self.has("three-point repair"):
            repairs = [math.ceil(0.5 * longest), longest, 2 * longest]
        return self.n_window * tree_periods(
            self.n_period, copies * (plain + len(hardened) + slices), repairs, copies * slices
        )

    def _cut_something(self) -> bool:
        """One step towards a smaller tree; False where nothing is left to cut."""
        failing = self._failing_lines()
        spare = [line for line in failing if line not in self._hardened_lines()]
        may_shorten = self.asked_periods is None
        if self.n_period > 4 and may_shorten:
            self.n_period -= 1
        elif len(failing) > 2 and spare:
            self._without_failures(spare[-1])
        elif self.repair_periods > 1 and self.has("three-point repair"):
            self.repair_periods -= 1
        elif self.n_period > 3 and may_shorten:
            self.n_period -= 1
        elif len(self.measures) > 1 and self.is_drawn and self.chance(0.6):
            self.measures = self.measures[:1]
        elif self.repair_periods > 1:
            self.repair_periods -= 1
        elif len(failing) > 1 and spare:
            self._without_failures(spare[-1])
        elif self.is_drawn and any(unit.start_failure_frac > 0 for unit in self.generators):
            self.generators = tuple(replace(u, start_failure_frac=0.0) for u in self.generators)
        elif len(self.measures) > 1 and self.is_drawn:
            self.measures = self.measures[:1]
        elif self.has("three-point repair") and self.is_drawn:
            self.features = self.features - {"three-point repair"}
        else:
            return False
        return True

    def _failing_lines(self) -> list[str]:
        return [line.line for line in self.lines if line.outage_class and not line.normally_open]

    def _hardened_lines(self) -> set[str]:
        return {line for measure in self.measures for line in measure.lines}

    def _without_failures(self, name: str) -> None:
        self.lines = tuple(
            replace(line, outage_class=None) if line.line == name else line for line in self.lines
        )

    def _windows(self) -> tuple[Window, ...]:
        windows = []
        for i in range(self.n_window):
            last = i == self.n_window - 1
            window = make_window(
                "day" if i == 0 else "storm",
                self.n_period,
                start_row=1 + i * self.n_period,
                occurrences_per_year=self.uniform(5, 60, 0),
                price_profile="price" if self.has("price profile") else None,
                failure_profile="weather" if self.has("failure profile") else None,
                counts_for_demand=i == 0,
                is_storm=i > 0,
            )
            if last and self.has("load multiplier"):
                window = replace(window, load_multiplier=self.uniform(0.7, 1.3, 2))
            if last and self.has("failure multiplier"):
                window = replace(window, failure_multiplier=self.uniform(1.5, 3.0, 1))
            if last and self.has("repair multiplier"):
                window = replace(window, repair_multiplier=self.repair_multiplier)
            if last and self.has("start charge by window"):
                floor = max(unit.min_soc_frac for unit in self.storage)
                window = replace(
                    window, start_soc_frac=round(floor + self.uniform(0, 1 - floor, 2), 2)
                )
            windows.append(window)
        return tuple(windows)

    def _profiles(self) -> Profiles:
        n_row = 2 + self.n_window * self.n_period
        draws = {
            "demand": (0.4, 1.0),
            "solar": (0.0, 0.9),
            "wind": (0.0, 1.0),
            "price": (0.5, 2.0),
            "spare": (0.2, 1.0),
            "weather": (0.3, 2.0),
        }
        return make_profiles(
            n_row,
            **{
                name: np.round(self.rng.uniform(low, high, n_row), 2)
                for name, (low, high) in draws.items()
            },
        )

    def _exposed(self) -> bool:
        """Weather matters only to exposed classes: the features of exposure imply it."""
        of_exposure = {
            "weather exposure",
            "failure profile",
            "failure multiplier",
            "repair multiplier",
        }
        return bool(self.features & of_exposure)

    def _outage_classes(self) -> tuple[OutageClass, ...]:
        """Rates that give at most 5 to 40 % chance of failure in a period, weather aside."""
        n_line = sum(bool(line.outage_class) and not line.normally_open for line in self.lines)
        n_unit = sum(unit.outage_class is not None for unit in (*self.storage, *self.generators))
        n_component = n_line + n_unit + (self.bulk is not None)
        per_period = -math.log(1.0 - self.uniform(0.05, 0.4))
        if self._exposed():
            per_period /= max(window.failure_multiplier for window in self.windows)
        rate = per_period / max(n_component, 1) * HOURS_PER_YEAR / self.period_h
        isolation_h = self.period_h if self.has("isolation") else 0.0
        mean_length = float(np.mean([line.length for line in self.lines]))
        by_length = self.chance(0.5)
        cost = self.uniform(200, 2000, 0) if self.has("repair cost") else 0.0
        line_rate = rate * self._all_year_factor(self._exposed())
        other_rate = rate * self._all_year_factor(False)
        repair_h = self.period_h * self.repair_periods
        classes = [
            make_outage_class(
                "overhead",
                0.0 if by_length else round(line_rate, 2),
                failures_per_length_year=round(line_rate / mean_length, 2) if by_length else 0.0,
                repair_h=repair_h,
                switching_h=isolation_h,
                is_weather_exposed=self._exposed(),
                repair_cost_per_failure=cost,
            )
        ]
        if n_unit:
            classes.append(make_outage_class("unit", round(other_rate, 2), repair_h=self.period_h))
        if self.bulk:
            classes.append(
                make_outage_class(
                    "bulk", round(other_rate, 2), repair_h=repair_h, switching_h=isolation_h
                )
            )
        return tuple(classes)

    def _all_year_factor(self, is_exposed: bool) -> float:
        """What the rate is divided by under the all-year basis (model.md section 2)."""
        if not self.has("all-year rates"):
            return 1.0
        total = 0.0
        for window in self.windows:
            multiplier = window.failure_multiplier if is_exposed else 1.0
            total += window.occurrences_per_year * multiplier * window.n_period
        return total * self.period_h / HOURS_PER_YEAR

    def _customer_classes(self) -> tuple[CustomerClass, ...]:
        classes = []
        for name, low, high in (("homes", 1.0, 4.0), ("shops", 3.0, 20.0)):
            at_once = self.uniform(0.5, 3.0, 1) if self.has("first-moment cost") else 0.0
            first = round(at_once + self.uniform(low, high, 1), 1)
            fourth = round(first + 3 * self.uniform(low, high, 1), 1)
            classes.append(
                make_customer_class(
                    name,
                    is_critical=name == "shops",
                    cost_0h_per_kw=at_once,
                    cost_1h_per_kw=first,
                    cost_4h_per_kw=fourth,
                    cost_8h_per_kw=round(fourth + 4 * self.uniform(low, high, 1), 1),
                    cost_after_8h_per_kwh=self.uniform(low, high, 1),
                )
            )
        return tuple(classes)

    def _settings(self) -> Settings:
        peak_kva = sum(load.peak_kw / load.power_factor for load in self.loads)
        price = self.uniform(0.1, 0.25)
        limit = round(peak_kva * self.uniform(0.8, 1.1), 0)
        is_tight = self.has("tight voltage")
        return make_settings(
            period_h=self.period_h,
            energy_price_per_kwh=price,
            # Price profiles are at least 0.5, so the sale price stays below every purchase price.
            export_price_per_kwh=round(price * 0.4, 4) if self.has("sale") else None,
            demand_charge_per_kw_year=(
                self.uniform(20, 120, 0) if self.has("demand charge") else 0.0
            ),
            substation_limit_kva=limit if self.has("substation limit") else 20.0 * peak_kva,
            vmin_pu=0.95 if is_tight else 0.9,
            vmax_pu=1.05 if is_tight else 1.1,
            vmin_event_pu=0.93 if is_tight else 0.88,
            vmax_event_pu=1.06 if is_tight else 1.1,
            loss_allowance_frac=0.03 if self.has("loss allowance") else 0.0,
            real_discount_rate_frac=0.0 if self.has("no discount") else self.uniform(0.02, 0.09),
            capital_budget=self.uniform(10_000, 80_000, 0) if self.has("budget") else None,
            stored_energy_price_per_kwh=(
                self.uniform(0.1, 0.5, 2) if self.has("stored-energy price") else None
            ),
            rate_basis=(
                RateBasis.ALL_YEAR if self.has("all-year rates") else RateBasis.FAIR_WEATHER
            ),
            bulk_supply_outage_class=self.bulk,
            repair_spread=(
                RepairSpread.THREE_POINT if self.has("three-point repair") else RepairSpread.NONE
            ),
            load_control=LoadControl.BUS if self.has("bus load control") else LoadControl.SECTION,
            island_ratio=self.uniform(0.6, 1.5, 2),
            island_headroom_frac=0.1 if self.has("island headroom") else 0.0,
        )


def tree_periods(n_period: int, n_scenario: int, repairs: list[int], n_avoided: int = 0) -> int:
    """Periods in the whole scenario tree if every scenario may strike in every period.

    ``N(u) = T - u + scenarios * sum_k sum_repairs (repair + N(k + 1 + repair))``, and for every
    failure that a measure avoids, ``N(k + 1)`` for each repair time besides.

    >>> tree_periods(2, 1, [1])  # 2 periods; a failure in each, 1 period long, none after it
    4
    """
    size = [0] * (n_period + 2)
    for u in range(n_period - 1, -1, -1):
        size[u] = n_period - u
        for k in range(u, n_period):
            for repair in repairs:
                after = size[min(k + 1 + repair, n_period)]
                size[u] += n_scenario * (repair + after) + n_avoided * size[k + 1]
    return size[0]
