"""The tables of the results workbook: sheet names, and each table's columns with their units.

Every heading that a reader sees in a table stands here. ``{money}`` is the study's currency.
"""

from __future__ import annotations

from xlplan.report.grid import Column

SUMMARY = "Summary"
ALTERNATIVES = "Alternatives"
PLAN = "Plan"
HARDENING = "Line hardening"
REPAIR_TIME = "Repair time"
BUDGET = "Budget"
SENSITIVITIES = "Sensitivities"
RELIABILITY = "Reliability"
RISK = "Risk"
OPERATION = "Operation"
VOLTAGES = "Voltages"
FEEDER = "Feeder"
CONVERGENCE = "Convergence"
CHECKS = "Checks"
ASSUMPTIONS = "Assumptions"
CAUTIONS = "Cautions"

SHEET_ORDER = (
    SUMMARY,
    ALTERNATIVES,
    PLAN,
    HARDENING,
    REPAIR_TIME,
    BUDGET,
    SENSITIVITIES,
    RELIABILITY,
    RISK,
    OPERATION,
    VOLTAGES,
    FEEDER,
    CONVERGENCE,
    CHECKS,
    ASSUMPTIONS,
    CAUTIONS,
)

SUMMARY_PLANS = (
    Column("name", "Alternative", "wrap"),
    Column("capital", "Capital after grants ({money})", "money"),
    Column("upkeep", "Investment and upkeep ({money}/year)", "money"),
    Column("supply", "Energy, fuel, demand ({money}/year)", "money"),
    Column("other", "Repairs and other ({money}/year)", "money"),
    Column("utility", "Utility's own cost ({money}/year)", "money"),
    Column("customers", "Customers' outage cost ({money}/year)", "money"),
    Column("total", "Total ({money}/year)", "money"),
    Column("difference", "Against existing ({money}/year)", "change"),
    Column("low", "95 % interval: low ({money}/year)", "change"),
    Column("high", "95 % interval: high ({money}/year)", "change"),
    Column("outage_h", "Outage hours per customer (h/year)", "hours"),
    Column("outage_fair_h", "Without storms, bulk supply loss (h/year)", "hours"),
    Column("eens", "Energy not supplied (kWh/year)", "energy"),
)

SUMMARY_WORTH = (
    Column("name", "Is it worth it", "wrap"),
    Column("verdict", "Against the existing feeder", "verdict"),
    Column("to_best", "Against the best one", "verdict"),
    Column("payback", "Simple payback (years)", "years"),
    Column("own_payback", "Payback on the utility's own money (years)", "years"),
    Column("ratio", "Benefit-cost ratio", "hours"),
    Column("ratio_gross", "Benefit-cost ratio before grants", "hours"),
    Column("gross", "Capital before grants ({money})", "money"),
    Column("present", "Present value against existing ({money})", "change"),
    Column("minutes", "Customer-minutes avoided (per year)", "whole"),
    Column("per_minute", "Cost per avoided customer-minute ({money})", "per_minute"),
)

PLAN_TOTALS = (
    Column("name", "Alternative", "wrap"),
    Column("place", "How it came about", "text"),
    Column("storage_kw", "Storage power (kW)", "power"),
    Column("storage_kwh", "Storage energy (kWh)", "energy"),
    Column("generator_kw", "Generation (kW)", "power"),
    Column("measures", "Hardening measures (number)", "whole"),
    Column("devices", "Device changes: capital ({money})", "money"),
    Column("gross", "Capital before grants ({money})", "money"),
    Column("net", "Capital after grants ({money})", "money"),
    Column("investment_gross", "Yearly investment before grants ({money}/year)", "money"),
    Column("investment", "Yearly investment ({money}/year)", "money"),
    Column("fixed_om", "Fixed O&M ({money}/year)", "money"),
    Column("yearly", "Yearly cost ({money}/year)", "money"),
)

