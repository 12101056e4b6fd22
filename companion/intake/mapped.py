"""Payloads of loggers of other makes to readings, by the site's [wire.NAME] mappings; every other topic goes to wire.py."""

from __future__ import annotations

import json
import math
import re
from datetime import UTC, datetime
from typing import Any

from companion.book.readings import Row
from companion.intake.senml import WireError
from companion.intake.wire import AHEAD_S, EARLIEST, LIFE, NAN, NO_LIFE, PLACES, Pack, decode
from companion.settings.site import Site
from companion.settings.wire import Mapping, Place, Steps

MOST = 100_000  # readings in a payload
NUMBER = re.compile(r"\s*[-+]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][-+]?[0-9]+)?\s*")  # as text
RFC3339 = re.compile(r"[0-9]{4}-[0-9]{2}-[0-9]{2}[Tt ][0-9]{2}:[0-9]{2}:[0-9]{2}(\.[0-9]+)?([Zz]|[+-][0-9]{2}:[0-9]{2})?")


def taken(site: Site, topic: str, payload: bytes, arrived: float) -> Pack:
    """The readings of a payload on any topic that the site knows. WireError, as wire.decode; arrived: [s since 1970]."""
    for mapping in site.wire.values():
        match = mapping.pattern.fullmatch(topic)
        if match is not None:
            return _mapped(site, mapping, mapping.tank or match["tank"], payload, arrived)
    return decode(topic, payload, site.signal, arrived)


def _mapped(site: Site, mapping: Mapping, told: str, payload: bytes, arrived: float) -> Pack:
    tank = mapping.devices.get(told, told) if mapping.devices else told
    if tank not in site.tanks:
        raise WireError(
            f"there is no tank '{tank[:80]}' in the site file; name it, or write devices under [wire.{mapping.name}]"
        )
    try:
        root = json.loads(payload.decode("utf-8"), parse_constant=_no_number)
    except (UnicodeDecodeError, ValueError, RecursionError) as error:
        raise WireError(f"is no JSON: {str(error)[:80]}") from None
    try:
        found = [root] if mapping.readings is None else _at(root, mapping.readings)
    except KeyError:
        raise WireError(f"has no readings where [wire.{mapping.name}] says") from None
    readings = found if isinstance(found, list) else [found]
    if len(readings) > MOST:
        raise WireError(f"has {len(readings)} readings, more than {MOST}")
    rows: list[Row] = []
    faults = []
    for n, reading in enumerate(readings, 1):
        try:
            rows.append(_row(site, mapping, tank, root, reading, arrived))
        except ValueError as fault:
            faults.append(f"reading {n}: {fault}")
    return Pack(tank, rows, None, None, faults)


def _row(site: Site, mapping: Mapping, tank: str, root: Any, reading: Any, arrived: float) -> Row:
    def value(place: Place, required: bool = True) -> Any:
        try:
            return _at(root if place.from_root else reading, place.steps)
        except KeyError:
            if required:
                raise ValueError(f"has no {place.path}") from None
            return None

    when = _time(mapping, value(mapping.time))
    if not when >= EARLIEST:
        raise ValueError(f"{mapping.time.path}: the time is before 2015, so the logger's clock was lost")
    if when > arrived + AHEAD_S:
        raise ValueError(
            f"{mapping.time.path}: the time is {(when - arrived) / 3600:.0f} h after its arrival, so the logger's clock is wrong"
        )
    signal = site.signal(tank, when)
    if signal != mapping.signal:
        raise ValueError(f"{mapping.raw.path}: is {mapping.signal} by [wire.{mapping.name}], the site file says {signal}")
    raw = _number(mapping.raw, value(mapping.raw))
    others = []
    for name in PLACES:
        place = mapping.others.get(name)
        told = None if place is None else value(place, required=False)
        others.append(NAN if place is None or told is None else _number(place, told))
    microseconds = round(when * 1e6)
    seq = microseconds if mapping.seq is None else _whole(mapping.seq, value(mapping.seq))
    life = NO_LIFE if mapping.seq is None else "wire-" + (_life(mapping.life, value(mapping.life)) if mapping.life else "")
    return (microseconds, raw, *others, life, seq)  # type: ignore[return-value]


def _at(value: Any, steps: Steps) -> Any:
    """The value at the end of some steps; KeyError where they lead nowhere."""
    for step in steps:
        if isinstance(step, int) and isinstance(value, list) and step < len(value):
            value = value[step]
        elif isinstance(value, dict) and str(step) in value:
            value = value[str(step)]
        else:
            raise KeyError(step)
    return value


def _number(place: Place, value: Any) -> float:
    good = (
        NUMBER.fullmatch(value) if isinstance(value, str) else isinstance(value, (int, float)) and not isinstance(value, bool)
    )
    try:
        number = float(value) if good else math.nan
    except OverflowError:
        number = math.nan
    number = place.a + place.b * number
    if not math.isfinite(number):
        raise ValueError(f"{place.path}: {str(value)[:40]!r} is no number")
    return number


def _whole(place: Place, value: Any) -> int:
    if isinstance(value, bool) or not isinstance(value, int) or not 0 <= value < 2**63:
        raise ValueError(f"{place.path}: {str(value)[:40]!r} is no whole number from 0 up")
    return value


def _life(place: Place, value: Any) -> str:
    """A life as text that every book can keep."""
    if isinstance(value, bool) or not isinstance(value, (str, int)) or not LIFE.fullmatch(str(value)):
        raise ValueError(
            f"{place.path}: {str(value)[:40]!r} is neither text of 1 to 64 printable ASCII letters nor a whole number"
        )
    return str(value)


def _time(mapping: Mapping, value: Any) -> float:
    """Seconds since 1970. ValueError, too, where a clock that was changed leaves it open which."""
    kind = mapping.time_format
    try:
        if kind in ("unix", "unix_ms"):
            return _number(mapping.time, value) / (1000.0 if kind == "unix_ms" else 1.0)
        if kind == "rfc3339" and not RFC3339.fullmatch(value):
            raise ValueError
        moment = datetime.fromisoformat(value.upper()) if kind == "rfc3339" else datetime.strptime(value, kind)
        zone = moment.tzinfo or mapping.zone
        if zone is None:
            raise ValueError
        first, second = (moment.replace(tzinfo=zone, fold=fold) for fold in (0, 1))
        at = first.astimezone(UTC)
        changed = first.utcoffset() != second.utcoffset()
    except (ValueError, TypeError, OverflowError):
        raise ValueError(f"{mapping.time.path}: {str(value)[:40]!r} is no time as {kind} tells it") from None
    if changed:
        came = "comes twice" if at.astimezone(zone).replace(tzinfo=None) == moment.replace(tzinfo=None) else "never comes"
        raise ValueError(
            f"{mapping.time.path}: {str(value)[:40]!r} {came} in {zone}, where clocks are changed; have the logger send UTC"
        )
    return at.timestamp()


def _no_number(word: str) -> float:
    raise ValueError(f"{word} is no number in JSON")
