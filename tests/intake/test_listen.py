"""Real mosquitto, real packs: what a logger publishes stands in the book once, and the logger gets its receipt."""

from __future__ import annotations

import contextlib
import json
import os
import signal
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

from companion.book.store import open_book
from companion.field.broker import Broker, local_broker
from companion.intake.listen import Listener
from companion.settings.errors import SiteError
from companion.settings.site import Site
from core_mp import senml

TOPIC = "levelbook/north/readings"


@pytest.fixture
def broker() -> Iterator[Broker]:
    needs.need("mosquitto", "Debian's mosquitto")
    with local_broker(program="mosquitto") as running:
        yield running


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
    kept = [json.loads(line) for line in (tmp_path / "quarantine.jsonl").read_text().splitlines()]
    assert [entry["topic"] for entry in kept] == [TOPIC, "levelbook/nowhere/readings"]
    assert "is no JSON" in kept[0]["reason"] and "there is no tank 'nowhere'" in kept[1]["reason"]
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


def test_mqtt_5_works_as_well(broker: Broker, tmp_path: Path) -> None:
    site = site_of(tmp_path, SITE + f"[mqtt]\nport = {broker.port}\nprotocol = 5\n")
    with listening(site), client(broker) as logger:
        logger.publish(TOPIC, payload(0, 3), qos=1)
        eventually(lambda: stored(site) == [0, 1, 2])
