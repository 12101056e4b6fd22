"""A sealed day gives back every bit of what was put in, and says so when it is damaged."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from companion.book.sealed import FLOATS, Columns, seal, unseal

START = 1_772_323_200_000_000


def day() -> Columns:
    """1,440 readings as a logger sends them, five to a pack."""
    rng = np.random.default_rng(1)
    n = np.arange(1440)
    time = START + n * 60_000_000
    arrived = np.repeat(time[4::5] + rng.integers(0, 900, 288) * 1000, 5)
    return {
        "time_us": time, "seq": n + 5, "arrived_us": arrived, "life": np.full(1440, "a", object),
        "raw": np.round(15000 + 3000 * np.sin(n / 200) + 2 * rng.standard_normal(1440)),
        "temperature_c": np.round(11 + 0.3 * np.sin(n / 229) + 0.05 * rng.standard_normal(1440), 1),
        "barometer_pa": np.round(98000 + 300 * np.sin(n / 400) + 5 * rng.standard_normal(1440)),
        "headspace_pa": np.full(1440, np.nan), "battery_v": np.round(3.65 - n / 1e6, 2),
    }  # fmt: skip


def same(a: Columns, b: Columns) -> None:
    for name in ("time_us", "seq"):
        assert np.array_equal(a[name], b[name]), name
    assert np.array_equal(np.asarray(a["arrived_us"]) // 1000, np.asarray(b["arrived_us"]) // 1000)
    assert list(a["life"]) == list(b["life"])
    for name in FLOATS:
        x, y = np.asarray(a[name], float), np.asarray(b[name], float)
        missing = np.isnan(x)
        assert np.array_equal(missing, np.isnan(y)) and np.array_equal(
            x[~missing].view(np.int64), y[~missing].view(np.int64)
        ), name


def test_a_day_comes_back_bit_for_bit() -> None:
    same(day(), unseal(seal(day())))


number = st.one_of(st.just(math.nan), st.floats(allow_nan=False, allow_infinity=False), st.integers(-(10**6), 10**6).map(float),
                   st.integers(-(10**5), 10**5).map(lambda n: n / 100), st.just(-0.0))  # fmt: skip
row = st.tuples(st.integers(-(2**62), 2**62), st.sampled_from(["a", "b", "file"]), st.integers(0, 2**62), st.integers(0, 2**60),
                number, number, number, number, number)  # fmt: skip


@given(st.lists(row, min_size=1, max_size=40))
def test_any_readings_come_back_bit_for_bit(rows: list[tuple[object, ...]]) -> None:
    columns = dict(zip(("time_us", "life", "seq", "arrived_us", *FLOATS), map(np.array, zip(*rows, strict=True)), strict=True))
    same(columns, unseal(seal(columns)))


def test_a_damaged_blob_is_told() -> None:
    blob = bytearray(seal(day()))
    blob[-20] ^= 1
    with pytest.raises(ValueError, match="damaged"):
        unseal(bytes(blob))
    with pytest.raises(ValueError, match="damaged"):
        unseal(b"\x10\x00\x00\x00nonsense")
