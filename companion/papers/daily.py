"""The daily log: each tank's local days, closed so that they add up.

In: a site, a tank, its raw readings with a margin on both sides of the days. Out: contract rows, one a tank and local day.
A day runs from one local midnight to the next, 23 to 25 hours. Its opening is the state at midnight, interpolated between
the readings either side, and is the closing of the day before to the last digit. change = closing - opening = net fill -
net draw holds as printed, since the sums are done in the whole litres that are printed.
"""

from __future__ import annotations

import csv
import sys
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, date, datetime, time, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import numpy.typing as npt
import pandas as pd

from companion.book.files import aside
from companion.book.store import open_book
from companion.figures.convert import convert
from companion.figures.turning import BAND, averaged, neighbours, noise, turning_points
from companion.papers.remarks import remarks, spoken
from companion.settings.site import Site
from companion.settings.tank import Period, TankSettings

COLUMNS = ("date", "tank", "opening_level_m", "closing_level_m", "minimum_level_m", "minimum_at", "maximum_level_m", "maximum_at",
           "opening_volume_m3", "closing_volume_m3", "change_m3", "change_u95_m3", "net_fill_m3", "net_draw_m3", "readings",
           "complete_pct", "remarks")  # fmt: skip

BRIDGE = timedelta(hours=6)  # midnight is interpolated across a gap of this length at most
MARGIN = BRIDGE  # of readings that daily() wants before the first day and after the last
GAP = 1.5  # usual intervals between two readings: what is longer is a gap

Column = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Midnight:
    """A tank's state at a local midnight: level [m], volume [m3], its 95 % uncertainty [m3]; how it was come by."""

    level_m: float
    volume_m3: float
    volume_u95_m3: float
    note: str = ""


@dataclass(frozen=True)
class Track:
    """A tank's readings that have a level, as arrays in order of time [s since 1970]."""

    time_s: Column
    level_m: Column
    volume_m3: Column
    volume_u95_m3: Column
    interval_s: float  # the usual one between two readings

    def between(self, start_s: float, end_s: float) -> slice:
        """Places of the readings with start <= time < end."""
        first, last = np.searchsorted(self.time_s, [start_s, end_s])
        return slice(int(first), int(last))


def daily(site: Site, tank: TankSettings, readings: pd.DataFrame, first_day: date, last_day: date) -> pd.DataFrame:
    """The log of a tank's local days from first_day to last_day: COLUMNS, numbers rounded as printed.

    readings: the tank's, from MARGIN before the first day to MARGIN after the last. What cannot be known is NaN, and
    remarks say why.
    """
    figures = convert(tank, readings)
    track = track_of(figures)
    days = [first_day + timedelta(days=n) for n in range((last_day - first_day).days + 1)]
    midnights = [local_midnight(day, site.timezone) for day in [*days, last_day + timedelta(days=1)]]
    states = [_midnight(track, at.timestamp()) for at in midnights]
    rows = []
    for n, day in enumerate(days):
        rows.append(_row(site, tank, day, track, figures, midnights[n : n + 2], states[n : n + 2]))
    return pd.DataFrame(rows, columns=list(COLUMNS))


def local_midnight(day: date, zone: ZoneInfo) -> datetime:
    """The moment [UTC] at which a local day begins; where clocks skip midnight, the first moment that exists."""
    return datetime.combine(day, time.min, zone).astimezone(UTC)


def track_of(figures: pd.DataFrame) -> Track:
    """The readings that have a level."""
    good = figures[np.isfinite(figures["level_m"])]
    time_s = pd.DatetimeIndex(good["time"]).as_unit("us").asi8 / 1e6
    steps = np.diff(pd.DatetimeIndex(figures["time"]).as_unit("us").asi8 / 1e6)
    steps = steps[steps > 0]
    level, volume, doubt = (good[name].to_numpy(float) for name in ("level_m", "volume_m3", "volume_u95_m3"))
    return Track(time_s, level, volume, doubt, float(np.median(steps)) if len(steps) else np.nan)


