"""The demo: everything on this machine. A broker of our own, simulated loggers, the book, figures and the day's log."""

from __future__ import annotations

import json
import signal
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import paho.mqtt.client as mqtt
import pandas as pd
from paho.mqtt.enums import CallbackAPIVersion

from companion.book.readings import COLUMNS, write_readings
from companion.book.store import Book, open_book
from companion.field.broker import Broker, BrokerError, local_broker
from companion.field.district import LIVES, check_folder, write_district
from companion.field.fleet import simulate
from companion.figures.convert import convert
from companion.figures.table import write_figures
from companion.intake.listen import Listener
from companion.papers.daily import daily, local_midnight, write_daily
from companion.papers.trend import draw_trend
from companion.settings.site import Site, load_site
from core_mp import senml
from core_mp import status as bits

HISTORY_DAYS = 30
AHEAD_DAYS = 2  # simulated live at most
MINUTE_S = 0.2  # real time of a simulated minute
SHOWN_MINUTES = 10  # between two looks at the book
SEED = 20
LIFE = "sim"
TIMEZONE = "Europe/London"
AGAIN_S = 5.0  # a logger sends again what has no receipt for so long
PACK = 60  # readings in a pack at most
LIVE_S = 4.0  # of live readings at least, however short the demo
PAPERS_S = 6.0  # set aside at the end of a timed demo for its files


def run_demo(out: Path, seconds: float | None = None) -> int:
    """Run the demo with its files in out, until Ctrl-C or the end of its simulated days, or for about so many seconds.

    Returns the exit status. FileFault where out holds anything but an earlier demo.
    """
    check_folder(out)
    stop = threading.Event()
    try:
        with _stopped_by_signals(stop), local_broker() as broker:
            return _run(out, seconds, broker, stop)
    except BrokerError as error:
        print(f"levelbook: {error}", file=sys.stderr)
        return 1


def _run(out: Path, seconds: float | None, broker: Broker, stop: threading.Event) -> int:
    began = time.monotonic()
    site, fleet, today = _district(out, broker.port)
    _say(f"{site.name}: {len(site.tanks)} tanks, {HISTORY_DAYS} days of one-minute readings in {out / 'book.db'}")
    _say(
        f"live over MQTT on {broker.host}:{broker.port} ({broker.program}), a minute each {MINUTE_S} s from {today:%d %B} on; Ctrl-C ends it"
    )
    listener = Listener(site, _say)
    listening = threading.Thread(target=listener.run, args=(quiet := threading.Event(),))
    listening.start()
    try:
        if not listener.connected.wait(10.0):
            raise RuntimeError("the listener could not reach the demo's own broker")
        live = None if seconds is None else max(LIVE_S, seconds - PAPERS_S - (time.monotonic() - began))
        _live(site, fleet, broker.port, live, stop)
    finally:
        quiet.set()
        listening.join()
    _papers(site, out, today)
    return 0


@dataclass
class Logger:
    """A simulated logger: what it has yet to take, and its spool, which it keeps until the book has it."""

    tank: str
    signal: str
    coming: pd.DataFrame
    client: mqtt.Client
    spool: list[tuple[Any, ...]] = field(default_factory=list)
    kept: int = -1  # by the last receipt; the network's thread sets it, the logger's looks
    sent: int = -1
    moved: float = 0.0  # when it last sent something new, or again

    def take(self, until: pd.Timestamp) -> None:
        """Spool the readings up to a simulated time; publish the new ones, and again what has had no receipt for long."""
        due = self.coming[self.coming["time"] <= until]
        self.coming = self.coming.iloc[len(due) :]
        for row in due.to_dict("records"):
            others = [None if np.isnan(row[name]) else row[name] for name in COLUMNS[2:6]]
            raw = int(row["raw"]) if self.signal == "counts" else row["raw"]
            self.spool.append((row["seq"], int(row["time"].timestamp()), raw, *others))
        self.spool = [reading for reading in self.spool if reading[0] > self.kept]
        now = time.monotonic()
        if self.spool and self.spool[0][0] <= self.sent and now - self.moved > AGAIN_S:
            self.sent = self.kept
        waiting = [reading for reading in self.spool if reading[0] > self.sent][:PACK]
        if waiting:
            pack = senml.pack(self.tank, self.signal, LIFE, self.spool[0][0], waiting)
            self.client.publish(f"levelbook/{self.tank}/readings", pack, qos=1)
            self.sent, self.moved = waiting[-1][0], now

    def on_message(self, client: mqtt.Client, userdata: Any, message: mqtt.MQTTMessage) -> None:
        """A receipt: what the book has may go."""
        receipt = json.loads(message.payload)
        if receipt["life"] == LIFE:
            self.kept = max(self.kept, receipt["seq"])


def _district(out: Path, port: int) -> tuple[Site, dict[str, pd.DataFrame], datetime]:
    """The site with its history in the book, each tank's readings still to come, and the local midnight between the two."""
    site = load_site(write_district(out, port, TIMEZONE))
    for old in out.glob("book.db*"):
        old.unlink()
    today = local_midnight(datetime.now(site.timezone).date() - timedelta(days=AHEAD_DAYS), site.timezone)
    start = today - timedelta(days=HISTORY_DAYS)
    fleet, history = {}, []
    for n, (name, tank) in enumerate(site.tanks.items()):
        readings, _ = simulate(tank, LIVES[name], start, (HISTORY_DAYS + AHEAD_DAYS) * 1440, SEED + n, LIFE)
        past = readings["time"] < pd.Timestamp(today)
        history.append((name, readings[past]))
        fleet[name] = readings[~past]
    with open_book(site.store_url) as book, book.change():
        for name, frame in history:
            book.put(name, frame)
    return site, fleet, today


