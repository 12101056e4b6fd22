"""The site file: read whole, in SI, dated; all faults at once, each with its key and the remedy."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import pytest
from sites import SITE, TABLE, site_of, write_site

from companion.settings.describe import describe
from companion.settings.errors import SiteError
from companion.settings.site import load_site
from core_mp.earth import air_density, normal_gravity, standard_pressure, standard_temperature

ROOT = Path(__file__).parents[2]


def faults(folder: Path, text: str, table: str | None = TABLE) -> list[str]:
    with pytest.raises(SiteError) as told:
        load_site(write_site(folder, text, table))
    assert all("\n" not in fault and str(folder) in fault for fault in told.value.faults)
    return told.value.faults


def test_a_good_file_is_read_in_si(tmp_path: Path) -> None:
    site = site_of(tmp_path)
    tank = site.tank("north")
    assert (tank.floor_elevation_m, tank.height_m, tank.overflow_level_m, tank.low_level_m) == (100.0, 10.0, 9.5, 1.0)
    assert tank.strappings[0].volumes_m3.tolist() == pytest.approx([0.0, 400.0, 800.0])
    sensor = tank.sensors[0]
    assert sensor.scale == ((0.004, 0.0), (0.02, 1e5)) and sensor.loop == ((6553.0, 0.004), (32767.0, 0.02))
    assert sensor.accuracy == 0.001 and sensor.span_pa == 1e5
    assert sensor.resolution_pa == pytest.approx(1e5 / (32767 - 6553))
    assert site.store_url == f"sqlite:{tmp_path / 'book.db'}"


def test_the_core_gets_gravity_and_air_of_the_place(tmp_path: Path) -> None:
    tank = site_of(tmp_path).tank("north")
    core = tank.core(tank.periods()[0])
    assert core.gravity == normal_gravity(52.0, 105.0)
    assert core.standard_pa == standard_pressure(110.0)
    assert core.air == (pytest.approx(air_density(1.0, standard_temperature(110.0)) * core.gravity), pytest.approx(-9.9))


def test_without_a_reference_elevation_the_air_column_is_left_out_whole(tmp_path: Path) -> None:
    tank = site_of(tmp_path, SITE.replace('reference_elevation = "110 m"\n', "")).tank("north")
    core = tank.core(tank.periods()[0])
    assert core.air == (0.0, 0.0) and core.standard_pa == standard_pressure(100.0)


def test_dated_settings_hold_from_their_date_and_the_first_serves_before(tmp_path: Path) -> None:
    (tmp_path / "new.csv").write_text("level [m],volume [m^3]\n0,0\n10,900\n")
    text = SITE.replace("[tank.north.sensor]", "[[tank.north.sensor]]").replace(
        'strapping = "north.csv"', 'strapping = [{ file = "north.csv" }, { since = 2026-06-01T00:00:00Z, file = "new.csv" }]'
    )
    text += """[[tank.north.sensor]]
