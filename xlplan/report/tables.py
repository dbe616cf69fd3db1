"""The tables of the results workbook: sheet names, and each table's columns with their units.

Every heading that a reader sees in a table stands here. ``{money}`` is the study's currency.
"""

from __future__ import annotations

from xlplan.report.grid import Column

SUMMARY = "Summary"
ALTERNATIVES = "Alternatives"
PLAN = "Plan"
RELIABILITY = "Reliability"
OPERATION = "Operation"
VOLTAGES = "Voltages"
CONVERGENCE = "Convergence"
CHECKS = "Checks"
ASSUMPTIONS = "Assumptions"
CAUTIONS = "Cautions"

SHEET_ORDER = (
    SUMMARY,
    ALTERNATIVES,
    PLAN,
    RELIABILITY,
    OPERATION,
    VOLTAGES,
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
    Column("low", "95 % interval of this, low ({money}/year)", "change"),
    Column("high", "95 % interval of this, high ({money}/year)", "change"),
    Column("outage_h", "Outage hours per customer (h/year)", "hours"),
    Column("outage_fair_h", "Of these, without storms and loss of bulk supply (h/year)", "hours"),
    Column("eens", "Energy not supplied (kWh/year)", "energy"),
)

PLAN_TOTALS = (
    Column("name", "Alternative", "wrap"),
    Column("place", "How it came about", "text"),
    Column("storage_kw", "Storage power (kW)", "power"),
    Column("storage_kwh", "Storage energy (kWh)", "energy"),
    Column("generator_kw", "Generation (kW)", "power"),
    Column("measures", "Hardening measures (number)", "whole"),
    Column("other_capital", "Device changes: capital ({money})", "money", is_input=True),
    Column("other_yearly", "Device changes: yearly cost ({money}/year)", "money", is_input=True),
    Column("gross", "Capital before grants ({money})", "money"),
    Column("net", "Capital after grants ({money})", "money"),
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
    Column("per_kw", "Capital per kW ({money}/kW)", "price", is_input=True),
    Column("per_kwh", "Capital per kWh ({money}/kWh)", "price", is_input=True),
    Column("site", "Site cost, or cost of the measure ({money})", "money", is_input=True),
    Column("grant", "Grant (share of capital)", "percent", is_input=True),
    Column("life", "Life (years)", "years", is_input=True),
    Column("om_rate", "Fixed O&M ({money}/year per kW, or per measure)", "price", is_input=True),
    Column("crf", "Capital recovery factor (per year)", "factor"),
)

PURCHASES = (
    Column("name", "Alternative", "wrap"),
    Column("asset", "Asset", "text"),
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
    Column("section", "Dead section", "text"),
    Column("window", "Window", "text"),
    Column("kind", "Kind", "text"),
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
    Column("served", "Load served (kWh)", "energy"),
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
    Column("when", "When", "wrap"),
    Column("linear", "Linear (share of rating)", "percent"),
    Column("ac", "AC (share of rating)", "percent"),
    Column("verdict", "Within the rating", "status"),
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
    Column("gap", "Gap", "percent"),
    Column("status", "Why it stopped", "text"),
    Column("method", "Method", "text"),
    Column("counted", "How the cost was found", "text"),
    Column("seconds", "Solving (s)", "hours"),
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