def _live(site: Site, fleet: dict[str, pd.DataFrame], port: int, seconds: float | None, stop: threading.Event) -> None:
    loggers = [_logger(site, name, coming, port) for name, coming in fleet.items()]
    end = None if seconds is None else time.monotonic() + seconds
    at = min(pd.Timestamp(coming["time"].iloc[0]) for coming in fleet.values())
    last = max(pd.Timestamp(coming["time"].iloc[-1]) for coming in fleet.values())
    minute = 0
    with open_book(site.store_url) as book:
        while not stop.is_set() and at <= last and (end is None or time.monotonic() < end):
            for logger in loggers:
                logger.take(at)
            at += pd.Timedelta(minutes=1)
            minute += 1
            stop.wait(MINUTE_S)
            if minute % SHOWN_MINUTES == 0:
                _look(site, book)
    for logger in loggers:
        logger.client.disconnect()
        logger.client.loop_stop()


def _logger(site: Site, tank: str, coming: pd.DataFrame, port: int) -> Logger:
    client = mqtt.Client(CallbackAPIVersion.VERSION2, f"levelbook-demo-{tank}")
    logger = Logger(tank, site.tanks[tank].sensors[-1].signal, coming, client)
    client.on_message = logger.on_message
    client.on_connect = lambda client, *_: client.subscribe(f"levelbook/{tank}/kept", 1)
    client.connect("127.0.0.1", port)
    client.loop_start()
    return logger


def _look(site: Site, book: Book) -> None:
    """What the book has of each tank now."""
    lines = []
    for name, tank in site.tanks.items():
        last = book.last(name)
        now = convert(tank, last).iloc[0]
        before = book.readings(name, last["time"].iloc[0] - timedelta(minutes=30), last["time"].iloc[0])
        rate = (now["level_m"] - convert(tank, before, doubts=False)["level_m"].mean()) / 0.25 if len(before) else np.nan
        way = "rising" if rate > 0.02 else "falling" if rate < -0.02 else "steady"
        raw = last["raw"].iloc[0]
        said = f"{raw:.0f} counts" if tank.sensors[-1].signal == "counts" else f"{raw * 1e3:.3f} mA"
        lines.append(f"  {name:<6} {said:>12}  {now['level_m']:7.3f} m ±{now['level_u95_m']:.3f} {now['volume_m3']:9.1f} m3 ±{now['volume_u95_m3']:<5.1f}"
                     f" grade {now['grade_m']:8.3f} m  {way} {abs(rate):.2f} m/h  {bits.words(int(now['status']))}")  # fmt: skip
    _say(f"{last['time'].iloc[0].tz_convert(site.timezone):%a %d %b %H:%M} {site.timezone.key}")
    _say("\n".join(lines))


def _papers(site: Site, out: Path, today: datetime) -> None:
    """The files people would hand in, from the thirty days that are closed."""
    first, last = (
        at.astimezone(site.timezone).date() for at in (today - timedelta(days=HISTORY_DAYS), today - timedelta(hours=12))
    )
    write_daily(out / "daily.csv", site, list(site.tanks.values()), first, last)
    week = today - timedelta(days=7)
    with open_book(site.store_url) as book:
        for name, tank in site.tanks.items():
            readings = book.readings(name, week, today)
            draw_trend(site, tank, convert(tank, readings), week, today, out / f"trend-{name}.png")
        hill = site.tanks["hill"]
        readings = book.readings("hill", week, today)
        write_readings(out / "readings-hill.csv", readings)
        write_figures(out / "figures-hill.csv", convert(hill, readings))
        _say(f"\nthe daily log of {last:%A %d %B %Y}, in m3")
        _say(
            f"  {'tank':<6} {'opening':>9} {'net fill':>9} {'net draw':>9} {'closing':>9} {'change':>9} {'±95 %':>6} {'complete':>9}"
        )
        for name, tank in site.tanks.items():
            readings = book.readings(name, today - timedelta(days=2), today + timedelta(hours=6))
            row = daily(site, tank, readings, last, last).iloc[0]
            _say(f"  {name:<6} {row['opening_volume_m3']:9.1f} {row['net_fill_m3']:9.1f} {row['net_draw_m3']:9.1f} {row['closing_volume_m3']:9.1f}"
                 f" {row['change_m3']:9.1f} {row['change_u95_m3']:6.1f} {row['complete_pct']:7.1f} %")  # fmt: skip
    _say(f"\nin {out}: daily.csv (thirty days), trend-*.png, readings-hill.csv, figures-hill.csv, site.toml, book.db")
    _say("levelbook is no protection system: overfill protection, tank entry and work at height follow local codes.")


@contextmanager
def _stopped_by_signals(stop: threading.Event) -> Iterator[None]:
    """Ctrl-C and SIGTERM set stop instead of breaking off, where this is the main thread."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = {name: signal.signal(name, lambda *_: stop.set()) for name in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield
    finally:
        for name, handler in before.items():
            signal.signal(name, handler)


def _say(line: str) -> None:
    print(line, flush=True)
