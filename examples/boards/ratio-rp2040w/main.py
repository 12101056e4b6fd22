# RP2040 W, a ratiometric 0.5-4.5 V sensor on the board's own converter. Wiring: README.md beside this folder.
import network
from machine import ADC, WDT

from core_mp import start
from core_mp.drivers.ratio import Ratio
from core_mp.wifi import Wifi


class Sensor:
    """What the logger reads: the sensor's output over its supply, 65,535 for 1."""

    def __init__(self):
        self.ratio = Ratio(ADC(26), ADC(27))

    def read(self):
        return self.ratio.read(), None, None, None, None


watchdog = WDT(timeout=8000)  # the most this board can: a rest is shorter, and the logger feeds it between waits
wifi = Wifi(network.WLAN(network.STA_IF), *start.secrets()["wifi"], watchdog)
start.run(start.logger(Sensor(), wifi, watchdog), 3)
