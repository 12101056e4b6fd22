"""An MQTT broker of our own, on loopback, for as long as it is needed: a private mosquitto, or else PyPI's iotcore.

It runs on a leash (leash.py): it ends with the block that asked for it, and also when this program is killed.
"""

from __future__ import annotations

import contextlib
import importlib.util
import os
import shutil
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

HOST = "127.0.0.1"
CONFIGURATION = """\
listener {port} 127.0.0.1
allow_anonymous true
persistence true
persistence_location {folder}/
autosave_on_changes true
autosave_interval 100
max_inflight_messages 1000
max_queued_messages 100000
log_type error
"""
LEASH = Path(__file__).with_name("leash.py")
WAIT_S = 10.0


class BrokerError(Exception):
    """No broker could be started; the message says what to install."""


@dataclass(frozen=True)
class Broker:
    """Where a running broker is, and which program it is."""

    host: str
    port: int
    program: str


@contextlib.contextmanager
def local_broker(port: int = 0, program: str | None = None) -> Iterator[Broker]:
    """A broker that is gone when the block ends. port: 0 takes a free one. program: "mosquitto" or "iotcore", else whichever is there.

    The environment variable LEVELBOOK_BROKER names the program where the caller does not.
    """
    port, program = port or _free_port(), program or os.environ.get("LEVELBOOK_BROKER")
    with tempfile.TemporaryDirectory(prefix="levelbook-broker-") as folder:
        name, command = _command(program, port, Path(folder))
        child = subprocess.Popen(
            [sys.executable, "-I", "-S", str(LEASH), folder, *command],
            stdin=subprocess.PIPE, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, start_new_session=True)  # fmt: skip
        try:
            _await(child, port, name)
            yield Broker(HOST, port, name)
        finally:
            assert child.stdin is not None
            child.stdin.close()
            child.wait()


def _command(program: str | None, port: int, folder: Path) -> tuple[str, list[str]]:
    mosquitto = shutil.which("mosquitto") or shutil.which("mosquitto", path="/usr/sbin:/usr/local/sbin")
    if mosquitto and program in (None, "mosquitto"):
        configuration = folder / "mosquitto.conf"
        configuration.write_text(CONFIGURATION.format(port=port, folder=folder) + ("user root\n" if _is_root() else ""))
        return "mosquitto", [mosquitto, "-c", str(configuration)]
    if importlib.util.find_spec("iotcore") and program in (None, "iotcore"):
        return "iotcore", [sys.executable, "-m", "iotcore", "--listen", HOST, "--port", str(port), "--log-level", "ERROR"]
    raise BrokerError(f"no broker to start: install {program or 'mosquitto (Debian), or iotcore (PyPI)'}")


def _is_root() -> bool:
    return hasattr(os, "geteuid") and os.geteuid() == 0


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind((HOST, 0))
        return int(probe.getsockname()[1])


def _await(child: subprocess.Popen[bytes], port: int, name: str) -> None:
    end = time.monotonic() + WAIT_S
    while time.monotonic() < end:
        if child.poll() is not None:
            raise BrokerError(f"{name} on port {port} ended at once with status {child.returncode}; try another port")
        with contextlib.suppress(OSError), socket.create_connection((HOST, port), timeout=0.2):
            return
        time.sleep(0.05)
    raise BrokerError(f"{name} does not answer on port {port}")
