"""One tank, from [tank.NAME]: where it stands, what it holds, how deep, and its sensors and tables with their dates."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
import numpy.typing as npt

from companion.settings.keys import Keys
from companion.settings.sensor import INSIDE, Sensor, read_sensor
from companion.strapping.read import TableError, read_table
from companion.strapping.shapes import upright_cylinder
from core_mp.earth import air_density, normal_gravity, standard_pressure, standard_temperature
from core_mp.strapping import StrappingTable
from core_mp.tank import Tank
from core_mp.water import liquid_density, water_density

DEFAULT_TEMPERATURE_C = 15.0
SEAWATER_G_KG = 35.0


@dataclass(frozen=True)
class Strapping:
    """A strapping table from one moment on: levels [m], volumes [m3], both rising, shape (n,). since: None from the beginning."""

    since: datetime | None
    levels_m: npt.NDArray[np.float64]
    volumes_m3: npt.NDArray[np.float64]
    source: str


Dated = TypeVar("Dated", Sensor, Strapping)


@dataclass(frozen=True)
class Period:
    """A stretch of time in which one sensor and one table hold; start and end are None where it has none."""

    start: datetime | None
    end: datetime | None
    sensor: Sensor
    strapping: Strapping


@dataclass(frozen=True)
class Pump:
    """Levels [m above tank datum] at which the filling pump starts and stops."""

    start_level_m: float
    stop_level_m: float


@dataclass(frozen=True)
class Suction:
    """A pump that draws from the tank: inlet elevation [m on the site's datum], required NPSH [m], losses before it [m]."""

    inlet_elevation_m: float
    required_m: float
    losses_m: float


@dataclass(frozen=True)
class TankSettings:
    """A tank as the site file tells it. Levels [m above tank datum], elevations [m on the site's datum]; None where not told."""

    name: str
    title: str
    zone: str | None
    latitude_deg: float
    floor_elevation_m: float
    height_m: float | None
    overflow_level_m: float | None
    low_level_m: float | None
    high_level_m: float | None
    default_temperature_c: float
    air_temperature_c: float | None
    density: Callable[..., Any]  # of temperature [degC], salinity [g/kg], gauge pressure [Pa], in kg/m3
    salinity: float | None
    shell_expansion_per_k: float | None
    shell_reference_c: float
    sensors: tuple[Sensor, ...]
    strappings: tuple[Strapping, ...]
    pump: Pump | None = None
    suction: Suction | None = None

    def periods(self) -> list[Period]:
        """Stretches of time with their sensor and table, in order, over all time; what is dated first serves before too."""
        dates = [sensor.since for sensor in self.sensors[1:]] + [table.since for table in self.strappings[1:]]
        starts = sorted({since for since in dates if since is not None})
        edges: list[datetime | None] = [None, *starts, None]
        return [
            Period(start, end, _in_force(self.sensors, start), _in_force(self.strappings, start))
            for start, end in zip(edges[:-1], edges[1:], strict=True)
        ]

    def sensor_at(self, moment: datetime) -> Sensor:
        """The sensor in force at a moment."""
        return _in_force(self.sensors, moment)

    def core(self, period: Period) -> Tank:
        """The tank as core_mp takes it, for one period, everything that stays the same worked out."""
        sensor, table = period.sensor, period.strapping
        reference = sensor.reference_elevation_m
        z = self.floor_elevation_m if reference is None else reference
        air = standard_temperature(z) if self.air_temperature_c is None else self.air_temperature_c
        middle = self.floor_elevation_m + 0.5 * float(table.levels_m[0] + table.levels_m[-1])
        return Tank(
            sensor.transmitter(),
            StrappingTable(table.levels_m.tolist(), table.volumes_m3.tolist()),
            self.density,
            INSIDE[sensor.kind],
            sensor.height_m,
            self.floor_elevation_m,
            normal_gravity(self.latitude_deg, middle),
            self.default_temperature_c,
            self.salinity,
            0.0 if reference is None else self.floor_elevation_m + sensor.height_m - reference,
            standard_pressure(z),
            0.0 if reference is None else air_density(1.0, air),
        )


def _in_force(dated: Sequence[Dated], at: datetime | None) -> Dated:
    if at is None:
        return dated[0]
    return [one for one in dated if one.since is None or one.since <= at or one is dated[0]][-1]


def read_tank(keys: Keys, name: str, folder: Path, latitude_deg: float) -> TankSettings | None:
    """The tank of one table; None where a fault was noted that leaves it without meaning."""
    before = len(keys.faults)
    title = keys.text("title", name) or name
    zone = keys.text("zone")
    floor = keys.quantity("floor_elevation", "length", required=True)
    height = keys.quantity("height", "length", positive=True)
    levels = {key: keys.quantity(key, "length") for key in ("overflow_level", "low_level", "high_level")}
    _ordered(keys, levels, height)
    default = keys.quantity("default_temperature", "temperature")
    air = keys.quantity("air_temperature", "temperature")
    _believable(keys, "default_temperature", default, -5.0, 95.0)
    _believable(keys, "air_temperature", air, -60.0, 60.0)
    density, salinity = _liquid(keys)
    expansion = keys.quantity("shell_expansion", "expansion")
    reference = keys.quantity("shell_reference", "temperature")
    sensors = _sensors(keys, height)
    strappings = _strappings(keys, folder)
    pump, suction = _pump(keys), _suction(keys)
    keys.unknown("strapping", "shape", "sensor", "pump", "suction")
    if len(keys.faults) > before or floor is None:
        return None
    return TankSettings(name, title, zone, latitude_deg, floor, height, levels["overflow_level"], levels["low_level"], levels["high_level"],
                        DEFAULT_TEMPERATURE_C if default is None else default, air, density, salinity, expansion,
                        15.0 if reference is None else reference, sensors, strappings, pump, suction)  # fmt: skip


def _ordered(keys: Keys, levels: dict[str, float | None], height: float | None) -> None:
    ladder = [(key, levels[key]) for key in ("low_level", "high_level", "overflow_level")] + [("height", height)]
    told = [(key, level) for key, level in ladder if level is not None]
    for (key, level), (above, limit) in zip(told, told[1:], strict=False):
        if level > limit or (level == limit and above != "height"):
            keys.fault(key, f"{level:g} m must be below {above}, {limit:g} m; mend whichever is wrong")


def _believable(keys: Keys, key: str, value: float | None, low: float, high: float) -> None:
    if value is not None and not low <= value <= high:
        keys.fault(key, f'must be from "{low:g} degC" to "{high:g} degC", but is "{keys.raw(key)}"')


def _liquid(keys: Keys) -> tuple[Callable[..., Any], float | None]:
    liquid = keys.raw("liquid")
    salinity = keys.quantity("salinity", "salinity")
    if salinity is not None and not 0.0 <= salinity <= 43.0:
        keys.fault(
            "salinity",
            f'must be from "0 g/kg" to "43 g/kg", where the equation of state holds, but is "{keys.raw("salinity")}"',
        )
    if isinstance(liquid, dict):
        of = Keys(liquid, f"{keys.where}.liquid", keys.faults)
        density = of.quantity("density", "density", required=True, positive=True)
        expansion = of.quantity("expansion", "expansion")
        at = of.quantity("at", "temperature")
        of.unknown()
        if density is not None and not 300.0 <= density <= 3000.0:
            of.fault("density", f'{density:g} kg/m3 is no liquid of a tank; check the unit of "{of.raw("density")}"')
        if salinity is not None:
            keys.fault("salinity", "is for water; leave it out where liquid has a density of its own")
        return liquid_density(density or 1000.0, expansion or 0.0, 15.0 if at is None else at), None
    if liquid not in (None, "water", "seawater"):
        keys.fault(
            "liquid", f'must be "water", "seawater" or {{ density = "880 kg/m^3", expansion = "7e-4 / K" }}, but is {liquid!r}'
        )
    if liquid == "seawater" and salinity is None:
        salinity = SEAWATER_G_KG
    return water_density, salinity or None


def _sensors(keys: Keys, height: float | None) -> tuple[Sensor, ...]:
    value = keys.raw("sensor")
    if value is None:
        keys.fault("sensor", f"is missing; write [{keys.where}.sensor] and its keys below it")
        return ()
    tables = value if isinstance(value, list) else [value]
    dated = isinstance(value, list) and len(value) > 1
    sensors = []
    for n, table in enumerate(tables, 1):
        of = Keys(table, f"{keys.where}.sensor" + (f"[{n}]" if isinstance(value, list) else ""), keys.faults)
        sensor = read_sensor(of)
        if sensor is None:
            continue
        if dated and sensor.since is None and n > 1:
            of.fault("since", "is missing; write the time from which this sensor holds, since = 2026-01-01T00:00:00Z")
        if height is not None and not sensor.height_m < height:
            of.fault(
                "height", f"{sensor.height_m:g} m must be below the tank's height, {height:g} m; it is counted from tank datum"
            )
        sensors.append(sensor)
    return tuple(_by_date(keys, "sensor", sensors))


def _strappings(keys: Keys, folder: Path) -> tuple[Strapping, ...]:
    value, shape = keys.raw("strapping"), keys.raw("shape")
    if (value is None) == (shape is None):
        keys.fault("strapping", 'write strapping = "file.csv", or a table [' + keys.where + ".shape], one of the two")
        return ()
    if shape is not None:
        table = _shape(Keys(shape, f"{keys.where}.shape", keys.faults))
        return () if table is None else (Strapping(None, *table, "shape"),)
    entries = [{"file": value}] if isinstance(value, str) else value
    if not isinstance(entries, list) or not entries:
        keys.fault("strapping", f'must be "file.csv" or [{{ since = ..., file = "..." }}, ...], but is {value!r}')
        return ()
    found = []
    for n, entry in enumerate(entries, 1):
        of = Keys(entry, f"{keys.where}.strapping" + (f"[{n}]" if isinstance(value, list) else ""), keys.faults)
        since, file = of.since(), of.text("file", required=True)
        of.unknown()
        if since is None and "since" not in of and n > 1:
            of.fault("since", "is missing; write the time from which this table holds, since = 2026-01-01T00:00:00Z")
        if file is None:
            continue
        try:
            found.append(Strapping(since, *read_table(folder / file), file))
        except TableError as error:
            keys.fault("strapping", str(error))
    return tuple(_by_date(keys, "strapping", found))


def _shape(of: Keys) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]] | None:
    kind = of.choice("kind", ("upright_cylinder",))
    diameter = of.quantity("diameter", "length", required=True, positive=True)
    height = of.quantity("height", "length", required=True, positive=True)
    of.unknown()
    return None if kind is None or diameter is None or height is None else upright_cylinder(diameter, height)


