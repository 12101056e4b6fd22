"""What a test needs beside Python: said in one line when it is missing; in CI a missing one fails instead of skipping."""

from __future__ import annotations

import importlib.util
import os
import shutil
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
FIRMWARE = Path("/usr/share/firmware-microbit-micropython/firmware.hex")
WASM = ROOT / "build/wasm/node_modules/@micropython/micropython-webassembly-pyscript/micropython.mjs"


def need(name: str, install: str = "") -> str:
    """The path of a program, file or module that the test needs; skips the test where it is missing.

    install: what to install, said in the skip; with LEVELBOOK_REQUIRE_ALL=1 the test fails instead.
    """
    found = shutil.which(name, path=os.environ.get("PATH", "") + os.pathsep + str(Path(sys.executable).parent) + ":/usr/sbin")
    if not found and Path(name).exists():
        found = name
    if not found and name.isidentifier() and importlib.util.find_spec(name):
        found = name
    if not found:
        line = f"{name} is missing: install {install or name}"
        pytest.fail(line) if os.environ.get("LEVELBOOK_REQUIRE_ALL") == "1" else pytest.skip(line)
    return found


def emulated_board() -> None:
    """Skip where there is no emulator or no firmware for the 16 KB board."""
    need("qemu-system-arm", "Debian's qemu-system-arm")
    need(str(FIRMWARE), "Debian's firmware-microbit-micropython")


def wasm() -> str:
    """Path of the WebAssembly MicroPython's module; skips where node or the module is missing."""
    need("node", "Debian's nodejs")
    return need(str(WASM), "npm package @micropython/micropython-webassembly-pyscript: make tools")
