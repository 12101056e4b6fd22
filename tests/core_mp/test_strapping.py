"""Strapping tables: linear between rows, exact at rows, clamped outside, and back."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from fluids.geometry import TANK
from hypothesis import given
from hypothesis import strategies as st
from published import rows

from core_mp.strapping import StrappingTable

NORTH = StrappingTable([0.0, 1.0, 2.0], [0.0, 20.0, 42.0])


def test_volume_is_linear_between_two_rows() -> None:
    assert NORTH.volume(1.5) == 31.0  # halfway from 20 to 42 m3
    assert NORTH.level(31.0) == 1.5
    assert NORTH.area(1.5) == 22.0 and NORTH.area(0.2) == 20.0


def test_outside_the_table_the_end_row_serves() -> None:
    assert (NORTH.volume(-1.0), NORTH.volume(7.0), NORTH.level(-5.0), NORTH.level(99.0)) == (0.0, 42.0, 0.0, 2.0)
    assert (NORTH.area(-1.0), NORTH.area(7.0)) == (20.0, 22.0)


@pytest.mark.parametrize(
    "rows_", [([0.0], [0.0]), ([0, 1, 1], [0, 1, 2]), ([0, 1, 2], [0, 2, 1]), ([0, 1], [0, 1, 2]), ([0, math.nan], [0, 1])]
)
def test_rows_that_do_not_rise_are_refused(rows_: tuple[list[float], list[float]]) -> None:
    with pytest.raises((ValueError, IndexError)):
        StrappingTable(*rows_)


@pytest.mark.parametrize("curve", ["STRAP_A", "VCUR1"])
def test_epanet_interpolates_its_volume_curves_as_we_do(curve: str) -> None:
    # EPANET 2.2 (PyPI wntr): levels and volumes of tanks with these curves, over a day
    points = rows("network_curves", lambda row: row["curve"] == curve)
    table = StrappingTable([float(row["level_m"]) for row in points], [float(row["volume_m3"]) for row in points])
    seen = rows("network_tanks", lambda row: row["volume_curve"] == curve)
    for row in seen:
        assert table.volume(float(row["level_m"])) == pytest.approx(float(row["volume_m3"]), abs=0.002)


SPHEROID = rows("tank_volumes", lambda row: row["shape"] == "oblate spheroid (elevated tank bowl)")


@pytest.mark.parametrize("spacing", [0.05, 0.2, 0.5])
def test_a_table_errs_by_no_more_than_the_chord_bound(spacing: float) -> None:
    """|error| <= max|dA/dh| dh^2 / 8, the error of a chord; volumes of the shape by closed form and quadrature."""
    shape = json.loads(SPHEROID[0]["parameters_json_m"])
    a, b = (float(shape[key]) for key in ("a_horizontal", "b_vertical"))
    levels = np.linspace(0.0, 2 * b, round(2 * b / spacing) + 1)
    table = StrappingTable(levels.tolist(), (math.pi * a**2 * levels**2 * (3 * b - levels) / (3 * b**2)).tolist())
    bound = 2.0 * math.pi * a**2 / b * (levels[1] - levels[0]) ** 2 / 8.0
    for row in SPHEROID:
        assert abs(table.volume(float(row["depth_m"])) - float(row["volume_m3"])) <= bound + 1e-9 * float(
            row["total_volume_m3"]
        )


@pytest.mark.parametrize(
    "tank", [TANK(D=3.0, L=12.0, horizontal=True), TANK(D=4.0, L=6.0, horizontal=False, sideA="conical", sideA_a=1.5)]
)
def test_a_fine_table_follows_the_librarys_shapes(tank: TANK) -> None:
    # PyPI fluids, geometry.TANK.V_from_h
    levels = np.linspace(0.0, tank.h_max, 2001)
    volumes = [tank.V_from_h(float(level)) for level in levels]
    table = StrappingTable(levels.tolist(), volumes)
    for level in np.linspace(0.013, tank.h_max - 0.013, 57).tolist():
        assert table.volume(level) == pytest.approx(tank.V_from_h(level), abs=1e-5 * volumes[-1])


steps = st.lists(st.tuples(st.floats(0.001, 3.0), st.floats(0.001, 500.0)), min_size=2, max_size=60)


@given(steps, st.floats(0.0, 1.0))
def test_level_to_volume_and_back_is_the_level(pieces: list[tuple[float, float]], part: float) -> None:
    levels, volumes = (np.cumsum(column).tolist() for column in zip(*pieces, strict=True))
    table = StrappingTable(levels, volumes)
    level = levels[0] + part * (levels[-1] - levels[0])
    assert table.level(table.volume(level)) == pytest.approx(level, rel=1e-9, abs=1e-9)


ROUNDING = 1e-9  # m3: a line is told from level 0, so a steep one far up is a small difference of large numbers


@given(steps, st.floats(-5.0, 200.0), st.floats(-5.0, 200.0))
def test_more_level_is_never_less_volume(pieces: list[tuple[float, float]], one: float, other: float) -> None:
    table = StrappingTable(*(np.cumsum(column).tolist() for column in zip(*pieces, strict=True)))
    low, high = sorted((one, other))
    assert table.volume(low) <= table.volume(high) + ROUNDING


@given(steps, st.floats(-5.0, 200.0))
def test_the_search_finds_the_same_piece_as_numpy(pieces: list[tuple[float, float]], level: float) -> None:
    levels, volumes = (np.cumsum(column) for column in zip(*pieces, strict=True))
    ours = StrappingTable(levels.tolist(), volumes.tolist()).volume(level)
    assert ours == pytest.approx(float(np.interp(level, levels, volumes)), rel=1e-12, abs=ROUNDING)
