"""The same core_mp files on every engine they must run on: CPython, MicroPython's unix and WebAssembly ports, a 16 KB board.

One program takes 200 readings over 0 to 40 m of water through the whole chain (4-20 mA, density, air column, 40-row table)
and prints each figure's float bits; CPython's doubles are the truth. On the board one instruction is 64 ns of the emulated
clock, so that its gates are counts, the same on any machine.
"""

from __future__ import annotations

import struct
import subprocess
import sys

import emulated_board
import needs
import pytest
from ports import on_unix, on_wasm

from core_mp.transmitter import Transmitter

SETUP = """
from array import array
levels = array('f', (float(i) for i in range(40)))
volumes = array('f', (50.0 * i + 0.25 * i * i for i in range(40)))
sensor = transmitter.Transmitter([(0.004, 0.0), (0.02, 4e5)], [(6553, 0.004), (32767, 0.02)])
t = tank.Tank(sensor, strapping.StrappingTable(levels, volumes), water.water_density, None, 0.125, 1450.0, 9.8062, 12.0,
              None, -41.0, 85066.0, 1.215e-5)
out = [0, 0.0, 0.0, 0.0, 0.0]
"""
PROBE = """
x = 1
for n in range(200):
    x = (x * 757 + 211) % 32749
    t.measure(6553 + x * 4 // 5, (x * 7 % 400) / 10, 84000.0 + x % 997, None, out)
    print(out[0], end='')
    for figure in out[1:]:
        print(' %08x' % struct.unpack('<I', struct.pack('<f', figure))[0], end='')
    print()
for raw in (5000, 5900, 6000, 32800, 34000, 7000):
    print(t.measure(raw, None if raw == 7000 else 12.0, 85000.0, None, out)[0], end=' ')
print()
"""
PACKAGED = "import struct\nfrom core_mp import strapping, tank, transmitter, water\n"
STATUS = [5, 20, 20, 64, 72, 128]  # at the raw signals that end PROBE, see core_mp/status.py

SINGLE = {"pressure_pa": 0.05, "level_m": 2e-5, "volume_m3": 1e-3, "grade_m": 1.3e-4}  # half a step of a 32-bit float and more
BOARD = {"pressure_pa": 1.0, "level_m": 1e-4, "volume_m3": 1e-5 * 2330.25, "grade_m": 6e-4}  # the gates of the 16 KB board


def figures(printed: str) -> tuple[list[list[float]], list[int]]:
    """The printed readings, [status, pressure, level, volume, grade] each, and the status bits of the odd signals."""
    *rows, odd = [line.split() for line in printed.strip(" \n\0").splitlines()]
    assert len(rows) == 200
    single = [[struct.unpack("<f", struct.pack("<I", int(text, 16)))[0] for text in row[1:]] for row in rows]
    return [[int(row[0]), *four] for row, four in zip(rows, single, strict=True)], [int(text) for text in odd]


