"""A tank's level sensor, from [tank.NAME.sensor]: what it sends and what that means."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from datetime import date, datetime
from typing import Any

from companion.settings.keys import Keys
from companion.units import QuantityError, read
from core_mp.transmitter import Transmitter

SIGNALS = ("counts", "current", "voltage", "pressure", "level")
KINDS = ("gauge", "sealed", "absolute")
INSIDE = {"gauge": None, "sealed": 101325.0, "absolute": 0.0}  # Pa, absolute, inside the sensor's reference
IDENTITY = ((0.0, 0.0), (1.0, 1.0))

Points = tuple[tuple[float, float], ...]


@dataclass(frozen=True)
class Sensor:
    """A sensor from one moment on. Pressures in Pa, currents in A, elevations and heights in m; None where not told.

    scale: (signal, pressure) points; loop: (counts, current) points; accuracy: share of span; since: None from the beginning.
    """

    since: datetime | None
    signal: str
    kind: str
    height_m: float
    reference_elevation_m: float | None
    scale: Points
    loop: Points | None
    counts_limits: tuple[float, float] | None
    accuracy: float | None
    drift_per_year: float | None
    calibrated: date | None

    @property
    def span_pa(self) -> float:
        """Upper less lower range value [Pa]; NaN where the signal has no scale."""
        return self.scale[-1][1] - self.scale[0][1] if self.scale != IDENTITY else float("nan")

    @property
    def resolution_pa(self) -> float:
        """What one count is worth [Pa] where it is worth most; 0 where the signal is no count."""
        if self.signal != "counts":
            return 0.0
        transmitter = self.transmitter()
        marks = self.loop or self.scale
        return max(float(transmitter.pressure(count + 1) - transmitter.pressure(count)) for count, _ in marks[:-1])

    def transmitter(self) -> Transmitter:
        """The transmitter as core_mp takes it."""
        loop = IDENTITY if self.signal == "current" else self.loop
        return Transmitter(self.scale, loop, self.counts_limits)


def read_sensor(keys: Keys) -> Sensor | None:
    """The sensor of one table; None where a fault was noted that leaves it without meaning."""
    before = len(keys.faults)
    since = keys.since()
    signal = keys.choice("signal", SIGNALS, "counts") or "counts"
    kind = keys.choice("pressure", KINDS, None if signal != "level" else "gauge") or "gauge"
    height = keys.quantity("height", "length", required=signal != "level")
    reference = keys.quantity("reference_elevation", "length")
    loop = _points(keys, "loop", _count, lambda value: read(value, "current"), '[[6553, "4 mA"], [32767, "20 mA"]]')
    if loop and len(loop) > 2:
        keys.fault("loop", "must have two points; a converter that bends between them is told by scale in counts")
    if loop and signal != "counts":
        keys.fault("loop", f'is for signal = "counts" read from a current loop, but the signal is {signal}; leave it out')
    scale = _scale(keys, signal, loop is not None)
    accuracy = keys.quantity("accuracy", "share")
    if accuracy is not None and not 0.0 <= accuracy <= 0.2:
        keys.fault("accuracy", f'must be from "0 %" to "20 %" of span, but is "{keys.raw("accuracy")}"')
    drift = keys.quantity("drift", "drift")
    calibrated = keys.day("calibrated")
    limits = _limits(keys)
    keys.unknown()
    if accuracy is not None and signal == "pressure" and "scale" not in keys:
        keys.fault("accuracy", 'is of span, and the span is not told; write scale = [["0 bar", "0 bar"], ["1 bar", "1 bar"]]')
    if len(keys.faults) > before or scale is None:
        return None
    return Sensor(since, signal, kind, height or 0.0, reference, scale, loop, limits, accuracy, drift, calibrated)


def _scale(keys: Keys, signal: str, loop: bool) -> Points | None:
    if signal in ("pressure", "level") and "scale" not in keys:
        return IDENTITY
    if signal == "level":
        keys.fault("scale", 'is for sensors of pressure, but signal = "level"; leave it out')
        return None
    dimension = (
        "current" if loop else {"counts": "", "current": "current", "voltage": "voltage", "pressure": "pressure"}[signal]
    )
    first = {"": "6553", "current": '"4 mA"', "voltage": '"0.5 V"', "pressure": '"0 bar"'}[dimension]
    second = {"": "32767", "current": '"20 mA"', "voltage": '"4.5 V"', "pressure": '"1 bar"'}[dimension]
    example = f'[[{first}, "0 bar"], [{second}, "1 bar"]]'
    if "scale" not in keys:
        keys.fault("scale", f"is missing; write the signal at two or more pressures, scale = {example}")
        return None
    signal_of: Callable[[Any], float] = _count if not dimension else lambda value: read(value, dimension)
    return _points(keys, "scale", signal_of, lambda value: read(value, "pressure"), example)


def _points(keys: Keys, key: str, x_of: Callable[[Any], float], y_of: Callable[[Any], float], example: str) -> Points | None:
    value = keys.raw(key)
    if value is None:
        return None
    if not isinstance(value, list) or len(value) < 2 or any(not isinstance(pair, list) or len(pair) != 2 for pair in value):
        keys.fault(key, f"must be two or more pairs; write {key} = {example}")
        return None
    points = []
    for n, pair in enumerate(value, 1):
        try:
            points.append((x_of(pair[0]), y_of(pair[1])))
        except QuantityError as error:
            keys.fault(key, f"point {n}: {error}")
    if len(points) < len(value):
        return None
    for n, ((x, y), (x2, y2)) in enumerate(zip(points, points[1:], strict=False), 2):
        if not (x < x2 and y < y2):
            keys.fault(
                key, f"both numbers must rise, but point {n} {value[n - 1]} follows {value[n - 2]}; write the lower point first"
            )
            return None
    return tuple(points)


def _count(value: Any) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise QuantityError(f'{value!r} is no count; write a bare number like 6553, or give loop = [[6553, "4 mA"], ...] too')
    return float(value)


def _limits(keys: Keys) -> tuple[float, float] | None:
    value = keys.raw("counts_limits")
    if value is None:
        return None
    if (
        not isinstance(value, list)
        or len(value) != 2
        or not all(type(end) in (int, float) for end in value)
        or not value[0] < value[1]
    ):
        keys.fault("counts_limits", f"must be the least and the most count, like [0, 65535], but is {value!r}")
        return None
    return float(value[0]), float(value[1])
