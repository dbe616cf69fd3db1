"""Where each purchase stands in the capacity vector, each memory of the past in the state vector.

Capacities (in service: existing plus bought), in this order: generator kW, storage kW, storage kWh,
hardening (0 or 1), demand limit ``D`` in kW. State, in this order: energy of each store (kWh),
output of each ramp-limited generator (kW), fuel of each tank (kWh of output).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from xlplan.study.study import Study
from xlplan.study.windows import WindowSeries

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Layout:
    """Positions within the capacity and the state vector of a study."""

    n_generator: int
    n_storage: int
    n_measure: int
    ramp_generators: tuple[int, ...]
    tank_generators: tuple[int, ...]
    capacity_names: tuple[str, ...]
    capacity_lower: FloatArray
    capacity_upper: FloatArray
    state_names: tuple[str, ...]

    @property
    def n_capacity(self) -> int:
        """Length of the capacity vector."""
        return self.n_generator + 2 * self.n_storage + self.n_measure + 1

    @property
    def n_state(self) -> int:
        """Length of the state vector."""
        return self.n_storage + len(self.ramp_generators) + len(self.tank_generators)

    def generator_kw(self, i: int) -> int:
        """Position of a generator's kW."""
        return i

    def storage_kw(self, i: int) -> int:
        """Position of a store's kW."""
        return self.n_generator + i

    def storage_kwh(self, i: int) -> int:
        """Position of a store's kWh."""
        return self.n_generator + self.n_storage + i

    def hardening(self, i: int) -> int:
        """Position of a measure."""
        return self.n_generator + 2 * self.n_storage + i

    @property
    def demand_kw(self) -> int:
        """Position of the demand limit."""
        return self.n_capacity - 1

    def energy_state(self, i: int) -> int:
        """Position of a store's energy."""
        return i

    def output_state(self, i_generator: int) -> int:
        """Position of a ramp-limited generator's output."""
        return self.n_storage + self.ramp_generators.index(i_generator)

    def fuel_state(self, i_generator: int) -> int:
        """Position of a tank's fuel."""
        return self.n_storage + len(self.ramp_generators) + self.tank_generators.index(i_generator)


def largest_flow_kw(study: Study, all_series: Sequence[WindowSeries]) -> float:
    """kVA that no flow ever needs to pass: every load at its highest plus every unit's rating.

    A finite box for flows without a rating; surplus never pays beyond what units produce.
    """
    load = max(float(np.hypot(s.load_kw, s.load_kvar).sum(axis=1).max()) for s in all_series)
    units = sum(u.existing_kw + u.max_new_kw for u in study.generators)
    stores = sum(s.existing_kw + s.max_new_kw for s in study.storage)
    kvar = sum(bus.capacitor_kvar for bus in study.buses)
    return load + units + stores + kvar


def build_layout(study: Study, all_series: Sequence[WindowSeries]) -> Layout:
    """Layout of a study; the demand limit never needs to pass what the source can give."""
    units, stores = study.generators, study.storage
    lower = [u.existing_kw for u in units] + [s.existing_kw for s in stores]
    lower += [s.existing_kwh for s in stores] + [0.0] * (len(study.measures) + 1)
    upper = [u.existing_kw + u.max_new_kw for u in units]
    upper += [s.existing_kw + s.max_new_kw for s in stores]
    upper += [s.existing_kwh + s.max_new_kwh for s in stores]
    upper += [1.0] * len(study.measures) + [
        min(study.settings.substation_limit_kva, largest_flow_kw(study, all_series))
    ]
    names = [f"{u.generator} kW" for u in units] + [f"{s.storage} kW" for s in stores]
    names += [f"{s.storage} kWh" for s in stores] + [m.measure for m in study.measures]
    ramp = tuple(i for i, u in enumerate(units) if u.ramp_frac_per_period is not None)
    tank = tuple(i for i, u in enumerate(units) if u.tank_h is not None)
    return Layout(
        n_generator=len(units),
        n_storage=len(stores),
        n_measure=len(study.measures),
        ramp_generators=ramp,
        tank_generators=tank,
        capacity_names=(*names, "demand limit kW"),
        capacity_lower=np.array(lower, dtype=float),
        capacity_upper=np.array(upper, dtype=float),
        state_names=(
            *(f"{s.storage} energy" for s in stores),
            *(f"{units[i].generator} output" for i in ramp),
            *(f"{units[i].generator} fuel" for i in tank),
        ),
    )


def state_domain(study: Study, layout: Layout) -> tuple[FloatArray, FloatArray]:
    """Matrices of the state's domain: lower = L c and upper = U c, each (n_state, n_capacity)."""
    lower = np.zeros((layout.n_state, layout.n_capacity))
    upper = np.zeros((layout.n_state, layout.n_capacity))
    for i, store in enumerate(study.storage):
        lower[layout.energy_state(i), layout.storage_kwh(i)] = store.min_soc_frac
        upper[layout.energy_state(i), layout.storage_kwh(i)] = 1.0
    for i in layout.ramp_generators:
        upper[layout.output_state(i), layout.generator_kw(i)] = 1.0
    for i in layout.tank_generators:
        tank_h = study.generators[i].tank_h
        assert tank_h is not None
        upper[layout.fuel_state(i), layout.generator_kw(i)] = tank_h
    return lower, upper


def start_state(study: Study, layout: Layout, series: WindowSeries) -> FloatArray:
    """Matrix of a window's first state: stores at their start SOC, tanks full, outputs free (0)."""
    matrix = np.zeros((layout.n_state, layout.n_capacity))
    for i in range(layout.n_storage):
        matrix[layout.energy_state(i), layout.storage_kwh(i)] = series.start_soc_frac[i]
    for i in layout.tank_generators:
        tank_h = study.generators[i].tank_h
        assert tank_h is not None
        matrix[layout.fuel_state(i), layout.generator_kw(i)] = tank_h
    return matrix
