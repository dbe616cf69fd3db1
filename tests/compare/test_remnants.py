"""Plans without remnants: left out where nothing depends on them, kept where something does."""

from __future__ import annotations

import pytest

from tests.builders import make_storage, small_study
from tests.compare.pack_study import by_tree, pack_study, solver
from xlplan.compare.plan_solver import Wish
from xlplan.model import remnants

METHODS = ("tree", "decomposed")
ALL = 1.1
"""A share of the most for sale below which every purchase is doubted."""


@pytest.mark.parametrize("method", METHODS)
def test_power_that_is_free_is_not_bought_for_a_store_without_energy(method):
    """Energy is far too dear here, so that nothing is worth buying; power alone costs nothing."""
    battery = make_storage(
        "battery",
        "B",
        capital_cost_per_kw=0.0,
        fixed_om_per_kw=0.0,
        capital_cost_per_kwh=1e5,
    )
    study = small_study(storage=(battery,))
    nothing = by_tree(small_study())
    with solver(study, method) as one:
        for plan in one.solve():
            assert not any(p.is_bought or p.kw or p.kwh for p in plan.result.purchases)
            assert plan.result.costs.total == pytest.approx(nothing, rel=1e-6)


@pytest.mark.parametrize("method", METHODS)
def test_what_the_cost_depends_on_is_kept(monkeypatch, method):
    """Every purchase is doubted here; the store that pays stays."""
    monkeypatch.setattr(remnants, "REMNANT_FRAC", ALL)
    study = pack_study(measures=(), generators=())
    with solver(study, method) as one:
        plan = one.solve()[-1].result
    best = by_tree(study)
    bought = plan.purchases[0]
    assert bought.is_bought
    assert plan.costs.total == pytest.approx(best, rel=1e-5)
    assert plan.gap_frac <= 1e-5


def test_what_lies_within_the_gap_is_left_out_and_the_bound_stays(monkeypatch):
    """With a gap that wide the empty plan is as near as asked for; its cost is its own."""
    monkeypatch.setattr(remnants, "REMNANT_FRAC", ALL)
    study = pack_study(measures=(), generators=())
    with solver(study, gap_frac=2.0) as one:
        plan = one.solve_wish(Wish("plan")).result
    assert not plan.purchases[0].is_bought
    nothing = by_tree(pack_study(storage=(), measures=(), generators=()))
    assert plan.costs.total == pytest.approx(nothing)
    assert plan.lower_bound <= by_tree(study)
