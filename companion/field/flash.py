"""A bundle onto a board over its serial port, each file proved there by its hash; spool, settings and secrets stay as they are."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

from companion.book.files import FileFault

BEGIN = "/main.py"  # goes last: until the rest is proved the board begins nothing new
OWN = ("/spool.0", "/spool.1", "/settings.0", "/settings.1", "/secrets.json")  # the board's own files: no bundle holds them


def flash(folder: Path, port: str, say: Callable[[str], None] = lambda line: None) -> int:
    """Copy a bundle to the board on a serial port; returns how many files were written. FileFault.

    A file that is there already, byte for byte, is not written again. say: where a line for people goes.
    """
    files = _files(folder)
    try:
        from mpremote.transport import TransportError
        from mpremote.transport_serial import SerialTransport
    except ImportError:
        raise FileFault("mpremote is missing: pip install 'levelbook[board]'") from None
    try:
        board = SerialTransport(port, wait=0)
    except (TransportError, OSError) as error:
        raise FileFault(f"{port}: no board answers ({error}); name its serial port, e.g. /dev/ttyACM0 or COM5") from None
    try:
        board.enter_raw_repl()
        written = 0
        for path, data in files.items():
            if _hash_there(board, path) == hashlib.sha256(data).digest():
                continue
            _folders(board, path)
            board.fs_writefile(path, data)
            if _hash_there(board, path) != hashlib.sha256(data).digest():
                raise FileFault(f"{port}: {path} is not there as it was sent; flash again, and look at the cable")
            written += 1
            say(f"{path}: {len(data):,} bytes")
        return written
    except (TransportError, OSError) as error:
        raise FileFault(f"{port}: {str(error).strip().splitlines()[-1]}; flash again: what is there already is kept") from None
    finally:
        _restart(board)


def _files(folder: Path) -> dict[str, bytes]:
    """The bundle's files by their path on the board, checked against its manifest."""
    try:
        manifest = json.loads((folder / "manifest.json").read_text())
        told = {str(path): str(entry["sha256"]) for path, entry in manifest["files"].items()}
    except (OSError, ValueError, KeyError, TypeError, AttributeError):
        raise FileFault(f"{folder}: is no bundle; make one with levelbook pack") from None
    files = {}
    for path in sorted(told, key=lambda path: (path == BEGIN, path)):
        file = folder / path.lstrip("/")
        data = file.read_bytes() if file.is_file() else b""
        if hashlib.sha256(data).hexdigest() != told[path] or path in OWN or ".." in path:
            raise FileFault(f"{file}: is not as the manifest says; make the bundle anew with levelbook pack")
        files[path] = data
    return files


def _hash_there(board: Any, path: str) -> bytes:
    return bytes(board.fs_hashfile(path, "sha256")) if board.fs_exists(path) else b""


def _folders(board: Any, path: str) -> None:
    parts = path.split("/")[1:-1]
    for n in range(1, len(parts) + 1):
        folder = "/" + "/".join(parts[:n])
        if not board.fs_exists(folder):
            board.fs_mkdir(folder)


def _restart(board: Any) -> None:
    """Let the board begin anew, with what it holds now."""
    try:
        board.exec_raw_no_follow("import machine\nmachine.reset()\n")
        board.close()
    except Exception:  # the port goes away with the board
        return