since = 2026-03-01T12:00:00+01:00
signal = "counts"
pressure = "gauge"
height = "0.2 m"
scale = [[0, "0 bar"], [1000, "1 bar"]]
"""
    periods = site_of(tmp_path, text).tank("north").periods()
    assert [period.start for period in periods] == [
        None,
        datetime(2026, 3, 1, 11, tzinfo=UTC),
        datetime(2026, 6, 1, tzinfo=UTC),
    ]
    assert [period.end for period in periods] == [periods[1].start, periods[2].start, None]
    assert [period.sensor.height_m for period in periods] == [0.1, 0.2, 0.2]
    assert [float(period.strapping.volumes_m3[-1]) for period in periods] == pytest.approx([800.0, 800.0, 900.0])


@pytest.mark.parametrize("units", ["metric", "us"])
def test_the_shipped_example_is_read_and_described(units: str) -> None:
    site = load_site(ROOT / "configs" / "example-site" / "site.toml")
    text = "\n".join(describe(site))
    assert "North reservoir" in text and "since 2026-02-10T09:30:00Z" in text and "note:" not in text
    assert site.tank("mill").floor_elevation_m == pytest.approx(915.0 * 0.3048)
    assert site.zones["high"].points[0] == (268.0, "Hill street end") and site.zones["high"].minimum_pa == 2e5


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ("format = 1", "", "format: is missing; write format = 1"),
        ("format = 1", "format = 2", "format: 2 is another format"),
        ('"Europe/Berlin"', '"Europe/Atlantis"', 'site.timezone: "Europe/Atlantis" is no time zone known here'),
        ('timezone = "Europe/Berlin"\n', "", "site.timezone: is missing"),
        ("latitude = 52.0", "latitude = 95", "site.latitude: must be a number from -90 to 90"),
        ("latitude = 52.0", 'latitude = "52"', "site.latitude: must be a number"),
        ("latitude = 52.0", "latitude = nan", "site.latitude: must be a number"),
        ('units = "metric"', 'units = "imperial"', "site.units: must be one of metric, us"),
        ("[tank.north]", "[tank.North]", "tank.North: a tank's name is of a-z"),
        ('"100 m"', "100", 'tank.north.floor_elevation: 100 has no unit; write it with one, like "100 m"'),
        ('"100 m"', '"100 kg"', "tank.north.floor_elevation"),
        ('floor_elevation = "100 m"\n', "", "tank.north.floor_elevation: is missing"),
        ('height = "10 m"', 'height = "-10 m"', "tank.north.height: must be above zero"),
        ('"9.5 m"', '"10.5 m"', "tank.north.overflow_level: 10.5 m must be below height, 10 m"),
        ('low_level = "1 m"', 'low_level = "9.7 m"', "tank.north.low_level: 9.7 m must be below overflow_level"),
        ('strapping = "north.csv"', "", "tank.north.strapping: write strapping"),
        ('strapping = "north.csv"', 'strapping = "none.csv"', "none.csv: cannot be read"),
        ('strapping = "north.csv"', 'strapping = "north.csv"\nshape = { kind = "upright_cylinder", diameter = "1 m", height = "1 m" }', "one of the two"),
        ('strapping = "north.csv"', 'shape = { kind = "cube", diameter = "1 m", height = "1 m" }', "tank.north.shape.kind: must be one of"),
        ('strapping = "north.csv"', 'shape = { kind = "upright_cylinder", diameter = "-4 m", height = "1 m" }', "shape.diameter: must be above zero"),
        ('default_temperature = "10 degC"', 'default_temperature = "50 K"', "tank.north.default_temperature: must be from"),
        ('default_temperature = "10 degC"', 'salinity = "300 g/kg"', "tank.north.salinity: must be from"),
        ('default_temperature = "10 degC"', 'liquid = "oil"', "tank.north.liquid: must be"),
        ('default_temperature = "10 degC"', 'liquid = { density = "0.88 kg/m^3" }', "is no liquid of a tank"),
        ('default_temperature = "10 degC"', 'default_temprature = "10 degC"', "tank.north.default_temprature: is no key here; did you mean default_temperature?"),
        ('signal = "counts"', 'signal = "frequency"', "tank.north.sensor.signal: must be one of counts"),
        ('pressure = "gauge"\n', "", "tank.north.sensor.pressure: is missing; write one of gauge, sealed, absolute"),
        ('height = "0.1 m"', 'height = "12 m"', "tank.north.sensor.height: 12 m must be below the tank's height"),
        ('["20 mA", "1 bar"]', '["20 mA", "1"]', "tank.north.sensor.scale: point 2: 1 has no unit"),
        ('[["4 mA", "0 bar"], ["20 mA", "1 bar"]]', '[["20 mA", "1 bar"], ["4 mA", "0 bar"]]', "tank.north.sensor.scale: both numbers must rise"),
        ('[["4 mA", "0 bar"], ["20 mA", "1 bar"]]', '[["4 mA", "1 bar"], ["20 mA", "0 bar"]]', "tank.north.sensor.scale: both numbers must rise"),
        ('[["4 mA", "0 bar"], ["20 mA", "1 bar"]]', '[["4 mA", "0 bar"]]', "tank.north.sensor.scale: must be two or more pairs"),
        ('["20 mA", "1 bar"]', '["20 mA", "400 inH2O"]', "can mean more than one unit"),
        ('loop = [[6553, "4 mA"], [32767, "20 mA"]]\n', "", 'tank.north.sensor.scale: point 1: \'4 mA\' is no count'),
        ('[32767, "20 mA"]', '[6000, "20 mA"]', "tank.north.sensor.loop: both numbers must rise"),
        ("counts_limits = [0, 65535]", "counts_limits = [65535, 0]", "tank.north.sensor.counts_limits: must be the least and the most"),
        ('accuracy = "0.1 %"', 'accuracy = "0.1"', "tank.north.sensor.accuracy: 0.1 has no unit"),
        ('accuracy = "0.1 %"', 'accuracy = "40 %"', "tank.north.sensor.accuracy: must be from"),
        ('accuracy = "0.1 %"', "calibrated = 2026-01-05T00:00:00", "tank.north.sensor.calibrated: must be a day"),
        ("[tank.north.sensor]", "[tank.north.sensor]\nsince = 2026-01-01T00:00:00", "tank.north.sensor.since: 2026-01-01T00:00:00 has no zone"),
        ("[tank.north]", "[mqtt]\nprotocol = 4\n[tank.north]", "mqtt.protocol: must be 3 or 5"),
        ("[tank.north]", '[mqtt]\npassword = "secret"\n[tank.north]', "mqtt.password: does not belong in a file"),
        ("[tank.north]", '[store]\nurl = "book.db"\n[tank.north]', "store.url: must be like"),
        ("[tank.north]", '[zone.z]\nservice_points = [["12", "gate"]]\n[tank.north]', "zone.z.service_points: point 1: 12 has no unit"),
        ("[tank.north]", '[zone.z]\nminimum = "3 bar"\nmaximum = "2 bar"\n[tank.north]', "zone.z.minimum: must be below maximum"),
    ],
)  # fmt: skip
def test_each_fault_names_its_key_and_the_remedy(tmp_path: Path, old: str, new: str, says: str) -> None:
    assert old in SITE
    found = faults(tmp_path, SITE.replace(old, new, 1))
    assert any(says in fault for fault in found), found


def test_all_faults_are_told_at_once(tmp_path: Path) -> None:
    text = (
        SITE.replace('"100 m"', "100")
        .replace("latitude = 52.0", "latitude = 95")
        .replace('"0.1 m"', '"0.1 foo"')
        .replace("10000,", "4000,")
    )
    assert len(faults(tmp_path, text)) == 3
    found = faults(tmp_path, text, TABLE.replace("10000,", "4000,"))
    assert len(found) == 4 and any("north.csv: line 4: the level must rise" in fault for fault in found)


def test_a_site_without_tanks_is_told_what_to_write(tmp_path: Path) -> None:
    assert any("tank: there is none; write [tank.NAME]" in fault for fault in faults(tmp_path, SITE.split("[tank.north]")[0]))


def test_two_settings_of_one_date_are_refused(tmp_path: Path) -> None:
    sensor = SITE[SITE.index("[tank.north.sensor]") :].replace(
        "[tank.north.sensor]", "[[tank.north.sensor]]\nsince = 2026-01-01T00:00:00Z"
    )
    text = SITE[: SITE.index("[tank.north.sensor]")] + sensor + sensor
    assert any("two of them hold since 2026-01-01T00:00:00Z" in fault for fault in faults(tmp_path, text))


def test_what_is_no_toml_names_the_line(tmp_path: Path) -> None:
    [fault] = faults(tmp_path, "format = 1\n[site\n")
    assert "is not TOML" in fault and "line 2" in fault
    [fault] = faults(tmp_path, "\ud800".encode("utf-8", "surrogatepass").decode("latin-1"))
    assert "is not TOML" in fault


def test_a_missing_site_file_is_one_line(tmp_path: Path) -> None:
    with pytest.raises(SiteError, match="cannot be read"):
        load_site(tmp_path / "none.toml")


def test_notes_say_what_deserves_a_thought(tmp_path: Path) -> None:
    text = (
        SITE.replace('"1 bar"', '"0.5 bar"').replace('accuracy = "0.1 %"\n', "").replace('reference_elevation = "110 m"\n', "")
    )
    said = "\n".join(describe(site_of(tmp_path, text)))
    assert "the sensor's range ends at 50.0 kPa, but the level 9.5 m gives 92.2 kPa" in said
    assert "accuracy is not told" in said and "reference_elevation is not told" in said
