"""MQTT to the book: subscribe, store, and only then acknowledge.

The network's thread queues what arrives; the writer takes what has gathered, commits it in one transaction, acknowledges it in
the order of its arrival (never what an older connection brought: the broker will bring that again), and tells the loggers
by a receipt what is kept. A full queue holds the network's thread back, and so the broker; a book that cannot write holds
everything back, unacknowledged, until it can.
"""

from __future__ import annotations

import contextlib
import json
import queue
import signal
import sys
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import paho.mqtt.client as mqtt

from companion.book.aside import Refused
from companion.book.store import Book, open_book
from companion.intake.connect import acknowledge, client_of, connect
from companion.intake.mapped import taken
from companion.intake.quarantine import conflict, one_line, told
from companion.intake.senml import WireError
from companion.intake.wire import Pack
from companion.settings.site import Site

WAITING = 10_000  # packs in the queue at most
TOGETHER = 2_000  # packs in one transaction at most
RECEIPT_S = 1.0  # between two receipts of a tank at least
SEAL_S = 3600.0  # between two looks for days that are over
AGAIN_S = 2.0  # until a book that could not write is tried again


@dataclass(frozen=True)
class Message:
    """What arrived, when [s since 1970], and on which connection."""

    at: float
    connection: int
    mid: int
    qos: int
    topic: str
    payload: bytes