def _by_date(keys: Keys, key: str, dated: list[Dated]) -> list[Dated]:
    dates = [one.since for one in dated if one.since is not None]
    for at in sorted({at for at in dates if dates.count(at) > 1}):
        keys.fault(key, f"two of them hold since {at:%Y-%m-%dT%H:%M:%SZ}; give one another date, or leave it out")
    return sorted(dated, key=lambda one: (one.since is not None, one.since.timestamp() if one.since else 0.0))


def _pump(keys: Keys) -> Pump | None:
    if keys.raw("pump") is None:
        return None
    of = Keys(keys.raw("pump"), f"{keys.where}.pump", keys.faults)
    start, stop = of.quantity("start_level", "length", required=True), of.quantity("stop_level", "length", required=True)
    of.unknown()
    if start is None or stop is None:
        return None
    if not start < stop:
        of.fault("start_level", f"{start:g} m must be below stop_level, {stop:g} m: the pump fills the tank")
    return Pump(start, stop)


def _suction(keys: Keys) -> Suction | None:
    if keys.raw("suction") is None:
        return None
    of = Keys(keys.raw("suction"), f"{keys.where}.suction", keys.faults)
    inlet, required = of.quantity("inlet_elevation", "length", required=True), of.quantity("required", "length", required=True)
    losses = of.quantity("losses", "length")
    of.unknown()
    return None if inlet is None or required is None else Suction(inlet, required, losses or 0.0)
