"""MQTT to the book: subscribe, store, and only then acknowledge.

The network's thread queues what arrives; the writer takes what has gathered, commits it in one transaction, acknowledges it in
the order of its arrival (never what an older connection brought: the broker will bring that again), and tells the loggers
by a receipt what is kept. A full queue holds the network's thread back, and so the broker.
"""

from __future__ import annotations

import json
import os
import queue
import signal
import sys
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import paho.mqtt.client as mqtt
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion

from companion.book.store import Book, open_book
from companion.intake.wire import Pack, WireError, decode
from companion.settings.errors import SiteError
from companion.settings.site import Mqtt, Site

WAITING = 10_000  # packs in the queue at most
TOGETHER = 2_000  # packs in one transaction at most
RECEIPT_S = 1.0  # between two receipts of a tank at least
LOOPBACK = ("localhost", "127.0.0.1", "::1")


@dataclass(frozen=True)
class Message:
    """What arrived, and on which connection."""

    connection: int
    mid: int
    qos: int
    topic: str
    payload: bytes


@dataclass
class Tally:
    """What has been done so far."""

    packs: int = 0
    new: int = 0
    repeated: int = 0
    quarantined: int = 0


def listen(site: Site) -> int:
    """Readings from the site's broker into its book, until SIGTERM or SIGINT; exit status 0."""
    stop = threading.Event()
    for name in ("SIGTERM", "SIGINT"):
        signal.signal(getattr(signal, name), lambda *_: stop.set())
    tally = Listener(site).run(stop)
    print(
        f"listened: {tally.new} new readings in {tally.packs} packs, {tally.repeated} repeated, {tally.quarantined} quarantined",
        file=sys.stderr,
    )
    return 0


