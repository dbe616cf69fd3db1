"""A made-up answer to a made-up study: numbers invented, but consistent with each other.

Yearly costs, capital and sums over buses, classes and windows agree by construction, so that the
checks of the workbook can be expected to pass, and fail where a test spoils a number.
"""

from __future__ import annotations

import dataclasses

import numpy as np

from xlplan.base.errors import Finding, Level
from xlplan.base.names import EXISTING, IGNORING_OUTAGES, LEAST_COST
from xlplan.compare.pack_result import (
    BudgetPoint,
    HardeningValue,
    HourFaster,
    Pack,
    Regret,
    RepairPoint,
    SensitivityCase,
    Worth,
)
from xlplan.compare.study_result import (
    DrawnBus,
    DrawnLine,
    FeederDrawing,
    InputEcho,
    StudyResult,
)
from xlplan.evaluate.ac_results import (
    AcCheck,
    AcStretch,
    AssetLoading,
    BusVoltage,
    MarginAdvice,
    VoltageRange,
)
from xlplan.evaluate.results import (
    BusResult,
    CauseResult,
    CheckLine,
    ClassResult,
    ConvergenceRow,
    CostParts,
    EventSpread,
    Indices,
    PlanResult,
    Purchase,
    Risk,
    Trace,
    WindowResult,
    WorstEvent,
)

RATE = 0.04
STATUS = "gap reached"
BUSES = tuple(f"B{i:02d}" for i in range(1, 15))
CLASSES = (("homes", False, 900.0), ("shops and works", False, 80.0), ("clinic", True, 2.0))
WINDOWS = (("ordinary day", 300.0), ("peak day", 60.0), ("storm", 2.5))

ASSETS = (
    # asset, kind, place, max kW, max kWh, per kW, per kWh, site, grant, life, O&M rate
    ("BAT-NORTH", "storage", "B05", 800.0, 3200.0, 310.0, 270.0, 40_000.0, 0.20, 15.0, 6.0),
    ("BAT-SOUTH", "storage", "B11", 500.0, 2000.0, 310.0, 270.0, 30_000.0, 0.20, 15.0, 6.0),
    ("GEN-B09", "generator", "B09", 600.0, 0.0, 520.0, 0.0, 25_000.0, 0.0, 20.0, 11.0),
    ("Tree wire, ridge", "hardening", "L4, L5", 0.0, 0.0, 0.0, 0.0, 88_000.0, 0.5, 40.0, 900.0),
    ("Cable, creek", "hardening", "L7", 0.0, 0.0, 0.0, 0.0, 260_000.0, 0.0, 50.0, 300.0),
)


def crf(life_years: float, rate: float = RATE) -> float:
    """Capital recovery factor, r (1 + r)^n / ((1 + r)^n - 1); 1 / n at r = 0."""
    if rate == 0.0:
        return 1.0 / life_years
    growth = (1.0 + rate) ** life_years
    return rate * growth / (growth - 1.0)


def purchases(bought: dict[str, tuple[float, float]], rate: float) -> tuple[Purchase, ...]:
    """All assets; ``bought`` gives kW and kWh of those that are bought."""
    rows = []
    for name, kind, place, max_kw, max_kwh, per_kw, per_kwh, site, grant, life, om in ASSETS:
        is_bought = name in bought
        kw, kwh = bought.get(name, (0.0, 0.0))
        gross = site + kw * per_kw + kwh * per_kwh if is_bought else 0.0
        units = (1.0 if kind == "hardening" else kw) if is_bought else 0.0
        factor = crf(life, rate)
        rows.append(
            Purchase(
                asset=name,
                kind=kind,
                place=place,
                kw=kw,
                kwh=kwh,
                is_bought=is_bought,
                max_new_kw=max_kw,
                max_new_kwh=max_kwh,
                capital_per_kw=per_kw,
                capital_per_kwh=per_kwh,
                capital_site=site,
                grant_frac=grant,
                life_years=life,
                crf=factor,
                fixed_om_rate=om,
                capital_gross=gross,
                capital_net=gross * (1.0 - grant),
                investment=gross * (1.0 - grant) * factor,
                fixed_om=units * om,
            )
        )
    return tuple(rows)


