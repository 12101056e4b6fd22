"""Property tests: no clock in them, since machines are noisy; in CI the same examples each time, so that red means the change."""

from __future__ import annotations

import os

from hypothesis import settings

settings.register_profile("house", deadline=None, derandomize=bool(os.environ.get("CI")))
settings.register_profile("long", deadline=None, max_examples=3000)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "house"))

collect_ignore = ["core_mp/field_day.py", "core_mp/power_cuts.py"]  # MicroPython runs them
