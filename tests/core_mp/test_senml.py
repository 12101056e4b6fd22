"""SenML packs: written the same on CPython and MicroPython, and read back by the desk as the readings they were."""

from __future__ import annotations

import json
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from ports import on_unix, on_wasm

from companion.intake.wire import decode
from core_mp import senml

READINGS = [
    (41, 1767225600, 19660, 11.5, 98012.0, None, 3.61),
    (42, 1767225660, 19664, None, 98013, None, 3.6),
    (43, 1767225721, 0, math.nan, None, 150.5, None),
]


def test_a_pack_is_senml_as_the_contract_says() -> None:
    pack = json.loads(senml.pack("north", "counts", "k3f9", 40, READINGS))
    assert pack[0] == {"bn": "north/", "bt": 1767225600, "n": "life", "vs": "k3f9"} and pack[1] == {"n": "oldest", "v": 40}
    assert {"n": "temperature", "u": "Cel", "v": 11.5} in pack and {"t": 121, "n": "headspace", "u": "Pa", "v": 150.5} in pack
    assert {"t": 60, "n": "seq", "v": 42} in pack
    assert all(isinstance(record.get("t", 0), int) for record in pack)


@pytest.mark.parametrize("port", ["unix", "wasm"])
def test_micropython_writes_the_same_pack(port: str) -> None:
    program = f"from core_mp import senml\nnan=float('nan')\nprint(senml.pack('north', 'counts', 'k3f9', 40, {READINGS!r}))"
    said = on_unix("-c", program) if port == "unix" else on_wasm(program, "senml")
    assert said.strip() == senml.pack("north", "counts", "k3f9", 40, READINGS)


def test_a_reading_that_has_no_room_leaves_the_pack_as_it_was() -> None:
    pack = senml.Pack("north", "counts", 250)
    pack.begin(1767225600, "a", 0)
    added = [pack.add((n, 1767225600 + n, 7000, 9.5, None, None, None), 1767225600 + n) for n in range(5)]
    assert added == [True, False, False, False, False]
    assert bytes(pack.end()).decode() == senml.pack("north", "counts", "a", 0, [(0, 1767225600, 7000, 9.5, None, None, None)])
    pack.begin(1767225600, "a", 0)
    assert pack.say("refused", 'a "quote" and \\escape') and json.loads(bytes(pack.end()))[-1]["vs"] == "a 'quote' and /escape"
    pack.say("refused", "x" * 300)
    assert len(pack.end()) <= 250


optional = st.one_of(st.none(), st.floats(-1e6, 1e6))
reading = st.tuples(
    st.integers(0, 10**6), st.integers(0, 10**6), st.integers(-(2**24), 2**24), optional, optional, optional, optional
)


@given(st.lists(reading, min_size=1, max_size=30, unique_by=lambda r: r[0]))
def test_what_is_packed_is_read_back(rows: list[tuple[float, ...]]) -> None:
    rows = [(n, 1_700_000_000 + sum(r[1] % 500 for r in rows[: n + 1]), *r[2:]) for n, r in enumerate(rows)]
    pack = decode("levelbook/t1/readings", senml.pack("t1", "counts", "a", 0, rows).encode(), lambda tank, when: "counts")
    assert not pack.faults and pack.life == "a" and pack.oldest == 0
    for row, back in zip(rows, pack.frame.to_dict("records"), strict=True):
        found = (
            back["seq"],
            back["time"].timestamp(),
            back["raw"],
            back["temperature_c"],
            back["barometer_pa"],
            back["headspace_pa"],
            back["battery_v"],
        )
        assert found == pytest.approx([math.nan if value is None else value for value in row], nan_ok=True)
