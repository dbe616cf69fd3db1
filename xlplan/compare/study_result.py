"""The whole answer to a study: what ``report`` writes and computes nothing of."""

from __future__ import annotations

from dataclasses import dataclass, field

from xlplan.base.errors import Finding
from xlplan.compare.pack_result import Pack
from xlplan.evaluate.results import CheckLine, PlanResult


@dataclass(frozen=True)
class InputEcho:
    """One input used, default or typed: for the Assumptions sheet."""

    sheet: str
    row: str
    """Id of the row, or the settings group."""
    title: str
    unit: str
    value: object
    is_default: bool
    source: str


@dataclass(frozen=True)
class DrawnBus:
    """A bus of the drawing: place in drawing units, and what happens to it in each outage shown.

    ``state``: one word per stage shown: live, island or dead.
    """

    bus: str
    x: float
    y: float
    states: tuple[str, ...]
    note: str


@dataclass(frozen=True)
class DrawnLine:
    """A line of the drawing, between two buses; ``states`` as for buses, or open."""

    line: str
    from_bus: str
    to_bus: str
    is_open: bool
    states: tuple[str, ...]


@dataclass(frozen=True)
class FeederDrawing:
    """The one-line drawing; ``stages``: title of each state shown, normal service first."""

    buses: tuple[DrawnBus, ...]
    lines: tuple[DrawnLine, ...]
    stages: tuple[str, ...]
    stage_notes: tuple[str, ...]
    is_computed: bool
    """True where the study gives no places and the layout is computed."""


@dataclass(frozen=True)
class StudyResult:
    """Plans in the order existing, ignoring outages, least cost, then the user's own.

    ``status``: gap reached, limit reached or interrupted (of the least-cost plan).
    """

    study_name: str
    prepared_by: str
    currency: str
    price_year: int | None
    study_file: str
    fingerprint: str
    seed: int
    method: str
    method_reason: str
    status: str
    gap_target_frac: float
    recommended: str
    plans: tuple[PlanResult, ...]
    value_of_outage_planning: float
    value_of_outage_planning_interval: tuple[float, float]
    scenarios: int
    findings: tuple[Finding, ...]
    checks: tuple[CheckLine, ...]
    """Checks of the study as a whole (history, totals); plans have their own."""
    inputs: tuple[InputEcho, ...]
    real_discount_rate_frac: float
    capital_budget: float | None
    demand_charge_per_kw_year: float
    peak_kw: float
    customers: float
    versions: tuple[tuple[str, str], ...]
    started_at: str
    read_seconds: float
    solve_seconds: float
    write_seconds: float = 0.0
    pack: Pack = field(default_factory=Pack)
    feeder: FeederDrawing | None = None

    def plan(self, name: str) -> PlanResult:
        """The plan of that name; KeyError if there is none."""
        for plan in self.plans:
            if plan.name == name:
                return plan
        raise KeyError(name)