def _midnight(track: Track, at_s: float) -> Midnight:
    after = int(np.searchsorted(track.time_s, at_s))
    before = after - 1
    if after < len(track.time_s) and track.time_s[after] == at_s:
        before = after
    near = [n for n in (before, after) if 0 <= n < len(track.time_s) and abs(track.time_s[n] - at_s) <= track.interval_s]
    if before < 0 or after == len(track.time_s):
        if not near:
            return Midnight(np.nan, np.nan, np.nan, "no readings on one side of midnight")
        n = near[0]
        return Midnight(
            track.level_m[n], track.volume_m3[n], track.volume_u95_m3[n], "taken from the reading nearest to midnight"
        )
    span = track.time_s[after] - track.time_s[before]
    if span > BRIDGE.total_seconds():
        return Midnight(np.nan, np.nan, np.nan, f"no readings for {spoken(span)} over midnight")
    part = (at_s - track.time_s[before]) / span if span else 0.0
    level, volume, doubt = (
        float(c[before] + part * (c[after] - c[before])) for c in (track.level_m, track.volume_m3, track.volume_u95_m3)
    )
    if span <= GAP * track.interval_s:
        return Midnight(level, volume, doubt)
    away = min(at_s - track.time_s[before], track.time_s[after] - at_s)
    return Midnight(
        level, volume, float(np.hypot(doubt, away * _fastest(track, at_s))), f"interpolated over a gap of {spoken(span)}"
    )


def _fastest(track: Track, at_s: float) -> float:
    """The fastest change of volume [m3/s] in the day either side: the tank may have moved so in a gap."""
    part = track.between(at_s - 86400.0, at_s + 86400.0)
    if part.stop - part.start < 12:
        return np.nan
    step = 10
    volumes, times = track.volume_m3[part], track.time_s[part]
    return float(np.max(np.abs(volumes[step:] - volumes[:-step]) / (times[step:] - times[:-step])))


def _row(site: Site, tank: TankSettings, day: date, track: Track, figures: pd.DataFrame, bounds: list[datetime],
         states: list[Midnight]) -> list[object]:  # fmt: skip
    start_s, end_s = (at.timestamp() for at in bounds)
    part = track.between(start_s, end_s)
    opening, closing = states
    times = np.concatenate([[start_s], track.time_s[part], [end_s]])
    levels = np.concatenate([[opening.level_m], track.level_m[part], [closing.level_m]])
    low, high = _extreme(np.nanargmin, levels), _extreme(np.nanargmax, levels)
    open_l, close_l = _litres(opening.volume_m3), _litres(closing.volume_m3)
    change_l = None if open_l is None or close_l is None else close_l - open_l
    fill_l, draw_l = _net(tank, track, part, times, levels, opening, closing, change_l)
    of_day = figures[(figures["time"] >= pd.Timestamp(bounds[0])) & (figures["time"] < pd.Timestamp(bounds[1]))]
    gaps = _gaps(track, part, start_s, end_s)
    lost = sum(b - a for a, b in gaps)
    complete = 0.0 if part.start == part.stop else max(0.0, 100.0 * (1.0 - lost / (end_s - start_s)))
    said = remarks(tank, site.timezone, of_day, gaps, bounds, opening.note, closing.note)
    doubt = float(np.hypot(opening.volume_u95_m3, closing.volume_u95_m3))
    return [day.isoformat(), tank.name, round(opening.level_m, 3), round(closing.level_m, 3),
            _mm(levels, low), _clock(times, low, site.timezone),
            _mm(levels, high), _clock(times, high, site.timezone),
            _m3(open_l), _m3(close_l), _m3(change_l), round(doubt, 3), _m3(fill_l), _m3(draw_l), len(of_day), round(complete, 1),
            said]  # fmt: skip


def _net(tank: TankSettings, track: Track, part: slice, times: Column, levels: Column, opening: Midnight, closing: Midnight,
         change_l: int | None) -> tuple[int | None, int | None]:  # fmt: skip
    """Net fill and net draw [litres], their difference exactly the change."""
    if change_l is None or part.start == part.stop:
        return None, None
    sigma = noise(track.level_m[part])
    resolution = _resolution(tank, times[0], times[-1])
    sigma = max(sigma if np.isfinite(sigma) else 0.0, resolution / np.sqrt(12.0))
    m = neighbours(track.level_m[part], sigma)
    breaks = np.flatnonzero(np.diff(times) > GAP * track.interval_s) + 1
    smooth = np.concatenate([averaged(stretch, m) for stretch in np.split(levels, breaks)])
    turns = turning_points(smooth, max(BAND * sigma / np.sqrt(2 * m + 1), 2.0 * resolution))
    volumes = np.interp(smooth[turns], *_by_level(track, part))
    volumes[0], volumes[-1] = opening.volume_m3, closing.volume_m3
    fill_l = max(round(float(np.maximum(np.diff(volumes), 0.0).sum()) * 1000.0), change_l, 0)
    return fill_l, fill_l - change_l


