"""The finding is a claim: it must not claim more than the numbers hold."""

from __future__ import annotations

import dataclasses

import pytest

from xlplan.base.names import EXISTING, LEAST_COST
from xlplan.compare.study_result import StudyResult
from xlplan.report import wording

from .made_up import made_up_plan


def with_best(result: StudyResult, **changes: object) -> StudyResult:
    """The result with a changed least-cost plan."""
    best = dataclasses.replace(result.plan(LEAST_COST), **changes)  # type: ignore[arg-type]
    plans = tuple(best if plan.name == LEAST_COST else plan for plan in result.plans)
    return dataclasses.replace(result, plans=plans)


def test_an_unsolved_power_flow_is_said(result: StudyResult) -> None:
    check = result.plan(LEAST_COST).ac
    assert check is not None
    stretch = dataclasses.replace(check.stretches[0], n_not_converged=5)
    unsolved = dataclasses.replace(check, stretches=(stretch, *check.stretches[1:]))
    words = " ".join(wording.uncertainties(with_best(result, ac=unsolved)))
    assert "LOOK: in an AC power flow 5 of 56 periods have no solution" in words
    assert "keep within limits" not in words
    words = " ".join(wording.uncertainties(with_best(result, ac=None)))
    assert "not checked by an AC power flow" in words
    words = " ".join(wording.uncertainties(result))
    assert "losses of normal service 2.5 % of load, loss allowance 2.0 %" in words


def test_clear_saving(result: StudyResult) -> None:
    text = wording.headline(
        with_best(result, difference=-1234.4, difference_interval=(-2000.0, -500.0))
    )
    share = 123_440.0 / result.plans[0].costs.total
    assert text.startswith(
        f"The least-cost plan lowers the yearly cost by 1,234 crowns ({share:.1f} %)"
    )


def test_interval_that_includes_zero(result: StudyResult) -> None:
    text = wording.headline(
        with_best(result, difference=-10_000.0, difference_interval=(-30_000.0, 10_000.0))
    )
    assert "cannot be told apart" in text
    assert "-30,000 crowns to 10,000 crowns" in text
    assert "lowers" not in text


def test_dearer_plan(result: StudyResult) -> None:
    text = wording.headline(
        with_best(result, difference=5_000.0, difference_interval=(2_000.0, 8_000.0))
    )
    assert "raises the yearly cost by 5,000 crowns" in text


@pytest.mark.parametrize("status", ["limit reached", "interrupted"])
def test_stopped_run_says_so(result: StudyResult, status: str) -> None:
    stopped = dataclasses.replace(with_best(result, gap_frac=0.034), status=status)
    text = wording.headline(stopped)
    assert text.startswith("Stopped before its target (gap 3.4 %, target 1.0 %); best plan so far")


def test_missed_gap_says_so_whatever_the_status(result: StudyResult) -> None:
    assert wording.headline(with_best(result, gap_frac=0.034)).startswith("Stopped before")
    assert wording.headline(with_best(result, gap_frac=None)).startswith("Stopped before")
    assert not wording.headline(with_best(result, gap_frac=0.01)).startswith("Stopped")


def test_nothing_to_buy(result: StudyResult) -> None:
    empty = made_up_plan(LEAST_COST, "optimise", {}, 1.0, base_total=result.plans[0].costs.total)
    plans = (result.plans[0], result.plans[1], empty)
    text = wording.headline(dataclasses.replace(result, plans=plans))
    assert text.startswith("The least-cost plan buys nothing")


def test_uncertainties(result: StudyResult) -> None:
    said = " ".join(wording.uncertainties(result))
    assert "4,000 sampled" in said
    assert "statistical figure" in said
    assert "0.80 %" in said
    assert "STOP" not in said
    assert "Planning violation" not in said
    far = dataclasses.replace(
        result,
        checks=(dataclasses.replace(result.checks[0], left=9.0), result.checks[1]),
    )
    assert "STOP and look: far from the feeder's own records: SAIFI." in " ".join(
        wording.uncertainties(far)
    )
    shed = " ".join(wording.uncertainties(with_best(result, normal_shed_kwh=55.0)))
    assert "Planning violation: 55 kWh" in shed
    counted = " ".join(wording.uncertainties(with_best(result, is_enumerated=True)))
    assert "no sampling error" in counted
    assert "statistical" not in counted
    window = dataclasses.replace(result.plans[2].windows[0], poisson_events=0.2)
    busy = " ".join(wording.uncertainties(with_best(result, windows=(window,))))
    assert "In window ordinary day failures often overlap" in busy
    span = dataclasses.replace(result, value_of_outage_planning_interval=(-1.0, 5.0))
    assert "worth nothing here that can be told from 0" in " ".join(wording.uncertainties(span))


def test_rivals_are_named(result: StudyResult) -> None:
    assert "As cheap as this plan" not in " ".join(wording.uncertainties(result))
    low = result.plan(LEAST_COST).cost_interval[0]
    near = dataclasses.replace(result.plans[3], cost_interval=(low, low + 1.0))
    tied = dataclasses.replace(result, plans=(*result.plans[:3], near))
    assert "As cheap as this plan within what the run leaves open: =1+1 switches." in " ".join(
        wording.uncertainties(tied)
    )


def test_basis_and_consequence(result: StudyResult) -> None:
    assert "prepared by @SUM(A1)" in wording.basis(result)
    assert "Price year not given" in wording.basis(dataclasses.replace(result, price_year=None))
    text = wording.consequence(result)
    assert "instead of 6.10 on the existing feeder" in text
    assert "The utility itself pays 49,457 crowns a year more" in text
    assert "outages cost customers 233,360 crowns a year less" in text
    assert EXISTING in [plan.name for plan in result.plans]


@pytest.mark.parametrize(("sign", "word"), [(1.0, "more"), (-1.0, "less")])
def test_outage_planning_within_what_the_search_leaves_open(
    result: StudyResult, sign: float, word: str
) -> None:
    """Either plan may come out a little dearer: neither way is it a value."""
    best = result.plan(LEAST_COST)
    assert best.gap_frac
    value = sign * 0.5 * best.gap_frac * best.costs.total
    near = dataclasses.replace(
        result,
        value_of_outage_planning=value,
        value_of_outage_planning_interval=(0.9 * value, 1.1 * value),
    )
    text = wording.outage_planning(near)
    assert "worth nothing here" in text
    assert f"a year {word}," in text
    assert "-" not in text.replace("least-cost", "")
    far = dataclasses.replace(near, value_of_outage_planning=4.0 * value)
    assert "worth nothing" not in wording.outage_planning(far)
