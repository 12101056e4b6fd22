"""What a reading is read by: a sensor's straight line and a strapping table's rows, in numbers already worked out.

transmitter.py and strapping.py work them out from what people know of a sensor and a tank. A board with little memory is handed
the numbers and needs this file alone. The numbers of status bits are those of status.py.
"""


class Line:
    """What a reading needs of a transmitter.

    line: (low, high, raw, pressure [Pa] there, Pa for each of raw): it holds from low to high, where nothing is wrong either.
    limits: raw signals: the least that the converter gives; at or below which a loop is faulty; below and above which there
    is doubt; at or above which a loop is faulty; the most that the converter gives.
    """

    def __init__(self, line, limits):
        self.line = line
        self.limits = limits

    def pressure(self, raw):
        """Pressure [Pa, over the sensor's own reference] of a raw signal, whatever status() says of it."""
        _, _, x, p, slope = self.line
        return p + (raw - x) * slope

    def status(self, raw):
        """Status bits of a raw signal; 0 wherever nothing is wrong."""
        least, fault, low, high, short, most = self.limits
        bits = (raw < low) * 4 | (raw > high) * 8 | (raw <= fault) * 1 | (raw >= short) * 2
        return bits | (1 - (raw >= least) * (raw <= most)) * 512


class Rows:
    """levels_m [m above tank datum], volumes_m3 [m3]: two rows or more, both rising. Any sequences; array('f') on a board."""

    def __init__(self, levels_m, volumes_m3):
        self.levels_m = levels_m
        self.volumes_m3 = volumes_m3

    def find(self, level, line):
        """Put the table's line at a level [m] into line, a list of four; returns status bits: 0, BELOW_TABLE or ABOVE_TABLE.

        line: it holds from, to [m]; the volume is line[2] + level * line[3]. Outside the table the end row serves; that line holds
        nowhere else. The row is looked for where an even table would have it, then next to that, then by halves.
        """
        xs = self.levels_m
        ys = self.volumes_m3
        low = 0
        high = len(xs) - 1
        line[0] = 1
        line[1] = line[3] = 0
        i = level > xs[high]
        if i or level < xs[0]:
            line[2] = ys[i * high]
            return 32 << i
        i = int((level - xs[0]) * high / (xs[high] - xs[0]))
        step = 1
        while high - low > 1:
            if not low < i < high:
                i = (low + high) >> 1
            if xs[i] <= level:
                low = i
                i += step
            else:
                high = i
                i -= step
            step = high
        line[0] = i = xs[low]
        line[1] = step = xs[high]
        line[3] = step = (ys[high] - ys[low]) / (step - i)
        line[2] = ys[low] - i * step
        return 0
