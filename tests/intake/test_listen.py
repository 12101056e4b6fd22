"""Real mosquitto, real packs: what a logger publishes stands in the book once, and the logger gets its receipt."""

from __future__ import annotations

import contextlib
import json
import os
import signal
import sqlite3
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import needs
import paho.mqtt.client as mqtt
import pytest
from paho.mqtt.enums import CallbackAPIVersion
from sites import SITE, site_of

from companion.book.aside import Entry
from companion.book.store import Book, open_book
from companion.field.broker import Broker, local_broker
from companion.intake.connect import acknowledge, session_name
from companion.intake.listen import Listener, Message
from companion.settings.errors import SiteError
from companion.settings.site import Site
from core_mp import senml

TOPIC = "levelbook/north/readings"


@pytest.fixture
def site(broker: Broker, tmp_path: Path) -> Site:
    return site_of(tmp_path, SITE + f'[mqtt]\nhost = "127.0.0.1"\nport = {broker.port}\n')


@contextlib.contextmanager
def listening(site: Site) -> Iterator[Listener]:
    stop, said = threading.Event(), []
    listener = Listener(site, said.append)
    listener.said = said
    thread = threading.Thread(target=listener.run, args=(stop,))
    thread.start()
    try:
        assert listener.connected.wait(10)
        yield listener
    finally:
        stop.set()
        thread.join(10)
        assert not thread.is_alive()


@contextlib.contextmanager
def client(broker: Broker) -> Iterator[mqtt.Client]:
    one = mqtt.Client(CallbackAPIVersion.VERSION2)
    one.connect(broker.host, broker.port)
    one.loop_start()
    try:
        yield one
    finally:
        one.disconnect()
        one.loop_stop()


def payload(first: int, n: int) -> str:
    return senml.pack(
        "north",
        "counts",
        "k1",
        0,
        [(seq, 1767225600 + 60 * seq, 7000 + seq, 9.5, None, None, 3.6) for seq in range(first, first + n)],
    )


def eventually(condition, seconds: float = 10.0) -> None:
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "did not happen in time"
        time.sleep(0.02)


def stored(site: Site) -> list[int]:
    with open_book(site.store_url) as book:
        return book.readings("north")["seq"].tolist()


def quarantined(site: Site) -> list[Entry]:
    with open_book(site.store_url) as book:
        return book.aside.entries()


def test_readings_reach_the_book_and_a_retained_receipt_comes_back(site: Site, broker: Broker) -> None:
    receipts: list[dict[str, object]] = []
    with listening(site), client(broker) as logger:
        for n in range(20):
            logger.publish(TOPIC, payload(n * 5, 5), qos=1).wait_for_publish(5)
        eventually(lambda: stored(site) == list(range(100)))
    with client(broker) as late:
        late.on_message = lambda client, userdata, message: receipts.append(json.loads(message.payload))
        late.subscribe("levelbook/north/kept", 1)
        eventually(lambda: receipts)
    assert receipts == [{"life": "k1", "seq": 99}]


def test_packs_sent_again_are_stored_once_and_a_hole_holds_the_receipt_back(site: Site, broker: Broker) -> None:
    receipts: list[dict[str, object]] = []
    with listening(site) as listener, client(broker) as logger:
        logger.on_message = lambda client, userdata, message: receipts.append(json.loads(message.payload))
        logger.subscribe("levelbook/north/kept", 1)
        for first in (0, 0, 10, 3):
            logger.publish(TOPIC, payload(first, 5), qos=1).wait_for_publish(5)
        eventually(lambda: stored(site) == [*range(8), *range(10, 15)])
        eventually(lambda: receipts and receipts[-1]["seq"] == 7)
        logger.publish(TOPIC, payload(8, 2), qos=1).wait_for_publish(5)
        eventually(lambda: receipts[-1]["seq"] == 14)
        eventually(lambda: listener.tally.repeated == 7)


def test_what_is_no_pack_is_kept_aside_with_its_reason_and_the_rest_goes_on(site: Site, broker: Broker, tmp_path: Path) -> None:
    with listening(site) as listener, client(broker) as logger:
        logger.publish(TOPIC, "nonsense \udcff".encode("utf-8", "surrogateescape"), qos=1)
        logger.publish("levelbook/nowhere/readings", payload(0, 1), qos=1)
        logger.publish(TOPIC, payload(0, 1), qos=1)
        eventually(lambda: stored(site) == [0] and listener.tally.quarantined == 2)
    kept = quarantined(site)
    assert [entry.topic for entry in kept] == [TOPIC, "levelbook/nowhere/readings"]
    assert "is no JSON" in kept[0].reason and "there is no tank 'nowhere'" in kept[1].reason
    assert len(listener.said) == 2 and all("\n" not in line for line in listener.said)


