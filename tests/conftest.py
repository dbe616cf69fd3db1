"""Settings shared by all tests: hypothesis profiles, and threads that do not fight for cores."""

from __future__ import annotations

import os

from hypothesis import HealthCheck, settings

# NumPy's threads gain nothing on arrays this small and slow parallel test runs down.
os.environ.setdefault("OMP_NUM_THREADS", "1")

# No deadlines: tests assert no seconds. Derandomised: the same cases in every run.
settings.register_profile(
    "fast",
    max_examples=15,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow],
)
settings.register_profile(
    "ci",
    max_examples=60,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow],
)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "fast"))
