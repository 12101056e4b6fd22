"""Rules of thumb of the trade, common practice, no source: each must come out of the core within its own tolerance."""

from __future__ import annotations

from collections.abc import Callable

import pytest
from published import rows

from core_mp.earth import air_density, normal_gravity, standard_pressure
from core_mp.transmitter import Transmitter
from core_mp.water import water_density

PSI, FOOT, INHG, G = 6894.757293168361, 0.3048, 3386.388640341, 9.80665
AT_60F = (60.0 - 32.0) / 1.8
DENSEST = max(range(1000), key=lambda t: water_density(t / 100.0)) / 100.0

RULES: dict[str, Callable[[], float]] = {
    "1 psi holds up about 2.31 ft of water": lambda: PSI / (water_density(AT_60F) * G) / FOOT,
    "1 ft of water gives about 0.433 psi": lambda: water_density(AT_60F) * G * FOOT / PSI,
    "1 bar holds up about 10.2 m of water": lambda: 1e5 / (water_density(15.0) * G),
    "1 m of water gives about 9.8 kPa": lambda: water_density(15.0) * G / 1e3,
    "1 m of water gives about 1.42 psi": lambda: water_density(15.0) * G / PSI,
    "1 hPa is about 1 cm of water (10.2 mm)": lambda: 1e5 / (water_density(15.0) * G),
    "1 psi is about 27.7 in of water": lambda: PSI / (water_density(AT_60F) * G) / 0.0254,
    "60 psi is about 140 ft of water": lambda: 60 * PSI / (water_density(AT_60F) * G) / FOOT,
    "100 ft of water is about 43.3 psi": lambda: 100 * FOOT * water_density(AT_60F) * G / PSI,
    "the atmosphere holds up about 10.3 m of water": lambda: standard_pressure(0.0) / (water_density(15.0) * G),
    "the atmosphere holds up about 34 ft of water": lambda: standard_pressure(0.0) / (water_density(15.0) * G) / FOOT,
    "1 cubic metre of water is about 1 tonne": lambda: water_density(15.0) / 1e3,
    "air pressure falls about 12 hPa per 100 m near sea level": lambda: (
        (standard_pressure(0.0) - standard_pressure(100.0)) / 100
    ),
    "air pressure falls about 1 inHg per 1000 ft near sea level": lambda: (
        (standard_pressure(0.0) - standard_pressure(1000 * FOOT)) / INHG
    ),
    "at about 1500 m the air pressure is about 85 percent of sea level": lambda: (
        standard_pressure(1500.0) / standard_pressure(0.0)
    ),
    "sea water is about 2.5 percent denser than fresh": lambda: 100 * (water_density(15.0, 35.0) / water_density(15.0) - 1),
    "gravity grows about 0.5 percent from equator to pole": lambda: 100 * (normal_gravity(90.0) / normal_gravity(0.0) - 1),
    "water is densest near 4 C": lambda: DENSEST,
    "a 4-20 mA loop at 12 mA is at half of its range": lambda: Transmitter(
        [(0.004, 0), (0.02, 100)], [(0, 0), (1, 1)]
    ).pressure(0.012),
    "an air column is about 1/800 as heavy as a water column": lambda: air_density(101325.0, 15.0) / water_density(15.0),
}


@pytest.mark.parametrize("statement", RULES)
def test_rules_of_thumb_come_out(statement: str) -> None:
    [row] = rows("rules_of_thumb", lambda row: row["statement"] == statement)
    assert "common practice, no source" in row["source"]
    assert RULES[statement]() == pytest.approx(float(row["rule_value"]), abs=float(row["tolerance_abs"]) + 1e-9)
