"""Columns: the same answers as one reading at a time, each reading with the settings in force at its time."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from published import rows
from sites import SITE, site_of, write_site

from companion.book.readings import frame_of
from companion.figures.convert import CHUNK, FIGURES, convert
from companion.figures.table import write_figures
from companion.settings.site import load_site
from core_mp import status as bits

NAN = float("nan")
START = np.datetime64("2026-03-01T00:00:00")


def minutes(raw: list[float], **others: list[float]) -> pd.DataFrame:
    return frame_of(START + np.arange(len(raw)) * np.timedelta64(60, "s"), raw, **others)


KINDS = {
    "gauge": SITE,
    "no vent": SITE.replace('reference_elevation = "110 m"\n', ""),
    "absolute": SITE.replace('"gauge"', '"absolute"').replace('"1 bar"', '"2 bar"'),
    "sealed": SITE.replace('"gauge"', '"sealed"'),
    "salt": SITE.replace('default_temperature = "10 degC"', 'salinity = "12 g/kg"'),
    "bent scale": SITE.replace('loop = [[6553, "4 mA"], [32767, "20 mA"]]\n', "").replace(
        '[["4 mA", "0 bar"], ["20 mA", "1 bar"]]', '[[6553, "0 bar"], [20000, "0.49 bar"], [32767, "1 bar"]]'
    ),
}
readings = st.lists(
    st.tuples(
        st.one_of(st.integers(0, 65535).map(float), st.integers(6600, 30000).map(float)),
        st.one_of(st.just(NAN), st.floats(-10.0, 100.0)),
        st.one_of(st.just(NAN), st.floats(85e3, 105e3), st.just(980.0)),
    ),
    min_size=1,
    max_size=40,
)


@pytest.mark.parametrize("kind", KINDS)
@settings(max_examples=40, deadline=None)
@given(rows_=readings)
def test_a_column_gives_what_single_readings_give(kind: str, rows_: list[tuple[float, float, float]], tmp_path_factory) -> None:
    tank = site_of(tmp_path_factory.getbasetemp(), KINDS[kind]).tank("north")
    raw, temperature, barometer = (list(column) for column in zip(*rows_, strict=True))
    figures = convert(tank, minutes(raw, temperature_c=temperature, barometer_pa=barometer))
    for n, row in enumerate(rows_):
        single = tank.core(tank.periods()[0]).measure(*row)
        assert single[0] == figures["status"][n]
        assert single[1:] == pytest.approx([figures[name][n] for name in FIGURES], rel=1e-12, abs=1e-9, nan_ok=True)


def test_a_headspace_column_closes_the_tank_and_a_hole_in_it_is_no_reading(tmp_path: Path) -> None:
    tank = site_of(tmp_path).tank("north")
    figures = convert(tank, minutes([20000.0, 20000.0], temperature_c=[10.0, 10.0], headspace_pa=[15000.0, NAN]))
    single = tank.core(tank.periods()[0]).measure(20000.0, 10.0, None, 15000.0)
    assert [figures[name][0] for name in FIGURES] == pytest.approx(single[1:], rel=1e-12)
    assert figures["status"][1] == bits.NO_READING and np.isnan(figures["level_m"][1])


def test_chunks_leave_no_seam(tmp_path: Path) -> None:
    tank = site_of(tmp_path).tank("north")
    n = 2 * CHUNK + 77
    raw = 18000 + 9000 * np.sin(np.arange(n) / 500.0)
    raw[CHUNK - 1 : CHUNK + 1] = 0.0
    whole = convert(tank, minutes(raw.tolist()))
    parts = pd.concat([convert(tank, minutes(raw.tolist()).iloc[a : a + 1000]) for a in range(0, n, 1000)], ignore_index=True)
    pd.testing.assert_frame_equal(whole, parts)


def test_each_reading_takes_the_settings_in_force_at_its_time(tmp_path: Path) -> None:
    text = SITE.replace("[tank.north.sensor]", "[[tank.north.sensor]]")
    later = text[text.index("[[tank.north.sensor]]") :].replace(
        "[[tank.north.sensor]]", "[[tank.north.sensor]]\nsince = 2026-03-01T00:02:00Z"
    )
    tank = site_of(tmp_path, text + later.replace('"0.1 m"', '"0.6 m"')).tank("north")
    levels = convert(tank, minutes([20000.0] * 4, temperature_c=[10.0] * 4))["level_m"]
    assert (
        levels[1] == levels[0] and levels[2] == levels[3] and levels[2] - levels[1] == pytest.approx(0.5, abs=0.001)
    )  # less the air between
    shuffled = minutes([20000.0] * 4, temperature_c=[10.0] * 4).iloc[[3, 0, 2, 1]]
    assert convert(tank, shuffled)["level_m"].tolist() == [levels[3], levels[0], levels[2], levels[1]]


def test_a_corrected_setting_corrects_all_history(tmp_path: Path) -> None:
    frame = minutes([20000.0, 21000.0], temperature_c=[10.0] * 2)
    before = convert(site_of(tmp_path).tank("north"), frame)["level_m"]
    after = convert(site_of(tmp_path, SITE.replace('"0.1 m"', '"0.13 m"')).tank("north"), frame)["level_m"]
    assert (after - before).tolist() == pytest.approx([0.03, 0.03], abs=1e-4)


def test_a_level_signal_is_taken_as_the_level(tmp_path: Path) -> None:
    sensor = '[tank.north.sensor]\nsignal = "level"\n'
    tank = load_site(write_site(tmp_path, SITE[: SITE.index("[tank.north.sensor]")] + sensor)).tank("north")
    figures = convert(tank, minutes([3.25, 11.0]))
    assert figures["level_m"].tolist() == [3.25, 11.0] and figures["volume_m3"].tolist() == pytest.approx([260.0, 800.0])
    assert figures["grade_m"].tolist() == [103.25, 111.0] and np.isnan(figures["pressure_pa"]).all()
    assert figures["status"].tolist() == [0, bits.ABOVE_TABLE]


def test_uncertainty_carries_accuracy_and_resolution(tmp_path: Path) -> None:
    """JCGM 100:2008: a rectangular distribution of half width a has u = a / sqrt(3) (4.3.7), a step d has u = d / sqrt(12); U = 2 u."""
    tank = site_of(tmp_path).tank("north")
    row = convert(tank, minutes([20000.0], temperature_c=[10.0])).iloc[0]
    u_pa = np.hypot(0.001 * 1e5 / np.sqrt(3.0), 1e5 / 26214 / np.sqrt(12.0))
    assert row["level_u95_m"] == pytest.approx(2.0 * u_pa / (999.70 * 9.8125), rel=1e-3)
    assert row["volume_u95_m3"] == pytest.approx(80.0 * row["level_u95_m"], rel=1e-9)
    without = convert(site_of(tmp_path, SITE.replace('accuracy = "0.1 %"\n', "")).tank("north"), minutes([20000.0])).iloc[0]
    assert np.isnan(without["level_u95_m"]) and without["level_m"] > 0.0


@pytest.mark.parametrize(
    "row",
    rows("shell_temperature", lambda row: row["temp_unit"] == "C" and "bare" in row["kind"]),
    ids=lambda row: row["T_liquid"],
)
def test_a_warm_shell_holds_more(row: dict[str, str], tmp_path: Path) -> None:
    # API MPMS 12.1.1's CTSh for bare shells, (1 + a dT)^2 with T_shell = (7 T_liquid + T_ambient) / 8
    text = SITE.replace(
        'default_temperature = "10 degC"',
        f'shell_expansion = "{row["alpha_per_K_or_F"]} / K"\nshell_reference = "{row["T_reference"]} degC"\nair_temperature = "{row["T_ambient"]} degC"',
    )
    liquid = [float(row["T_liquid"])]
    warm, plain = (convert(site_of(tmp_path, t).tank("north"), minutes([20000.0], temperature_c=liquid)).iloc[0]
                   for t in (text, SITE.replace('default_temperature = "10 degC"', f'air_temperature = "{row["T_ambient"]} degC"')))  # fmt: skip
    assert warm["volume_m3"] / plain["volume_m3"] == pytest.approx(float(row["CTSh"]), rel=1e-9)


def test_figures_are_written_as_the_contract_says(tmp_path: Path) -> None:
    tank = site_of(tmp_path).tank("north")
    write_figures(tmp_path / "f.csv", convert(tank, minutes([20000.0, 5000.0], temperature_c=[10.0, 10.0])))
    header, one, two = (tmp_path / "f.csv").read_text().splitlines()
    assert header == "time,status,pressure_Pa,level_m,volume_m3,grade_m,level_u95_m,volume_u95_m3,grade_u95_m"
    assert one.startswith("2026-03-01T00:00:00Z,ok,512") and two == "2026-03-01T00:01:00Z,loop_low under_range" + ",NaN" * 7
    back = pd.read_csv(tmp_path / "f.csv")
    assert back["grade_m"][0] == pytest.approx(back["level_m"][0] + 100.0, abs=1e-9)


def test_no_readings_give_no_figures(tmp_path: Path) -> None:
    assert convert(site_of(tmp_path).tank("north"), minutes([])).empty
