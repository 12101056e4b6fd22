# Run by MicroPython's unix port (see test_field_day.py): a logger of tank "north" with a simulated sensor, on real MQTT, until it has
# taken the readings asked for and the desk has all of them. Its time runs 600 times as fast as the world's. Arguments: port, the
# folder of its board, readings in all.
import sys
import time

from core_mp.clock import Clock
from core_mp.logger import Logger
from core_mp.mqtt import Client
from core_mp.settings import Settings
from core_mp.spool import Spool

port, folder, readings = int(sys.argv[1]), sys.argv[2], int(sys.argv[3])
FASTER = 600


class Sensor:
    def read(self):
        return 7000 + spool.next_seq % 20000, 9.5, None, None, 3.6  # the raw count says which reading it is


def ticks():
    return time.ticks_ms() * FASTER


spool = Spool(folder, 20000)
clock = Clock(ticks, lambda: 1767225600 + time.ticks_ms() * FASTER // 1000 % (1 << 30), spool.last_time)
client = Client("127.0.0.1", port, "north-logger", will=("levelbook/north/presence", "offline"), timeout_s=3)
logger = Logger(Settings(folder), spool, clock, client, Sensor())
while spool.next_seq < readings or spool.oldest < readings:
    if spool.next_seq >= readings:
        logger._sample_at = 1 << 40
    rest = logger.step()
    if rest:
        time.sleep_ms(rest * 1000 // FASTER)
print("life", spool.life, "troubles", logger.troubles, "dropped", spool.dropped)