def device(capital: float, rate: float) -> Purchase:
    """A recloser that an alternative adds, with a life of 25 years."""
    factor = crf(25.0, rate)
    return Purchase(
        asset="=L9: recloser at the from end",
        kind="device",
        place="L9",
        kw=0.0,
        kwh=0.0,
        is_bought=True,
        max_new_kw=0.0,
        max_new_kwh=0.0,
        capital_per_kw=0.0,
        capital_per_kwh=0.0,
        capital_site=capital,
        grant_frac=0.0,
        life_years=25.0,
        crf=factor,
        fixed_om_rate=0.0,
        capital_gross=capital,
        capital_net=capital,
        investment=capital * factor,
        fixed_om=0.0,
    )


def spread(scale: float) -> EventSpread:
    """Figures of one event, rising evenly with the percentile."""
    percents = (1.0, 5.0, 25.0, 50.0, 75.0, 95.0, 99.0)
    return EventSpread(
        mean=0.5 * scale,
        cvar95=0.975 * scale,
        largest=scale,
        percentiles=tuple((p, scale * p / 100.0) for p in percents),
        bins=tuple((0.1 * i * scale, 0.1 * (i + 1) * scale, 0.3) for i in range(10)),
    )


def made_up_pack(base: PlanResult, best: PlanResult, rate: float) -> Pack:
    """Hardening, budget, repair time and sensitivities around two plans."""
    prices = {a.asset: a for a in best.purchases}
    hardening = []
    for name, value, is_in_plan in (
        ("Tree wire, ridge", 9_000.0, True),
        ("Cable, creek", 900.0, False),
    ):
        asset = next(a for a in ASSETS if a[0] == name)
        net = asset[7] * (1.0 - asset[8])
        hardening.append(
            HardeningValue(
                measure=name,
                lines=tuple(str(asset[2]).split(", ")),
                failures_avoided_frac=0.6,
                capital_net=net,
                investment=net * crf(asset[9], rate),
                fixed_om=asset[10],
                is_in_plan=is_in_plan,
                alone=Worth(
                    1.4 * value,
                    0.4 * value,
                    value,
                    (1.3 * value, 1.5 * value),
                    410.0,
                    2e6,
                    2e6 - value,
                ),
                in_plan=Worth(
                    value, 100.0, value - 100.0, (-50.0, 2.0 * value), 300.0, 2e6, 2e6 - value
                ),
                without=() if is_in_plan else ("Tree wire, ridge",),
            )
        )
    assert set(prices) >= {row.measure for row in hardening}
    points = []
    for i in range(8):
        budget = best.capital_cost * i / 7.0
        plan = (
            base
            if i < 3
            else best
            if i == 7
            else made_up_plan(
                f"Budget {i}",
                "optimise",
                {"BAT-NORTH": (50.0 * i, 100.0 * i)},
                1.0 - 0.08 * i,
                rate,
            )
        )
        saving = base.costs.total - plan.costs.total
        is_carried = i in (1, 2)
        points.append(
            BudgetPoint(budget, plan, saving, (saving - 9e3, saving + 9e3), is_carried, i == 5)
        )
    repair = []
    for factor in (0.5, 0.75, 1.0, 1.5, 2.0):
        kept = best
        if factor != 1.0:
            bought = {a.asset: (a.kw, a.kwh) for a in best.purchases if a.is_bought}
            kept = made_up_plan("Kept", "fixed", bought, 0.42 * factor, rate)
        repair.append(RepairPoint(factor, 4.0 * factor, 12.0, kept, kept, 0.0, (-90.0, 80.0)))
    cases = []
    for parameter, values in (("=failure rates", (0.5, 2.0)), ("discount rate", (-2.0, 2.0))):
        for is_high in (False, True):
            value = values[is_high]
            share = 0.42 * (value if value > 0.0 and value != 2.0 else 1.3)
            bought = {"BAT-NORTH": (420.5, 1261.5)}
            anew = made_up_plan("Anew", "optimise", bought, share, rate)
            kept = made_up_plan("Kept", "fixed", {"BAT-NORTH": (500.0, 1261.5)}, share, rate)
            loss = kept.costs.total - anew.costs.total
            cases.append(
                SensitivityCase(
                    parameter=parameter,
                    is_high=is_high,
                    value=value,
                    kept=kept,
                    anew=anew,
                    loss=loss,
                    loss_interval=(loss - 10.0, loss + 10.0),
                    does_change=is_high,
                    changes="=no GEN-B09" if is_high else "the same plan",
                    totals=((EXISTING, base.costs.total + value), (LEAST_COST, kept.costs.total)),
                )
            )
    return Pack(
        is_asked=True,
        plan_name=LEAST_COST,
        hardening=tuple(hardening),
        budget=tuple(points),
        knee=4,
        repair_time=tuple(repair),
        hour_faster=HourFaster(5_100.0, (4_000.0, 6_000.0), 0.75, 1.0),
        sensitivities=tuple(cases),
        regrets=(
            Regret(LEAST_COST, best.costs.total, 10.0, "as given", 1.0),
            Regret(EXISTING, base.costs.total, 90_000.0, "as given", 1.0),
        ),
    )