@pytest.fixture(scope="module")
def truth() -> list[list[float]]:
    """The same readings in CPython's doubles."""
    names: dict[str, object] = {}
    exec(PACKAGED + SETUP, names)
    rows, x = [], 1
    for _ in range(200):
        x = (x * 757 + 211) % 32749
        rows.append(list(names["t"].measure(6553 + x * 4 // 5, (x * 7 % 400) / 10, 84000.0 + x % 997, None, [0.0] * 5)))
    return rows


def check(printed: str, truth: list[list[float]], allowed: dict[str, float]) -> None:
    rows, odd = figures(printed)
    assert odd == STATUS
    assert [row[0] for row in rows] == [row[0] for row in truth]
    for column, (name, most) in enumerate(allowed.items(), 1):
        worst = max(abs(row[column] - true[column]) for row, true in zip(rows, truth, strict=True))
        assert worst <= most, f"{name}: off by {worst:.3g}, {most:.3g} allowed"


def test_the_readings_cover_forty_metres(truth: list[list[float]]) -> None:
    assert min(row[2] for row in truth) < 1.0 and max(row[2] for row in truth) > 39.0


def test_cpython_prints_the_same_figures(truth: list[list[float]]) -> None:
    done = subprocess.run(
        [sys.executable, "-c", PACKAGED + SETUP + PROBE], capture_output=True, text=True, cwd=needs.ROOT, check=True
    )
    check(done.stdout, truth, SINGLE)


def test_unix_port_agrees_with_cpython(truth: list[list[float]]) -> None:
    check(on_unix("-c", PACKAGED + SETUP + PROBE), truth, SINGLE)


def test_webassembly_port_agrees_with_cpython(truth: list[list[float]]) -> None:
    modules = ("density", "lines", "salt", "strapping", "tank", "transmitter", "water")
    check(on_wasm(PACKAGED + SETUP + PROBE, *modules), truth, SINGLE)


MODULES = ("tank", "lines", "density")  # what a reading needs; the rest works its numbers out beforehand
LOAD = "import gc\n" + "".join(f"import {name}\ngc.collect()\n" for name in MODULES)


def prepared(
    levels: str = "(float(i) for i in range(40))", volumes: str = "(50.0 * i + 0.25 * i * i for i in range(40))"
) -> str:
    """Set-up with the numbers that a desk works out for a board: SETUP's tank without transmitter.py and strapping.py."""
    sensor = Transmitter([(0.004, 0.0), (0.02, 4e5)], [(6553, 0.004), (32767, 0.02)])
    return f"""
from array import array
table = lines.Rows(array('f', {levels}), array('f', {volumes}))
t = tank.Tank(lines.Line({sensor.line!r}, {sensor.limits!r}), table, density.fresh_density, None, 0.125, 1450.0,
              9.8062, 12.0, None, -41.0, 85066.0, 1.215e-5)
out = [0, 0.0, 0.0, 0.0, 0.0]
gc.collect()
"""


def on_board(script: str, modules: tuple[str, ...] = MODULES) -> str:
    needs.emulated_board()
    return emulated_board.run(script, emulated_board.core(*modules))


def test_16_kb_board_agrees_with_cpython_within_its_floats(truth: list[list[float]]) -> None:
    check(on_board("import struct\n" + LOAD + prepared() + PROBE), truth, BOARD)


def test_16_kb_board_runs_the_set_up_too() -> None:
    """transmitter.py and strapping.py work the numbers out there, too."""
    script = """
import gc
import transmitter
gc.collect()
import strapping
gc.collect()
sensor = transmitter.Transmitter([(0.004, 0.0), (0.012, 1e5), (0.02, 4e5)], [(6553, 0.004), (32767, 0.02)])
north = strapping.StrappingTable([0.0, 1.0, 2.0], [0.0, 20.0, 42.0])
print(sensor.status(5800), int(sensor.pressure(26214) + 0.5), north.volume(1.5), north.level(31.0), north.area(1.5))
"""
    printed = on_board(script, ("lines", "transmitter", "strapping")).strip(" \n\0").split()
    sensor = Transmitter([(0.004, 0.0), (0.012, 1e5), (0.02, 4e5)], [(6553, 0.004), (32767, 0.02)])
    assert printed[0] == "5" and int(printed[1]) == pytest.approx(sensor.pressure(26214), abs=1.0)
    assert [float(word) for word in printed[2:]] == [31.0, 1.5, 22.0]


@pytest.mark.parametrize("name", ["earth", "status", "water", "salt"])
def test_16_kb_board_loads_the_rest_as_well(name: str) -> None:
    calls = {"earth": "print(int(earth.normal_gravity(45.0) * 1e4), int(earth.standard_pressure(1000.0)))", "status": "print(status.words(5))",
             "salt": "print(int(salt.salted(999.9668, 5.0, 35.0, 0.0)))",
             "water": "print(int(water.vapour_pressure(20.0)), int(water.liquid_density(880.0, 7e-4)(25.0)))"}  # fmt: skip
    want = {"earth": "98061 8987", "status": "loop_low under_range", "water": "2339 873", "salt": "1027"}
    modules = ("density", "salt", name) if name == "water" else (name,)
    assert on_board(f"import {name}\n{calls[name]}\n", modules).strip(" \n\0").startswith(want[name])


DAY = """
import utime
now = utime.ticks_us
total = worst = most = x = heap = start = took = warm = air = raw = 0
for n in range(300):
    x = (x * 757 + 211) % 32749
    raw = 9000 + n * 9 + x % 5
    warm = 12.0 + n // 60 * 0.1
    air = 84900.0 + x % 11
    gc.collect()
    heap = gc.mem_alloc()
    start = now()
    t.measure(raw, warm, air, None, out)
    took = now() - start
    heap = gc.mem_alloc() - heap
    total += took
    worst = max(took, worst)
    most = max(heap, most)
start = now()
start = now() - start
print(total // 300 - start, worst - start, most, out[2])
"""


def board_day() -> tuple[float, float, int, float]:
    """Instructions of a mean and of the worst reading, heap bytes of the worst, and the last level [m].

    300 readings in a row as a tank gives them: water rising 1.2 cm between two, temperature 0.1 degC an hour, barometer
    moving at each reading. The worst reading is one in which temperature and table row change together.
    """
    mean, worst, heap, level = on_board(LOAD + prepared() + DAY).strip(" \n\0").split()
    scale = 1000 / emulated_board.NS_PER_INSTRUCTION
    return int(mean) * scale, int(worst) * scale, int(heap), float(level)


def test_a_reading_costs_the_board_25000_instructions_and_no_heap() -> None:
    mean, _, heap, level = board_day()
    assert level > 7.0
    assert mean <= 25_000
    assert heap == 0


def test_a_reading_works_with_the_boards_heap_locked() -> None:
    """As in an interrupt: a reading that took any heap, even for a moment, would be a MemoryError."""
    measure = "    t.measure(raw, warm, air, None, out)\n"
    assert measure in DAY
    locked = DAY.replace(measure, "    micropython.heap_lock()\n" + measure + "    micropython.heap_unlock()\n")
    assert on_board("import micropython\n" + LOAD + prepared() + locked).strip(" \n\0").split()[2] == "0"


def board_heap() -> int:
    """Bytes of heap free on the board, as a program finds it after importing a module that sets up a tank with a 40-row table.

    What a reading needs is loaded, by numbers that the desk worked out. The module's own code is garbage once it has run.
    """
    needs.emulated_board()
    setup = LOAD + prepared("range(40)", "range(40)") + "del table, array\n"
    files = {"site.py": emulated_board.lean(setup).encode(), **emulated_board.core(*MODULES)}
    return int(emulated_board.run("import gc\nimport site\ngc.collect()\nprint(gc.mem_free())\n", files).strip(" \n\0"))


def test_the_core_leaves_the_board_room() -> None:
    assert board_heap() >= 4_500


LOOKUP = """
import lines
from array import array
import utime
n = %d
table = lines.Rows(array('H', range(n)), array('H', range(n)))
now = utime.ticks_us
held = [0] * 4
x = total = 0
for i in range(100):
    x = (x * 757 + 211) %% 32749
    level = (n - 1) * x / 32749
    start = now()
    table.find(level, held)
    total += now() - start
start = now()
start = now() - start
print(total // 100 - start)
"""


def board_lookup(rows: int) -> float:
    """Instructions of a mean look-up in an even table, at levels all over it."""
    needs.emulated_board()
    printed = emulated_board.run(LOOKUP % rows, emulated_board.core("lines"))
    return int(printed.strip(" \n\0")) * 1000 / emulated_board.NS_PER_INSTRUCTION


def test_a_thousand_rows_cost_at_most_half_more_than_ten() -> None:
    assert board_lookup(1000) <= 1.5 * board_lookup(10)
