"""Signals to pressure, and the limits of a loop, against NAMUR NE 43 and worked examples."""

from __future__ import annotations

import re

import numpy as np
import pytest
from published import rows

from core_mp import status as bits
from core_mp.transmitter import Transmitter

LOOP = [(4000, 0.004), (20000, 0.020)]


@pytest.mark.parametrize(
    "row", rows("signal_levels", lambda row: row["kind"] == "classify"), ids=lambda row: row["example_input"]
)
@pytest.mark.parametrize("way", ["counts", "current"])
def test_a_loop_is_judged_as_ne_43_says(row: dict[str, str], way: str) -> None:
    milliamperes = float(row["example_input"].split()[0])
    if way == "counts":
        status = Transmitter([(0.004, 0.0), (0.020, 5e5)], LOOP).status(round(milliamperes * 1000))
    else:
        status = Transmitter([(0.004, 0.0), (0.020, 5e5)], [(0, 0), (1, 1)]).status(milliamperes / 1000)
    fault, doubtful = status & bits.FAULT, status & (bits.UNDER_RANGE | bits.OVER_RANGE)
    assert {"fault": bool(fault), "undefined": bool(doubtful) and not fault, "valid": status == 0}[row["example_output"]]


@pytest.mark.parametrize(
    "row", rows("signal_levels", lambda row: row["kind"] == "example"), ids=lambda row: f"{row['name']} {row['example_input']}"
)
def test_worked_examples_of_signals(row: dict[str, str]) -> None:
    low, high = float(row["lower"]) * 1e3, float(row["upper"]) * 1e3
    x = float(row["example_input"].split()[0])
    if row["name"] == "4-20 mA":
        p = Transmitter([(0.004, low), (0.020, high)], [(0, 0), (1, 1)]).pressure(x / 1000)
    elif row["name"].startswith("ratiometric"):
        supply = float(re.findall(r"of ([\d.]+) V", row["example_input"])[0])
        p = Transmitter([(0.1 * supply, low), (0.9 * supply, high)]).pressure(x)
    else:
        full = 2 ** int(re.findall(r"N=(\d+)", row["name"])[0])
        p = Transmitter([(0.1 * full, low), (0.9 * full, high)]).pressure(x)
    assert p / 1e3 == pytest.approx(float(row["example_output"].split()[0]), rel=1e-9, abs=1e-7)


def test_straight_lines_stand_between_calibration_points_and_go_on_beyond_them() -> None:
    sensor = Transmitter([(1000, 0.0), (2000, 100.0), (4000, 400.0), (5000, 800.0)])
    raw = np.array([500.0, 1000.0, 1500.0, 2000.0, 3000.0, 4000.0, 4500.0, 6000.0])
    assert sensor.pressure(raw).tolist() == pytest.approx([-50.0, 0.0, 50.0, 100.0, 250.0, 400.0, 600.0, 1200.0])
    assert [sensor.pressure(x) for x in raw.tolist()] == pytest.approx(sensor.pressure(raw).tolist(), rel=1e-15)


def test_what_the_converter_cannot_give_is_no_reading_and_its_ends_are_doubtful() -> None:
    sensor = Transmitter([(1638, 0.0), (14746, 2e5)], counts_limits=(0, 16383))
    assert [sensor.status(raw) for raw in (-1, 0, 1, 16382, 16383, 16384)] == [
        bits.UNDER_RANGE | bits.NO_READING, bits.UNDER_RANGE, 0, 0, bits.OVER_RANGE, bits.OVER_RANGE | bits.NO_READING]  # fmt: skip
    assert sensor.status(float("nan")) & bits.NO_READING
    assert sensor.status(np.array([5.0, np.nan]))[1] & bits.NO_READING


def test_24_bit_counts_keep_every_count() -> None:
    sensor = Transmitter([(838861, 0.0), (7549747, 1e5)])
    step = sensor.pressure(5000001) - sensor.pressure(5000000)
    assert step == pytest.approx(1e5 / (7549747 - 838861), rel=1e-6)