def made_up_drawing() -> FeederDrawing:
    """Four buses in a fork, in normal service and in one outage."""
    buses = (
        DrawnBus("=S", 0.0, 0.0, ("live", "live"), "source"),
        DrawnBus("B01", 1.0, 0.0, ("live", "dead"), "load 180 kW"),
        DrawnBus("B02", 2.0, 0.0, ("live", "island"), ""),
        DrawnBus("B03", 2.0, -1.0, ("live", "live"), ""),
    )
    lines = (
        DrawnLine("L1", "=S", "B01", False, ("live", "dead")),
        DrawnLine("L2", "B01", "B02", False, ("live", "dead")),
        DrawnLine("L3", "B01", "B03", False, ("live", "dead")),
        DrawnLine("T1", "=S", "B03", True, ("open", "live")),
    )
    stages, notes = ("Normal service", "Worst: L1, repair"), ("All is fed.", "=B01 is dead.")
    return FeederDrawing(buses, lines, stages, notes, True)


def trace(title: str, n_period: int, outage: tuple[int, int] | None) -> Trace:
    """Hours of a smooth day, with an outage between two periods."""
    hours = np.arange(n_period) * 1.0
    load = 1500.0 + 700.0 * np.sin((hours - 8.0) / 24.0 * 2.0 * np.pi)
    store = 200.0 * np.sin((hours - 12.0) / 24.0 * 4.0 * np.pi)
    other = -0.4 * store
    solar = np.clip(400.0 * np.sin((hours - 6.0) / 12.0 * np.pi), 0.0, None)
    solar[np.mod(hours, 24.0) > 18.0] = 0.0
    engine = np.zeros(n_period)
    shed = np.zeros(n_period)
    grid_kw = load - store - other - solar
    if outage is not None:
        dark = slice(*outage)
        engine[dark], grid_kw[dark] = 450.0, 0.0
        store[dark], other[dark] = 350.0, 120.0
        shed[dark] = np.clip(load - store - other - solar - engine, 0.0, None)[dark]
    sources = {
        "Grid": grid_kw,
        "BAT-NORTH": store,
        "BAT-SOUTH": other,
        "Solar, school roof": solar,
        "GEN-B09": engine,
        "Tie to West": np.zeros(n_period),
    }
    energy = 1500.0 - np.cumsum(store) * 0.2
    return Trace(
        title=title,
        description="Invented curves.",
        times=tuple(
            f"{int(h) // 24 + 1:d} d {int(h) % 24:02d}:{int(h % 1 * 60):02d}" for h in hours
        ),
        hours=hours,
        load_kw=load,
        served_kw=load - shed,
        unserved_kw=shed,
        sources=sources,
        energy_kwh={"BAT-NORTH": energy, "BAT-SOUTH": 0.5 * energy},
        energy_capacity_kwh={"BAT-NORTH": 2400.0, "BAT-SOUTH": 1200.0},
        closings=() if outage is None else ("Section Z4 is dead.", "Tie T1 closed after 0.75 h."),
    )


