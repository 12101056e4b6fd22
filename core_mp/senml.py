"""Readings to a SenML pack (RFC 8428, JSON): what a logger publishes on levelbook/<tank>/readings.

    [{"bn":"north/","bt":1767225600,"n":"life","vs":"k3f9"},{"n":"oldest","v":41},
     {"n":"counts","v":19660},{"n":"temperature","u":"Cel","v":11.5},{"n":"seq","v":41},
     {"t":60,"n":"counts","v":19664},{"t":60,"n":"temperature","u":"Cel","v":11.5},{"t":60,"n":"seq","v":42}]

bt is the first reading's time, t the seconds after it, both whole; where a logger has no clock bt is relative to now (RFC 8428,
4.5.3). life and oldest (the lowest seq the spool still holds) stand once, first, and after them what the logger says of
itself; each reading's seq closes it. What was not measured is left out, and so is what is no number.
"""

UNITS = {"counts": None, "current": "A", "voltage": "V", "pressure": "Pa", "level": "m"}
OTHERS = (("temperature", "Cel"), ("barometer", "Pa"), ("headspace", "Pa"), ("battery", "V"), ("seq", None))


def pack(tank, signal, life, oldest, readings):
    """The pack's text.

    tank: its name. signal: one of UNITS. life: text drawn with the spool. oldest: seq. readings: one or more of
    (seq, time [s since 1970, UTC], raw, temperature [degC], barometer [Pa], headspace [Pa], battery [V]), in order of seq;
    the last four may be None. Numbers that are not whole go out with nine digits, more than a spool's 32 bits hold.

    >>> pack("north", "counts", "k3f9", 41, [(41, 1767225600, 19660, None, None, None, None)])
    '[{"bn":"north/","bt":1767225600,"n":"life","vs":"k3f9"},{"n":"oldest","v":41},{"n":"counts","v":19660},{"n":"seq","v":41}]'
    """
    out = Pack(tank, signal, 200 + 400 * len(readings))
    out.begin(readings[0][1], life, oldest)
    for reading in readings:
        out.add(reading, reading[1])
    return bytes(out.end()).decode()


class Pack:
    """A pack in the making, in a buffer made once: begin, say, add while there is room, end. size: bytes it may have."""

    def __init__(self, tank, signal, size):
        self._head = b'[{"bn":"' + tank.encode() + b'/","bt":'
        self._names = [
            ('"n":"%s","v":' % name if unit is None else '"n":"%s","u":"%s","v":' % (name, unit)).encode()
            for name, unit in ((signal, UNITS[signal]),) + OTHERS
        ]
        self._size = size - 1
        self._buffer = bytearray(size)

    def begin(self, start, life, oldest):
        """Begin a pack whose first reading has this time; where there is no clock, seconds since now."""
        self._start, self._end = start, 0
        self._put(self._head)
        self._put(b'%d,"n":"life","vs":"' % start)
        self._put(life.encode())
        self._put(b'"},{"n":"oldest","v":%d}' % oldest)

    def say(self, name, value):
        """What the logger says of itself: a whole number or a text; False where there is no room."""
        end = self._end
        if isinstance(value, str):
            value = value.replace("\\", "/").replace('"', "'")  # or the pack were no JSON
        self._put((',{"n":"%s","v%s}' % (name, 's":"%s"' % value if isinstance(value, str) else '":%d' % value)).encode())
        return self._fits(end)

    def add(self, reading, time):
        """Add a reading of this time; False where there is no room for it: the pack is as it was."""
        end, time = self._end, time - self._start
        at = b',{"t":%d,' % time if time else b",{"
        for i in range(6):
            value = reading[2 + i] if i < 5 else reading[0]
            if value is not None and value - value == 0:
                self._put(at)
                self._put(self._names[i])
                self._put(b"%d}" % int(value) if value == int(value) else b"%.9g}" % value)
        return self._fits(end)

    def end(self):
        """The pack's bytes: a view of the buffer, until the next begin."""
        self._buffer[self._end] = 93  # ]
        return memoryview(self._buffer)[: self._end + 1]

    def _fits(self, end):
        """Whether all since an end had room; without, the pack is as it was there."""
        if self._end > self._size:
            self._end = end
        return self._end > end

    def _put(self, data):
        """Add bytes; where there is no room, only _end tells."""
        end = self._end + len(data)
        if end <= self._size:
            self._buffer[self._end : end] = data
        self._end = end