class Listener:
    """One subscriber of a site. say: where a line for people goes."""

    def __init__(self, site: Site, say: Callable[[str], None] | None = None) -> None:
        self.site = site
        self.tally = Tally()
        self.connected = threading.Event()
        self._say = say or (lambda line: print(f"levelbook: {line}", file=sys.stderr, flush=True))
        self._queue: queue.Queue[Message] = queue.Queue(WAITING)
        self._connection = 0
        self._owed: dict[str, dict[str, Any]] = {}
        self._sent: dict[str, float] = {}
        self._client = _client(site, self)

    def run(self, stop: threading.Event) -> Tally:
        """Store readings until stop is set, then what has arrived by then; returns what was done."""
        mqtt_of = self.site.mqtt
        with open_book(self.site.store_url) as book:
            self._client.connect_async(mqtt_of.host, mqtt_of.port, keepalive=30)
            self._client.loop_start()
            try:
                while not stop.is_set():
                    self._turn(book, 0.2)
                while not self._queue.empty():
                    self._turn(book, 0.0)
                self._receipts(everything=True)
            finally:
                self._client.disconnect()
                self._client.loop_stop()
        return self.tally

    def _turn(self, book: Book, wait_s: float) -> None:
        batch = self._gathered(wait_s)
        if batch:
            packs = [(message, self._decoded(message)) for message in batch]
            good = [pack for _, pack in packs if pack is not None and len(pack.frame)]
            added = book.add_many([(pack.tank, pack.frame) for pack in good])
            for pack, outcome in zip(good, added, strict=True):
                self.tally.new += outcome.new
                self.tally.repeated += outcome.repeated
                for row in outcome.conflicts.to_dict("records"):
                    self._quarantine(
                        f"levelbook/{pack.tank}/readings",
                        json.dumps(row, default=str),
                        "another reading of this identity is in the book",
                    )
                self._owe(book, pack)
            self.tally.packs += len(batch)
            for message in batch:
                if message.connection == self._connection and message.qos:
                    self._client.ack(message.mid, message.qos)
        self._receipts()

    def _gathered(self, wait_s: float) -> list[Message]:
        try:
            batch = [self._queue.get(timeout=wait_s) if wait_s else self._queue.get_nowait()]
        except queue.Empty:
            return []
        while len(batch) < TOGETHER:
            try:
                batch.append(self._queue.get_nowait())
            except queue.Empty:
                break
        return batch

    def _decoded(self, message: Message) -> Pack | None:
        try:
            pack = decode(message.topic, message.payload, self._signal)
        except WireError as error:
            self._quarantine(message.topic, message.payload.decode("utf-8", "backslashreplace"), str(error))
            return None
        for fault in pack.faults:
            self._quarantine(message.topic, message.payload.decode("utf-8", "backslashreplace"), fault)
        return pack

    def _signal(self, tank: str) -> str | None:
        return self.site.tanks[tank].sensors[-1].signal if tank in self.site.tanks else None

    def _quarantine(self, topic: str, payload: str, reason: str) -> None:
        """Keep what cannot be taken, on the disk before it is acknowledged."""
        self.tally.quarantined += 1
        self._say(f"{topic}: quarantined: {reason}")
        path = Path(self.site.store_url.partition(":")[2]).with_name("quarantine.jsonl")
        with open(path, "a", encoding="utf-8") as file:
            line = {
                "time": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime()),
                "topic": topic,
                "reason": reason,
                "payload": payload,
            }
            file.write(json.dumps(line) + "\n")
            file.flush()
            os.fsync(file.fileno())

    def _owe(self, book: Book, pack: Pack) -> None:
        if pack.life is None:
            return
        kept = book.kept(pack.tank, str(pack.life), pack.oldest)
        if kept is not None:
            self._owed[pack.tank] = {"life": pack.life, "seq": kept}

    def _receipts(self, everything: bool = False) -> None:
        now = time.monotonic()
        due = [tank for tank in self._owed if everything or now - self._sent.get(tank, -1e9) >= RECEIPT_S]
        for tank in due:
            self._client.publish(f"levelbook/{tank}/kept", json.dumps(self._owed.pop(tank)), qos=1, retain=True)
            self._sent[tank] = now

    def on_connect(self, client: mqtt.Client, userdata: Any, flags: Any, reason: Any, properties: Any) -> None:
        """paho's: a connection stands, or was refused."""
        if reason.is_failure:
            self._say(
                f"broker {self.site.mqtt.host}: refused the connection ({reason}); check username and password_env in [mqtt]"
            )
            return
        self._connection += 1
        client.subscribe([(topic, 1) for topic in self.site.mqtt.topics])

    def on_subscribe(self, *_: Any) -> None:
        """paho's: the subscription stands."""
        self.connected.set()

    def on_connect_fail(self, client: mqtt.Client, userdata: Any) -> None:
        """paho's: the broker cannot be reached; paho tries again."""
        self._say(f"broker {self.site.mqtt.host}:{self.site.mqtt.port}: cannot be reached; trying again")

    def on_message(self, client: mqtt.Client, userdata: Any, message: mqtt.MQTTMessage) -> None:
        """paho's: a message. Waits where the queue is full."""
        self._queue.put(Message(self._connection, message.mid, message.qos, message.topic, bytes(message.payload)))


def _client(site: Site, listener: Listener) -> mqtt.Client:
    of = site.mqtt
    five = of.protocol == 5
    client = mqtt.Client(
        CallbackAPIVersion.VERSION2, f"levelbook-desk-{site.path.absolute().parent.name}"[:60], None if five else False,
        protocol=MQTTProtocolVersion.MQTTv5 if five else MQTTProtocolVersion.MQTTv311, manual_ack=True)  # fmt: skip
    _secure(client, site, of)
    client.reconnect_delay_set(1, 30)
    client.on_connect, client.on_message, client.on_subscribe = listener.on_connect, listener.on_message, listener.on_subscribe
    client.on_connect_fail = listener.on_connect_fail
    return client


def _secure(client: mqtt.Client, site: Site, of: Mqtt) -> None:
    if of.tls_ca is not None:
        try:
            client.tls_set(ca_certs=str(site.path.parent / of.tls_ca))
        except OSError as error:
            raise SiteError(
                [f"{site.path}: mqtt.tls_ca: {of.tls_ca} cannot be read ({error}); name the broker's CA certificate"]
            ) from None
    elif of.host not in LOOPBACK:
        raise SiteError(
            [f"{site.path}: mqtt.tls_ca: is missing, and {of.host} is another machine; name the broker's CA certificate"]
        )
    if of.username is not None:
        password = os.environ.get(of.password_env) if of.password_env else None
        if of.password_env and password is None:
            raise SiteError(
                [f"{site.path}: mqtt.password_env: {of.password_env} is not set in the environment; set it to the password"]
            )
        client.username_pw_set(of.username, password)