def made_up_ac(low_pu: float = 0.981) -> AcCheck:
    """Voltages that fall along the buses to ``low_pu``; one bus is dead in the event."""
    buses = []
    for is_event, low_limit in ((False, 0.95), (True, 0.9)):
        for i, bus in enumerate((*BUSES, "=1+1 bus")):
            v_pu = 1.02 - (1.02 - low_pu) * i / len(BUSES)
            is_dead = is_event and i == 3
            v_pu = float("nan") if is_dead else v_pu
            buses.append(
                BusVoltage(
                    bus=bus,
                    is_event=is_event,
                    low_linear_pu=v_pu + 0.002,
                    low_ac_pu=v_pu,
                    low_when="" if is_dead else "peak day: 1 d 19:00",
                    high_linear_pu=v_pu + 0.011,
                    high_ac_pu=v_pu + 0.01,
                    high_when="" if is_dead else "ordinary day: 1 d 03:00",
                    low_limit_pu=low_limit,
                    high_limit_pu=1.05,
                    breaks_limits=v_pu < low_limit,
                    is_outside_range_a=v_pu < 0.95,
                    is_outside_range_a_above_600_v=v_pu < 0.975,
                    n_period=0 if is_dead else 24,
                    n_not_converged=0,
                )
            )
    broken = low_pu < 0.95
    return AcCheck(
        range_a=VoltageRange(0.95, 1.05, "service up to 600 V"),
        range_a_above_600_v=VoltageRange(0.975, 1.05, "service above 600 V"),
        buses=tuple(buses),
        loadings=(
            AssetLoading(
                "=1+1 line", "line", False, 4000.0, "kVA", 0.61, 0.63, "peak day: x", False
            ),
            AssetLoading("S", "substation", True, 5000.0, "kVA", 0.4, 0.41, "storm: y", False),
        ),
        stretches=(
            AcStretch(
                "Normal service: ordinary day",
                False,
                300.0,
                1,
                24,
                0,
                30e3,
                700.0,
                600.0,
                0.03,
                9.0,
            ),
            AcStretch(
                "Normal service: peak day", False, 60.0, 1, 24, 0, 40e3, 1200.0, 800.0, 0.04, 36.0
            ),
            AcStretch("Outage event: line L4", True, 2.5, 2, 8, 0, 4e3, 60.0, 80.0, 0.02, -1.8),
        ),
        advice=MarginAdvice(0.003 if broken else 0.0, 0.0, 0.0, 0.0, 0.0),
        allowance_frac=0.02,
    )


