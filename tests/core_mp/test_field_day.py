"""The logger under real MicroPython, on real MQTT, with the desk's listener: whatever is killed or cut, the book has each reading once."""

from __future__ import annotations

import random
import signal
import threading
import time
from pathlib import Path

import pytest
from boards import board, start
from faults import Link, Mosquitto
from sites import SITE, site_of

from companion.book.store import open_book
from companion.intake.listen import Listener

READINGS = 10_000


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
