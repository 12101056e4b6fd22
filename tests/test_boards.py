"""The examples' boards: each main.py with a board simulated around it, its bundle, and the level that comes of a known signal."""

from __future__ import annotations

import runpy
import sys
import time
import types
from pathlib import Path
from typing import Any

import needs
import pytest
from test_drivers import PRINTED, Converter, Pin, Sensor, memory

from companion.field.pack import pack
from companion.settings.site import load_site
from core_mp import start
from core_mp.drivers.pressure24 import BAROMETER, IMMERSION
from core_mp.settings import Settings

BOARDS = needs.ROOT / "examples/boards"


class Wlan:
    """A station that is connected at its third look."""

    def __init__(self, kind: int) -> None:
        self.looks, self.on, self.to = 0, False, ("", "")

    def active(self, on: bool) -> None:
        self.on = on

    def isconnected(self) -> bool:
        self.looks += 1
        return self.looks > 3

    def connect(self, name: str, password: str) -> None:
        self.to = (name, password)

    def disconnect(self) -> None:
        self.looks = 0


class Watchdog:
    def __init__(self, timeout: int) -> None:
        self.timeout, self.fed = timeout, 0

    def feed(self) -> None:
        self.fed += 1


class TwoSensors:
    """Sensor in the tank and barometer on one bus, by their addresses."""

    def __init__(self, slept: list[int]) -> None:
        self.at = {}
        for address, (kind, c, d1, d2, *_) in zip((0x77, 0x76), PRINTED, strict=True):
            self.at[address] = Sensor(memory(kind, c), d1, d2, slept)
        assert PRINTED[0][0] is BAROMETER and PRINTED[1][0] is IMMERSION

    def writeto(self, address: int, data: bytes) -> None:
        if address not in self.at:
            raise OSError(19)
        self.at[address].writeto(0x76, data)

    def readfrom(self, address: int, n: int) -> bytes:
        return self.at[address].readfrom(address, n)


def board(monkeypatch: pytest.MonkeyPatch, name: str, bus: Any, pins: dict[int, Pin]) -> tuple[Any, Any, Any, float]:
    """What a main.py hands to the logger: sensor, network, watchdog; and how long it may rest at once [s]."""
    machine, network = types.ModuleType("machine"), types.ModuleType("network")
    adc = type("ADC", (), {"ATTN_11DB": 3, "__new__": lambda cls, pin, atten=None: pins[pin]})
    vars(machine).update(ADC=adc, I2C=lambda n, sda, scl, freq: bus, WDT=Watchdog, Pin=lambda n: n)
    vars(network).update(WLAN=Wlan, STA_IF=0)
    monkeypatch.setitem(sys.modules, "machine", machine)
    monkeypatch.setitem(sys.modules, "network", network)
    handed: list[Any] = []
    monkeypatch.setattr(start, "secrets", lambda folder="": {"wifi": ["network", "password"]})
    monkeypatch.setattr(start, "logger", lambda sensor, network, watchdog: (sensor, network, watchdog))
    monkeypatch.setattr(start, "run", lambda logger, most_s=5: handed.append((*logger, most_s)))
    runpy.run_path(str(BOARDS / name / "main.py"))
    [parts] = handed
    return parts


def level(tmp_path: Path, tank: str, reading: tuple[Any, ...], program: Path) -> float:
    """The level [m] that a logger of the tank's bundle makes of a reading."""
    site = load_site(BOARDS / "site.toml")
    made = pack(site, site.tank(tank), tmp_path / tank, program)
    assert "/main.py" in made.files and any("drivers" in path for path in made.files)
    core = Settings(str(made.folder)).core
    return float(core.measure(*reading[:4])[2])


@pytest.fixture(autouse=True)
def sleeps(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    slept: list[int] = []
    monkeypatch.setattr(time, "sleep_ms", slept.append, raising=False)
    return slept


def test_a_loop_on_an_esp32(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """12 mA of a 1 bar transmitter over 150 ohm is 1.8 V, half a bar and 5.1 m."""
    sensor, _, watchdog, _ = board(monkeypatch, "loop-esp32", Converter(1.8, 0, 0, 0), {35: Pin(36000)})
    reading = sensor.read()
    assert reading[0] == 14400 and reading[4] == pytest.approx(3.63, abs=0.01) and watchdog.timeout == 120000
    assert level(tmp_path, "loop", reading, BOARDS / "loop-esp32/main.py") == pytest.approx(
        0.1 + 50000 / (999.1 * 9.819), abs=2e-3
    )


def test_a_ratiometric_sensor_on_an_rp2040w(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """2.5 V of 5 V, both over 3/5 of a divider: half a bar."""
    sensor, wifi, watchdog, most_s = board(monkeypatch, "ratio-rp2040w", None, {26: Pin(29789), 27: Pin(59578)})
    reading = sensor.read()
    assert reading[0] == pytest.approx(32768, abs=1)
    assert level(tmp_path, "ratio", reading, BOARDS / "ratio-rp2040w/main.py") == pytest.approx(
        0.1 + 50000 / (999.1 * 9.819), abs=2e-3
    )
    assert most_s * 1000 < watchdog.timeout < 8388  # what this board's watchdog can be set to
    wifi.up()
    assert wifi._wlan.to == ("network", "password") and watchdog.fed == 2
    wifi.down()
    assert not wifi._wlan.on
    wifi._wlan.isconnected = lambda: False
    with pytest.raises(OSError, match="network does not answer"):
        wifi.up()


def test_a_digital_sensor_and_a_barometer_on_an_esp32(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path, sleeps: list[int]
) -> None:
    """399,980 Pa in the water under 100,009 Pa of air: beyond this tank, but what the makers' examples give."""
    bus = TwoSensors(sleeps)
    sensor, *_ = board(monkeypatch, "digital-esp32", bus, {})
    reading = sensor.read()
    assert reading == (399980, 19.81, 100009, None, None)
    assert level(tmp_path, "digital", reading, BOARDS / "digital-esp32/main.py") == pytest.approx(
        0.1 + 299971 / (998.25 * 9.819), abs=0.05
    )
    there = bus.at.pop(0x77)
    assert sensor.read()[2] is not None or sensor.air is None
    bus.at[0x77] = there
    assert sensor.read()[2] == 100009
