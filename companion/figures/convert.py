"""Readings to figures, in columns: pressure, level, volume, hydraulic grade, status and 95 % uncertainty.

The arithmetic is core_mp's, the same functions that a logger runs on one reading, here on chunks of numpy columns; what
stands here is what one reading decides with `if` and a column with a mask. Each reading is taken with the sensor and the
strapping table in force at its time.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import numpy.typing as npt
import pandas as pd

from companion.settings.site import Period, TankSettings
from core_mp import status as bits
from core_mp.tank import Tank

CHUNK = 16_384  # readings: a few columns of this length stay in a core's cache
COVERAGE = 2.0  # coverage factor k of the 95 % uncertainty, JCGM 100:2008, 6.3.3

Column = npt.NDArray[np.float64]
FIGURES = ("pressure_pa", "level_m", "volume_m3", "grade_m")
DOUBTS = ("level_u95_m", "volume_u95_m3", "grade_u95_m")


def convert(tank: TankSettings, readings: pd.DataFrame, doubts: bool = True) -> pd.DataFrame:
    """Figures of a frame of readings, in its order: time, status (bits of core_mp.status), FIGURES and, if asked, DOUBTS.

    A reading without a level (a loop fault, no number, a closed tank's missing headspace) has NaN figures; outside the
    strapping table the volume is its end row's and has no uncertainty. The uncertainties carry the sensor's accuracy (a
    rectangular distribution, JCGM 100:2008, 4.3.7) and the converter's resolution, k = 2; NaN where no accuracy is stated.
    """
    n = len(readings)
    out = {name: np.empty(n) for name in FIGURES + (DOUBTS if doubts else ())}
    status = np.zeros(n, np.int64)
    columns = [readings[name].to_numpy(float) for name in ("raw", "temperature_c", "barometer_pa", "headspace_pa")]
    for period, rows in _by_period(tank, readings["time"]):
        core = tank.core(period)
        raw, temperature, barometer, headspace = (column[rows] for column in columns)
        part = {name: column[rows] for name, column in out.items()}
        flags = status[rows]
        closed = bool(np.isfinite(headspace).any())
        for start in range(0, len(raw), CHUNK):
            at = slice(start, start + CHUNK)
            chunk = {name: column[at] for name, column in part.items()}
            _figures(
                tank, period, core, raw[at], temperature[at], barometer[at], headspace[at] if closed else None, flags[at], chunk
            )
        if not isinstance(rows, slice):
            status[rows] = flags
            for name, column in out.items():
                column[rows] = part[name]
    return pd.DataFrame({"time": readings["time"].array, "status": status, **out}, copy=False)


def _by_period(tank: TankSettings, times: pd.Series) -> Iterator[tuple[Period, slice | npt.NDArray[np.intp]]]:
    """Each period of the tank's settings that has readings, with their places: a slice where they stand together."""
    periods = tank.periods()
    if len(periods) == 1:
        yield periods[0], slice(0, len(times))
        return
    starts = [period.start for period in periods[1:] if period.start is not None]
    edges = pd.DatetimeIndex(starts).as_unit("us").asi8
    which = np.searchsorted(edges, pd.DatetimeIndex(times).as_unit("us").asi8, side="right")
    for i, period in enumerate(periods):
        rows = np.flatnonzero(which == i)
        if len(rows):
            together = rows[-1] - rows[0] + 1 == len(rows)
            yield period, slice(int(rows[0]), int(rows[-1]) + 1) if together else rows


def _figures(tank: TankSettings, period: Period, core: Tank, raw: Column, temperature: Column, barometer: Column,
             headspace: Column | None, status: npt.NDArray[np.int64], out: dict[str, Column]) -> None:  # fmt: skip
    low, high = core.transmitter.line[:2]
    if not low <= raw.min() <= raw.max() <= high:
        status |= core.transmitter.status(raw)
    if period.sensor.signal == "level":
        p, level = np.full(len(raw), np.nan), raw.copy()
        weight: Column | float = np.nan
    else:
        t = _believed(temperature, -5.0, 95.0, core.t_c, status, bits.NO_TEMPERATURE)
        missing = bits.NO_BAROMETER if core.inside is not None else 0
        air = _believed(barometer, 30e3, 120e3, core.standard_pa, status, missing)
        p = core.transmitter.pressure(raw)
        if core.inside is not None:
            p += core.inside - air
        if headspace is not None:
            status |= np.isnan(headspace) * bits.NO_READING
        weight = core.gravity * core.density(t, core.salinity, 0.5 * (p if headspace is None else p + headspace))
        per_pa, rise = core.air
        of_air = per_pa * air
        core.weight = [weight, 0.0, weight - of_air, of_air * rise]  # type: ignore[list-item]  # columns for numbers
        level = core.level(p, headspace)
        if not level.min() > core.height_m:
            dry = level <= core.height_m
            status |= dry * bits.DRY
            level[dry] = core.height_m
    _volume(tank, period, level, temperature, core.t_c, status, out)
    out["pressure_pa"][:] = p
    out["level_m"][:] = level
    np.add(level, core.floor_m, out=out["grade_m"])
    if headspace is not None:
        out["grade_m"] += headspace / weight
    if "level_u95_m" in out:
        _doubts(period, weight, out, status)
    if status.any():
        fault = status & bits.FAULT != 0
        status[fault] &= bits.FAULT | bits.UNDER_RANGE | bits.OVER_RANGE
        for column in out.values():
            column[fault] = np.nan


def _believed(
    column: Column, low: float, high: float, otherwise: float, status: npt.NDArray[np.int64], bit: int
) -> Column | float:
    """The column where its numbers are possible, the other value elsewhere, with the status bit set there."""
    if low <= column.min() and column.max() <= high:
        return column
    good = (column >= low) & (column <= high)
    status |= ~good * bit
    return np.where(good, column, otherwise) if good.any() else otherwise


def _volume(tank: TankSettings, period: Period, level: Column, temperature: Column, default_c: float,
            status: npt.NDArray[np.int64], out: dict[str, Column]) -> None:  # fmt: skip
    levels, volumes = period.strapping.levels_m, period.strapping.volumes_m3
    out["volume_m3"][:] = np.interp(level, levels, volumes)
    if not levels[0] <= level.min() <= level.max() <= levels[-1]:
        status |= (level < levels[0]) * bits.BELOW_TABLE | (level > levels[-1]) * bits.ABOVE_TABLE
    if tank.shell_expansion_per_k is not None:
        liquid = np.where(np.isfinite(temperature), temperature, default_c)
        outside = liquid if tank.air_temperature_c is None else tank.air_temperature_c
        warmer = (7.0 * liquid + outside) / 8.0 - tank.shell_reference_c  # bare steel shell, API MPMS 12.1.1
        out["volume_m3"] *= (1.0 + tank.shell_expansion_per_k * warmer) ** 2


def _doubts(period: Period, weight: Column | float, out: dict[str, Column], status: npt.NDArray[np.int64]) -> None:
    """95 % uncertainties [m, m3, m] from the sensor's accuracy and the converter's resolution."""
    sensor, levels, volumes = period.sensor, period.strapping.levels_m, period.strapping.volumes_m3
    accuracy = np.nan if sensor.accuracy is None else sensor.accuracy
    wide = COVERAGE * np.sqrt((accuracy * sensor.span_pa) ** 2 / 3.0 + sensor.resolution_pa**2 / 12.0)
    np.divide(wide, weight, out=out["level_u95_m"])
    out["grade_u95_m"][:] = out["level_u95_m"]
    row = np.clip(np.searchsorted(levels, out["level_m"], side="right") - 1, 0, len(levels) - 2)
    areas = np.diff(volumes) / np.diff(levels)
    np.multiply(out["level_u95_m"], areas[row], out=out["volume_u95_m3"])
    out["volume_u95_m3"][(status & (bits.BELOW_TABLE | bits.ABOVE_TABLE)) != 0] = np.nan
