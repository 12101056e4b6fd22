"""The logger under real MicroPython, on real MQTT, with the desk's listener: whatever is killed or cut, the book has each reading once."""

from __future__ import annotations

import contextlib
import random
import signal
import socket
import subprocess
import threading
import time
from pathlib import Path

import needs
import pytest
from boards import board, start
from sites import SITE, site_of

from companion.book.store import open_book
from companion.intake.listen import Listener

READINGS = 10_000


class Mosquitto:
    """A broker on one port that can be killed, and forgets what it held: its persistence is off."""

    def __init__(self, folder: Path) -> None:
        self.program = needs.need("mosquitto", "Debian's mosquitto")
        with socket.socket() as probe:
            probe.bind(("127.0.0.1", 0))
            self.port = probe.getsockname()[1]
        self.configuration = folder / "m.conf"
        self.configuration.write_text(f"listener {self.port} 127.0.0.1\nallow_anonymous true\nlog_type error\nuser root\n")

    def start(self) -> None:
        self.child = subprocess.Popen([self.program, "-c", str(self.configuration)], stderr=subprocess.DEVNULL)
        end = time.monotonic() + 10
        while time.monotonic() < end:
            with contextlib.suppress(OSError):
                socket.create_connection(("127.0.0.1", self.port), 0.2).close()
                return
            time.sleep(0.05)
        raise RuntimeError("mosquitto does not answer")

    def kill(self) -> None:
        self.child.kill()
        self.child.wait()


class Link:
    """A wire between logger and broker that can be cut, in the middle of a packet too, or go silent."""

    def __init__(self, to: int) -> None:
        self.to = to
        self.listening = socket.create_server(("127.0.0.1", 0))
        self.port = self.listening.getsockname()[1]
        self.ends: list[socket.socket] = []
        self.down = self.silent = False
        threading.Thread(target=self._accept, daemon=True).start()

    def _accept(self) -> None:
        while True:
            try:
                near, _ = self.listening.accept()
            except OSError:
                return
            try:
                far = socket.create_connection(("127.0.0.1", self.to), 1)
            except OSError:
                near.close()
                continue
            if self.down:
                near.close()
                far.close()
                continue
            self.ends += [near, far]
            for a, b in ((near, far), (far, near)):
                threading.Thread(target=self._carry, args=(a, b), daemon=True).start()

    def _carry(self, a: socket.socket, b: socket.socket) -> None:
        with contextlib.suppress(OSError):
            while data := a.recv(97):  # less than a packet, so that a cut tears one
                while self.silent:
                    time.sleep(0.01)
                b.sendall(data)
        for end in (a, b):
            with contextlib.suppress(OSError):
                end.shutdown(socket.SHUT_RDWR)

    def cut(self) -> None:
        self.down = True
        for end in self.ends:
            with contextlib.suppress(OSError):
                end.shutdown(socket.SHUT_RDWR)
        self.ends = []

    def close(self) -> None:
        self.cut()
        self.listening.close()


@pytest.mark.parametrize("seed", [1])
def test_broker_logger_and_link_fail_in_turn_and_the_book_has_each_of_10000_readings_once(tmp_path: Path, seed: int) -> None:
    rng = random.Random(seed)
    broker = Mosquitto(tmp_path)
    site = site_of(tmp_path, SITE + f"[mqtt]\nport = {broker.port}\n")
    flash = board(tmp_path / "board", every_s=1, report_s=60, again_s=1200)
    link = Link(broker.port)
    stop = threading.Event()
    broker.start()
    listener = Listener(site, lambda line: None)
    thread = threading.Thread(target=listener.run, args=(stop,))
    thread.start()
    done: dict[str, int] = {}
    try:
        assert listener.connected.wait(10)
        child = start("field_day.py", flash, link.port, flash, READINGS)
        end = time.monotonic() + 120
        while child.poll() is None:
            assert time.monotonic() < end, "the logger does not come to its end"
            time.sleep(rng.uniform(0.1, 1.2))
            fault = rng.choice(["broker", "logger", "cut", "silence"])
            done[fault] = done.get(fault, 0) + 1
            if fault == "broker":
                broker.kill()
                time.sleep(rng.uniform(0.0, 0.5))
                broker.start()
            elif fault == "logger" and child.poll() is None:
                child.send_signal(signal.SIGKILL)
                child.communicate()
                child = start("field_day.py", flash, link.port, flash, READINGS)
            elif fault == "cut":
                link.cut()
                time.sleep(rng.uniform(0.0, 0.5))
                link.down = False
            else:
                link.silent = True
                time.sleep(rng.uniform(0.0, 0.5))
                link.silent = False
        said, errors = child.communicate(timeout=10)
        assert child.returncode == 0, said[-1500:] + errors[-1500:]
        assert "dropped 0" in said and len(done) == 4
    finally:
        stop.set()
        thread.join(10)
        broker.kill()
        link.close()
        child.kill()
    with open_book(site.store_url) as book:
        found = book.readings("north")
    assert found["life"].nunique() == 1 and found["seq"].is_unique
    assert set(range(READINGS)) <= set(found["seq"])
    assert (found["raw"] == 7000 + found["seq"] % 20000).all()
