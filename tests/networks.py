"""Published example networks, simulated for a day by EPANET 2.2 (PyPI wntr), and a sensor's counts of what their tanks did.

The sensor model here is written apart from core_mp: hydrostatics with IAPWS-95 densities (PyPI iapws) and WELMEC's gravity,
so that what is compared was not computed by the same hand.
"""

from __future__ import annotations

import contextlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pandas as pd
from iapws import IAPWS95
from published import rows

from companion.book.readings import frame_of
from companion.settings.site import Site, load_site

Column = npt.NDArray[np.float64]
START = np.datetime64("2026-05-04T00:00:00")
WATER_C, AIR_C = 12.0, 12.0  # degC
RANGE_PA, LOW, HIGH = 5e5, 6553, 32767  # 4-20 mA over 26,214 counts


@dataclass(frozen=True)
class TankDay:
    """A tank's day: time [s], level [m], volume [m3], grade [m] at each hydraulic step; floor [m]; its table; what flowed."""

    time_s: Column
    level_m: Column
    volume_m3: Column
    grade_m: Column
    floor_m: float
    table: tuple[Column, Column]
    fill_m3: float = np.nan
    draw_m3: float = np.nan


def published_day(network: str, tank: str) -> TankDay:
    """A tank's day from tests/reference, where networks stand that wntr's wheel does not ship."""
    steps = rows("network_tanks", lambda row: row["network"] == network and row["tank"] == tank)
    [day] = rows("network_daily", lambda row: row["network"] == network and row["tank"] == tank)
    names = ("time_s", "level_m", "volume_m3", "head_hydraulic_grade_m")
    time, level, volume, grade = (np.array([float(row[name]) for row in steps]) for name in names)
    if steps[0]["volume_curve"]:
        curve = rows("network_curves", lambda row: row["curve"] == steps[0]["volume_curve"])
        table = (np.array([float(row["level_m"]) for row in curve]), np.array([float(row["volume_m3"]) for row in curve]))
    else:
        table = _cylinder(float(steps[0]["diameter_m"]), level.max() + 5.0, level, volume)
    return TankDay(time, level, volume, grade, float(steps[0]["tank_elevation_m"]), table,
                   float(day["total_fill_m3_from_flow"]), float(day["total_draw_m3_from_flow"]))  # fmt: skip


def simulated_day(network: str, tank: str, folder: Path) -> TankDay:
    """A tank's day as EPANET's toolkit simulates it now: every hydraulic step of 24 h of a network in wntr's library."""
    import wntr
    from wntr.epanet.toolkit import ENepanet
    from wntr.epanet.util import EN

    source = Path(wntr.__file__).parent / "library" / "networks" / f"{network}.inp"
    seen: list[tuple[float, float, float]] = []
    with contextlib.chdir(folder):  # the toolkit writes beside itself
        engine = ENepanet(version=2.2)
        engine.ENopen(str(source), "day.rpt", "day.bin")
        node = engine.ENgetnodeindex(tank)
        engine.ENsettimeparam(EN.DURATION, 86400)
        engine.ENopenH()
        engine.ENinitH(0)
        while True:
            now = engine.ENrunH()
            seen.append((now, engine.ENgetnodevalue(node, EN.HEAD), engine.ENgetnodevalue(node, EN.DEMAND)))
            if engine.ENnextH() <= 0:
                break
        elevation, diameter = engine.ENgetnodevalue(node, EN.ELEVATION), engine.ENgetnodevalue(node, 17)  # EN_TANKDIAM
        engine.ENcloseH()
        engine.ENclose()
    time, head, flow = (np.array(column, float) for column in zip(*seen, strict=True))
    foot, gpm = 0.3048, 0.3048**3 / 448.831  # both files are in feet and US gallons a minute, in EPANET's factor
    level = (head - elevation) * foot
    area = np.pi / 4 * (diameter * foot) ** 2
    moved = flow[:-1] * gpm * np.diff(time)
    return TankDay(time, level, area * level, head * foot, elevation * foot, (np.array([0.0, level.max() + 5.0]), area * np.array([0.0, level.max() + 5.0])),
                   float(moved[moved > 0].sum()), float(-moved[moved < 0].sum()))  # fmt: skip


def _cylinder(diameter: float, top: float, level: Column, volume: Column) -> tuple[Column, Column]:
    area = np.pi / 4 * diameter**2
    offset = float(np.median(volume - area * level))  # EPANET counts a tank's minimum volume in
    ends = np.array([0.5 * level.min(), top])
    return ends, offset + area * ends


def readings_of(day: TankDay, kind: str, noise_m: float = 0.0, every_s: int = 60) -> pd.DataFrame:
    """What a 16-bit 4-20 mA sensor at the tank's floor sends: flows are steady within a hydraulic step, so volume is linear there."""
    time = np.arange(0.0, 86400.0 + every_s, every_s)
    level = (
        np.interp(np.interp(time, day.time_s, day.volume_m3), day.table[1], day.table[0])
        if len(day.table[0]) > 2
        else np.interp(time, day.time_s, day.level_m)
    )
    level = level + noise_m * np.random.default_rng(11).standard_normal(len(time))
    surface, deep = (IAPWS95(T=WATER_C + 273.15, P=pressure).rho for pressure in (0.101325, 0.501325))
    barometer = 100800.0 + 300.0 * np.sin(time / 86400.0 * 2 * np.pi)
    air = barometer / (287.05 * (AIR_C + 273.15))
    s = np.sin(np.pi / 4) ** 2  # latitude 45; WELMEC guide 2 and OIML R 76: gravity zones
    gravity = 9.780318 * (1.0 + 0.0053024 * s - 0.0000058) - 3.085e-6 * (day.floor_m + 0.5 * level)
    pressure = np.zeros_like(level)
    for _ in range(4):
        rho = surface + (deep - surface) / 4e5 * 0.5 * pressure
        pressure = (rho - air) * gravity * level  # the reference stands at the sensor
    absolute = kind == "absolute"
    counts = np.round(LOW + (pressure + barometer * absolute) / RANGE_PA * (HIGH - LOW))
    return frame_of(START + time.astype("timedelta64[s]"), counts, life="n", seq=range(len(time)), temperature_c=np.full(len(time), WATER_C),
                    barometer_pa=barometer if absolute else np.full(len(time), np.nan))  # fmt: skip


def site_with(day: TankDay, kind: str, folder: Path) -> Site:
    """A site file with this tank and sensor."""
    levels, volumes = day.table
    (folder / "table.csv").write_text(
        "level [m],volume [m^3]\n" + "".join(f"{a!r},{b!r}\n" for a, b in zip(levels.tolist(), volumes.tolist(), strict=True))
    )
    (folder / "site.toml").write_text(f"""
format = 1
[site]
name = "network"
timezone = "UTC"
datum = "network datum"
latitude = 45
[tank.t]
floor_elevation = "{day.floor_m!r} m"
strapping = "table.csv"
air_temperature = "{AIR_C} degC"
[tank.t.sensor]
signal = "counts"
pressure = "{kind}"
height = "0 m"
reference_elevation = "{day.floor_m!r} m"
loop = [[{LOW}, "4 mA"], [{HIGH}, "20 mA"]]
scale = [["4 mA", "0 bar"], ["20 mA", "5 bar"]]
accuracy = "0.1 %"
""")
    return load_site(folder / "site.toml")
