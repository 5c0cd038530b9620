"""Settings that every test shares: the same examples on every run, and no files left behind."""

from __future__ import annotations

from hypothesis import HealthCheck, settings

settings.register_profile(
    "workbench",
    derandomize=True,
    database=None,
    # A shared machine may stop for a second at any moment; a time limit would only be flaky.
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow],
)
settings.load_profile("workbench")
