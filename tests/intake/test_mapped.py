"""Loggers of other makes: their settings, their payloads, what is wrong with them; on a real broker too."""

from __future__ import annotations

import json
import math
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sites import SITE, site_of
from test_listen import client, eventually, listening, quarantined, stored

from companion.book.store import open_book
from companion.cli import main
from companion.field.broker import Broker
from companion.intake.mapped import taken
from companion.intake.senml import WireError
from companion.settings.errors import SiteError
from companion.settings.site import Site

NOW = 1_772_400_000.0
AT = 1_772_323_200
COUNTS = '[wire.meadow]\ntopic = "meadow/{tank}/up"\nraw = "v"\ntime = "ts"\ntime_format = "unix"\n'
CURRENT = (
    SITE.replace('signal = "counts"', 'signal = "current"')
    .replace('loop = [[6553, "4 mA"], [32767, "20 mA"]]\n', "")
    .replace("counts_limits = [0, 65535]\n", "")
)


def rows(site: Site, payload: object, topic: str = "meadow/north/up"):
    pack = taken(site, topic, json.dumps(payload).encode(), NOW)
    return pack.rows, pack.faults


def test_one_reading_a_payload(tmp_path: Path) -> None:
    assert rows(site_of(tmp_path, SITE + COUNTS), {"v": 7000, "ts": AT}) == (
        [
            (
                AT * 10**6,
                7000.0,
                pytest.approx(math.nan, nan_ok=True),
                pytest.approx(math.nan, nan_ok=True),
                pytest.approx(math.nan, nan_ok=True),
                pytest.approx(math.nan, nan_ok=True),
                "wire",
                AT * 10**6,
            )
        ],
        [],
    )


def test_a_list_of_readings_with_units_devices_and_values_at_the_root(tmp_path: Path) -> None:
    text = (
        CURRENT
        + """[wire.meadow]
topic = "meadow/{tank}/up"
devices = { "A1B2" = "north" }
readings = "data.samples"
raw = "ch[1].value"
raw_unit = "mA"
temperature = "t"
temperature_unit = "degF"
barometer = "/air.p"
barometer_unit = "mbar"
battery = "/bat"
battery_unit = "mV"
time = "ts"
time_format = "unix_ms"
seq = "n"
life = "/boot"
"""
    )
    samples = [
        {"ch": [0, {"value": 12.5}], "t": 50.0, "ts": AT * 1000 + 500, "n": 4},
        {"ch": [0, {"value": "13"}], "ts": (AT + 60) * 1000, "n": 5},
    ]
    found, faults = rows(
        site_of(tmp_path, text), {"data": {"samples": samples}, "air": {"p": 981.5}, "bat": 3600, "boot": 17}, "meadow/A1B2/up"
    )
    assert not faults and found[0][:4] == (
        AT * 10**6 + 500_000,
        pytest.approx(0.0125),
        pytest.approx(10.0),
        pytest.approx(98150.0),
    )
    assert (
        found[0][5:] == (pytest.approx(3.6), "wire-17", 4) and found[1][1] == pytest.approx(0.013) and math.isnan(found[1][2])
    )


@pytest.mark.parametrize(
    ("kind", "told", "seconds"),
    [
        ("rfc3339", "2026-03-01T01:00:00+01:00", AT),
        ("rfc3339", "2026-03-01T00:00:00.250Z", AT + 0.25),
        ("unix", str(AT), AT),
        ("%d.%m.%Y %H:%M:%S %z", "01.03.2026 02:00:00 +0200", AT),
        ("%d.%m.%Y %H:%M:%S", "01.03.2026 01:00:00", AT),
        ("%Y-%m-%d %H:%M", "2025-07-01 02:00", 1751328000),
    ],
)
def test_times_in_each_format(tmp_path: Path, kind: str, told: str, seconds: float) -> None:
    site = site_of(tmp_path, SITE + COUNTS.replace('"unix"', f'"{kind}"\ntime_zone = "Europe/Berlin"'))
    assert rows(site, {"v": 1, "ts": told})[0][0][0] == round(seconds * 1e6)


