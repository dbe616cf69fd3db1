"""Names of the standing alternatives, which every sheet and the JSON twin share."""

EXISTING = "Existing feeder"
IGNORING_OUTAGES = "Plan ignoring outages"
LEAST_COST = "Least-cost plan"
