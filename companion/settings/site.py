"""The site file: one TOML file that says what stands where, read whole and checked before anything is done with it."""

from __future__ import annotations

import re
import tomllib
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

from companion.settings.errors import SiteError
from companion.settings.keys import Keys
from companion.settings.tank import Period, TankSettings, read_tank
from companion.settings.wire import Mapping, read_mapping, shared
from companion.units import QuantityError, read

__all__ = ["Mqtt", "Period", "Site", "TankSettings", "Zone", "load_site"]

FORMAT = 1
TOPICS = ("levelbook/+/readings",)


@dataclass(frozen=True)
class Mqtt:
    """Where readings come from. password_env names the environment variable that holds the password."""

    host: str = "127.0.0.1"
    port: int = 1883
    tls_ca: str | None = None
    username: str | None = None
    password_env: str | None = None
    topics: tuple[str, ...] = TOPICS
    protocol: int = 3


@dataclass(frozen=True)
class Zone:
    """A pressure zone: service points (elevation [m], label), the service pressures [Pa, gauge] it must keep."""

    name: str
    points: tuple[tuple[float, str], ...]
    minimum_pa: float | None
    maximum_pa: float | None


@dataclass(frozen=True)
class Site:
    """A site as its file tells it. units: "metric" or "us", what people are shown. wire: mappings for loggers of other makes."""

    path: Path
    name: str
    timezone: ZoneInfo
    datum: str
    latitude_deg: float
    units: str
    store_url: str
    mqtt: Mqtt
    tanks: dict[str, TankSettings]
    zones: dict[str, Zone] = field(default_factory=dict)
    wire: dict[str, Mapping] = field(default_factory=dict)

    def signal(self, name: str, at_s: float) -> str | None:
        """What a tank's logger sends at a time [s since 1970]; None where there is no such tank."""
        return self.tanks[name].sensor_at(datetime.fromtimestamp(at_s, UTC)).signal if name in self.tanks else None

    def tank(self, name: str) -> TankSettings:
        """The tank of a name; SiteError that lists the names where there is none."""
        if name not in self.tanks:
            raise SiteError([f"{self.path}: there is no tank '{name}'; its tanks are {', '.join(self.tanks)}"])
        return self.tanks[name]


def load_site(path: str | Path) -> Site:
    """The site of a file. SiteError with all the file's faults, each with its key and what to write instead."""
    path = Path(path)
    top = _toml(path)
    faults: list[str] = []
    keys = Keys(top, "", faults)
    if keys.raw("format") != FORMAT:
        found = "is missing" if "format" not in keys else f"{keys.raw('format')!r} is another format"
        keys.fault("format", f"{found}; write format = {FORMAT}")
    of = Keys(keys.raw("site") or {}, "site", faults)
    if "site" not in keys:
        keys.fault("site", "is missing; write [site] with name, timezone and latitude")
    site = {key: of.text(key, default) for key, default in (("name", path.stem), ("datum", "site datum"))}
    zone = _timezone(of)
    latitude = of.number("latitude", -90.0, 90.0, required="site" in keys)
    units = of.choice("units", ("metric", "us"), "metric")
    of.unknown()
    store = _store(Keys(keys.raw("store") or {}, "store", faults), path)
    mqtt = _mqtt(Keys(keys.raw("mqtt") or {}, "mqtt", faults))
    tanks = _tanks(keys, path.parent, 45.0 if latitude is None else latitude)
    zones = {name: _zone(Keys(table, f"zone.{name}", faults), name) for name, table in _tables(keys, "zone").items()}
    wire = _wire(keys)
    keys.unknown("format", "site", "store", "mqtt", "tank", "zone", "wire")
    if faults or zone is None or latitude is None:
        raise SiteError([f"{path}: {fault}" for fault in faults])
    return Site(path, str(site["name"]), zone, str(site["datum"]), latitude, str(units), store, mqtt, tanks, zones, wire)


def _toml(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_bytes().decode("utf-8-sig"))
    except OSError as error:
        raise SiteError([f"{path}: cannot be read ({error.strerror}); name a site file"]) from None
    except UnicodeDecodeError:
        raise SiteError([f"{path}: is not UTF-8 text; save it as UTF-8"]) from None
    except tomllib.TOMLDecodeError as error:
        raise SiteError(
            [f"{path}: is not TOML: {error}; mend that line (text stands in quotes, tables in [brackets])"]
        ) from None


