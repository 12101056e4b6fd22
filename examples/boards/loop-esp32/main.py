# ESP32, a 16-bit converter on I2C, a 4-20 mA loop over 150 ohm. Wiring: README.md beside this folder.
import network
from machine import ADC, I2C, WDT, Pin

from core_mp import start
from core_mp.drivers.adc16 import Adc16
from core_mp.wifi import Wifi

BATTERY_V = 2 * 3.3 / 65535  # a count of the board's own converter, behind a divider of 1/2


class Sensor:
    """What the logger reads: counts of the loop, and the battery."""

    def __init__(self):
        self.loop = Adc16(I2C(0, sda=Pin(21), scl=Pin(22), freq=100000), 4.096)
        self.battery = ADC(Pin(35), atten=ADC.ATTN_11DB)

    def read(self):
        return self.loop.read(0), None, None, None, self.battery.read_u16() * BATTERY_V


watchdog = WDT(timeout=120000)
wifi = Wifi(network.WLAN(network.STA_IF), *start.secrets()["wifi"], watchdog)
start.run(start.logger(Sensor(), wifi, watchdog))
