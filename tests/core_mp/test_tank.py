"""One reading through a tank: what each situation gives, and what it says of it."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from core_mp import status as bits
from core_mp.earth import air_density, standard_pressure
from core_mp.strapping import StrappingTable
from core_mp.tank import Tank
from core_mp.transmitter import Transmitter
from core_mp.water import water_density

LOOP = [(6553, 0.004), (32767, 0.020)]
SCALE = [(0.004, 0.0), (0.020, 1e5)]


def tank(**others: object) -> Tank:
    settings = {"height_m": 0.5, "floor_m": 300.0, "t_c": 10.0, "rise_m": -9.0, "standard_pa": standard_pressure(309.5),
                "air_per_pa": air_density(1.0, 10.0)}  # fmt: skip
    return Tank(
        Transmitter(SCALE, LOOP, (0, 65535)), StrappingTable([1.0, 9.0], [80.0, 720.0]), water_density, **(settings | others)
    )


def counts(milliamperes: float) -> int:
    return round(6553 + (milliamperes - 4.0) / 16.0 * (32767 - 6553))


def test_a_plain_reading_says_nothing_and_gives_all() -> None:
    status, pressure, level, volume, grade = tank().measure(counts(12.0), 10.0, 97000.0)
    assert status == 0
    assert pressure == pytest.approx(50000.0, abs=2.0)
    assert grade == pytest.approx(300.0 + level)
    assert volume == pytest.approx(80.0 * level)


@pytest.mark.parametrize(
    ("milliamperes", "said"), [(0.0, bits.LOOP_LOW), (3.55, bits.LOOP_LOW), (21.1, bits.LOOP_HIGH), (24.0, bits.LOOP_HIGH)]
)
def test_a_faulty_loop_gives_no_number(milliamperes: float, said: int) -> None:
    status, *figures = tank().measure(counts(milliamperes), 10.0, 97000.0)
    assert status & said and all(math.isnan(figure) for figure in figures)


@pytest.mark.parametrize("raw", [-1, 65536, math.nan])
def test_what_is_no_reading_gives_no_number(raw: float) -> None:
    status, *figures = tank().measure(raw, 10.0, 97000.0)
    assert status & bits.NO_READING and all(math.isnan(figure) for figure in figures)


def test_beyond_the_measuring_range_the_number_stands_and_is_marked() -> None:
    over = tank().measure(counts(20.7), 10.0, 97000.0)
    assert over[0] == bits.OVER_RANGE | bits.ABOVE_TABLE and over[2] > 10.0
    under = tank().measure(counts(3.7), 10.0, 97000.0)
    assert under[0] == bits.UNDER_RANGE | bits.DRY | bits.BELOW_TABLE


def test_a_dry_sensor_shows_its_own_height_at_most() -> None:
    status, _, level, volume, _ = tank().measure(counts(4.0), 10.0, 97000.0)
    assert status == bits.DRY | bits.BELOW_TABLE
    assert level == 0.5 and volume == 80.0


def test_outside_the_table_the_level_stands_and_the_volume_is_the_end_rows() -> None:
    above = tank(height_m=4.0).measure(counts(13.0), 10.0, 97000.0)
    assert above[0] == bits.ABOVE_TABLE and above[2] > 9.0 and above[3] == 720.0
    below = tank().measure(counts(4.4), 10.0, 97000.0)
    assert below[0] == bits.BELOW_TABLE and 0.5 < below[2] < 1.0 and below[3] == 80.0


@pytest.mark.parametrize("temperature", [None, math.nan, -40.0, 127.0])
def test_without_a_temperature_the_default_serves_and_it_is_said(temperature: float | None) -> None:
    without, with_default = tank().measure(counts(12.0), temperature, 97000.0), tank().measure(counts(12.0), 10.0, 97000.0)
    assert without[0] == bits.NO_TEMPERATURE and without[1:] == with_default[1:]


@pytest.mark.parametrize("barometer", [None, math.nan, 970.0, 2e5])
def test_an_absolute_sensor_without_barometer_is_read_against_the_standard_atmosphere_and_it_is_said(
    barometer: float | None,
) -> None:
    sensor = Transmitter([(0, 0.0), (20000, 2e5)])
    absolute = Tank(sensor, StrappingTable([0, 12], [0, 12]), water_density, 0.0, 0.5, 300.0, standard_pa=96000.0)
    without, with_standard = absolute.measure(15000, 10.0, barometer), absolute.measure(15000, 10.0, 96000.0)
    assert without[0] == bits.NO_BAROMETER and without[1:] == with_standard[1:]
    assert tank().measure(counts(12.0), 10.0, barometer)[0] == 0  # a gauge sensor needs none


def test_a_sealed_sensor_is_an_absolute_one_shifted_by_its_own_atmosphere() -> None:
    sealed = Tank(Transmitter([(0, 0.0), (20000, 2e5)]), StrappingTable([0, 30], [0, 30]), water_density, 101325.0)
    absolute = Tank(Transmitter([(0, 101325.0), (20000, 301325.0)]), StrappingTable([0, 30], [0, 30]), water_density, 0.0)
    assert sealed.measure(9000, 12.0, 98200.0) == pytest.approx(absolute.measure(9000, 12.0, 98200.0))


def test_a_closed_tanks_headspace_comes_off_the_level_and_onto_the_grade() -> None:
    """head = (p - p_top) / (rho g), grade = floor + level + p_top / (rho g): the air column is left out whole."""
    closed = tank(height_m=0.0)
    status, pressure, level, _, grade = closed.measure(counts(12.0), 10.0, 97000.0, 20000.0)
    rho = water_density(10.0, None, 0.5 * (pressure + 20000.0))
    assert status == 0
    assert level == pytest.approx((pressure - 20000.0) / (rho * 9.80665), rel=1e-12)
    assert grade == pytest.approx(300.0 + level + 20000.0 / (rho * 9.80665), rel=1e-12)


def test_the_answer_is_written_where_asked() -> None:
    out = [0, 0.0, 0.0, 0.0, 0.0]
    assert tank().measure(counts(12.0), 10.0, 97000.0, None, out) is out


def test_readings_do_not_depend_on_those_before_them() -> None:
    """The tank remembers its last temperature and line of the table, to save work: that must not show."""
    used = tank()
    series = [(counts(4.0 + (n * 37 % 160) / 10.0), [9.0, None, 14.5][n % 3], 97000.0 + n) for n in range(200)]
    assert [used.measure(*reading) for reading in series] == [tank().measure(*reading) for reading in series]


@given(st.integers(0, 65535), st.integers(0, 65535), st.floats(0.0, 40.0), st.floats(80e3, 105e3))
def test_more_pressure_is_never_less_level_or_volume(one: int, other: int, temperature: float, barometer: float) -> None:
    low, high = (tank().measure(raw, temperature, barometer) for raw in sorted((one, other)))
    for a, b in zip(low[2:], high[2:], strict=True):
        assert not a > b


@given(st.integers(0, 65535), st.one_of(st.none(), st.floats()), st.one_of(st.none(), st.floats()))
def test_there_is_a_number_unless_there_is_a_fault(raw: int, temperature: float | None, barometer: float | None) -> None:
    status, *figures = tank().measure(raw, temperature, barometer)
    assert all(math.isnan(figure) for figure in figures) == bool(status & bits.FAULT)
