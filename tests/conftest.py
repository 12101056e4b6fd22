"""What all tests share: property tests without a clock, the same in each CI run, so that red means the change; a real broker."""

from __future__ import annotations

import os
from collections.abc import Iterator

import needs
import pytest
from hypothesis import settings

from companion.field.broker import Broker, local_broker

settings.register_profile("house", deadline=None, derandomize=bool(os.environ.get("CI")))
settings.register_profile("long", deadline=None, max_examples=3000)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "house"))

collect_ignore = [
    "core_mp/field_day.py",
    "core_mp/hundred_days.py",
    "core_mp/power_cuts.py",
    "field/raw_repl.py",
]  # MicroPython runs them


@pytest.fixture
def broker() -> Iterator[Broker]:
    """A real mosquitto of the test's own."""
    needs.need("mosquitto", "Debian's mosquitto")
    with local_broker(program="mosquitto") as running:
        yield running