def _by_level(track: Track, part: slice) -> tuple[Column, Column]:
    """Levels of the day in rising order and their volumes: the piece of the strapping table that the day went over."""
    levels, first = np.unique(track.level_m[part], return_index=True)
    return levels, np.maximum.accumulate(track.volume_m3[part][first])


def _resolution(tank: TankSettings, start_s: float, end_s: float) -> float:
    """What one count of the tank's sensor is worth in level [m]; the largest where the sensor changed in that time."""
    held = [period for period in tank.periods() if _overlap(period, start_s, end_s)]
    weight = 9.81 * float(tank.density(tank.default_temperature_c, tank.salinity, 0.0))
    return max(period.sensor.resolution_pa for period in held) / weight


def _overlap(period: Period, start_s: float, end_s: float) -> bool:
    return (period.start is None or period.start.timestamp() < end_s) and (
        period.end is None or period.end.timestamp() > start_s
    )


def _extreme(place: Callable[[Column], np.intp], levels: Column) -> int | None:
    return None if np.isnan(levels).all() else int(place(levels))


def _mm(levels: Column, place: int | None) -> float:
    return np.nan if place is None else round(float(levels[place]), 3)


def _litres(volume_m3: float) -> int | None:
    return None if np.isnan(volume_m3) else round(volume_m3 * 1000.0)


def _m3(litres: int | None) -> float:
    return np.nan if litres is None else litres / 1000.0


def _clock(times: Column, place: int | None, zone: ZoneInfo) -> str:
    return "" if place is None else datetime.fromtimestamp(times[place], zone).isoformat(timespec="seconds")


def _gaps(track: Track, part: slice, start_s: float, end_s: float) -> list[tuple[float, float]]:
    """Stretches [s] of the day without a level, each from where the next reading was due."""
    first, last = max(part.start - 1, 0), min(part.stop + 1, len(track.time_s))
    around = track.time_s[first:last]
    around = np.concatenate([[-np.inf], around, [np.inf]])
    gaps = []
    for before, after in zip(around[:-1], around[1:], strict=True):
        if after - before > GAP * track.interval_s or np.isnan(track.interval_s):
            a, b = max(before + track.interval_s, start_s), min(after, end_s)
            if b > a:
                gaps.append((float(a), float(b)))
    return gaps


def write_daily(path: str | Path, site: Site, tanks: list[TankSettings], first_day: date, last_day: date) -> None:
    """Write the log of tanks' local days from the site's book as CSV ("-": standard output), one row a tank and day."""
    start = local_midnight(first_day, site.timezone) - MARGIN
    end = local_midnight(last_day + timedelta(days=1), site.timezone) + MARGIN
    with open_book(site.store_url, create=False) as book, aside(path) as file:
        out = csv.writer(file, lineterminator="\n")
        out.writerow(COLUMNS)
        for n, tank in enumerate(tanks, 1):
            if sys.stderr.isatty():
                print(
                    f"\rdaily log: tank {n} of {len(tanks)}", end="\n" if n == len(tanks) else "", file=sys.stderr, flush=True
                )
            log = daily(site, tank, book.readings(tank.name, start, end), first_day, last_day)
            out.writerows([form(value) for form, value in zip(FORMS, row, strict=True)] for row in log.itertuples(index=False))


def _decimals(places: int) -> Callable[[float], str]:
    return lambda number: "NaN" if np.isnan(number) else f"{number:.{places}f}"


FORMS: tuple[Callable[..., str], ...] = (
    str, str, _decimals(3), _decimals(3), _decimals(3), str, _decimals(3), str,
    _decimals(3), _decimals(3), _decimals(3), _decimals(3), _decimals(3), _decimals(3), str, _decimals(1), str,
)  # fmt: skip
