# Run by MicroPython's unix port (see test_logger.py): a logger of tank "north" with a simulated board, on real MQTT, until it has taken
# the readings asked for and the desk has all of them. Arguments: port, spool folder, readings in all.
import sys
import time

from core_mp.logger import Logger
from core_mp.mqtt import Client
from core_mp.spool import Spool

port, folder, readings = int(sys.argv[1]), sys.argv[2], int(sys.argv[3])


class Board:
    def __init__(self, spool):
        self.spool = spool

    def read(self):
        return 7000 + self.spool.next_seq % 20000, 9.5, None, None, 3.6  # the raw count says which reading it is

    def seconds(self):
        return time.ticks_ms() / 1000

    def clock(self):
        return 1767225600 + self.spool.next_seq * 60

    def feed(self):
        pass


spool = Spool(folder, 20000)
client = Client("127.0.0.1", port, "north-logger", will=("levelbook/north/presence", "offline"), timeout_s=3)
logger = Logger("north", "counts", spool, Board(spool), client, every_s=0, report_s=0.2, batch=60, again_s=2)
while spool.next_seq < readings or spool.oldest < readings:
    if spool.next_seq >= readings:
        logger.every_s = logger._sample_at = 1 << 30
    logger.step()
    time.sleep_ms(2)
print("life", spool.life, "troubles", logger.troubles, "dropped", spool.dropped)
