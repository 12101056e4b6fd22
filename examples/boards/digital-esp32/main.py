# ESP32, a digital absolute pressure sensor in the tank and a barometer beside the board, on one I2C. Wiring: README.md beside this folder.
import network
from machine import I2C, WDT, Pin

from core_mp import start
from core_mp.drivers.pressure24 import BAROMETER, IMMERSION, Pressure24
from core_mp.wifi import Wifi


class Sensor:
    """What the logger reads: pressure [Pa, absolute], the water's temperature, the barometer. Either is looked for anew when it fails."""

    def __init__(self):
        self.i2c = I2C(0, sda=Pin(21), scl=Pin(22), freq=100000)
        self.water = self.air = None

    def read(self):
        self.water = self.water or Pressure24(self.i2c, IMMERSION, 0x76)
        pressure_pa, temperature_c = self.water.read()
        return pressure_pa, temperature_c, self.barometer(), None, None

    def barometer(self):
        try:
            self.air = self.air or Pressure24(self.i2c, BAROMETER, 0x77)
            return self.air.read()[0]
        except OSError:
            self.air = None
            return None


watchdog = WDT(timeout=120000)
wifi = Wifi(network.WLAN(network.STA_IF), *start.secrets()["wifi"], watchdog)
start.run(start.logger(Sensor(), wifi, watchdog))