def made_up_plan(
    name: str,
    kind: str,
    bought: dict[str, tuple[float, float]],
    outage_share: float,
    rate: float = RATE,
    device_capital: float = 0.0,
    gap_frac: float | None = 0.008,
    base_total: float | None = None,
) -> PlanResult:
    """One alternative; ``outage_share`` scales everything that outages cost."""
    assets = purchases(bought, rate)
    if device_capital > 0.0:
        assets = (*assets, device(device_capital, rate))
    investment = sum(a.investment for a in assets)
    costs = CostParts(
        investment=investment,
        fixed_om=sum(a.fixed_om for a in assets),
        energy=1_180_000.0 - 0.05 * sum(a.kwh for a in assets),
        fuel=300.0 + 4.0 * sum(a.kw for a in assets if a.kind == "generator"),
        demand=176_000.0 - 12.0 * sum(a.kw for a in assets),
        repair=21_000.0,
        interruption=402_345.67 * outage_share,
        normal_shedding=0.0,
        surplus=12.5,
        end_of_window=-130.0,
    )
    total = costs.total
    half = 0.003 * total
    eens = 26_000.0 * outage_share
    saifi, saidi = 2.4 * (0.6 + 0.4 * outage_share), 6.1 * outage_share
    shares = np.linspace(1.0, 2.0, len(BUSES))
    shares = shares / shares.sum()
    class_shares = (0.55, 0.40, 0.05)
    window_shares = (0.45, 0.20, 0.35)
    difference = 0.0 if base_total is None else total - base_total
    return PlanResult(
        name=name,
        kind=kind,
        description="Invented.",
        costs=costs,
        capital_cost=sum(a.capital_net for a in assets),
        capital_gross=sum(a.capital_gross for a in assets),
        lower_bound=None if gap_frac is None else total + half - gap_frac * total,
        cost_interval=(total - half, total + half),
        gap_frac=gap_frac,
        bound_upper=None,
        status=STATUS,
        method="decomposed",
        method_reason="212,000 nodes are more than the whole tree takes",
        is_enumerated=False,
        n_sample=4000,
        demand_kw=2150.0,
        purchases=assets,
        indices=Indices(eens, saifi, 0.31, saidi, saidi / saifi, 1.0 - saidi / 8760.0),
        indices_fair=Indices(
            0.6 * eens, 0.7 * saifi, 0.3, 0.55 * saidi, 0.55 * saidi / (0.7 * saifi), 0.9997
        ),
        windows=tuple(
            WindowResult(w, n, total / n / 3.0, 0.01, 0.0101, eens * share / n, 4.0, 11.0)
            for (w, n), share in zip(WINDOWS, window_shares, strict=True)
        ),
        buses=tuple(
            BusResult(bus, 70.0, 180.0, eens * share, saifi, saidi)
            for bus, share in zip(BUSES, shares, strict=True)
        ),
        classes=tuple(
            ClassResult(c, crit, n, eens * s, costs.interruption * s, saifi, saidi)
            for (c, crit, n), s in zip(CLASSES, class_shares, strict=True)
        ),
        causes=tuple(
            CauseResult(
                window=w,
                scenario=f"{w} {i}",
                section="" if i == 4 else f"Z{i}",
                causes=("bulk supply" if i == 4 else f"line L{i}, line L{i}a"),
                repair_h=4.0,
                events_per_year=0.2 + 0.01 * i,
                eens_kwh=eens * share / 5.0,
                customer_hours=300.0 * outage_share,
                cost=costs.interruption * share / 5.0,
                is_storm=w == "storm",
                is_bulk_supply=i == 4,
            )
            for (w, _), share in zip(WINDOWS, window_shares, strict=True)
            for i in range(5)
        ),
        risk=Risk(
            total,
            0.98 * total,
            1.21 * total,
            1.34 * total,
            2000,
            cost_percentiles=((5.0, 0.9 * total), (50.0, 0.98 * total), (95.0, 1.21 * total)),
            eens_percentiles=((5.0, 0.0), (50.0, 0.8 * eens), (95.0, 3.0 * eens)),
            eens_mean=eens,
            eens_cvar95=3.5 * eens,
            cost_bins=((0.9 * total, total, 0.7), (total, 1.4 * total, 0.3)),
            event_cost=spread(50_000.0 * outage_share),
            event_eens=spread(4_000.0 * outage_share),
        ),
        worst_events=tuple(
            WorstEvent(
                "storm", f"storm {i}", f"=L{i}", "14:00", 6.0, 0.2, 900.0 / i, 400.0, 7e3, "=B01"
            )
            for i in range(1, 13)
        ),
        interruption_own_clock=costs.interruption * 0.99,
        burnt_kwh=120.0,
        normal_shed_kwh=0.0,
        traces=(
            trace("A normal day", 24, None),
            trace("Worst outage event: line L4 in the storm window", 48, (15, 23)),
        ),
        checks=(
            CheckLine(
                "Power balance", "Largest imbalance of any period (kW), and 0", 1e-9, 0.0, 1e-6
            ),
            CheckLine("Weights", "Sum of path weights, and 1", 1.0, 1.0, 1e-9),
        ),
        convergence=(
            ConvergenceRow(2.0, 0.62 * total, float("nan"), float("inf"), float("inf"), "LP"),
            ConvergenceRow(9.0, 0.93 * total, 1.04 * total, 1.06 * total, 0.13, ""),
            ConvergenceRow(41.0, 0.985 * total, 1.01 * total, 1.015 * total, 0.03, "MILP"),
            ConvergenceRow(77.0, 0.995 * total, total, 1.003 * total, 0.008, "gap reached"),
        ),
        solve_seconds=77.0,
        ac=made_up_ac(),
        difference=difference,
        difference_interval=(
            (0.0, 0.0) if base_total is None else (difference - 9_000.0, difference + 9_000.0)
        ),
    )


