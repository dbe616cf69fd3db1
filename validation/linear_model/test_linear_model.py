"""The tables in DEVELOPERS.md are those that the study gives, and the advice follows from them."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from validation.linear_model.study import (
    DROPS_PU,
    N_FEEDER,
    coefficient,
    drop_table,
    loading_table,
    run,
)

DEVELOPERS = Path(__file__).resolve().parents[2] / "DEVELOPERS.md"


def test_tables_are_up_to_date() -> None:
    text = DEVELOPERS.read_text("utf-8")
    assert drop_table() in text
    assert loading_table() in text


def test_scaling_hits_the_drops_asked_for() -> None:
    by_drop, _ = run()
    assert len(by_drop) == N_FEEDER
    for one in by_drop:
        np.testing.assert_allclose(one.drop_pu, DROPS_PU, atol=1e-12)
        assert one.converged.all()


def test_the_advice_holds() -> None:
    """Never too low; the square of the drop covers 95 of 100, 1.4 times the square all."""
    by_drop, _ = run()
    assert min(float(one.least_error_pu.min()) for one in by_drop) >= -1e-9
    assert coefficient() < 1.45
    square = np.array(DROPS_PU) ** 2
    covered = np.mean([one.error_pu <= 1.02 * square for one in by_drop], axis=0)
    assert (covered >= 0.95).all()
    losses = np.array([one.loss_frac for one in by_drop])
    assert (np.mean(losses <= 0.5 * np.array(DROPS_PU), axis=0) >= 0.94).all()
    assert (losses <= 0.6 * np.array(DROPS_PU)).all()
