"""Nonlinear power flow of a radial feeder, to check what the linear model says.

Enters: a feeder, its live lines, the voltage held at each root, and what each bus draws. Leaves: an
``AcFlow``: voltages, flows at both line ends, losses, and whether it converged. Balanced
single-phase equivalent, constant power, solved by the backward/forward sweep (D. Shirmohammadi,
H. W. Hong, A. Semlyen, G. X. Luo, "A compensation-based power flow method for weakly meshed
distribution and transmission networks", 1988): currents from the voltages, added up towards the
root, then voltages from the root outwards.

A line is an ideal transformer of ratio ``1 + boost`` at its from end, then its impedance. Where the
sweep does not settle there may be no solution at all: the feeder cannot carry the load. Numbers of
a period that did not converge are nan, so that nobody takes them for results.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from xlplan.base.units import power_base_kva
from xlplan.network.feeder import Feeder
from xlplan.network.tree import RadialTree, radial_tree

BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]
FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

TOLERANCE_KVA = 1e-6
"""Largest mismatch of a converged period at any bus: a thousandth of a watt, far below anything
that is read from a result, and far above rounding (1e-16 of a feeder's power)."""

MAX_SWEEPS = 500
"""Usual feeders settle in under ten sweeps; close to the most that a feeder can carry each sweep
gains little, and what has not settled after this many is reported as not converged."""


@dataclass(frozen=True)
class AcFlow:
    """One or many periods; leading axes are those of what was drawn. nan where not converged.

    Power is positive from a line's from bus to its to bus, ``from`` as it enters at the from end,
    ``to`` as it leaves at the to end; 0 on lines that are in no path.

    v_pu : complex (..., n_bus), nan where no root leads
    from_kw, from_kvar, to_kw, to_kvar : (..., n_line)
    current_kva : (..., n_line), the larger current of the two ends times the nominal voltage,
        which is what a thermal rating given in kVA limits
    root_kw, root_kvar : (..., n_bus), what a root gives beyond its own draw, 0 elsewhere
    converged : bool, leading axes
    mismatch_kva : (...), largest difference at any bus between power drawn and asked for
    n_sweep : int
    """

    v_pu: ComplexArray
    from_kw: FloatArray
    from_kvar: FloatArray
    to_kw: FloatArray
    to_kvar: FloatArray
    current_kva: FloatArray
    root_kw: FloatArray
    root_kvar: FloatArray
    converged: BoolArray
    mismatch_kva: FloatArray
    n_sweep: int

    @property
    def loss_kw(self) -> FloatArray:
        """(..., n_line), never negative but for rounding."""
        return self.from_kw - self.to_kw

    @property
    def loss_kvar(self) -> FloatArray:
        """(..., n_line)."""
        return self.from_kvar - self.to_kvar


def solve_ac_flow(
    feeder: Feeder,
    line_live: BoolArray,
    root_v_pu: Mapping[int, ArrayLike],
    drawn_kw: ArrayLike,
    drawn_kvar: ArrayLike,
) -> AcFlow:
    """Voltages, flows and losses of radial parts, for one period or for many at once.

    Parameters
    ----------
    feeder : Feeder
    line_live : (n_line,)
    root_v_pu : voltage magnitude held at each root (one number, or one per period), by bus: a
        source, or in an island the bus of the unit that forms it. A root gives whatever its part
        takes; its angle is 0
    drawn_kw, drawn_kvar : (..., n_bus), load less what is injected (negative where it feeds in)

    Returns
    -------
    AcFlow with the leading axes of ``drawn_kw``

    Raises ValueError if the live lines form a loop or join two roots.
    """
    tree = radial_tree(feeder, line_live, root_v_pu)
    if tree.has_loop:
        raise ValueError("the live lines form a loop or join two roots")
    base_kva = power_base_kva(feeder.base_kv)
    drawn = (
        np.asarray(drawn_kw, dtype=float) + 1j * np.asarray(drawn_kvar, dtype=float)
    ) / base_kva
    leading = drawn.shape[:-1]
    drawn = drawn.reshape(-1, feeder.n_bus)
    sweep = _Sweep.of(feeder, tree)
    held = np.full((len(drawn), feeder.n_bus), np.nan)
    for i_bus, v_pu in root_v_pu.items():
        held[:, i_bus] = np.broadcast_to(np.asarray(v_pu, dtype=float), leading).reshape(-1)
    v_pu, line_i, mismatch, n_sweep = sweep.run(drawn, held, TOLERANCE_KVA / base_kva)
    converged = mismatch <= TOLERANCE_KVA / base_kva
    v_pu = np.where(converged[:, None], v_pu, np.nan)
    line_i = np.where(converged[:, None], line_i, np.nan)
    # The current at the from end, before the transformer, is larger by its ratio.
    ratio = 1.0 + feeder.boost_frac
    on_path = np.zeros(feeder.n_line, dtype=bool)
    on_path[tree.parent_line[tree.parent_line >= 0]] = True
    v_from, v_to = v_pu[:, feeder.from_bus], v_pu[:, feeder.to_bus]
    power_from = np.where(on_path, v_from * np.conj(line_i * ratio), 0.0) * base_kva
    power_to = np.where(on_path, v_to * np.conj(line_i), 0.0) * base_kva
    current = np.where(on_path, np.abs(line_i) * np.maximum(ratio, 1.0), 0.0) * base_kva
    root = np.zeros((len(drawn), feeder.n_bus), dtype=complex)
    for i_bus in root_v_pu:
        leaves = feeder.from_bus == i_bus
        arrives = feeder.to_bus == i_bus
        root[:, i_bus] = power_from[:, leaves].sum(axis=1) - power_to[:, arrives].sum(axis=1)
        root[~converged, i_bus] = np.nan

    def shaped(values: NDArray[Any]) -> NDArray[Any]:
        return values.reshape((*leading, *values.shape[1:]))

    return AcFlow(
        v_pu=shaped(v_pu),
        from_kw=shaped(power_from.real),
        from_kvar=shaped(power_from.imag),
        to_kw=shaped(power_to.real),
        to_kvar=shaped(power_to.imag),
        current_kva=shaped(current),
        root_kw=shaped(root.real),
        root_kvar=shaped(root.imag),
        converged=shaped(converged),
        mismatch_kva=shaped(mismatch * base_kva),
        n_sweep=n_sweep,
    )


@dataclass(frozen=True)
class _Sweep:
    """The lines of a tree, each as it is met on the way from the roots outwards."""

    n_bus: int
    n_line: int
    below: IntArray
    """Bus at the far end of each step, in the order of the tree."""
    above: IntArray
    line: IntArray
    is_forward: BoolArray
    """True if the line's to end is the far one."""
    ratio: FloatArray
    ohm: ComplexArray

    @classmethod
    def of(cls, feeder: Feeder, tree: RadialTree) -> _Sweep:
        reached = np.array(tree.order, dtype=np.int64)
        below = reached[tree.parent_line[reached] >= 0]
        line = tree.parent_line[below]
        return cls(
            n_bus=feeder.n_bus,
            n_line=feeder.n_line,
            below=below,
            above=tree.parent_bus[below],
            line=line,
            is_forward=feeder.to_bus[line] == below,
            ratio=1.0 + feeder.boost_frac[line],
            ohm=feeder.r_ohm[line] + 1j * feeder.x_ohm[line],
        )

    def run(
        self, drawn: ComplexArray, held: FloatArray, tolerance: float
    ) -> tuple[ComplexArray, ComplexArray, FloatArray, int]:
        """Voltages (n, n_bus), line currents (n, n_line), mismatch (n,), sweeps made.

        Per unit on the base of ``power_base_kva``, on which ohm are per unit. Periods that have
        settled are left as they are.
        """
        n = len(drawn)
        v_pu = np.full((n, self.n_bus), np.nan, dtype=complex)
        current = np.zeros((n, self.n_line), dtype=complex)
        mismatch = np.full(n, np.inf)
        # The start: the roots' voltages carried outwards, with nothing flowing.
        v_pu[:] = self._outwards(held, current)
        todo = np.arange(n)
        n_sweep = 0
        # A period that runs away overflows on its own; it is found not to have settled.
        with np.errstate(all="ignore"):
            while len(todo) and n_sweep < MAX_SWEEPS:
                n_sweep += 1
                at_bus = np.conj(drawn[todo] / v_pu[todo])
                line_i = self._inwards(at_bus)
                v_new = self._outwards(held[todo], line_i)
                # Roots are left out: their power is whatever their part takes.
                wrong = np.abs(v_new * np.conj(at_bus) - drawn[todo])[:, self.below]
                size = wrong.max(axis=1, initial=0.0)
                v_pu[todo], current[todo] = v_new, line_i
                mismatch[todo] = np.where(np.isfinite(size), size, np.inf)
                todo = todo[(size > tolerance) & np.isfinite(size)]
        return v_pu, current, mismatch, n_sweep

    def _inwards(self, at_bus: ComplexArray) -> ComplexArray:
        """Currents of lines after their transformer, positive from the from to the to end."""
        total = at_bus.copy()
        current = np.zeros((len(at_bus), self.n_line), dtype=complex)
        for step in range(len(self.below) - 1, -1, -1):
            i_bus, i_line = self.below[step], self.line[step]
            if self.is_forward[step]:
                current[:, i_line] = total[:, i_bus]
                total[:, self.above[step]] += self.ratio[step] * total[:, i_bus]
            else:
                current[:, i_line] = -total[:, i_bus] / self.ratio[step]
                total[:, self.above[step]] += total[:, i_bus] / self.ratio[step]
        return current

    def _outwards(self, held: FloatArray, current: ComplexArray) -> ComplexArray:
        """Voltages from the roots on, given the currents."""
        v_pu = held.astype(complex)
        for step, (i_bus, above) in enumerate(zip(self.below, self.above, strict=True)):
            drop = self.ohm[step] * current[:, self.line[step]]
            if self.is_forward[step]:
                v_pu[:, i_bus] = self.ratio[step] * v_pu[:, above] - drop
            else:
                v_pu[:, i_bus] = (v_pu[:, above] + drop) / self.ratio[step]
        return v_pu