@dataclass
class Tally:
    """What has been done so far: packs taken, readings new and repeated, payloads quarantined."""

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
        self._connection, self._turning = 0, threading.Lock()  # a connection's number; held while it is used or changes
        self._leaving = threading.Event()
        self._seal_at = 0.0
        self._trouble = ""
        self._owed: dict[str, dict[str, Any]] = {}
        self._sent: dict[str, float] = {}
        self._said: dict[str, dict[str, Any]] = {}  # what loggers say of themselves
        self._topics = [*site.mqtt.topics, *dict.fromkeys(mapping.filter for mapping in site.wire.values())]
        self._client = client_of(site)
        for name in ("on_connect", "on_connect_fail", "on_disconnect", "on_subscribe", "on_message"):
            setattr(self._client, name, getattr(self, name))

    def run(self, stop: threading.Event) -> Tally:
        """Store readings until stop is set, then what has arrived by then; returns what was done."""
        with open_book(self.site.store_url) as book:
            connect(self._client, self.site)
            try:
                while not stop.is_set():
                    self._turn(book, stop, 0.2)
                for _ in range(0, self._queue.qsize(), TOGETHER):
                    self._turn(book, stop, 0.0)
                self._receipts(everything=True)
            finally:
                self._leaving.set()
                self._client.disconnect()
                self._client.loop_stop()
        return self.tally

    def _turn(self, book: Book, stop: threading.Event, wait_s: float) -> None:
        batch = self._gathered(wait_s)
        if batch and self._stored(book, batch, stop):
            self._acknowledge(batch)
        if not batch and time.monotonic() >= self._seal_at:
            self._seal_at = time.monotonic() + SEAL_S
            with contextlib.suppress(*book.troubles):
                book.seal()
        self._receipts()

    def _gathered(self, wait_s: float) -> list[Message]:
        batch: list[Message] = []
        with contextlib.suppress(queue.Empty):
            batch.append(self._queue.get(bool(wait_s), wait_s))
            while len(batch) < TOGETHER:
                batch.append(self._queue.get_nowait())
        return batch

    def _stored(self, book: Book, batch: list[Message], stop: threading.Event) -> bool:
        """Store a batch, however long the book cannot be written; False where that lasts until stop is set."""
        while True:
            try:
                self._store(book, batch)
            except book.troubles as error:  # a full disk, a lock, a server that is gone
                self._troubled(f"{book.name}: the book cannot be written ({error}); readings wait unacknowledged until it can")
                if stop.wait(AGAIN_S):
                    return False
            else:
                self._trouble = ""
                return True

    def _store(self, book: Book, batch: list[Message]) -> None:
        """Everything of a batch to where it is safe: the book, or quarantine."""
        packs: list[tuple[Message, Pack]] = []
        bad: list[Refused] = []
        for message in batch:
            try:
                packs.append((message, taken(self.site, message.topic, message.payload, message.at)))
            except WireError as error:
                bad.append(Refused(message.topic, message.payload, str(error), message.at))
        new = repeated = 0
        with book.change():
            for (tank, relative), group in sorted(
                _together(packs).items()
            ):  # in one order: two desks on one book must not wait for each other
                rows = [row for _, pack in group for row in pack.rows]
                added, clash = book.put_rows(tank, rows, not relative)
                new, repeated = new + added, repeated + len(rows) - added - len(clash)
                start = 0
                for message, pack in group:
                    end = start + len(pack.rows)
                    seqs = [rows[place][7] for place in clash if start <= place < end]
                    faults = pack.faults + ([conflict(pack, seqs)] if seqs else [])
                    if faults:
                        bad.append(_refused(message, pack, faults))
                    start = end
            for (tank, life), (pack, at) in _speakers(packs).items():
                book.hear(tank, life, pack.oldest, self._said.get(tank, {}) | pack.said, at)
            book.aside.keep(bad)
        self.tally = Tally(
            self.tally.packs + len(batch),
            self.tally.new + new,
            self.tally.repeated + repeated,
            self.tally.quarantined + len(bad),
        )
        for refused in bad:
            self._say(one_line(f"{refused.topic}: quarantined: {refused.reason}"))
        for _, pack in packs:
            self._heard(pack)
        for pack, _ in _speakers(packs).values():
            self._owe(book, pack)

    def _heard(self, pack: Pack) -> None:
        """Say what a logger says of itself, where it is trouble that was not told yet."""
        before, now = self._said.get(pack.tank, {}), pack.said
        told = [f"{name} {now[name]}" for name in now if name != "settings" and now[name] not in (0, before.get(name, 0))]
        if told:
            self._say(one_line(f"{pack.tank}: its logger says: {', '.join(told)}"))
        self._said[pack.tank] = before | now

    def _acknowledge(self, batch: list[Message]) -> None:
        with self._turning:  # a packet id of an older connection may stand for another message on this one
            acknowledge(
                self._client, [message.mid for message in batch if message.connection == self._connection and message.qos]
            )

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

    def _troubled(self, line: str) -> None:
        """Say what is wrong, once and not at every trial."""
        if line != self._trouble:
            self._say(one_line(line))
        self._trouble = line

    def on_connect(self, client: mqtt.Client, userdata: Any, flags: Any, reason: Any, properties: Any) -> None:
        """paho's: a connection stands, or was refused."""
        if reason.is_failure:
            self._troubled(f"{self._broker}: refused the connection ({reason}); check username and password_env in [mqtt]")
            return
        with self._turning:
            self._connection += 1
        client.subscribe([(topic, 1) for topic in self._topics])

    def on_subscribe(self, client: mqtt.Client, userdata: Any, mid: int, reasons: Any, properties: Any) -> None:
        """paho's: the subscriptions stand, or were refused."""
        refused = [topic for topic, reason in zip(self._topics, reasons, strict=False) if reason.is_failure]
        if refused:
            self._troubled(f"{self._broker}: refuses {', '.join(refused)}; let this user read it, or mend topics in [mqtt]")
            return
        self._trouble = ""
        self.connected.set()

    def on_connect_fail(self, client: mqtt.Client, userdata: Any) -> None:
        """paho's, from where it caught the error: the broker cannot be reached; paho tries again."""
        self._troubled(f"{self._broker}: cannot be reached ({sys.exc_info()[1]}); trying again")

    def on_disconnect(self, client: mqtt.Client, userdata: Any, flags: Any, reason: Any, properties: Any) -> None:
        """paho's: the connection is gone, and with it the right to acknowledge what it brought."""
        with self._turning:
            self._connection += 1
        if not self._leaving.is_set():
            self._troubled(f"{self._broker}: the connection is lost ({reason}); trying again")

    def on_message(self, client: mqtt.Client, userdata: Any, message: mqtt.MQTTMessage) -> None:
        """paho's: a message. Waits where the queue is full, but not for a writer that has gone."""
        try:
            topic = message.topic
        except UnicodeDecodeError:  # a broker ought to refuse it: MQTT 3.1.1, 1.5.3
            topic = "(no UTF-8)"
        arrived = Message(time.time(), self._connection, message.mid, message.qos, topic, bytes(message.payload))
        while not self._leaving.is_set():
            with contextlib.suppress(queue.Full):
                self._queue.put(arrived, timeout=0.5)
                break

    @property
    def _broker(self) -> str:
        return f"broker {self.site.mqtt.host}:{self.site.mqtt.port}"


def _together(packs: list[tuple[Message, Pack]]) -> dict[tuple[str, bool], list[tuple[Message, Pack]]]:
    """Packs by tank, and whether their times are told from the arrival."""
    groups: dict[tuple[str, bool], list[tuple[Message, Pack]]] = {}
    for message, pack in packs:
        groups.setdefault((pack.tank, pack.relative), []).append((message, pack))
    return groups


def _speakers(packs: list[tuple[Message, Pack]]) -> dict[tuple[str, str], tuple[Pack, float]]:
    """The last pack of each life of a tank, and when it came."""
    return {(pack.tank, str(pack.life)): (pack, message.at) for message, pack in packs if pack.life is not None}


def _refused(message: Message, pack: Pack, faults: list[str]) -> Refused:
    """A pack to be kept aside, with the identities of its readings that are refused."""
    life = None if pack.life is None else str(pack.life)
    return Refused(message.topic, message.payload, told(faults), message.at, pack.tank, life, pack.refused)
