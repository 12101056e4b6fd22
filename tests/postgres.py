"""A real PostgreSQL of the tests' own, in a folder, on a socket of its own: one server a test process, a database a test."""

from __future__ import annotations

import atexit
import contextlib
import itertools
import os
import shutil
import subprocess
import tempfile
import time
from pathlib import Path

import needs

_servers: list[Server] = []
_numbers = itertools.count(1)


class Server:
    """A server that can be killed and started again; it ends with the tests."""

    def __init__(self) -> None:
        needs.need("psycopg", "PyPI's psycopg[binary]")
        found = sorted(Path("/usr/lib/postgresql").glob("*/bin/initdb"))
        self.bin = Path(needs.need(str(found[-1]) if found else "initdb", "Debian's postgresql")).parent
        self.folder = Path(tempfile.mkdtemp(prefix="levelbook-postgres-"))
        if os.geteuid() == 0:
            shutil.chown(self.folder, "postgres")
        self._run("initdb", "-A", "trust", "-U", "postgres", "-D", str(self.folder / "data"))
        self.start()

    def _run(self, program: str, *words: str) -> None:
        as_user = ["runuser", "-u", "postgres", "--"] if os.geteuid() == 0 else []  # it refuses to run as root
        subprocess.run([*as_user, str(self.bin / program), *words], check=True, capture_output=True, cwd=self.folder)

    def start(self) -> None:
        options = f"-k {self.folder} -c listen_addresses='' -c max_connections=50"
        self._run("pg_ctl", "-D", str(self.folder / "data"), "-o", options, "-w", "-l", str(self.folder / "log"), "start")

    def kill(self) -> None:
        """SIGKILL, as a power cut would."""
        pid = int((self.folder / "data/postmaster.pid").read_text().split()[0])
        os.kill(pid, 9)
        end = time.monotonic() + 10
        while Path(f"/proc/{pid}").exists() and time.monotonic() < end:
            time.sleep(0.02)

    def database(self) -> str:
        """The URL of a new database."""
        import psycopg

        name = f"book_{next(_numbers)}"
        with psycopg.connect(self.url("postgres"), autocommit=True) as db:
            db.execute(f"CREATE DATABASE {name}")
        return self.url(name)

    def url(self, name: str) -> str:
        return f"postgresql://postgres@/{name}?host={self.folder}"

    def end(self) -> None:
        with contextlib.suppress(subprocess.CalledProcessError):  # it was killed
            self._run("pg_ctl", "-D", str(self.folder / "data"), "-m", "immediate", "stop")
        shutil.rmtree(self.folder, ignore_errors=True)


def server() -> Server:
    """The test process's server, started when it is first asked for."""
    if not _servers:
        _servers.append(Server())
        atexit.register(_servers[0].end)
    return _servers[0]