def test_what_came_while_no_one_listened_is_brought_after(site: Site, broker: Broker) -> None:
    with listening(site):
        pass
    with client(broker) as logger:
        for n in range(50):
            logger.publish(TOPIC, payload(n, 1), qos=1).wait_for_publish(5)
    with listening(site):
        eventually(lambda: stored(site) == list(range(50)))


def test_a_listener_killed_at_any_moment_loses_nothing_that_the_broker_keeps(site: Site, broker: Broker) -> None:
    """The command itself, killed with SIGKILL three times while packs pour in; then ended with SIGTERM, which is clean."""
    command = [sys.executable, "-c", "import sys; from companion.cli import main; sys.exit(main())", "listen", str(site.path)]
    environment = os.environ | {"PYTHONPATH": str(needs.ROOT)}
    with listening(site):
        pass  # the subscription exists from now on
    done = threading.Event()

    def pour() -> None:
        with client(broker) as logger:
            for n in range(600):
                logger.publish(TOPIC, payload(n, 1), qos=1).wait_for_publish(5)
                time.sleep(0.004)
        done.set()

    threading.Thread(target=pour).start()
    for pause in (1.2, 1.5, 1.3):
        child = subprocess.Popen(command, env=environment, stderr=subprocess.PIPE)
        time.sleep(pause)
        child.send_signal(signal.SIGKILL)
        child.communicate()
    child = subprocess.Popen(command, env=environment, stderr=subprocess.PIPE, text=True)
    assert done.wait(30)
    with client(broker) as logger:  # once this one is stored, the last listener is up, whatever those before it did
        logger.publish(TOPIC, payload(600, 1), qos=1).wait_for_publish(5)
    eventually(lambda: stored(site) == list(range(601)), 20)
    child.send_signal(signal.SIGTERM)
    _, said = child.communicate(timeout=10)
    assert child.returncode == 0 and "listened: " in said


def test_a_broker_on_another_machine_needs_tls_and_a_password_its_variable(tmp_path: Path) -> None:
    with pytest.raises(SiteError, match=r"mqtt\.tls_ca: is missing, and broker\.example is another machine"):
        Listener(site_of(tmp_path, SITE + '[mqtt]\nhost = "broker.example"\n'))
    with pytest.raises(SiteError, match=r"mqtt\.tls_ca: no\.pem cannot be read"):
        Listener(site_of(tmp_path, SITE + '[mqtt]\nhost = "broker.example"\ntls_ca = "no.pem"\n'))
    with pytest.raises(SiteError, match="NO_SUCH_VARIABLE is not set"):
        Listener(site_of(tmp_path, SITE + '[mqtt]\nusername = "desk"\npassword_env = "NO_SUCH_VARIABLE"\n'))


def test_mqtt_5_works_as_well_and_brings_what_came_while_no_one_listened(broker: Broker, tmp_path: Path) -> None:
    site = site_of(tmp_path, SITE + f"[mqtt]\nport = {broker.port}\nprotocol = 5\n")
    with listening(site), client(broker) as logger:
        logger.publish(TOPIC, payload(0, 3), qos=1)
        eventually(lambda: stored(site) == [0, 1, 2])
    with client(broker) as logger:
        logger.publish(TOPIC, payload(3, 2), qos=1).wait_for_publish(5)
    with listening(site):
        eventually(lambda: stored(site) == [0, 1, 2, 3, 4])


def test_what_an_older_connection_brought_is_not_acknowledged(site: Site, broker: Broker, monkeypatch) -> None:
    """The connection is lost while the writer is busy. What it stores then is acknowledged only once the broker has brought it again."""
    writing, go = threading.Event(), threading.Event()
    store, acknowledged = Listener._store, []

    def slowly(self: Listener, book: Book, batch: list[Message]) -> None:
        writing.set()
        assert go.wait(10)
        store(self, book, batch)

    monkeypatch.setattr(Listener, "_store", slowly)
    with listening(site) as listener, client(broker) as logger:
        monkeypatch.setattr(
            "companion.intake.listen.acknowledge", lambda client, mids: acknowledged.extend(mids) or acknowledge(client, mids)
        )
        logger.publish(TOPIC, payload(0, 1), qos=1)
        assert writing.wait(10)
        intruder = mqtt.Client(CallbackAPIVersion.VERSION2, session_name(site), clean_session=False)
        intruder.connect(broker.host, broker.port)  # the same name: the broker hangs up on the listener
        eventually(lambda: listener.said)
        go.set()
        eventually(lambda: listener.tally.new == 1)
        intruder.disconnect()
        eventually(lambda: listener.tally.repeated == 1 and acknowledged)
    assert len(acknowledged) == 1  # as it came the second time
    assert "the connection is lost" in listener.said[0] and stored(site) == [0]


