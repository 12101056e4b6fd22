"""Drivers against a simulated bus that keeps the part's registers as its data sheet has them."""

from __future__ import annotations

import time
from typing import Any

import pytest

from core_mp.drivers import pressure24
from core_mp.drivers.adc16 import FULL_SCALE_V, Adc16
from core_mp.drivers.pressure24 import BAROMETER, IMMERSION, Pressure24, compensated
from core_mp.drivers.ratio import Ratio


@pytest.fixture(autouse=True)
def sleeps(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """MicroPython's time.sleep_ms, which CPython lacks; what was slept."""
    slept: list[int] = []
    monkeypatch.setattr(time, "sleep_ms", slept.append, raising=False)
    return slept


RANGES = {0: 6.144, 1: 4.096, 2: 2.048, 3: 1.024, 4: 0.512, 5: 0.256}  # V, by the PGA bits


class Converter:
    """The 16-bit converter's four registers. A conversion takes `takes` looks; volts: at the inputs."""

    def __init__(self, *volts: float, takes: int = 3) -> None:
        self.volts, self.takes, self.left = volts, takes, 0
        self.config, self.counts, self.there = 0x8583, 0, True

    def writeto_mem(self, address: int, register: int, data: bytes) -> None:
        self._answer(address)
        assert register == 1 and len(data) == 2
        self.config = data[0] << 8 | data[1]
        if self.config & 0x8000 and self.config & 0x0100:  # begin a single shot
            mux = self.config >> 12 & 7
            pairs = {0: (0, 1), 1: (0, 3), 2: (1, 3), 3: (2, 3)}
            plus, minus = pairs.get(mux, (mux - 4, None))
            volts = self.volts[plus] - (0.0 if minus is None else self.volts[minus])
            full = RANGES[self.config >> 9 & 7]
            self.counts = max(-32768, min(32767, round(volts / full * 32768)))
            self.left = self.takes
            self.config &= 0x7FFF

    def readfrom_mem_into(self, address: int, register: int, buffer: bytearray) -> None:
        self._answer(address)
        if register == 1 and self.left:
            self.left -= 1
            if not self.left:
                self.config |= 0x8000
        word = self.config if register == 1 else self.counts & 0xFFFF
        buffer[0], buffer[1] = word >> 8, word & 255

    def _answer(self, address: int) -> None:
        if address != 0x48 or not self.there:
            raise OSError(19)


def test_counts_of_each_input_and_of_a_pair() -> None:
    adc = Adc16(Converter(0.6, 1.2, 3.0, -0.3))
    assert [adc.read(n) for n in range(4)] == [4800, 9600, 24000, -2400]
    assert adc.difference(0) == -4800 and adc.difference(1) == 26400


@pytest.mark.parametrize("full", FULL_SCALE_V)
def test_each_full_scale_is_set_as_the_register_table_says(full: float) -> None:
    assert Adc16(Converter(full / 4, 0, 0, 0), full).read(0) == 8192
    assert Adc16(Converter(99.0, 0, 0, 0), full).read(0) == 32767


def test_the_loops_limits_are_within_the_converters_range() -> None:
    """4 to 20 mA over 150 ohm, as examples/boards wires it: what NE 43 asks for can be told apart."""
    adc = Adc16(bus := Converter(0.0, 0, 0, 0))
    for milliamperes, counts in ((3.6, 4320), (4.0, 4800), (20.0, 24000), (21.0, 25200), (25.0, 30000)):
        bus.volts = (0.150 * milliamperes, 0, 0, 0)
        assert adc.read(0) == counts


def test_a_converter_that_does_not_answer_or_does_not_finish_is_an_error() -> None:
    bus = Converter(0.6, 0, 0, 0, takes=99)
    with pytest.raises(OSError, match="no conversion within 20 ms"):
        Adc16(bus).read(0)
    bus.there = False
    with pytest.raises(OSError):
        Adc16(bus).read(0)
    with pytest.raises(ValueError, match="full scale must be one of"):
        Adc16(bus, 5.0)


class Sensor:
    """The digital pressure sensor: its memory, and conversions that are ready only when enough was slept."""

    def __init__(self, words: list[int], d1: int, d2: int, slept: list[int]) -> None:
        self.words, self.d, self.slept = words, {0x48: d1, 0x58: d2}, slept
        self.command = self.began = 0
        self.pending: int | None = None

    def writeto(self, address: int, data: bytes) -> None:
        assert address == 0x76 and len(data) == 1
        self.command = data[0]
        if self.command in self.d:
            self.pending, self.began = self.d[self.command], len(self.slept)

    def readfrom(self, address: int, n: int) -> bytes:
        if self.command == 0:
            value = self.pending if self.pending is not None and sum(self.slept[self.began :]) >= 9 else 0
            self.pending = None
            return (value or 0).to_bytes(n, "big")
        assert 0xA0 <= self.command < 0xB0 and n == 2
        return self.words[(self.command - 0xA0) // 2].to_bytes(2, "big")


# The makers' printed examples (from memory): C1 to C6, D1, D2, then the pressure [Pa] and temperature [degC] they print.
PRINTED: list[tuple[Any, list[int], int, int, int, float]] = [
    (BAROMETER, [40127, 36924, 23317, 23282, 33464, 28312], 9085466, 8569150, 100009, 20.07),
    (IMMERSION, [34982, 36352, 20328, 22354, 26646, 26146], 4958179, 6815414, 399980, 19.81),
]


def memory(kind: Any, c: list[int]) -> list[int]:
    """The sensor's memory with its CRC where the kind has it."""
    words = [0, *c, 0] if kind is BAROMETER else [0, *c]
    crc = pressure24.crc4(words)
    words[7 if kind is BAROMETER else 0] |= crc if kind is BAROMETER else crc << 12
    return words


@pytest.mark.parametrize(("kind", "c", "d1", "d2", "pressure", "temperature"), PRINTED)
def test_the_printed_examples(
    kind: Any, c: list[int], d1: int, d2: int, pressure: int, temperature: float, sleeps: list[int]
) -> None:
    assert compensated([0, *c], d1, d2, kind) == (pressure, temperature)
    sensor = Pressure24(Sensor(memory(kind, c), d1, d2, sleeps), kind)
    assert sensor.read() == (pressure, temperature)


@pytest.mark.parametrize("kind", [BAROMETER, IMMERSION])
def test_damaged_coefficients_are_refused(kind: Any, sleeps: list[int]) -> None:
    good = memory(kind, PRINTED[0][1] if kind is BAROMETER else PRINTED[1][1])
    for word in range(1, 7):
        for bit in range(16):
            words = list(good)
            words[word] ^= 1 << bit
            with pytest.raises(OSError, match="CRC"):
                Pressure24(Sensor(words, 1, 1, sleeps), kind)


def test_a_conversion_that_was_not_ready_is_an_error(sleeps: list[int]) -> None:
    with pytest.raises(OSError, match="no conversion"):
        Pressure24(Sensor(memory(BAROMETER, PRINTED[0][1]), 0, 8569150, sleeps), BAROMETER).read()


class Pin:
    def __init__(self, *counts: int) -> None:
        self.counts = list(counts)

    def read_u16(self) -> int:
        self.counts.append(self.counts.pop(0))
        return self.counts[-1]


def test_a_ratio_cares_for_neither_supply_nor_reference() -> None:
    for supply in (40000, 55000, 65535):
        assert Ratio(Pin(supply // 2), Pin(supply)).read() == pytest.approx(32767, abs=1)
    assert Ratio(Pin(0), Pin(50000)).read() == 0 and Ratio(Pin(50000), Pin(50000)).read() == 65535
    noisy = Ratio(Pin(24990, 25010, 25000, 25000), Pin(50000))
    assert noisy.read() == pytest.approx(32768, abs=1)


def test_a_sensor_without_supply_is_an_error() -> None:
    with pytest.raises(OSError, match="no supply"):
        Ratio(Pin(3), Pin(100)).read()
