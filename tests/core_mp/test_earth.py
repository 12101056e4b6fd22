"""Gravity and air, against WGS84, ISO 2533 and libraries."""

from __future__ import annotations

import numpy as np
import pytest
from fluids.atmosphere import ATMOSPHERE_1976
from published import number, rows

from core_mp.earth import air_density, normal_gravity, standard_pressure, standard_temperature


@pytest.mark.parametrize("row", rows("gravity"), ids=lambda row: f"{row['kind']} {row['latitude_deg']} {row['height_m']}")
def test_gravity_is_wgs84s(row: dict[str, str]) -> None:
    g = normal_gravity(float(row["latitude_deg"]), float(row["height_m"]))
    quoted, closed, welmec = (
        number(row[name]) for name in ("g_quoted_m_s2", "g_WGS84_closed_form_boule_m_s2", "g_WELMEC_m_s2")
    )
    if quoted is not None:
        assert g == pytest.approx(quoted, abs=1e-10)
    if closed is not None:
        assert g == pytest.approx(closed, abs=5e-7)
    if welmec is not None:
        assert g == pytest.approx(welmec, abs=2e-5)


@pytest.mark.parametrize("row", rows("atmosphere"), ids=lambda row: f"{row['kind']} {row['height_m']}")
def test_the_standard_atmosphere_is_iso_2533s(row: dict[str, str]) -> None:
    z = float(row["height_m"])
    if row["p_ISA_Pa_height_taken_geometric"]:
        assert standard_pressure(z) == pytest.approx(float(row["p_ISA_Pa_height_taken_geometric"]), abs=0.05)
        assert air_density(standard_pressure(z), standard_temperature(z)) == pytest.approx(
            float(row["rho_air_kg_m3_geometric"]), rel=1e-4
        )
    if row["p_quoted_Pa"]:
        by_geopotential = "geopotential" in row["source"]  # z = r H / (r - H), ISO 2533, 2.3
        printed_at = 6356766.0 * z / (6356766.0 - z) if by_geopotential else z
        assert standard_pressure(printed_at) == pytest.approx(float(row["p_quoted_Pa"]), abs=1.0)


@pytest.mark.parametrize("z", [-50.0, 0.0, 312.0, 1500.0, 4000.0])
def test_the_standard_atmosphere_is_the_librarys(z: float) -> None:
    # PyPI fluids, ATMOSPHERE_1976(z).P
    assert standard_pressure(z) == pytest.approx(ATMOSPHERE_1976(z).P, abs=0.05)


def test_columns_give_what_single_figures_give() -> None:
    z = np.array([-50.0, 0.0, 2500.0])
    assert standard_pressure(z) == pytest.approx([standard_pressure(a) for a in z.tolist()], rel=1e-15)
    assert normal_gravity(45.0, z) == pytest.approx([normal_gravity(45.0, a) for a in z.tolist()], rel=1e-15)
    assert air_density(z + 1e5, z / 100) == pytest.approx([air_density(a + 1e5, a / 100) for a in z.tolist()], rel=1e-15)
