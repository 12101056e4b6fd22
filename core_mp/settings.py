"""What a logger is told: by its bundle (tank.json, table.bin), and since then by the desk; whatever is wrong is refused whole.

A message of the desk is its sha256 in hex, a line's end, and JSON: {"tank": "north", "version": 1767225600, "every_s": 60, ...}
with any of the keys in RANGES, and the sensor's calibration as line and limits (lines.py). It is kept as it came in one of two
files in turn, so that a power cut leaves the one in use; at the start the newest that is whole serves, else the bundle.
"""

import binascii
import hashlib
import json
from array import array

from core_mp.lines import Line, Rows
from core_mp.tank import Tank

RANGES = {
    "every_s": (1, 86400),  # between readings
    "report_s": (1, 86400),  # between reports
    "again_s": (5, 3600),  # without a receipt for so long, readings are sent again
    "samples": (1, 25),  # of which the median is a reading
    "fast_m": (0.001, 100),  # a change of level that is reported at once
    "stay": (0, 1),  # connected between reports, or not
    "receipts": (0, 1),  # the desk sends receipts; else the broker's word lets readings go
    "height_m": (-100, 1000),  # of the sensor's diaphragm above tank datum
}
LENGTHS = {"line": 5, "limits": 6}


class Settings:
    """The settings in a folder of the board.

    Attributes: tank (its name), signal, values (by their names), version, core (a Tank; None where the sensor tells the level itself),
    refused (why the desk's last message was; None).
    """

    def __init__(self, folder):
        self._folder = folder
        with open(folder + "/tank.json") as f:
            self._bundle = json.load(f)
        self.tank, self.signal = self._bundle["tank"], self._bundle["signal"]
        self.refused = None
        self._file = 0
        self._use(self._bundle)
        for file in (0, 1):
            try:
                with open(self._path(file), "rb") as f:
                    self._check(f.read())
                self._file = file
            except (OSError, ValueError):
                pass

    def take(self, message):
        """Settings from the desk: True where they are in use from now on, False where they were already, or are refused."""
        before = self.values, self.core, self.version
        try:
            self._check(message)
            if self.values is before[0]:
                return False
            with open(self._path(1 - self._file), "wb") as f:
                f.write(message)
        except Exception as error:  # whatever the message holds, it must not stop a logger
            self.values, self.core, self.version = before
            self.refused = "the flash is full" if isinstance(error, OSError) else str(error) or "no memory for it"
            return False
        self._file = 1 - self._file
        self.refused = None
        return True

    def _path(self, file):
        return self._folder + "/settings.%d" % file

    def _check(self, message):
        """Use a message if all of it is right, and it is no older than what is in use. ValueError says what is wrong."""
        body = bytes(message[65:])
        if binascii.hexlify(hashlib.sha256(body).digest()) != bytes(message[:64]):
            raise ValueError("the hash does not fit")
        told = json.loads(body)
        if type(told) is not dict or told.get("tank") != self.tank or type(told.get("version")) is not int:
            raise ValueError("not for this tank, or no version")
        for key in told:
            value = told[key]
            if key in RANGES:
                low, high = RANGES[key]
                if type(value) not in (int, float) or not low <= value <= high:
                    raise ValueError("%s must be from %s to %s" % (key, low, high))
            elif key in LENGTHS:
                if type(value) is not list or len(value) != LENGTHS[key] or not all(type(n) in (int, float) for n in value):
                    raise ValueError("%s must be %d numbers" % (key, LENGTHS[key]))
            elif key not in ("tank", "version"):
                raise ValueError("an unknown key")
        if told["version"] < self.version:
            raise ValueError("older than version %d" % self.version)
        if told["version"] > self.version:
            values = self._bundle.copy()
            values.update(told)
            self._use(values)

    def _use(self, values):
        """Put settings to use. ValueError where no level would come of them."""
        core = None
        if self.signal != "level":
            line, limits = values["line"], values["limits"]
            if not max(limits[:3]) <= line[0] < line[1] <= min(limits[3:]) or not line[4] > 0:
                raise ValueError("line must rise, and lie within limits")
            core = self._core(Line(line, limits), values)
        self.values, self.core, self.version = values, core, values["version"]

    def _core(self, line, values):
        if "points" in values:
            from core_mp.transmitter import Bent

            line = Bent(line.line, line.limits, values["points"])
        if "liquid" in values or values["salinity"]:
            from core_mp import water

            density = water.liquid_density(*values["liquid"]) if "liquid" in values else water.water_density
        else:
            from core_mp.density import fresh_density as density
        table = Rows(array("f", [0] * values["rows"]), array("f", [0] * values["rows"]))
        with open(self._folder + "/table.bin", "rb") as f:
            f.readinto(table.levels_m)
            f.readinto(table.volumes_m3)
        keys = ("inside", "height_m", "floor_m", "gravity", "t_c", "salinity", "rise_m", "standard_pa", "air_per_pa")
        return Tank(line, table, density, *[values[key] for key in keys])
