"""The existing feeder's figures beside measured history, where the study gives some."""

from __future__ import annotations

from collections.abc import Sequence

from xlplan.base.units import frac_from_pct, minutes_from_hours
from xlplan.evaluate.results import CheckLine, PlanResult
from xlplan.outages.window_model import WindowModel
from xlplan.study.study import Study

STOP_FRAC = frac_from_pct(20.0)
"""Beyond this the model does not describe the feeder: look before believing (model.md, 6)."""


def peak_kw(study: Study, windows: Sequence[WindowModel]) -> float:
    """Highest load of all windows, without the loss allowance."""
    keep = 1.0 + study.settings.loss_allowance_frac
    return max(float(w.series.load_kw.sum(axis=1).max()) for w in windows) / keep


def history_checks(
    study: Study, windows: Sequence[WindowModel], existing: PlanResult
) -> tuple[CheckLine, ...]:
    """Measured peak, SAIFI and SAIDI against the existing feeder's, with a stop sign beyond 20 %.

    Parameters
    ----------
    study : Study
    windows : sequence of WindowModel
    existing : PlanResult of the existing feeder

    Returns
    -------
    tuple of CheckLine, one per measured figure; empty where none is given
    """
    settings = study.settings
    lines = []

    def compare(name: str, what: str, modelled: float, measured: float | None) -> None:
        if measured is not None:
            tolerance = STOP_FRAC * abs(measured)
            lines.append(CheckLine(name, what, modelled, measured, tolerance, is_warning=True))

    compare(
        "History: peak",
        "Highest load of the windows against the measured peak, kW",
        peak_kw(study, windows) * (1.0 + settings.loss_allowance_frac),
        settings.measured_peak_kw,
    )
    compare(
        "History: SAIFI",
        "Interruptions per customer and year of the existing feeder against history",
        existing.indices.saifi,
        settings.history_saifi,
    )
    compare(
        "History: SAIDI",
        "Minutes per customer and year of the existing feeder against history",
        minutes_from_hours(existing.indices.saidi_h),
        None if settings.history_saidi_h is None else minutes_from_hours(settings.history_saidi_h),
    )
    return tuple(lines)
