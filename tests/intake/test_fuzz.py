"""Bad payloads: a short form of `make fuzz`."""

from __future__ import annotations

from fuzz_wire import fuzz


def test_no_bad_payload_breaks_anything_or_becomes_a_wrong_reading() -> None:
    became = fuzz(20_000, 1)
    assert became["refused"] > 5_000 and became["in part"] > 100 and became["taken"] > 100