def test_a_good_reading_beside_bad_ones_is_kept_and_each_reason_names_the_place(tmp_path: Path) -> None:
    site = site_of(tmp_path, SITE + COUNTS.replace('raw = "v"', 'readings = "all"\nraw = "v"\nbattery = "b"'))
    bad = [
        {"v": True, "ts": AT},
        {"v": "x", "ts": AT},
        {"ts": AT},
        {"v": 1},
        {"v": 1, "ts": "now"},
        {"v": 1, "ts": 946684800},
        {"v": 1, "ts": NOW + 9e5},
        {"v": 1, "ts": AT, "b": []},
        7,
        None,
    ]
    found, faults = rows(site, {"all": [*bad, {"v": 3, "ts": AT}]})
    assert [row[1] for row in found] == [3.0] and len(faults) == len(bad)
    for n, words in enumerate(
        (
            "v: 'True' is no number",
            "v: 'x' is no number",
            "has no v",
            "has no ts",
            "ts: 'now' is no time",
            "ts: the time is before 2015",
            "ts: the time is 2",
            "b: '[]' is no number",
            "has no ts",
        )
    ):
        assert f"reading {n + 1}: {words}" in faults[n]


@pytest.mark.parametrize(("told", "words"), [("2026-03-29 02:30", "never comes"), ("2025-10-26 02:30", "comes twice")])
def test_a_local_time_that_clocks_skip_or_repeat_is_refused_and_those_around_it_taken(
    tmp_path: Path, told: str, words: str
) -> None:
    """IANA: Europe/Berlin skipped 02:00 to 03:00 on 2026-03-29, and has 02:00 to 03:00 twice on 2025-10-26."""
    kind = '"%Y-%m-%d %H:%M"\ntime_zone = "Europe/Berlin"'
    site = site_of(tmp_path, SITE + COUNTS.replace('"unix"', kind).replace('raw = "v"', 'readings = "/"\nraw = "v"'))
    times = [told, told.replace("02:30", "01:30"), told.replace("02:30", "03:30")]
    pack = taken(site, "meadow/north/up", json.dumps([{"v": 1, "ts": at} for at in times]).encode(), 1_775_000_000.0)
    assert len(pack.faults) == 1 and f"reading 1: ts: {told!r} {words} in Europe/Berlin" in pack.faults[0]
    assert pack.rows[1][0] - pack.rows[0][0] == (1 if words == "never comes" else 3) * 3600 * 10**6


@pytest.mark.parametrize("boot", ["\ud800", "a\0b", "", "x" * 65, None, True, {"a": 1}, 1.5])
def test_a_life_that_no_book_can_keep_is_refused(tmp_path: Path, boot: object) -> None:
    site = site_of(tmp_path, SITE + COUNTS + 'seq = "n"\nlife = "boot"\n')
    found, faults = rows(site, {"v": 1, "ts": AT, "n": 1, "boot": boot})
    assert not found and "reading 1: boot: " in faults[0] and faults[0].encode()


@pytest.mark.parametrize("raw", ["1_000", "nan", "1e999", "\u0661", "0x1F", ""])
def test_text_that_is_no_plain_number_is_refused(tmp_path: Path, raw: str) -> None:
    found, faults = rows(site_of(tmp_path, SITE + COUNTS), {"v": raw, "ts": AT})
    assert not found and "reading 1: v: " in faults[0]


@pytest.mark.parametrize("told", ["2026-03-01", "2026-W09-7T00:00:00Z", "20260301T000000Z", "2026-03-01T00:00:00"])
def test_a_time_that_is_not_of_rfc_3339_is_refused(tmp_path: Path, told: str) -> None:
    found, faults = rows(site_of(tmp_path, SITE + COUNTS.replace("unix", "rfc3339")), {"v": 1, "ts": told})
    assert not found and "is no time as rfc3339 tells it" in faults[0]


def test_a_payload_that_no_book_could_keep_is_quarantined_and_the_listener_goes_on(broker: Broker, tmp_path: Path) -> None:
    site = site_of(tmp_path, SITE + f"[mqtt]\nport = {broker.port}\n" + COUNTS + 'seq = "n"\nlife = "boot"\n')
    with listening(site) as listener, client(broker) as other:
        for n, boot in enumerate(("\ud800", "a")):
            other.publish("meadow/north/up", json.dumps({"v": 1, "ts": AT, "n": n, "boot": boot}), qos=1)
        eventually(lambda: listener.tally.packs == 2)
    assert stored(site) == [1] and "boot" in quarantined(site)[0].reason


@pytest.mark.parametrize("payload", [b"", b"\xff", b"[NaN]", b"[" * 100_000, b'{"v": 1e999, "ts": 1}', b"{}", b"7"])
def test_what_is_no_payload_is_refused_and_nothing_breaks(tmp_path: Path, payload: bytes) -> None:
    try:
        pack = taken(site_of(tmp_path, SITE + COUNTS), "meadow/north/up", payload, NOW)
    except WireError:
        return
    assert not pack.rows and pack.faults


