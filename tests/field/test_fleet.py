"""Simulated tanks: the same seed gives the same day, water is conserved, and levelbook's figures agree with the truth."""

from __future__ import annotations

from datetime import UTC, date, datetime
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from companion.field.district import LIVES, write_district
from companion.field.fleet import simulate
from companion.figures.convert import convert
from companion.papers.daily import daily
from companion.settings.describe import describe
from companion.settings.site import Site, load_site

START = datetime(2026, 3, 27, tzinfo=UTC)
DAYS = 5


@pytest.fixture(scope="module")
def site(tmp_path_factory) -> Site:
    return load_site(write_district(tmp_path_factory.mktemp("district"), 1883, "Europe/London"))


def test_the_district_is_read_without_a_note(site: Site) -> None:
    assert len(site.tanks) == 5 and set(site.tanks) == set(LIVES)
    assert not [line for line in describe(site) if "note:" in line]


@pytest.mark.parametrize("name", LIVES)
def test_the_same_seed_gives_the_same_readings_and_another_one_others(site: Site, name: str) -> None:
    tank = site.tank(name)
    one, again, other = (simulate(tank, LIVES[name], START, 1440, seed)[0] for seed in (3, 3, 4))
    pd.testing.assert_frame_equal(one, again)
    assert len(one) != len(other) or (one["raw"] != other["raw"]).any()


@pytest.mark.parametrize("name", LIVES)
def test_what_comes_in_less_what_goes_out_is_what_the_tank_gains(site: Site, name: str) -> None:
    _, truth = simulate(site.tank(name), LIVES[name], START, DAYS * 1440, 3)
    gained = np.cumsum((truth["inflow_m3h"] - truth["outflow_m3h"]).to_numpy()[:-1]) / 60.0
    assert truth["volume_m3"].to_numpy()[1:] - truth["volume_m3"][0] == pytest.approx(gained, abs=1e-6)
    assert truth["level_m"].max() < site.tank(name).overflow_level_m and truth["level_m"].min() > site.tank(name).low_level_m


@pytest.mark.parametrize("name", LIVES)
def test_figures_agree_with_the_truth_within_their_stated_uncertainty(site: Site, name: str) -> None:
    """The simulated sensor is exact but for noise and counts, so its accuracy alone must cover it, and does nearly always."""
    readings, truth = simulate(site.tank(name), LIVES[name], START, DAYS * 1440, 3)
    figures = convert(site.tank(name), readings)
    true = truth.set_index("time").loc[readings["time"]]
    for column, doubt in (("level_m", "level_u95_m"), ("volume_m3", "volume_u95_m3")):
        error = np.abs(figures[column].to_numpy() - true[column].to_numpy())
        assert (error <= figures[doubt].to_numpy()).mean() > 0.99


@pytest.mark.parametrize("name", LIVES)
def test_the_days_net_fill_and_draw_are_the_true_ones(site: Site, name: str) -> None:
    """Truth: the sums of the true volume's own rises and falls. Allowed 1 %, and twice the day's stated uncertainty of change."""
    readings, truth = simulate(site.tank(name), LIVES[name], START, DAYS * 1440, 3)
    log = daily(site, site.tank(name), readings, date(2026, 3, 28), date(2026, 3, 30))  # with a day of 23 hours
    for row in log.to_dict("records"):
        day = truth[truth["time"].dt.tz_convert("Europe/London").dt.date.astype(str) == row["date"]]["volume_m3"].to_numpy()
        steps = np.diff(day)
        for found, true in ((row["net_fill_m3"], steps[steps > 0].sum()), (row["net_draw_m3"], -steps[steps < 0].sum())):
            assert found == pytest.approx(true, rel=0.01, abs=2.0 * row["change_u95_m3"])


def test_readings_keep_their_identity_when_some_are_lost(site: Site) -> None:
    readings, _ = simulate(site.tank("hill"), LIVES["hill"], START, 1440, 3)
    assert readings["seq"].is_monotonic_increasing and readings["seq"].iloc[-1] <= 1439 and len(readings) < 1440


def test_tables_and_site_are_written_where_asked(tmp_path: Path) -> None:
    write_district(tmp_path / "new", 4000, "Europe/London")
    assert sorted(path.name for path in (tmp_path / "new").iterdir()) == ["site.toml", "tower.csv", "vale.csv"]
