"""The main job against published example networks: EPANET's tanks, a sensor's counts of them, and what levelbook makes of those."""

from __future__ import annotations

from datetime import date
from pathlib import Path

import numpy as np
import pytest
from networks import HIGH, LOW, RANGE_PA, TankDay, published_day, readings_of, simulated_day, site_with

from companion.figures.convert import convert
from companion.papers.daily import daily
from core_mp import status as bits

COUNT_M = RANGE_PA / (HIGH - LOW) / 9800.0  # what a count is worth: 1.9 mm
TANKS = [("Net1", "2"), ("Net3", "1"), ("Net3", "2"), ("Net3", "3"), ("Net3_strap", "1"), ("Anytown", "41"), ("Anytown", "42")]
DAY = date(2026, 5, 4)


@pytest.fixture(scope="module")
def days() -> dict[tuple[str, str], TankDay]:
    return {name: published_day(*name) for name in TANKS}


@pytest.mark.parametrize("name", TANKS[:4], ids="-".join)
def test_the_published_rows_are_what_epanet_gives_now(days, name: tuple[str, str], tmp_path: Path) -> None:
    now, then = simulated_day(*name, tmp_path), days[name]
    assert now.time_s == pytest.approx(then.time_s)
    assert now.level_m == pytest.approx(then.level_m, abs=1e-5)
    assert now.grade_m == pytest.approx(then.grade_m, abs=1e-5)
    assert (now.fill_m3, now.draw_m3) == pytest.approx((then.fill_m3, then.draw_m3), rel=1e-5)


@pytest.mark.parametrize("kind", ["gauge", "absolute"])
@pytest.mark.parametrize("name", TANKS, ids="-".join)
def test_level_volume_and_grade_are_epanets_within_the_sensors_counts(
    days, name: tuple[str, str], kind: str, tmp_path: Path
) -> None:
    """Half a count, and for a gauge sensor the weather, which it has no barometer to see: 1.5 mm at 42 m."""
    day = days[name]
    tank = site_with(day, kind, tmp_path).tank("t")
    figures = convert(tank, readings_of(day, kind))
    at = np.flatnonzero(np.isin(np.arange(len(figures)) * 60.0, day.time_s))
    want = np.isin(day.time_s, at * 60.0)
    allowed = 0.5 * COUNT_M + 0.0003 + (0.0015 * day.level_m.max() / 42.0 if kind == "gauge" else 0.0)
    inside = (figures["status"].to_numpy()[at] & (bits.BELOW_TABLE | bits.ABOVE_TABLE)) == 0
    area = (np.diff(day.table[1]) / np.diff(day.table[0])).max()
    assert len(at) > 3
    assert figures["level_m"].to_numpy()[at] == pytest.approx(day.level_m[want], abs=allowed)
    assert figures["grade_m"].to_numpy()[at] == pytest.approx(day.grade_m[want], abs=allowed)
    assert figures["volume_m3"].to_numpy()[at][inside] == pytest.approx(day.volume_m3[want][inside], abs=allowed * area + 0.002)


@pytest.mark.parametrize("noise_m", [0.0, 0.002], ids=["clean", "2 mm noise"])
@pytest.mark.parametrize("kind", ["gauge", "absolute"])
@pytest.mark.parametrize("name", TANKS, ids="-".join)
def test_net_fill_and_draw_are_what_flowed(days, name: tuple[str, str], kind: str, noise_m: float, tmp_path: Path) -> None:
    """Within 0.5 % of the day's flow, and two counts over the tank's area for each end of the day."""
    day = days[name]
    site = site_with(day, kind, tmp_path)
    row = daily(site, site.tank("t"), readings_of(day, kind, noise_m), DAY, DAY).iloc[0]
    area = (np.diff(day.table[1]) / np.diff(day.table[0])).max()
    allowed = 0.005 * max(day.fill_m3, day.draw_m3) + 2.0 * (COUNT_M + noise_m) * area
    assert row["net_fill_m3"] == pytest.approx(day.fill_m3, abs=allowed)
    assert row["net_draw_m3"] == pytest.approx(day.draw_m3, abs=allowed)
    assert row["change_m3"] == pytest.approx(day.volume_m3[-1] - day.volume_m3[0], abs=2.0 * (COUNT_M + 3 * noise_m) * area)
    assert row["complete_pct"] == 100.0
