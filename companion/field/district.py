"""The demo's district, invented: five tanks of different shapes and sensors, their site file, tables and lives."""

from __future__ import annotations

import math
from pathlib import Path

from companion.book.files import FileFault
from companion.field.fleet import Life

SITE = """\
# The demo's site file, written by `levelbook demo`. Everything in it is invented.
format = 1

[site]
name = "Fernbank"
timezone = "{timezone}"
datum = "Fernbank datum"
latitude = 51.8
units = "metric"

[store]
url = "sqlite:book.db"

[mqtt]
host = "127.0.0.1"
port = {port}

[tank.hill]                       # an upright cylinder, gauge sensor, 4-20 mA read by 16 bits
title = "Hill reservoir"
zone = "upper"
floor_elevation = "186.2 m"
height = "7.5 m"
overflow_level = "7.1 m"
low_level = "1.5 m"
shape = {{ kind = "upright_cylinder", diameter = "18.4 m", height = "7.5 m" }}
default_temperature = "11 degC"
[tank.hill.sensor]
signal = "counts"
pressure = "gauge"
height = "0.12 m"
reference_elevation = "194.0 m"
loop = [[6553, "4 mA"], [32767, "20 mA"]]
scale = [["4 mA", "0 bar"], ["20 mA", "0.8 bar"]]
counts_limits = [0, 65535]
accuracy = "0.1 %"

[tank.tower]                      # an elevated spheroid, by its strapping table
title = "Tower"
zone = "upper"
floor_elevation = "196.0 m"
height = "8.0 m"
overflow_level = "7.6 m"
low_level = "2.0 m"
strapping = "tower.csv"
default_temperature = "11 degC"
[tank.tower.sensor]
signal = "counts"
pressure = "gauge"
height = "0.05 m"
reference_elevation = "204.5 m"
loop = [[6553, "4 mA"], [32767, "20 mA"]]
scale = [["4 mA", "0 bar"], ["20 mA", "1 bar"]]
counts_limits = [0, 65535]
accuracy = "0.1 %"

[tank.vale]                       # a ground tank with sloping sides, absolute sensor and barometer
title = "Vale basin"
zone = "lower"
floor_elevation = "141.5 m"
height = "4.6 m"
overflow_level = "4.3 m"
low_level = "0.9 m"
strapping = "vale.csv"
default_temperature = "12 degC"
[tank.vale.sensor]
signal = "counts"
pressure = "absolute"
height = "0.10 m"
reference_elevation = "146.5 m"
scale = [[1638, "0 bar"], [14746, "2 bar"]]
counts_limits = [0, 16383]
accuracy = "0.1 %"

[tank.creek]                      # told in US units, a ratiometric sensor
title = "Creek standpipe"
zone = "lower"
floor_elevation = "480.0 ft"
height = "52 ft"
overflow_level = "50 ft"
low_level = "12 ft"
shape = {{ kind = "upright_cylinder", diameter = "22 ft", height = "52 ft" }}
default_temperature = "54 degF"
[tank.creek.sensor]
signal = "counts"
pressure = "gauge"
height = "0.4 ft"
reference_elevation = "534 ft"
scale = [[3277, "0 psi"], [29491, "25 psi"]]
counts_limits = [0, 32767]
accuracy = "0.25 %"

[tank.lodge]                      # a small tank, loop current sent as it is
title = "Lodge tank"
zone = "upper"
floor_elevation = "212.4 m"
height = "3.0 m"
overflow_level = "2.8 m"
low_level = "0.6 m"
shape = {{ kind = "upright_cylinder", diameter = "4.2 m", height = "3.0 m" }}
default_temperature = "10 degC"
[tank.lodge.sensor]
signal = "current"
pressure = "gauge"
height = "0.08 m"
reference_elevation = "215.6 m"
scale = [["4 mA", "0 mbar"], ["20 mA", "400 mbar"]]
accuracy = "0.2 %"
"""

LIVES = {
    "hill": Life(62.0, 118.0, 3.4, 6.6),
    "tower": Life(38.0, 84.0, 3.6, 7.2, noise=3.0),
    "vale": Life(95.0, 170.0, 1.8, 3.9, noise=1.0, has_barometer=True),
    "creek": Life(21.0, 40.0, 8.0, 14.4, noise=2.0, has_temperature=False),
    "lodge": Life(1.6, 4.5, 1.1, 2.5, noise=3e-6),
}


def check_folder(folder: Path) -> None:
    """Refuse a folder that holds anything but an earlier demo, so that no one's site or book is written over. FileFault."""
    if not folder.exists():
        return
    if not folder.is_dir():
        raise FileFault(f"{folder}: is a file; name a folder for the demo's files with --out")
    site = folder / "site.toml"
    ours = site.is_file() and site.read_bytes().startswith(SITE.partition("\n")[0].encode())
    if not ours and any(folder.iterdir()):
        raise FileFault(f"{folder}: holds files that are not a demo's; name a new or an empty folder with --out")


def write_district(folder: Path, port: int, timezone: str) -> Path:
    """Write the district's site file and tables into a folder; returns the site file's path."""
    folder.mkdir(parents=True, exist_ok=True)
    site = folder / "site.toml"
    site.write_text(SITE.format(port=port, timezone=timezone))
    (folder / "tower.csv").write_text(_table("level [m],volume [m^3]", [(h, _spheroid(h, 7.0, 4.0)) for h in _steps(8.0, 0.2)]))
    (folder / "vale.csv").write_text(_table("level [cm],volume [L]", [(100 * h, 1000 * _basin(h)) for h in _steps(4.6, 0.2)]))
    return site


def _steps(height: float, step: float) -> list[float]:
    return [n * step for n in range(round(height / step) + 1)]


def _spheroid(h: float, a: float, b: float) -> float:
    """Volume [m3] below h in a spheroid of half axes a (level) and b (upright)."""
    return math.pi * a**2 * h**2 * (3.0 * b - h) / (3.0 * b**2)


def _basin(h: float) -> float:
    """Volume [m3] below h in a basin of 18 by 26 m at its floor, sides sloping 1 in 2."""
    return 18.0 * 26.0 * h + (18.0 + 26.0) * 0.5 * h**2 + h**3 / 3.0


def _table(header: str, rows: list[tuple[float, float]]) -> str:
    return header + "\n" + "".join(f"{level:.6g},{volume:.8g}\n" for level, volume in rows)
