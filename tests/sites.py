"""A site for tests: a good one, and the same with something changed."""

from __future__ import annotations

from pathlib import Path

from companion.settings.site import Site, load_site

SITE = """\
format = 1
[site]
name = "Test"
timezone = "Europe/Berlin"
datum = "test datum"
latitude = 52.0
units = "metric"
[tank.north]
floor_elevation = "100 m"
height = "10 m"
overflow_level = "9.5 m"
low_level = "1 m"
strapping = "north.csv"
default_temperature = "10 degC"
[tank.north.sensor]
signal = "counts"
pressure = "gauge"
height = "0.1 m"
reference_elevation = "110 m"
loop = [[6553, "4 mA"], [32767, "20 mA"]]
scale = [["4 mA", "0 bar"], ["20 mA", "1 bar"]]
counts_limits = [0, 65535]
accuracy = "0.1 %"
"""
TABLE = "level [mm],volume [L]\n0,0\n5000,400000\n10000,800000\n"


def write_site(folder: Path, text: str = SITE, table: str | None = TABLE) -> Path:
    """The site file and its table in a folder; returns the site file's path."""
    (folder / "site.toml").write_text(text)
    if table is not None:
        (folder / "north.csv").write_text(table)
    return folder / "site.toml"


def site_of(folder: Path, text: str = SITE, table: str = TABLE) -> Site:
    """The loaded site."""
    return load_site(write_site(folder, text, table))