def test_a_book_that_cannot_be_written_holds_readings_back_until_it_can(site: Site, broker: Broker, monkeypatch) -> None:
    def impatient(url: str) -> Book:
        book = open_book(url)
        book.engine.execute("PRAGMA busy_timeout = 50")
        return book

    monkeypatch.setattr("companion.intake.listen.open_book", impatient)
    monkeypatch.setattr("companion.intake.listen.AGAIN_S", 0.05)
    with listening(site) as listener, client(broker) as logger:
        other = sqlite3.connect(site.store_url.partition(":")[2], isolation_level=None)
        other.execute("BEGIN IMMEDIATE")
        logger.publish(TOPIC, payload(0, 3), qos=1).wait_for_publish(5)
        eventually(lambda: listener.said)
        assert "the book cannot be written (database is locked)" in listener.said[0]
        other.execute("ROLLBACK")
        other.close()
        eventually(lambda: stored(site) == [0, 1, 2])
    assert len(listener.said) == 1


def test_a_writer_that_fails_with_a_full_queue_ends_the_listener(site: Site, broker: Broker, monkeypatch) -> None:
    monkeypatch.setattr("companion.intake.listen.WAITING", 1)
    listener = Listener(site)

    def fails(book: Book, batch: list[Message]) -> None:
        eventually(listener._queue.full)
        raise RuntimeError("as told")

    def run() -> None:
        with pytest.raises(RuntimeError, match="as told"):
            listener.run(threading.Event())

    listener._store = fails
    running = threading.Thread(target=run, daemon=True)
    running.start()
    with client(broker) as logger:
        assert listener.connected.wait(10)
        for n in range(20):
            logger.publish(TOPIC, payload(n, 1), qos=1)
        running.join(10)
    assert not running.is_alive()


def test_a_pack_is_quarantined_once_however_many_faults_it_has_and_its_line_cannot_act(
    site: Site, broker: Broker, tmp_path: Path
) -> None:
    other = json.loads(payload(0, 3).replace('"counts"', '"level"'))
    with listening(site) as listener, client(broker) as logger:
        logger.publish(TOPIC, json.dumps(other), qos=1)
        logger.publish(TOPIC, '[{"bn":"north/","n":"\\u001b[2J\\n","v":1}]', qos=1)
        logger.publish(TOPIC, b"\xff\x00", qos=1)
        eventually(lambda: listener.tally.quarantined == 3)
    kept = {entry.payload: entry.reason for entry in quarantined(site)}
    assert "sends level, the site file says counts (and 2 more)" in kept.pop(json.dumps(other).encode())
    assert b"\xff\x00" in kept
    assert len(listener.said) == 3 and all(line.isprintable() for line in listener.said)


def test_another_reading_of_the_same_identity_is_quarantined_and_the_first_stays(
    site: Site, broker: Broker, tmp_path: Path
) -> None:
    with listening(site) as listener, client(broker) as logger:
        logger.publish(TOPIC, payload(0, 2), qos=1)
        logger.publish(TOPIC, payload(0, 2).replace('"v":7001', '"v":9999'), qos=1)
        eventually(lambda: listener.tally.quarantined == 1 and listener.tally.repeated == 1)
    assert "another reading of life k1, seq 1 is in the book" in listener.said[0] and stored(site) == [0, 1]
    assert b"9999" in quarantined(site)[0].payload


def test_a_broker_that_is_not_there_is_told_once_with_the_reason(tmp_path: Path) -> None:
    with local_broker() as gone:
        pass
    listener = Listener(site_of(tmp_path, SITE + f"[mqtt]\nport = {gone.port}\n"), (said := []).append)
    stop = threading.Event()
    threading.Timer(2.5, stop.set).start()
    listener.run(stop)
    assert len(said) == 1 and "cannot be reached ([Errno" in said[0]


def test_a_site_file_has_a_session_of_its_own(tmp_path: Path) -> None:
    names = []
    for folder in ("a", "b", "a"):
        (tmp_path / folder).mkdir(exist_ok=True)
        names.append(session_name(site_of(tmp_path / folder)))
    assert names[0] == names[2] != names[1] and all(name.isalnum() and len(name) == 23 for name in names)


def test_receipts_go_past_readings_that_are_safe_in_quarantine(site: Site, broker: Broker) -> None:
    receipts: list[dict[str, object]] = []
    lost = payload(2, 1).replace('"bt":1767225720', '"bt":946684920')  # a clock that began again in 2000
    with listening(site), client(broker) as logger:
        logger.on_message = lambda client, userdata, message: receipts.append(json.loads(message.payload))
        logger.subscribe("levelbook/north/kept", 1)
        for one in (payload(0, 2), lost, payload(3, 2)):
            logger.publish(TOPIC, one, qos=1).wait_for_publish(5)
        eventually(lambda: receipts and receipts[-1]["seq"] == 4)
        logger.publish(TOPIC, lost, qos=1).wait_for_publish(5)
        eventually(lambda: [entry.times for entry in quarantined(site)] == [2])
    assert stored(site) == [0, 1, 3, 4] and "before 2015" in quarantined(site)[0].reason