PRICES = (
    Column("asset", "Asset", "wrap"),
    Column("place", "Where", "text"),
    Column("kind", "Kind", "text"),
    Column("max_kw", "Largest new power (kW)", "power"),
    Column("max_kwh", "Largest new energy (kWh)", "energy"),
    Column("per_kw", "Capital per kW ({money}/kW)", "price"),
    Column("per_kwh", "Capital per kWh ({money}/kWh)", "price"),
    Column("site", "Site cost, or cost of the measure ({money})", "money"),
    Column("grant", "Grant (share of capital)", "percent"),
    Column("life", "Life (years)", "years"),
    Column("om_rate", "Fixed O&M ({money}/year per kW, or per measure)", "price"),
    Column("crf", "Capital recovery factor (per year)", "factor"),
)

PURCHASES = (
    Column("name", "Alternative", "wrap"),
    Column("asset", "Asset", "wrap"),
    Column("kind", "Kind", "text"),
    Column("is_bought", "Bought", "text"),
    Column("kw", "Power bought (kW)", "power", is_input=True),
    Column("kwh", "Energy bought (kWh)", "energy", is_input=True),
    Column("om_units", "Units that O&M is paid on (kW or measures)", "power"),
    Column("gross", "Capital before grants ({money})", "money"),
    Column("net", "Capital after grants ({money})", "money"),
    Column("crf", "Capital recovery factor (per year)", "factor"),
    Column("investment", "Yearly investment ({money}/year)", "money"),
    Column("fixed_om", "Fixed O&M ({money}/year)", "money"),
    Column("yearly", "Yearly cost ({money}/year)", "money"),
)

INDICES = (
    Column("name", "Alternative", "wrap"),
    Column("counted", "What is counted", "wrap"),
    Column("eens", "Energy not supplied, EENS (kWh/year)", "energy"),
    Column("saifi", "SAIFI (interruptions per customer and year)", "index"),
    Column("maifi", "MAIFI (up to 5 minutes, per customer and year)", "index"),
    Column("saidi", "SAIDI (hours per customer and year)", "index"),
    Column("caidi", "CAIDI (hours per interruption)", "index"),
    Column("asai", "ASAI (share of the year served)", "share"),
)

HISTORY = (
    Column("name", "Compared with the feeder's own records", "wrap"),
    Column("what", "What is compared", "wrap"),
    Column("study", "This study", "exact"),
    Column("record", "Records", "exact"),
    Column("tolerance", "Allowed difference", "exact"),
    Column("ratio", "This study over records", "percent"),
    Column("verdict", "Verdict", "status"),
)

WINDOWS = (
    Column("name", "Alternative", "wrap"),
    Column("window", "Window", "wrap"),
    Column("occurrences", "Occurrences (per year)", "hours"),
    Column("events", "Outage events expected (per occurrence)", "small"),
    Column("poisson", "The same without the one-at-a-time rule", "small"),
    Column("cost", "Expected cost ({money} per occurrence)", "money"),
    Column("eens", "Energy not supplied (kWh per occurrence)", "energy"),
    Column("eens_year", "Energy not supplied (kWh/year)", "energy"),
    Column("interruptions", "Customer interruptions (per occurrence)", "energy"),
    Column("customer_h", "Customer hours (h per occurrence)", "energy"),
)

CLASSES = (
    Column("name", "Customer class", "wrap"),
    Column("is_critical", "Critical", "text"),
    Column("customers", "Customers (number)", "whole"),
    Column("eens_base", "Energy not supplied, existing (kWh/year)", "energy"),
    Column("eens_plan", "Energy not supplied, plan (kWh/year)", "energy"),
    Column("cost_base", "Interruption cost, existing ({money}/year)", "money"),
    Column("cost_plan", "Interruption cost, plan ({money}/year)", "money"),
    Column("saifi_base", "SAIFI, existing (per year)", "index"),
    Column("saifi_plan", "SAIFI, plan (per year)", "index"),
    Column("saidi_base", "SAIDI, existing (h/year)", "index"),
    Column("saidi_plan", "SAIDI, plan (h/year)", "index"),
)

