"""Density and vapour pressure of water, against IAPWS-95, Tanaka 2001, EOS-80 and TEOS-10."""

from __future__ import annotations

import numpy as np
import pytest
from iapws import IAPWS95, IAPWS97
from published import rows

from core_mp.water import liquid_density, vapour_pressure, water_density


@pytest.mark.parametrize("row", rows("water_density"), ids=lambda row: row["temp_C_ITS90"] + " degC")
def test_density_is_tanakas_and_close_to_iapws_95(row: dict[str, str]) -> None:
    t = float(row["temp_C_ITS90"])
    ours, ours_1mpa = water_density(t), water_density(t, 0.0, 1e6 - 101325.0)
    if row["rho_Tanaka2001_kg_m3_at_101325Pa_airfree"]:
        assert ours == pytest.approx(float(row["rho_Tanaka2001_kg_m3_at_101325Pa_airfree"]), abs=2e-6)
        assert ours_1mpa == pytest.approx(float(row["rho_Tanaka2001_kg_m3_at_1MPa"]), abs=2e-6)
    apart = 0.0015 if t <= 40.0 else 0.003
    assert ours == pytest.approx(float(row["rho_IAPWS95_iapws_kg_m3_at_101325Pa"]), abs=apart)
    if t <= 40.0:
        assert ours_1mpa == pytest.approx(float(row["rho_IAPWS95_iapws_kg_m3_at_1MPa"]), abs=apart)


@pytest.mark.parametrize("t", np.linspace(0.5, 95.0, 20))
def test_density_follows_iapws_95_as_the_library_gives_it(t: float) -> None:
    # PyPI iapws, IAPWS95(T, P).rho; IAPWS R6-95(2018)
    assert water_density(t) == pytest.approx(IAPWS95(T=t + 273.15, P=0.101325).rho, abs=0.0015 if t <= 40 else 0.003)


@pytest.mark.parametrize("row", rows("seawater_density", lambda row: row["kind"].startswith("published")), ids=str)
def test_salt_water_is_eos_80s_to_the_last_printed_digit(row: dict[str, str]) -> None:
    salinity, t68 = float(row["practical_salinity_PSS78"]), float(row["temp_C"])
    assert row["temp_scale"] == "IPTS-68" and row["sea_pressure_dbar_gauge"] == "0"
    apart = 1e-5 if salinity > 0 else 0.0013  # of fresh water levelbook takes Tanaka's density, not EOS-80's own
    assert water_density(t68 / 1.00024, salinity) == pytest.approx(float(row["rho_kg_m3"]), abs=apart)


@pytest.mark.parametrize("row", rows("seawater_density", lambda row: row["kind"] == "TEOS10"), ids=str)
def test_salt_water_is_within_6_g_a_cubic_metre_of_teos_10_and_9_under_half_a_megapascal(row: dict[str, str]) -> None:
    pressure = float(row["sea_pressure_dbar_gauge"]) * 1e4
    ours = water_density(float(row["temp_C"]), float(row["practical_salinity_PSS78"]), pressure)
    assert ours == pytest.approx(float(row["rho_kg_m3"]), abs=0.006 if pressure == 0 else 0.009)


@pytest.mark.parametrize("t", [0.5, 5.0, 20.0, 40.0, 60.0, 95.0])
def test_vapour_pressure_follows_iapws(t: float) -> None:
    # PyPI iapws, saturation line of IAPWS-IF97, which follows IAPWS SR1-86 within 0.03 %
    assert vapour_pressure(t) == pytest.approx(IAPWS97(T=t + 273.15, x=0).P * 1e6, rel=3e-4)


def test_a_column_gives_what_single_readings_give() -> None:
    t = np.linspace(-2.0, 95.0, 200)
    s = np.tile([0.0, 0.4, 7.0, 35.0], 50)
    p = np.linspace(0.0, 1e6, 200)
    single = [water_density(a, b, c) for a, b, c in zip(t.tolist(), s.tolist(), p.tolist(), strict=True)]
    assert water_density(t, s, p) == pytest.approx(single, rel=1e-15)
    assert vapour_pressure(t) == pytest.approx([vapour_pressure(a) for a in t.tolist()], rel=1e-14)


def test_no_salt_is_fresh_water_however_it_is_said() -> None:
    assert water_density(12.0) == water_density(12.0, 0.0) == water_density(12.0, None)
    assert water_density(np.array([12.0]), np.array([0.0]))[0] == water_density(12.0)


def test_another_liquid_expands_as_told() -> None:
    density = liquid_density(880.0, 7e-4, 15.0)
    assert density(15.0) == 880.0
    assert density(25.0, None, 1e5) == pytest.approx(880.0 / 1.007)
