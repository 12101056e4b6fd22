"""A sensor's straight line from raw signal to pressure, and its limits, in numbers already worked out.

transmitter.py works them out from what people know of a sensor. A board with little memory is handed the numbers and needs
this file alone. Floats or numpy arrays alike. The numbers of status bits are those of status.py.
"""


class Line:
    """What a reading needs of a transmitter.

    clear: (low, high), the raw signals between which nothing is wrong. fault: (low, high), at or beyond which a loop is
    faulty. ends: (least, most) that the converter gives. line: (raw, pressure [Pa] there, Pa for each of raw).
    """

    def __init__(self, clear, fault, ends, line):
        self.clear = clear
        self.fault = fault
        self.ends = ends
        self.line = line
        self.straight = True

    def pressure(self, raw):
        """Pressure [Pa, over the sensor's own reference] of a raw signal, whatever status() says of it."""
        x, p, slope = self.line
        return p + (raw - x) * slope

    def status(self, raw):
        """Status bits of a raw signal; 0 wherever clear[0] <= raw <= clear[1]."""
        low, high = self.clear
        bits = (raw < low) * 4 | (raw > high) * 8 | (raw != raw) * 512
        low, high = self.fault
        bits = bits | (raw <= low) * 1 | (raw >= high) * 2
        low, high = self.ends
        return bits | (raw < low) * 512 | (raw > high) * 512