BUSES = (
    Column("name", "Bus", "wrap"),
    Column("peak", "Peak load (kW)", "energy"),
    Column("customers", "Customers (number)", "whole"),
    Column("eens_base", "Energy not supplied, existing (kWh/year)", "energy"),
    Column("eens_plan", "Energy not supplied, plan (kWh/year)", "energy"),
    Column("often_base", "Interruptions, existing (per year)", "index"),
    Column("often_plan", "Interruptions, plan (per year)", "index"),
    Column("outage_base", "Outage time, existing (h/year)", "index"),
    Column("outage_plan", "Outage time, plan (h/year)", "index"),
)

SECTIONS = (
    Column("name", "Dead section", "wrap"),
    Column("label", "What it is", "text"),
    Column("events_base", "Events, existing (per year)", "small"),
    Column("events_plan", "Events, plan (per year)", "small"),
    Column("eens_base", "Energy not supplied, existing (kWh/year)", "energy"),
    Column("eens_plan", "Energy not supplied, plan (kWh/year)", "energy"),
    Column("cost_base", "Repair and interruption cost, existing ({money}/year)", "money"),
    Column("cost_plan", "Repair and interruption cost, plan ({money}/year)", "money"),
)

CAUSES = (
    Column("name", "Alternative", "wrap"),
    Column("causes", "What fails", "wrap"),
    Column("section", "Dead section", "wrap"),
    Column("window", "Window", "wrap"),
    Column("kind", "Kind", "wrap"),
    Column("repair_h", "Repair time (h)", "hours"),
    Column("events", "Events (per year)", "small"),
    Column("eens", "Energy not supplied (kWh/year)", "energy"),
    Column("customer_h", "Customer hours (h/year)", "energy"),
    Column("cost", "Repair and interruption cost ({money}/year)", "money"),
)

TRACE_HEAD = (
    Column("time", "Time", "text"),
    Column("hour", "Hours from the start (h)", "hours"),
    Column("load", "Load (kW)", "power"),
    Column("served", "Served (kW)", "power"),
    Column("unserved", "Unserved (kW)", "power"),
)

AC_PLANS = (
    Column("name", "Alternative", "wrap"),
    Column("verdict", "AC power flow", "status"),
    Column("about", "What was found", "wrap"),
    Column("periods", "Periods solved or tried", "whole"),
    Column("unsolved", "Periods without AC solution", "whole"),
    Column("broken", "Buses beyond the limits, normal service", "whole"),
    Column("lowest", "Lowest AC voltage in normal service", "wrap"),
    Column("broken_event", "Buses beyond the limits, outage events", "whole"),
    Column("loaded", "Assets beyond their rating", "whole"),
    Column("outside", "Buses outside Range A, normal service", "whole"),
    Column("margin_low", "Margin that would have covered it: lowest voltage (p.u.)", "small"),
    Column("margin_high", "The same: highest voltage (p.u.)", "small"),
    Column("margin_low_event", "The same, events: lowest (p.u.)", "small"),
    Column("margin_high_event", "The same, events: highest (p.u.)", "small"),
    Column("allowance", "Loss allowance that would have covered it", "percent"),
)

AC_LOSSES = (
    Column("name", "Alternative", "wrap"),
    Column("operation", "Operation", "wrap"),
    Column("title", "Stretch", "wrap"),
    Column("periods", "Periods", "whole"),
    Column("unsolved", "Without AC solution", "whole"),
    Column("occurrences", "Occurrences (per year)", "hours"),
    Column("share_note", "Losses against the allowance", "wrap"),
    Column("served", "Load served (kWh)", "whole"),
    Column("loss", "AC losses (kWh)", "energy"),
    Column("note", "Note", "wrap"),
    Column("allowance", "Loss allowance (kWh)", "energy"),
    Column("share", "AC losses (share of load)", "percent"),
    Column("allowed", "Loss allowance (share of load)", "percent"),
    Column("highest", "Highest losses of any period (share)", "percent"),
    Column("cost", "Cost beyond the allowance ({money})", "price"),
)

