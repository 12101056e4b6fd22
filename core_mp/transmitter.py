"""Raw signal to pressure, with the transmitter's fault limits.

In: what the logger read: counts, loop current [A], voltage [V] or pressure [Pa]. Out: pressure [Pa over the sensor's
own reference], status bits (status.py). Floats or numpy arrays alike; read() takes one reading.
"""


class Transmitter:
    """A pressure transmitter and the converter that reads it.

    scale: two or more (signal, pressure [Pa]) points, signals rising, straight lines between them and beyond.
    loop: two (counts, current [A]) points where the converter reads a current loop; the signals of scale are then currents
    [A] too, and NAMUR NE 43's limits (2003, 2021) hold, met within 16 nA: a fault <= 3.6 and >= 21 mA, measuring from 3.8
    to 20.5 mA. counts_limits: (least, most) number the converter gives.

    >>> sensor = Transmitter([(0.004, 0.0), (0.020, 1e5)], loop=[(6553, 0.004), (32767, 0.020)])
    >>> round(sensor.pressure(19660)), sensor.status(19660), sensor.status(5800)
    (50000, 0, 5)
    """

    def __init__(self, scale, loop=None, counts_limits=None):
        self._ends = low, high = counts_limits or (-1e30, 1e30)
        low += 1
        high -= 1
        self._loop = loop
        (c, i), (d, j) = loop or ((0, 0), (1, 1))
        k = (d - c) / (j - i)
        if loop:
            low = max(low, c + (0.003799984 - i) * k)
            high = min(high, c + (0.020500016 - i) * k)
        self._scale = []
        for x, p in scale:
            self._scale.append((c + (x - i) * k, p))
        (x, p), (d, j) = self._scale[:2]
        self.clear = low, high
        self.line = x, p, (j - p) / (d - x)
        self.straight = len(scale) == 2

    def pressure(self, raw):
        """Pressure [Pa, over the sensor's own reference] of a raw signal, whatever status() says of it."""
        x, p, slope = self.line
        p = p + (raw - x) * slope
        for i in range(2, len(self._scale)):
            (x, y), (x2, y2) = self._scale[i - 1 : i + 1]
            turn = (y2 - y) / (x2 - x) - slope
            p = p + (raw > x) * (raw - x) * turn
            slope += turn
        return p

    def status(self, raw):
        """Status bits of a raw signal; 0 wherever clear[0] <= raw <= clear[1]."""
        low, high = self._ends
        bits = (raw < low) * 512 | (raw > high) * 512 | (raw != raw) * 512
        low, high = self.clear
        bits = bits | (raw < low) * 4 | (raw > high) * 8
        if self._loop:
            (c, i), (d, j) = self._loop
            i = i + (raw - c) * (j - i) / (d - c)
            bits = bits | (i <= 0.003600016) * 1 | (i >= 0.020999984) * 2
        return bits