def test_a_logger_without_a_clock_is_heard_once_and_its_first_times_stay(site: Site, broker: Broker) -> None:
    relative = payload(0, 3).replace('"bt":1767225600', '"bt":-120')
    with listening(site) as listener, client(broker) as logger:
        logger.publish(TOPIC, relative, qos=1).wait_for_publish(5)
        eventually(lambda: listener.tally.new == 3)
        with open_book(site.store_url) as book:
            before = book.readings("north")
        time.sleep(1.1)
        logger.publish(TOPIC, relative, qos=1).wait_for_publish(5)
        eventually(lambda: listener.tally.repeated == 3)
    with open_book(site.store_url) as book:
        after = book.readings("north")
    assert after.equals(before) and not quarantined(site)
    assert after["time"].diff().dt.total_seconds().iloc[1:].tolist() == [60.0, 60.0]
    assert abs(after["time"].iloc[-1].timestamp() - time.time()) < 10


def test_a_backlog_from_before_a_change_of_signal_is_read_by_the_sensor_of_its_time(broker: Broker, tmp_path: Path) -> None:
    text = (
        SITE.replace("[tank.north.sensor]", "[[tank.north.sensor]]")
        + """[[tank.north.sensor]]
since = 2026-01-01T00:02:00Z
signal = "pressure"
pressure = "gauge"
height = "0.1 m"
"""
    )
    site = site_of(tmp_path, text + f"[mqtt]\nport = {broker.port}\n")
    with listening(site), client(broker) as logger:
        logger.publish(TOPIC, payload(2, 2).replace('"n":"counts"', '"n":"pressure","u":"Pa"'), qos=1)
        logger.publish(TOPIC, payload(0, 2), qos=1)
        eventually(lambda: stored(site) == [0, 1, 2, 3])


def test_what_a_logger_says_of_its_troubles_is_told_once_and_kept(site: Site, broker: Broker) -> None:
    says = payload(0, 1).replace(
        '{"n":"oldest","v":0}', '{"n":"oldest","v":0},{"n":"dropped","v":7},{"n":"faults:sensor","v":2},{"n":"settings","v":3}'
    )
    with listening(site) as listener, client(broker) as logger:
        for _ in range(2):
            logger.publish(TOPIC, says, qos=1)
        eventually(lambda: listener.tally.packs == 2)
    assert listener.said == ["north: its logger says: dropped 7, faults:sensor 2"]
    with open_book(site.store_url) as book:
        assert json.loads(book.engine.execute("SELECT said FROM logger").fetchone()[0]) == {
            "dropped": 7,
            "faults:sensor": 2,
            "settings": 3,
        }


@contextlib.contextmanager
def small_disk(folder: Path) -> Iterator[Path]:
    """A file system of a megabyte; skips where none can be mounted."""
    folder.mkdir()
    if subprocess.run(["mount", "-t", "tmpfs", "-o", "size=1m", "tmpfs", str(folder)], capture_output=True).returncode:
        pytest.skip("a small disk cannot be mounted here: run as root")
    try:
        yield folder
    finally:
        subprocess.run(["umount", "-l", str(folder)], check=True)


def test_a_full_disk_holds_readings_back_until_there_is_room(broker: Broker, tmp_path: Path, monkeypatch) -> None:
    monkeypatch.setattr("companion.intake.listen.AGAIN_S", 0.1)
    with small_disk(tmp_path / "disk") as disk:
        site = site_of(disk, SITE + f"[mqtt]\nport = {broker.port}\n")
        with listening(site) as listener, client(broker) as logger:
            logger.publish(TOPIC, payload(0, 5), qos=1)
            eventually(lambda: listener.tally.new == 5)
            with contextlib.suppress(OSError), open(disk / "other", "wb", buffering=0) as other:
                while True:
                    other.write(bytes(512))
            sent = 5
            while not listener.said:
                logger.publish(TOPIC, payload(sent, 20), qos=1).wait_for_publish(5)
                sent += 20
                assert sent < 50_000
            assert "the book cannot be written" in listener.said[0] and "full" in listener.said[0]
            before = listener.tally.new
            logger.publish(TOPIC, payload(sent, 20), qos=1).wait_for_publish(5)
            time.sleep(0.5)
            assert listener.tally.new == before
            (disk / "other").unlink()
            eventually(lambda: stored(site) == list(range(sent + 20)))
        assert not quarantined(site)
