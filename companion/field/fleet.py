"""Simulated tanks and their loggers: readings as a site's loggers would send them, and the truth behind them.

A tank gains what its pump gives and loses what its district draws, minute by minute, through its own strapping table; its
sensor is read through hydrostatics turned round (pressure from level), with noise, and rounded to counts.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime

import numpy as np
import numpy.typing as npt
import pandas as pd

from companion.book.readings import frame_of
from companion.settings.tank import Period, TankSettings
from core_mp.tank import Tank

Column = npt.NDArray[np.float64]
MINUTE_S = 60


@dataclass(frozen=True)
class Life:
    """How a simulated tank lives: mean draw and pump flow [m3/h], the pump's levels [m], its sensor's noise [signal units]."""

    draw_m3h: float
    pump_m3h: float
    start_level_m: float
    stop_level_m: float
    noise: float = 2.0
    has_temperature: bool = True
    has_barometer: bool = False
    lost: float = 0.002  # share of readings that never arrive


def simulate(
    tank: TankSettings, life: Life, start: datetime, minutes: int, seed: int, name: str = "sim"
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """A tank's one-minute readings from start (UTC) on, and the truth at each: time, level_m, volume_m3, inflow and outflow [m3/h].

    The same arguments give the same frames. The truth has a row a minute; readings that were lost are missing in the first.
    """
    rng = np.random.default_rng(seed)
    times = np.datetime64(start.replace(tzinfo=None), "us") + np.arange(minutes) * np.timedelta64(MINUTE_S, "s")
    draw = _draw(times, life, rng)
    period = tank.periods()[-1]
    level, volume, inflow = _water(period, life, draw)
    warmth = np.arange(minutes) / 1440.0
    temperature = np.round(tank.default_temperature_c + 1.5 * np.sin(warmth / 9.0) + 0.3 * np.sin(warmth * 2 * np.pi), 1)
    weather = 900.0 * np.sin(warmth / 3.7 * 2 * np.pi) + 400.0 * np.sin(warmth / 1.3 * 2 * np.pi)
    core = tank.core(period)
    barometer = np.round(core.standard_pa + weather)
    raw = _signal(tank, period, core, level, temperature, barometer) + life.noise * rng.standard_normal(minutes)
    if period.sensor.signal == "counts":
        raw = np.round(raw)
    here = rng.random(minutes) >= life.lost
    nothing = np.full(minutes, np.nan)
    frame = frame_of(times, raw, life=name, seq=np.arange(minutes), temperature_c=temperature if life.has_temperature else nothing,
                     barometer_pa=barometer if life.has_barometer else nothing, battery_v=np.round(3.65 - warmth / 400.0, 2))  # fmt: skip
    truth = pd.DataFrame(
        {"time": frame["time"], "level_m": level, "volume_m3": volume, "inflow_m3h": inflow, "outflow_m3h": draw}
    )
    return frame[here].reset_index(drop=True), truth


def _draw(times: npt.NDArray[np.datetime64], life: Life, rng: np.random.Generator) -> Column:
    """What the district draws [m3/h]: a morning and an evening peak, a quiet night, less on Sundays, and chance."""
    hour = (times - times.astype("datetime64[D]")) / np.timedelta64(1, "h")
    pattern = (
        0.45
        + 0.9 * np.exp(-(((hour - 7.5) / 1.8) ** 2))
        + 0.8 * np.exp(-(((hour - 19.0) / 2.4) ** 2))
        + 0.35 * (np.abs(hour - 13.5) < 5)
    )
    day = (times.astype("datetime64[D]").astype(int) + 4) % 7  # 0 is Sunday
    chance = np.exp(0.15 * np.repeat(rng.standard_normal(len(times) // 30 + 1), 30)[: len(times)])
    flow = pattern * chance * np.where(day == 0, 0.8, 1.0)
    return np.asarray(life.draw_m3h * flow / flow.mean())


def _water(period: Period, life: Life, draw: Column) -> tuple[Column, Column, Column]:
    """Level [m], volume [m3] and inflow [m3/h] minute by minute; what does not fit runs over, and an empty tank gives no more."""
    levels, volumes = period.strapping.levels_m, period.strapping.volumes_m3
    start, stop, most = (
        float(np.interp(level, levels, volumes)) for level in (life.start_level_m, life.stop_level_m, levels[-1])
    )
    volume, pumping = 0.5 * (start + stop), True
    held, inflow = np.empty(len(draw)), np.empty(len(draw))
    for n, out in enumerate(draw.tolist()):
        held[n] = volume
        pumping = volume < stop if pumping else volume < start
        inflow[n] = life.pump_m3h if pumping else 0.0
        volume = min(max(volume + (inflow[n] - out) / 60.0, float(volumes[0])), most)
    return np.interp(held, volumes, levels), held, inflow


def _signal(tank: TankSettings, period: Period, core: Tank, level: Column, temperature: Column, barometer: Column) -> Column:
    """The raw signal of a level: pressure at the diaphragm over the sensor's reference, then the transmitter turned round."""
    sensor = period.sensor
    if sensor.signal == "level":
        return level
    gravity = core.gravity
    air_weight_per_pa, rise = core.air
    air = barometer * air_weight_per_pa / gravity
    head = np.maximum(level - sensor.height_m, 0.0)
    pressure = np.zeros(len(level))
    for _ in range(3):  # density depends a little on the pressure itself
        density = tank.density(temperature, tank.salinity, 0.5 * pressure)
        pressure = gravity * (head * (density - air) - air * rise)
    if core.inside is not None:
        pressure = pressure + barometer - core.inside
    signals, pressures = np.array(sensor.scale).T
    signal = np.interp(pressure, pressures, signals)
    if sensor.loop is not None:
        counts, currents = np.array(sensor.loop).T
        signal = counts[0] + (signal - currents[0]) * (counts[1] - counts[0]) / (currents[1] - currents[0])
    return np.asarray(signal)
