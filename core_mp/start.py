"""A board's beginning: put the logger together from its bundle, and run it for ever. What main.py calls.

The board's folder holds tank.json and table.bin, ca.der where the broker has TLS, the spool, and secrets.json, written by hand
and never part of a bundle: {"user": ..., "password": ...} for the broker, and what main.py wants there.
"""

import json
import time

from core_mp import ntp
from core_mp.clock import Clock
from core_mp.logger import Logger
from core_mp.mqtt import Client
from core_mp.settings import Settings
from core_mp.spool import Spool


def secrets(folder=""):
    """What secrets.json holds; nothing where there is none."""
    try:
        with open(folder + "/secrets.json") as f:
            return json.load(f)
    except OSError:
        return {}


def logger(sensor, network=None, watchdog=None, folder="", records=4096, time_server="pool.ntp.org"):
    """The logger of a board's folder. records: see Spool. time_server: asked for the time over NTP; None where there is none."""
    settings = Settings(folder)
    spool = Spool(folder, records)
    broker, own = settings.values["mqtt"], secrets(folder)
    client = Client(broker["host"], broker["port"], settings.tank + "-logger", own.get("user"), own.get("password"),
                    ("levelbook/" + settings.tank + "/presence", "offline"), _tls(folder) if broker["tls"] else None, 5)  # fmt: skip
    ask = (lambda: _set(ntp.ask(time_server))) if time_server else None
    return Logger(settings, spool, Clock(time.ticks_ms, ask, spool.last_time), client, sensor, network, watchdog)


def run(logger, most_s=5, sleep_ms=None):
    """Run a logger for ever. most_s: rest at once, less than the watchdog waits. sleep_ms: machine.lightsleep on boards that can."""
    while True:
        rest = logger.step()
        if rest:
            (sleep_ms or time.sleep_ms)(1000 * min(rest, most_s))


def _tls(folder):
    import ssl

    context = ssl.SSLContext(ssl.PROTOCOL_TLS_CLIENT)
    context.verify_mode = ssl.CERT_REQUIRED
    with open(folder + "/ca.der", "rb") as f:
        context.load_verify_locations(cadata=f.read())
    return context


def _set(time_s):
    """Set the board's own clock, by which TLS judges a certificate's dates."""
    try:
        import machine

        t = time.gmtime(time_s - (946684800 if time.gmtime(0)[0] == 2000 else 0))  # boards count from 1970 or 2000
        machine.RTC().datetime((t[0], t[1], t[2], t[6], t[3], t[4], t[5], 0))
    except (ImportError, AttributeError):
        pass
    return time_s