def _timezone(of: Keys) -> ZoneInfo | None:
    name = of.text("timezone", required=True)
    if name is None:
        return None
    try:
        return ZoneInfo(name)
    except (KeyError, ValueError, OSError):
        of.fault("timezone", f'"{name}" is no time zone known here; write an IANA name like "Europe/Oslo" or "America/Denver"')
        return None


def _store(of: Keys, path: Path) -> str:
    url = of.text("url", "sqlite:book.db") or ""
    of.unknown()
    kind, _, rest = url.partition(":")
    if kind == "sqlite" and rest:
        return f"sqlite:{(path.parent / rest).absolute()}"
    if kind not in ("postgresql", "postgres") or not rest:
        of.fault("url", f'must be like "sqlite:book.db" or "postgresql://host/name", but is "{url}"')
    return url


def _mqtt(of: Keys) -> Mqtt:
    tls_ca, username, password_env = of.text("tls_ca"), of.text("username"), of.text("password_env")
    host = of.text("host", Mqtt.host) or Mqtt.host
    port = of.number("port", 1, 65535)
    topics = of.raw("topics")
    if topics is not None and (
        not isinstance(topics, list) or not topics or not all(isinstance(topic, str) for topic in topics)
    ):
        of.fault("topics", f'must be a list of topics like ["levelbook/+/readings"], but is {topics!r}')
        topics = None
    protocol = of.raw("protocol")
    if protocol not in (None, 3, 5):
        of.fault("protocol", f"must be 3 or 5, but is {protocol!r}")
    if "password" in of:
        of.fault("password", "does not belong in a file; put it in an environment variable and write password_env = its name")
    of.unknown("password")
    default_port = Mqtt.port if tls_ca is None else 8883
    return Mqtt(host, int(port or default_port), tls_ca, username, password_env, tuple(topics or TOPICS), protocol or 3)


def _tanks(keys: Keys, folder: Path, latitude_deg: float) -> dict[str, TankSettings]:
    tables = _tables(keys, "tank")
    if not tables:
        keys.fault("tank", "there is none; write [tank.NAME] with floor_elevation, strapping and [tank.NAME.sensor]")
    tanks = {}
    for name, table in tables.items():
        of = Keys(table, f"tank.{name}", keys.faults)
        if not re.fullmatch(r"[a-z0-9_-]+", name):
            of.fault("", "a tank's name is of a-z, 0-9, _ and -; put any other name in title")
        tank = read_tank(of, name, folder, latitude_deg)
        if tank is not None:
            tanks[name] = tank
    return tanks


def _wire(keys: Keys) -> dict[str, Mapping]:
    tanks = keys.raw("tank")
    names = list(tanks) if isinstance(tanks, dict) else []  # those with faults too, which are told once
    found: dict[str, Mapping] = {}
    for name, table in _tables(keys, "wire").items():
        of = Keys(table, f"wire.{name}", keys.faults)
        mapping = read_mapping(of, name, names)
        if mapping is None:
            continue
        for other in found.values():
            if shared(mapping.filter, other.filter):
                of.fault("topic", f"takes topics that [wire.{other.name}] takes; write patterns of which a topic fits one only")
        found[name] = mapping
    return found


def _zone(of: Keys, name: str) -> Zone:
    points = []
    value = of.raw("service_points") if "service_points" in of else of.raw("points")
    for n, pair in enumerate(value if isinstance(value, list) else [], 1):
        try:
            elevation, label = pair
            points.append((read(elevation, "length"), str(label)))
        except (TypeError, ValueError) as error:
            why = str(error) if isinstance(error, QuantityError) else f"{pair!r} is no pair"
            of.fault("service_points", f'point {n}: {why}; write ["312 m", "label"]')
    if value is not None and not isinstance(value, list):
        of.fault("service_points", 'must be a list of ["312 m", "label"]')
    low, high = (_first(of, key, f"{key}_pressure") for key in ("minimum", "maximum"))
    of.unknown("service_points", "points")
    if low is not None and high is not None and not low < high:
        of.fault("minimum", "must be below maximum; mend whichever is wrong")
    return Zone(name, tuple(points), low, high)


def _first(of: Keys, *names: str) -> float | None:
    told = [name for name in names if name in of]
    return of.quantity(told[0] if told else names[0], "pressure")


def _tables(keys: Keys, key: str) -> dict[str, Any]:
    value = keys.raw(key)
    if value is None or isinstance(value, dict):
        return value or {}
    keys.fault(key, f"must be tables; write [{key}.NAME]")
    return {}
