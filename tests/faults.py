"""What fails in the field, for tests: a broker that is killed and forgets, a wire that is cut or goes silent."""

from __future__ import annotations

import contextlib
import socket
import subprocess
import threading
import time
from pathlib import Path

import needs


class Mosquitto:
    """A broker on one port that can be killed, and forgets what it held: its persistence is off."""

    def __init__(self, folder: Path) -> None:
        self.program = needs.need("mosquitto", "Debian's mosquitto")
        with socket.socket() as probe:
            probe.bind(("127.0.0.1", 0))
            self.port = probe.getsockname()[1]
        self.configuration = folder / "m.conf"
        self.configuration.write_text(
            f"listener {self.port} 127.0.0.1\nallow_anonymous true\nmax_queued_messages 100000\nlog_type error\nuser root\n"
        )

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