AC_OUTSIDE = (
    Column("name", "Alternative", "wrap"),
    Column("operation", "Operation", "wrap"),
    Column("bus", "Bus", "wrap"),
    Column("low", "Lowest AC voltage (p.u.)", "small"),
    Column("below", "Below Range A by (p.u.)", "small"),
    Column("range", "Range A (p.u.)", "text"),
    Column("low_when", "When lowest", "wrap"),
    Column("high", "Highest AC voltage (p.u.)", "small"),
    Column("above", "Above Range A by (p.u.)", "small"),
    Column("high_when", "When highest", "wrap"),
)

AC_VOLTAGES = (
    Column("name", "Alternative", "wrap"),
    Column("operation", "Operation", "wrap"),
    Column("bus", "Bus", "wrap"),
    Column("low_linear", "Lowest, linear (p.u.)", "small"),
    Column("low_ac", "Lowest, AC (p.u.)", "small"),
    Column("error", "AC less linear (p.u.)", "small"),
    Column("low_when", "When lowest", "wrap"),
    Column("high_linear", "Highest, linear (p.u.)", "small"),
    Column("high_ac", "Highest, AC (p.u.)", "small"),
    Column("high_when", "When highest", "wrap"),
    Column("low_limit", "Study's lowest limit (p.u.)", "small"),
    Column("high_limit", "Study's highest limit (p.u.)", "small"),
    Column("verdict", "Within the limits", "status"),
    Column("range_a", "ANSI C84.1 Range A", "wrap"),
    Column("unsolved", "Periods without AC solution", "whole"),
)

AC_LOADINGS = (
    Column("name", "Alternative", "wrap"),
    Column("operation", "Operation", "wrap"),
    Column("asset", "Asset", "wrap"),
    Column("rating", "Rating", "energy"),
    Column("unit", "Unit", "text"),
    Column("kind", "Kind", "wrap"),
    Column("verdict", "Within the rating", "status"),
    Column("linear", "Linear (share of rating)", "percent"),
    Column("ac", "AC (share of rating)", "percent"),
    # Last, so that it can take the empty columns beside it.
    Column("when", "When", "text"),
)

PASSES = (
    Column("seconds", "Time (s)", "hours"),
    Column("bound", "Lower bound ({money}/year)", "money"),
    Column("estimate", "Cost of following the plan ({money}/year)", "money"),
    Column("upper", "Upper end of its 95 % interval ({money}/year)", "money"),
    Column("gap", "Gap", "percent"),
    Column("note", "Note", "text"),
)

METHODS = (
    Column("name", "Alternative", "wrap"),
    Column("bound", "Lower bound ({money}/year)", "money"),
    Column("cost", "Cost of following it ({money}/year)", "money"),
    Column("low", "95 % interval: low ({money}/year)", "money"),
    Column("high", "95 % interval: high ({money}/year)", "money"),
    Column("ceiling", "Bound from above, no sampling ({money}/year)", "money"),
    Column("gap", "Gap", "percent"),
    Column("status", "Why it stopped", "text"),
    Column("method", "Method", "text"),
    Column("counted", "How the cost was found", "text"),
    Column("seconds", "Solving (s)", "hours"),
)

AIMS = (
    Column("name", "Alternative", "wrap"),
    Column("bound", "Lower bound of the weighted cost ({money}/year)", "money"),
    Column("expected", "Expected cost ({money}/year)", "money"),
    Column("tail", "Cost if every window went badly, CVaR ({money}/year)", "money"),
    Column("total", "Weighted cost ({money}/year)", "money"),
    Column("low", "95 % interval: low ({money}/year)", "money"),
    Column("high", "95 % interval: high ({money}/year)", "money"),
    Column("ceiling", "Weighted cost, every path counted ({money}/year)", "money"),
    Column("gap", "Gap of the weighted cost", "percent"),
)

WORTH = (
    Column("rank", "Rank by net value", "whole"),
    Column("name", "Measure", "wrap"),
    Column("lines", "Lines", "wrap"),
    Column("avoided", "Failures avoided (share)", "percent"),
    Column("is_bought", "In the plan", "text"),
    Column("capital", "Capital after grants ({money})", "money"),
    Column("yearly", "Its own yearly cost ({money}/year)", "money"),
    Column("utility", "Worth to the utility, before its own cost ({money}/year)", "change"),
    Column("customers", "Worth to customers ({money}/year)", "change"),
    Column("value", "Worth, before its own cost ({money}/year)", "change"),
    Column("low", "95 % interval: low ({money}/year)", "change"),
    Column("high", "95 % interval: high ({money}/year)", "change"),
    Column("net", "Net value ({money}/year)", "change"),
    Column("payback", "Simple payback (years)", "years"),
    Column("eens", "Unserved energy avoided (kWh/year)", "energy"),
    Column("verdict", "Verdict", "status"),
)

