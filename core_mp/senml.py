"""Readings to a SenML pack (RFC 8428, JSON): what a logger publishes on levelbook/<tank>/readings.

    [{"bn":"north/","bt":1767225600,"n":"life","vs":"k3f9"},{"n":"oldest","v":41},
     {"n":"counts","v":19660},{"n":"temperature","u":"Cel","v":11.5},{"n":"seq","v":41},
     {"t":60,"n":"counts","v":19664},{"t":60,"n":"temperature","u":"Cel","v":11.5},{"t":60,"n":"seq","v":42}]

bt is the first reading's time, t the seconds after it, both whole. life and oldest (the lowest seq the spool still holds) stand
once, first; each reading's seq closes it. What was not measured is left out, and so is what is no number.
"""

UNITS = {"counts": "", "current": "A", "voltage": "V", "pressure": "Pa", "level": "m"}
OTHERS = (("temperature", "Cel"), ("barometer", "Pa"), ("headspace", "Pa"), ("battery", "V"))


def pack(tank, signal, life, oldest, readings):
    """The pack's text.

    tank: its name. signal: one of UNITS. life: text drawn with the spool. oldest: seq. readings: one or more of
    (seq, time [s since 1970, UTC], raw, temperature [degC], barometer [Pa], headspace [Pa], battery [V]), in order of seq;
    the last four may be None.

    >>> pack("north", "counts", "k3f9", 41, [(41, 1767225600, 19660, None, None, None, None)])
    '[{"bn":"north/","bt":1767225600,"n":"life","vs":"k3f9"},{"n":"oldest","v":41},{"n":"counts","v":19660},{"n":"seq","v":41}]'
    """
    start = readings[0][1]
    out = ['[{"bn":"%s/","bt":%d,"n":"life","vs":"%s"},{"n":"oldest","v":%d}' % (tank, start, life, oldest)]
    for reading in readings:
        at = reading[1] - start
        at = '{"t":%d,' % at if at else "{"
        _add(out, at, signal, UNITS[signal], reading[2])
        for i in range(4):
            _add(out, at, OTHERS[i][0], OTHERS[i][1], reading[3 + i])
        _add(out, at, "seq", "", reading[0])
    return ",".join(out) + "]"


def _add(out, at, name, unit, value):
    if value is None or value - value != 0:
        return
    unit = ',"u":"%s"' % unit if unit else ""
    out.append('%s"n":"%s"%s,"v":%s}' % (at, name, unit, repr(value)))
