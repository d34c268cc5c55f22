"""Hypothesis profiles: a fast one by default, `FOCKHULL_HYPOTHESIS=slow` for many examples."""

from __future__ import annotations

import os

from hypothesis import HealthCheck, settings

SLOW_TO_START = [HealthCheck.too_slow, HealthCheck.data_too_large]

settings.register_profile(
    "fast",
    max_examples=30,
    deadline=None,
    derandomize=True,
    suppress_health_check=SLOW_TO_START,
)
settings.register_profile(
    "slow",
    max_examples=1000,
    deadline=None,
    print_blob=True,
    suppress_health_check=SLOW_TO_START,
)
settings.load_profile(os.environ.get("FOCKHULL_HYPOTHESIS", "fast"))