REPAIR_POINTS = (
    Column("factor", "Repair times (times those given)", "hours"),
    Column("hours", "Mean length of an outage event (h, whole periods)", "hours"),
    Column("events", "Outage events (per year)", "small"),
    Column("kept", "Yearly cost, plan kept ({money}/year)", "money"),
    Column("kept_utility", "Of this the utility's own ({money}/year)", "money"),
    Column("kept_customers", "Of this the customers' ({money}/year)", "money"),
    Column("kept_eens", "Energy not supplied, plan kept (kWh/year)", "energy"),
    Column("kept_saidi", "Outage hours per customer, plan kept (h/year)", "hours"),
    Column("anew", "Yearly cost, plan made anew ({money}/year)", "money"),
    Column("anew_utility", "Of this the utility's own ({money}/year)", "money"),
    Column("anew_customers", "Of this the customers' ({money}/year)", "money"),
    Column("anew_capital", "Capital of that plan ({money})", "money"),
    Column("anew_eens", "Energy not supplied, plan made anew (kWh/year)", "energy"),
    Column("loss", "Loss by keeping the plan ({money}/year)", "change"),
    Column("low", "Interval of the loss: low ({money}/year)", "change"),
    Column("high", "Interval of the loss: high ({money}/year)", "change"),
    Column("verdict", "Make the plan anew?", "status"),
)

BUDGET_POINTS = (
    Column("budget", "Money that may be spent ({money})", "money"),
    Column("spent", "Capital spent after grants ({money})", "money"),
    Column("total", "Yearly cost ({money}/year)", "money"),
    Column("utility", "Of this the utility's own ({money}/year)", "money"),
    Column("customers", "Of this the customers' ({money}/year)", "money"),
    Column("eens", "Energy not supplied (kWh/year)", "energy"),
    Column("saidi", "Outage hours per customer (h/year)", "hours"),
    Column("saving", "Saving against spending nothing ({money}/year)", "change"),
    Column("low", "Interval of the saving: low ({money}/year)", "change"),
    Column("high", "Interval of the saving: high ({money}/year)", "change"),
    Column("step", "Saving per 1,000 more spent ({money}/year)", "change"),
    Column("bought", "What is bought", "wrap"),
    Column("note", "Note", "wrap"),
)

SENSITIVITY_ROWS = (
    Column("name", "Assumption", "wrap"),
    Column("low_value", "Low value (times; points for the rate)", "hours"),
    Column("high_value", "High value (times; points for the rate)", "hours"),
    Column("low_anew", "Yearly cost at low, best plan ({money}/year)", "money"),
    Column("high_anew", "Yearly cost at high, best plan ({money}/year)", "money"),
    Column("low_change", "Against the study at low ({money}/year)", "change"),
    Column("high_change", "Against the study at high ({money}/year)", "change"),
    Column("range", "Range of cost ({money}/year)", "money"),
    Column("low_plan", "What the best plan becomes at low", "wrap"),
    Column("high_plan", "What the best plan becomes at high", "wrap"),
    Column("verdict", "Does the plan change?", "status"),
)

SENSITIVITY_PARTS = (
    Column("name", "Assumption", "wrap"),
    Column("low_utility", "Best plan at low: utility's own ({money}/year)", "money"),
    Column("low_customers", "Best plan at low: customers' ({money}/year)", "money"),
    Column("high_utility", "Best plan at high: utility's own ({money}/year)", "money"),
    Column("high_customers", "Best plan at high: customers' ({money}/year)", "money"),
    Column("low_kept", "Plan kept, at low ({money}/year)", "money"),
    Column("high_kept", "Plan kept, at high ({money}/year)", "money"),
)