def test_a_tank_that_is_not_known_and_a_signal_that_differs_are_refused(tmp_path: Path) -> None:
    site = site_of(tmp_path, SITE + COUNTS)
    with pytest.raises(WireError, match="there is no tank 'mill'"):
        rows(site, {"v": 1, "ts": AT}, "meadow/mill/up")
    _, faults = rows(site_of(tmp_path, SITE + COUNTS.replace('raw = "v"', 'raw = "v"\nraw_unit = "mA"')), {"v": 1, "ts": AT})
    assert "is current by [wire.meadow], the site file says counts" in faults[0]


json_like = st.recursive(st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5),
                         lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.sampled_from(["all", "v", "ts", "b", "x"]), inner, max_size=4), max_leaves=12)  # fmt: skip


@given(json_like)
def test_whatever_comes_there_is_no_wrong_reading_and_no_crash(
    tmp_path_factory: pytest.TempPathFactory, payload: object
) -> None:
    site = _SITES.setdefault("one", None) or site_of(
        tmp_path_factory.mktemp("any"), SITE + COUNTS.replace('raw = "v"', 'readings = "all"\nraw = "v"\nbattery = "b"')
    )
    _SITES["one"] = site
    try:
        pack = taken(site, "meadow/north/up", json.dumps(payload).encode(), NOW)
    except WireError:
        return
    assert all(math.isfinite(row[1]) and EARLIEST_US <= row[0] <= (NOW + 3600) * 1e6 for row in pack.rows)


_SITES: dict[str, Site | None] = {}
EARLIEST_US = 1420070400 * 10**6


@pytest.mark.parametrize(
    ("was", "now", "says"),
    [
        ('topic = "meadow/{tank}/up"\n', "", "wire.meadow.topic: is missing"),
        ("meadow/{tank}/up", "meadow/+/up", "wire.meadow.topic: must be a topic with {tank}"),
        ("meadow/{tank}/up", "levelbook/{tank}/up", "wire.meadow.topic: must be a topic"),
        ("meadow/{tank}/up", "meadow/up", "must have {tank} as one of its levels"),
        ('raw = "v"\n', "", "wire.meadow.raw: is missing"),
        ('raw = "v"', 'raw = "a[b]"', "wire.meadow.raw: must be a path"),
        ('raw = "v"', 'raw = "v"\nraw_unit = "parsnip"', "wire.meadow.raw_unit"),
        ('raw = "v"', 'raw = "v"\ntemperature = "t"\ntemperature_unit = "bar"', "wire.meadow.temperature_unit"),
        ('raw = "v"', 'raw = "v"\nlife = "l"', "wire.meadow.seq: is missing, and life is told"),
        ('raw = "v"', 'raw = "v"\ndevices = { "A" = "mill" }', "wire.meadow.devices: there is no tank 'mill'"),
        ('raw = "v"', 'raw = "v"\nrow = 1', "wire.meadow.row: is no key here; did you mean raw?"),
        ('"unix"', '"noon"', "wire.meadow.time_format: must be one of"),
        ('"unix"', '"%H:%M"', "wire.meadow.time_zone: is missing"),
        ('"unix"', '"%H:%M"\ntime_zone = "Mars/Base"', "is no time zone known here"),
    ],
)
def test_faults_of_a_mapping_are_told(tmp_path: Path, was: str, now: str, says: str) -> None:
    assert was in COUNTS
    with pytest.raises(SiteError) as caught:
        site_of(tmp_path, SITE + COUNTS.replace(was, now))
    assert says in str(caught.value)


def test_they_reach_the_book_over_mqtt_and_quarantine_is_tried_again_once_the_mapping_is_mended(
    broker: Broker, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    text = SITE + f"[mqtt]\nport = {broker.port}\n" + COUNTS
    site = site_of(tmp_path, text)
    with listening(site) as listener, client(broker) as other:
        other.publish("meadow/north/up", json.dumps({"v": 7000, "ts": AT}), qos=1)
        other.publish("meadow/A1B2/up", json.dumps({"v": 7001, "ts": AT + 60}), qos=1)
        eventually(lambda: listener.tally.packs == 2)
    assert stored(site) == [AT * 10**6] and "there is no tank 'A1B2'" in quarantined(site)[0].reason
    site_of(tmp_path, text + 'devices = { "A1B2" = "north" }\n')
    assert main(["quarantine", str(tmp_path / "site.toml"), "retry"]) == 0 and "1 new readings" in capsys.readouterr().out
    with open_book(site.store_url) as book:
        assert book.readings("north")["raw"].tolist() == [7000.0, 7001.0] and book.gaps() == []
