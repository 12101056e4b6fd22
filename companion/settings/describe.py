"""What `levelbook check` says of a site file in which nothing is wrong: each tank in a few lines, and what deserves a thought."""

from __future__ import annotations

from companion.settings.sensor import IDENTITY
from companion.settings.site import Site
from companion.settings.tank import Period, TankSettings
from core_mp.water import water_density


def describe(site: Site) -> list[str]:
    """Lines for people: the site, each tank's table and sensors, and lines that start with "note:" for what to think about."""
    lines = [
        f"{site.path}: {site.name}, {len(site.tanks)} tank{'s' if len(site.tanks) > 1 else ''}, {site.timezone.key}, book {site.store_url}"
    ]
    for tank in site.tanks.values():
        lines.append(f"{tank.name}: {tank.title}, floor at {tank.floor_elevation_m:g} m on {site.datum}")
        for period in tank.periods():
            lines += ["  " + line for line in _period(tank, period)]
        lines += [f"  note: {note}" for note in _notes(tank)]
    return lines


def _period(tank: TankSettings, period: Period) -> list[str]:
    sensor, table = period.sensor, period.strapping
    since = "" if period.start is None else f"since {period.start:%Y-%m-%dT%H:%M:%SZ}: "
    reach = f"{table.levels_m[0]:g} to {table.levels_m[-1]:g} m, {table.volumes_m3[0]:g} to {table.volumes_m3[-1]:,.1f} m3"
    accuracy = "accuracy not told" if sensor.accuracy is None else f"accuracy {sensor.accuracy * 100:g} % of span"
    span = (
        "" if sensor.scale == IDENTITY else f", {sensor.scale[0][1] / 1e3:g} to {sensor.scale[-1][1] / 1e3:g} kPa, {accuracy}"
    )
    return [f"{since}table {table.source}, {len(table.levels_m)} rows, {reach}",
            f"{since}sensor sends {sensor.signal}, {sensor.kind}, {sensor.height_m:g} m above tank datum{span}"]  # fmt: skip


def _notes(tank: TankSettings) -> list[str]:
    notes = []
    last = tank.periods()[-1]
    sensor, table = last.sensor, last.strapping
    top = tank.overflow_level_m if tank.overflow_level_m is not None else float(table.levels_m[-1])
    if tank.overflow_level_m is None:
        notes.append("overflow_level is not told, so no overflow can be noticed")
    elif top > table.levels_m[-1] + 1e-6:
        notes.append(f"overflow_level {top:g} m is above the table's end, {table.levels_m[-1]:g} m: volume stops rising there")
    if tank.height_m is not None and table.levels_m[-1] > tank.height_m + 1e-6:
        notes.append(f"the table reaches {table.levels_m[-1]:g} m, above the tank's height, {tank.height_m:g} m")
    if sensor.signal != "level":
        core = tank.core(last)
        gravity = core.gravity
        at_top = (top - sensor.height_m) * tank.density(tank.default_temperature_c, tank.salinity, 0.0) * gravity
        most = sensor.scale[-1][1] - (core.standard_pa if sensor.kind == "absolute" else 0.0)
        if sensor.span_pa == sensor.span_pa and most < at_top:
            notes.append(
                f"the sensor's range ends at {most / 1e3:.1f} kPa, but the level {top:g} m gives {at_top / 1e3:.1f} kPa"
            )
        if sensor.reference_elevation_m is None:
            short = (top - sensor.height_m) * 1.2 / water_density(10.0) * 1e3
            notes.append(f"reference_elevation is not told, so the air's weight is left out: up to {short:.1f} mm")
        if sensor.accuracy is None:
            notes.append("accuracy is not told, so no figure has a stated uncertainty")
    return notes