REGRETS = (
    Column("name", "Alternative", "wrap"),
    Column("base", "Yearly cost as given ({money}/year)", "money"),
    Column("largest", "Largest regret ({money}/year)", "money"),
    Column("case", "In the case", "wrap"),
    Column("mean", "Mean regret over the cases ({money}/year)", "money"),
    Column("rank", "Rank by largest regret", "whole"),
)

SPREAD = (
    Column("figure", "Figure", "wrap"),
    Column("percent", "Percentile (%)", "whole"),
    Column("cost_base", "Year's cost, existing feeder ({money})", "money"),
    Column("cost_plan", "Year's cost, plan ({money})", "money"),
    Column("eens_base", "Year's unserved energy, existing feeder (kWh)", "energy"),
    Column("eens_plan", "Year's unserved energy, plan (kWh)", "energy"),
    Column("event_cost_base", "Cost of one event, existing feeder ({money})", "money"),
    Column("event_cost_plan", "Cost of one event, plan ({money})", "money"),
    Column("event_eens_base", "Unserved in one event, existing feeder (kWh)", "energy"),
    Column("event_eens_plan", "Unserved in one event, plan (kWh)", "energy"),
)


def _steps(look: str, weight: str) -> tuple[Column, ...]:
    """A distribution in equal steps; ``weight``: how often a step is met."""
    return (
        Column("low", "From", look),
        Column("high", "To", look),
        Column("weight", weight, "small"),
    )


YEAR_COST_STEPS = _steps("money", "Share of years")
YEAR_EENS_STEPS = _steps("energy", "Share of years")
EVENT_COST_STEPS = _steps("money", "Events (per year)")
EVENT_EENS_STEPS = _steps("energy", "Events (per year)")

WORST_EVENTS = (
    Column("causes", "What fails", "wrap"),
    Column("rank", "No.", "whole"),
    Column("window", "Window", "wrap"),
    Column("begins", "Outage begins", "text"),
    Column("hours", "Lasts (h)", "hours"),
    Column("per_year", "Events of this kind (per year)", "small"),
    Column("eens", "Energy not supplied in this event (kWh)", "energy"),
    Column("eens_base", "The same on the existing feeder, at its worst (kWh)", "energy"),
    Column("customers", "Customers interrupted (number)", "energy"),
    Column("cost", "Repair and interruption cost ({money})", "money"),
    Column("lost", "What was lost", "wrap"),
)

DRAWN_BUSES = (
    Column("bus", "Bus", "wrap"),
    Column("x", "x (drawing units)", "hours"),
    Column("y", "y (drawing units)", "hours"),
    Column("note", "What stands there", "wrap"),
)

CHECK_LINES = (
    Column("about", "About", "wrap"),
    Column("name", "Check", "wrap"),
    Column("what", "What should agree", "wrap"),
    Column("left", "First figure", "exact"),
    Column("right", "Second figure", "exact"),
    Column("tolerance", "Allowed difference", "margin"),
    Column("difference", "Size of the difference", "margin"),
    Column("otherwise", "Word if it does not agree", "text"),
    Column("outcome", "Result", "status"),
)

RUN_FACTS = (
    Column("title", "About this run", "wrap"),
    Column("value", "Value", "wrap"),
)

FINDINGS = (
    Column("level", "Level", "text"),
    Column("place", "Place", "text"),
    Column("key", "Field", "text"),
    Column("value", "As typed", "wrap"),
    Column("message", "What was noticed", "wrap"),
)

INPUTS = (
    Column("sheet", "Sheet", "text"),
    Column("row", "Row", "wrap"),
    Column("title", "Input", "wrap"),
    Column("value", "Value used", "any"),
    Column("unit", "Unit", "text"),
    Column("origin", "Typed or default", "text"),
    Column("source", "Where the figure is from", "wrap"),
)

CAUTION_LINES = (
    Column("number", "No.", "whole"),
    Column("topic", "Topic", "wrap"),
    Column("caution", "What to keep in mind", "wrap"),
    Column("decides", "Who or what settles it", "wrap"),
)
