# Run by MicroPython's unix port (see test_size.py): a logger for 100 days at a reading a minute, its time simulated, with days without
# a link, a broker that fails in the middle of a pack, settings from the desk, and a sensor and a clock that fail now and then. Prints
# a line a day: heap in use after a collection, the spool's next and oldest seq and what it dropped, the settings' version.
# Argument: the board's folder.
import binascii
import gc
import hashlib
import json
import sys

from core_mp.clock import Clock
from core_mp.logger import Logger
from core_mp.settings import Settings
from core_mp.spool import Spool

folder = sys.argv[1]
DAYS = 100
now = 0  # ms


class Desk:
    """A client, the broker and the desk behind it, in memory: it counts readings and sends receipts."""

    def __init__(self):
        self.inbox, self.seen, self.n, self.version = [], -1, 0, 1

    def connect(self):
        if now // 86400000 % 9 == 5:  # every ninth day nothing comes through
            raise OSError(113)

    def subscribe(self, topic):
        pass

    def ping(self):
        self.connect()

    def leave(self):
        pass

    def publish(self, topic, payload, retain=False):
        self.connect()
        self.n += 1
        if self.n % 501 == 0:
            raise OSError(104)
        if topic.endswith("readings"):
            last = bytes(payload[-24:]).decode().rsplit('"v":', 1)[-1]
            seq = int(last[: last.find("}")])
            if self.seen + 1 < self.oldest(payload) or seq > self.seen + 1000:
                raise RuntimeError("a hole before %d" % seq)
            if b'"seq"' in bytes(payload[-40:]):
                self.seen = max(self.seen, seq)
                self.inbox.append(("levelbook/north/kept", b'{"life":"a","seq":%d}' % self.seen))

    def oldest(self, payload):
        text = bytes(payload[:120]).decode()
        at = text.find('"oldest","v":') + 13
        return int(text[at : text.find("}", at)])

    def messages(self, wait_ms=0):
        self.connect()
        if now // 86400000 + 1 > self.version:
            self.version = now // 86400000 + 1
            body = json.dumps({"tank": "north", "version": self.version, "height_m": 0.1 + self.version * 1e-6}).encode()
            self.inbox.append(("levelbook/north/settings", binascii.hexlify(hashlib.sha256(body).digest()) + b"\n" + body))
        inbox, self.inbox = self.inbox, []
        return inbox


class Sensor:
    def read(self):
        minute = now // 60000
        if minute % 977 == 0:
            raise OSError(5)
        return 9000 + minute * 37 % 20000 // 40, 9.5 + minute % 50 / 10, None, None, 3.6


def ask():
    if now // 3600000 % 7 == 3:
        raise OSError(110)
    return 1767225600 + now // 1000


spool = Spool(folder, 4096, "a")
desk = Desk()
logger = Logger(Settings(folder), spool, Clock(lambda: now % (1 << 30), ask), desk, Sensor())
for day in range(DAYS):
    while now < (day + 1) * 86400000:
        now += max(1, min(logger.step(), 60)) * 1000
    gc.collect()
    used = gc.mem_alloc()
    print(day, used, spool.next_seq, spool.oldest, spool.dropped, logger.settings.version)
