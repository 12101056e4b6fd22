"""Everything killed, in turn and at random: a logger that obeys receipts, the broker, two desks, the server of their one book.

    python -m tests.chaos [ROUNDS] [SEED]       the long form: 200 rounds (make chaos); tests/intake/test_chaos.py runs a short one

A round waits a moment and kills one with SIGKILL; what was killed is started again. At the end the book has each reading that the
logger took exactly once, with its value, and nothing is missing.
"""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Sequence
from pathlib import Path

sys.path[:0] = [str(Path(__file__).parent), str(Path(__file__).parent / "core_mp")]

import needs
import postgres
from boards import board, start
from faults import Mosquitto
from sites import SITE, site_of

from companion.book.store import open_book
from companion.intake.listen import Listener
from companion.settings.site import load_site

A_ROUND = 150  # readings: less than a second's worth of receipts lets through


def listener(folder: Path) -> subprocess.Popen[str]:
    """`levelbook listen` on a site's folder."""
    command = [
        sys.executable,
        "-c",
        "import sys; from companion.cli import main; sys.exit(main())",
        "listen",
        str(folder / "site.toml"),
    ]
    return subprocess.Popen(command, env=os.environ | {"PYTHONPATH": str(needs.ROOT)}, stderr=subprocess.DEVNULL, text=True)


def chaos(
    folder: Path,
    rounds: int,
    seed: int,
    url: str,
    server: postgres.Server | None = None,
    receipts: bool = True,
    only: Sequence[str] = (),
) -> dict[str, int]:
    """Rounds of kills; returns how often each was killed. AssertionError where the book is not whole, but for what its gaps tell of.

    server: of a book in PostgreSQL. receipts: the logger obeys them; else it lets readings go at the broker's word. only: what is killed.
    """
    rng = random.Random(seed)
    readings = A_ROUND * rounds
    flash = board(folder / "board", every_s=1, report_s=60, again_s=1200, receipts=int(receipts))
    broker = Mosquitto(folder)
    desks = []
    for name in ("desk-a", "desk-b")[: 2 if server else 1]:
        (folder / name).mkdir()
        site_of(folder / name, SITE + f'[mqtt]\nport = {broker.port}\n[store]\nurl = "{url}"\n')
        desks.append(folder / name)
    broker.start()
    for desk in desks:  # the subscriptions exist from now on
        stop, one = threading.Event(), Listener(load_site(desk / "site.toml"), lambda line: None)
        first = threading.Thread(target=one.run, args=(stop,))
        first.start()
        assert one.connected.wait(10)
        stop.set()
        first.join()
    listening = [listener(desk) for desk in desks]
    logger = start("field_day.py", flash, broker.port, flash, readings)
    done: dict[str, int] = {}
    while not receipts and not _count(url):
        time.sleep(0.2)
    kinds = list(only) or ["logger", "broker", *(["server"] if server else []), *["desk"] * len(desks)]
    try:
        for n in range(rounds):
            time.sleep(rng.uniform(0.2, 1.5))
            kind = kinds[n] if n < len(kinds) else rng.choice(kinds)
            done[kind] = done.get(kind, 0) + 1
            if kind == "logger":
                logger.send_signal(signal.SIGKILL)
                logger.communicate()
                logger = start("field_day.py", flash, broker.port, flash, readings)
            elif kind == "broker":
                broker.kill()
                time.sleep(rng.uniform(0.0, 0.5))
                broker.start()
            elif kind == "server" and server:
                server.kill()
                time.sleep(rng.uniform(0.0, 0.5))
                server.start()
            else:
                which = rng.randrange(len(desks))
                listening[which].send_signal(signal.SIGKILL)
                listening[which].wait()
                listening[which] = listener(desks[which])
        said, errors = logger.communicate(timeout=60 + 2 * rounds)
        assert logger.returncode == 0 and "dropped 0" in said, said[-500:] + errors[-1500:]
        if not receipts:
            _settled(url, readings)
    finally:
        logger.kill()
        for child in listening:
            child.send_signal(signal.SIGTERM)
        for child in listening:
            child.wait(30)
        broker.kill()
    with open_book(url) as book:
        found = book.readings("north")
        assert found["life"].nunique() == 1 and found["seq"].is_unique
        missing = {seq for gap in book.gaps() for seq in range(gap.first, gap.last + 1)}
        assert set(range(int(found["seq"].max()) + 1)) == set(found["seq"]) | missing and not missing & set(found["seq"])
        if receipts or "broker" not in kinds:
            assert not missing and set(range(readings)) <= set(found["seq"])
        done["missing"] = len(missing)
        assert (found["raw"] == 7000 + found["seq"] % 20000).all() and not book.aside.entries()
    return done


def _settled(url: str, readings: int) -> None:
    """Wait until what the broker still has is in the book: all of it, or as much as comes."""
    count, since, end = -1, time.monotonic(), time.monotonic() + 120
    while count < readings and time.monotonic() < min(end, since + 20):
        time.sleep(0.5)
        now = _count(url)
        if now != count:
            count, since = now, time.monotonic()


def _count(url: str) -> int:
    with open_book(url) as book:
        return len(book.readings("north"))


def main() -> None:
    rounds, seed = (int(word) for word in (sys.argv[1:] + ["200", "1"][len(sys.argv) - 1 :])[:2])
    with tempfile.TemporaryDirectory() as name:
        server = postgres.server()
        began = time.monotonic()
        done = chaos(Path(name), rounds, seed, server.database(), server)
        print(f"{rounds} rounds in {time.monotonic() - began:.0f} s, killed {done}: {rounds * A_ROUND:,} readings, each once")


if __name__ == "__main__":
    main()
