"""What loggers of other makes send, from [wire.NAME]: on which topics, where in their JSON each value stands, in which unit."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass
from datetime import UTC, datetime
from zoneinfo import ZoneInfo

from companion.settings.keys import Keys
from companion.units import QuantityError, unit_factor

SIGNALS = {"current": "current", "voltage": "voltage", "pressure": "pressure", "length": "level"}  # of a raw unit's dimension
OTHERS = {
    "temperature": ("temperature", "degC"),
    "barometer": ("pressure", "Pa"),
    "headspace": ("pressure", "Pa"),
    "battery": ("voltage", "V"),
}
FORMATS = ("rfc3339", "unix", "unix_ms")
OWN = "levelbook/+/readings"  # where levelbook's own loggers send
SAMPLE = datetime(2026, 11, 28, 21, 34, tzinfo=UTC)  # a pattern of time must be able to say it
_STEP = re.compile(r"([^.\[\]]+)|\[(\d{1,4})\]")

Steps = tuple[str | int, ...]


@dataclass(frozen=True)
class Place:
    """A value's place in a payload: steps through its objects and lists, from the payload's root or from the reading; SI = a + b * value."""

    path: str
    steps: Steps
    from_root: bool
    a: float = 0.0
    b: float = 1.0


@dataclass(frozen=True)
class Mapping:
    """A mapping: topics (a pattern and MQTT's filter for it), the tank (None: the topic tells it, by devices where there are any), places.

    signal: what raw is. time_format: one of FORMATS, or a pattern of strptime; zone: of a text without one.
    """

    name: str
    pattern: re.Pattern[str]
    filter: str
    tank: str | None
    devices: dict[str, str]
    readings: Steps | None
    signal: str
    raw: Place
    others: dict[str, Place]
    time: Place
    time_format: str
    zone: ZoneInfo | None
    seq: Place | None
    life: Place | None


def read_mapping(of: Keys, name: str, tanks: Iterable[str]) -> Mapping | None:
    """The mapping of one table; None where a fault was noted."""
    before = len(of.faults)
    topic = of.text("topic", required=True) or "x"
    tank = of.text("tank")
    strange = any(re.search(r"[{}+#\s\0]", level) for level in topic.split("/") if level != "{tank}")
    if strange or topic.startswith(("levelbook/", "$")) or shared(topic, OWN):
        of.fault(
            "topic",
            f'must be a topic with {{tank}} for the level that names the tank, like "meadow/{{tank}}/up", but is "{topic}"',
        )
    if ("{tank}" in topic.split("/")) == (tank is not None) or topic.count("{") > 1:
        of.fault("topic", 'must have {tank} as one of its levels, or tank = "..." must name the one tank that it is of')
    devices = of.raw("devices") or {}
    if not isinstance(devices, dict) or not all(isinstance(value, str) for value in devices.values()):
        of.fault("devices", f'must be a table of device = "tank", but is {devices!r}')
        devices = {}
    for one in [*devices.values(), *([tank] if tank else [])]:
        if one not in tanks:
            of.fault("devices" if tank is None else "tank", f"there is no tank '{one}' in this file; write [tank.{one}]")
    readings = of.text("readings")
    to_readings = None if readings is None else _steps(of, "readings", readings.removeprefix("/"))
    signal, raw = _raw(of)
    others = {
        key: place for key, (dimension, unit) in OTHERS.items() if (place := _place(of, key, dimension, unit)) is not None
    }
    time = _place(of, "time", None, required=True)
    kind = of.text("time_format", "rfc3339") or "rfc3339"
    if kind not in FORMATS and "%" not in kind:
        of.fault("time_format", f'must be one of {", ".join(FORMATS)}, or a pattern like "%d.%m.%Y %H:%M:%S", but is "{kind}"')
    zone = _zone(of, kind)
    _pattern(of, kind)
    seq, life = _place(of, "seq", None), _place(of, "life", None)
    if life is not None and seq is None:
        of.fault("seq", "is missing, and life is told: a reading's identity is both of them, or neither")
    of.unknown()
    if len(of.faults) > before or raw is None or time is None:
        return None
    pattern = re.compile("/".join("(?P<tank>[^/]+)" if level == "{tank}" else re.escape(level) for level in topic.split("/")))
    return Mapping(name, pattern, topic.replace("{tank}", "+"), tank, {str(k): v for k, v in devices.items()}, to_readings, signal, raw, others, time,
                   kind, zone, seq, life)  # fmt: skip


def shared(one: str, other: str) -> bool:
    """Whether a topic can be of two patterns.

    >>> shared("meadow/{tank}/up", "meadow/north/+"), shared("meadow/{tank}/up", "meadow/north")
    (True, False)
    """
    pairs = list(zip(one.split("/"), other.split("/"), strict=False))
    any_level = ("{tank}", "+")
    return one.count("/") == other.count("/") and all(a == b or a in any_level or b in any_level for a, b in pairs)


def _pattern(of: Keys, kind: str) -> None:
    if kind in FORMATS or "%" not in kind:
        return
    try:
        again = datetime.strptime(SAMPLE.strftime(kind), kind).replace(tzinfo=UTC)
    except (ValueError, re.error):
        again = None
    if again != SAMPLE or "%Z" in kind:
        of.fault(
            "time_format",
            f'must be a pattern of date and time that strptime reads, like "%d.%m.%Y %H:%M:%S" (a zone as %z), but is "{kind}"',
        )


def _raw(of: Keys) -> tuple[str, Place | None]:
    """What raw is, by its unit (counts where it has none), and its place."""
    unit = of.text("raw_unit")
    for dimension, signal in SIGNALS.items() if unit else ():
        try:
            unit_factor(unit or "", dimension)
        except QuantityError as error:
            if "can mean more than one" in str(error):
                of.fault("raw_unit", str(error))
                return signal, None
            continue
        return signal, _place(of, "raw", dimension, None, required=True)
    if unit:
        of.fault("raw_unit", f'"{unit}" is no unit of current, voltage, pressure or length; leave it out for counts')
    return "counts", _place(of, "raw", None, required=True)


def _place(of: Keys, key: str, dimension: str | None, default: str | None = None, required: bool = False) -> Place | None:
    path = of.text(key, required=required)
    unit = of.text(f"{key}_unit", default) if dimension else None
    if path is None:
        if dimension and f"{key}_unit" in of:
            of.fault(key, f"is missing, and {key}_unit is told; write its path, or leave the unit out")
        return None
    a, b = 0.0, 1.0
    if dimension and unit:
        try:
            a = unit_factor(unit, dimension, 0.0)
            b = unit_factor(unit, dimension, 1.0) - a
        except QuantityError as error:
            of.fault(f"{key}_unit", str(error))
    return Place(path, _steps(of, key, path.removeprefix("/")), path.startswith("/"), a, b)


def _steps(of: Keys, key: str, path: str | None) -> Steps:
    if path is None:
        return ()
    found = list(_STEP.finditer(path))
    if "".join(one[0] for one in found) != path.replace(".", ""):
        of.fault(
            key, f'must be a path like "data.samples[0].value", from the payload\'s root with a leading "/", but is "{path}"'
        )
    return tuple(int(one[2]) if one[2] else one[1] for one in found)


def _zone(of: Keys, kind: str) -> ZoneInfo | None:
    name = of.text("time_zone")
    if name is None:
        if "%" in kind and "%z" not in kind:
            of.fault("time_zone", f'is missing, and "{kind}" tells no zone; write time_zone = "UTC" or one like "Europe/Oslo"')
        return None
    try:
        return ZoneInfo(name)
    except (KeyError, ValueError, OSError):
        of.fault("time_zone", f'"{name}" is no time zone known here; write an IANA name like "Europe/Oslo"')
        return None