def made_up_result(rate: float = RATE, **changes: object) -> StudyResult:
    """Four alternatives; names and texts that a careless writer would take for formulas."""
    base = made_up_plan(EXISTING, "existing", {}, 1.0, rate)
    total = base.costs.total
    naive = made_up_plan(
        IGNORING_OUTAGES,
        "optimise",
        {"BAT-SOUTH": (240.0, 480.0)},
        0.9,
        rate,
        gap_frac=None,
        base_total=total,
    )
    best = made_up_plan(
        LEAST_COST,
        "optimise",
        {
            "BAT-NORTH": (420.5, 1261.5),
            "GEN-B09": (250.0, 0.0),
            "Tree wire, ridge": (0.0, 0.0),
        },
        0.42,
        rate,
        base_total=total,
    )
    own = made_up_plan(
        "=1+1 switches",
        "fixed",
        {"BAT-NORTH": (800.0, 3200.0), "Cable, creek": (0.0, 0.0)},
        0.95,
        rate,
        device_capital=18_000.0,
        base_total=total,
    )
    base, naive, best, own = (
        dataclasses.replace(
            plan,
            difference_to_best=plan.costs.total - best.costs.total,
            difference_to_best_interval=(
                plan.costs.total - best.costs.total - 5.0,
                plan.costs.total - best.costs.total + 5.0,
            ),
        )
        for plan in (base, naive, best, own)
    )
    result = StudyResult(
        study_name="=1+1",
        prepared_by="@SUM(A1)",
        currency="crowns",
        price_year=2031,
        study_file="made & up study.xlsx",
        fingerprint="sha256:" + "ab" * 32,
        seed=7,
        method="decomposed",
        method_reason="212,000 nodes are more than the whole tree takes",
        status=STATUS,
        gap_target_frac=0.01,
        recommended=LEAST_COST,
        plans=(base, naive, best, own),
        value_of_outage_planning=naive.costs.total - best.costs.total,
        value_of_outage_planning_interval=(60_000.0, 90_000.0),
        scenarios=64,
        findings=(
            Finding(
                Level.WARNING, "unlikely", "Loads", "D7", "peak_kw", "5000", "5 MW on one bus.", ""
            ),
            Finding(Level.NOTE, "text_number", "Lines", "D9", "length", "'=2", "Text.", "Look."),
        ),
        checks=(
            CheckLine("SAIFI", "Interruptions per customer (per year)", 2.4, 2.2, 0.44, True),
            CheckLine("Peak load", "Highest load (kW)", 2200.0, 2150.0, 430.0, True),
        ),
        inputs=(
            InputEcho("Settings", "Study", "Study name", "", "=1+1", False, ""),
            InputEcho("Settings", "Money", "Budget", "crowns", None, True, "common practice"),
            InputEcho("Lines", "L4", "Length", "km", 1.25, False, ""),
            InputEcho("Lines", "L4", "Normally open", "", False, True, ""),
        ),
        real_discount_rate_frac=rate,
        capital_budget=1_500_000.0,
        demand_charge_per_kw_year=80.0,
        peak_kw=2200.0,
        customers=982.0,
        versions=(("xlplan", "0.1.0"), ("highspy", "1.0")),
        started_at="2031-03-04T05:06:07",
        read_seconds=1.5,
        solve_seconds=240.0,
        write_seconds=0.7,
        pack=made_up_pack(base, best, rate),
        feeder=made_up_drawing(),
    )
    return dataclasses.replace(result, **changes)  # type: ignore[arg-type]
