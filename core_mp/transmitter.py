"""A pressure transmitter and its converter: raw signal to pressure, with the fault limits of a current loop.

In: what the logger read: counts, loop current [A], voltage [V] or pressure [Pa]. Out: pressure [Pa over the sensor's
own reference], status bits (status.py). Floats or numpy arrays alike.
"""

try:
    from core_mp.lines import Line
except ImportError:  # a board whose file system has no folders
    from lines import Line

NE43 = (0.003600016, 0.003799984, 0.020500016, 0.020999984)  # A: fault, least measured, most measured, fault; met within 16 nA
NO_LIMITS = (-1e30, -1e30, 1e30, 1e30)


class Bent(Line):
    """A sensor's line that may bend: line and limits as Line has them, points: two or more (raw, pressure [Pa]), both rising."""

    def __init__(self, line, limits, points):
        Line.__init__(self, line, limits)
        self.points = points

    def pressure(self, raw):
        """Pressure [Pa, over the sensor's own reference] of a raw signal, whatever status() says of it."""
        _, _, x, p, slope = self.line
        p = p + (raw - x) * slope
        for (x, y), (x2, y2) in zip(self.points[1:], self.points[2:]):
            turn = (y2 - y) / (x2 - x) - slope
            p = p + (raw > x) * (raw - x) * turn
            slope += turn
        return p


class Transmitter(Bent):
    """A pressure transmitter, as its data sheet and its calibration tell it.

    scale: two or more (signal, pressure [Pa]) points, both rising, straight lines between them and beyond.
    loop: two (counts, current [A]) points where the converter reads a current loop; the signals of scale are then currents
    [A] too, and NAMUR NE 43's limits (2003, 2021) hold: a fault <= 3.6 and >= 21 mA, measuring from 3.8 to 20.5 mA.
    counts_limits: (least, most) number the converter gives.

    >>> sensor = Transmitter([(0.004, 0.0), (0.020, 1e5)], loop=[(6553, 0.004), (32767, 0.020)])
    >>> round(sensor.pressure(19660)), sensor.status(19660), sensor.status(5800)
    (50000, 0, 5)
    """

    def __init__(self, scale, loop=None, counts_limits=None):
        (c, i), (c2, i2) = loop or ((0, 0), (1, 1))
        per_ampere = (c2 - c) / (i2 - i)
        low, under, over, high = [c + (x - i) * per_ampere for x in NE43] if loop else NO_LIMITS
        least, most = counts_limits or (-1e30, 1e30)
        under, over = max(under, least + 1), min(over, most - 1)
        points = [(c + (x - i) * per_ampere, p) for x, p in scale]
        (x, p), (x2, p2) = points[:2]
        x = int(x) if x == int(x) else x  # a count less a count needs no float
        straight = over if len(scale) == 2 else min(over, x2)
        Bent.__init__(self, (under, straight, x, p, (p2 - p) / (x2 - x)), (least, low, under, over, high, most), points)
