"""What a day's row must say besides its figures: gaps, faults, readings outside the table, changed settings, odd days."""

from __future__ import annotations

from datetime import datetime
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

from companion.settings.site import TankSettings
from core_mp import status as bits

LONG = 600.0  # s: a gap of this length is named with its times, shorter ones are counted
NAMED = 4  # gaps named in one row at most
TOLD = (bits.LOOP_LOW, bits.LOOP_HIGH, bits.NO_READING, bits.UNDER_RANGE, bits.OVER_RANGE, bits.DRY, bits.BELOW_TABLE,
        bits.ABOVE_TABLE, bits.NO_BAROMETER)  # fmt: skip


def remarks(tank: TankSettings, zone: ZoneInfo, figures: pd.DataFrame, gaps: list[tuple[float, float]], bounds: list[datetime],
            opening_note: str, closing_note: str) -> str:  # fmt: skip
    """The remarks of a local day, "; " between them; empty where there is nothing to say.

    figures: of the day's readings. gaps: stretches [s since 1970] without a level. bounds: the day's two midnights.
    """
    said = []
    hours = (bounds[1] - bounds[0]).total_seconds() / 3600.0
    if hours != 24.0:
        said.append(f"day of {hours:g} hours")
    if figures.empty:
        said.append("no readings")
    else:
        said += _told_gaps(gaps, zone, bounds)
    said += [f"opening: {opening_note}"] if opening_note else []
    said += [f"closing: {closing_note}"] if closing_note else []
    status = figures["status"].to_numpy()
    for bit in TOLD:
        hit = (status & bit) != 0
        if bit in (bits.UNDER_RANGE, bits.OVER_RANGE):
            hit &= (status & bits.FAULT) == 0
        if hit.any():
            said.append(f"{bits.words(bit)} in {_count(hit)}{_span(figures['time'][hit], zone)}")
    without = (status & bits.NO_TEMPERATURE) != 0
    if without.any() and not without.all():
        said.append(f"no_temperature in {_count(without)}{_span(figures['time'][without], zone)}")
    if tank.overflow_level_m is not None:
        over = figures["level_m"].to_numpy() >= tank.overflow_level_m
        if over.any():
            said.append(f"at or above the overflow level in {_count(over)}{_span(figures['time'][over], zone)}")
    said += [f"settings changed at {at.astimezone(zone):%H:%M}" for at in _changes(tank) if bounds[0] < at < bounds[1]]
    return "; ".join(said)


def spoken(seconds: float) -> str:
    """A length of time as people say it.

    >>> spoken(11100.0), spoken(40.0), spoken(1.2e6)
    ('3 h 05 min', '40 s', '13 d 21 h')
    """
    minutes, hours = round(seconds / 60.0), round(seconds / 3600.0)
    if hours >= 48:
        return f"{hours // 24} d {hours % 24} h"
    if seconds < 120.0:
        return f"{seconds:.0f} s"
    return f"{minutes} min" if minutes < 60 else f"{minutes // 60} h {minutes % 60:02d} min"


def _told_gaps(gaps: list[tuple[float, float]], zone: ZoneInfo, bounds: list[datetime]) -> list[str]:
    long = sorted((gap for gap in gaps if gap[1] - gap[0] >= LONG), key=lambda gap: gap[0] - gap[1])
    end = bounds[1].timestamp()
    said = [
        f"no level {_at(a, zone)}-{'24:00' if b >= end else _at(b, zone)} ({spoken(b - a)})" for a, b in sorted(long[:NAMED])
    ]
    rest = long[NAMED:] + [gap for gap in gaps if gap[1] - gap[0] < LONG]
    if rest:
        plural = "s" if len(rest) > 1 else ""
        said.append(f"{len(rest)} {'more ' if long else ''}gap{plural}, {spoken(sum(b - a for a, b in rest))} together")
    return said


def _changes(tank: TankSettings) -> list[datetime]:
    return [period.start for period in tank.periods() if period.start is not None]


def _count(hit: np.ndarray) -> str:
    return f"{hit.sum()} reading{'s' if hit.sum() > 1 else ''}"


def _span(times: pd.Series, zone: ZoneInfo) -> str:
    first, last = (pd.Timestamp(time).tz_convert(zone) for time in (times.iloc[0], times.iloc[-1]))
    return f" at {first:%H:%M}" if len(times) == 1 else f" {first:%H:%M}-{last:%H:%M}"


def _at(seconds: float, zone: ZoneInfo) -> str:
    return f"{datetime.fromtimestamp(seconds, zone):%H:%M}"
