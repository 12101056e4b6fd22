"""The daily log: days that add up, on the clock of the place, with what is missing told."""

from __future__ import annotations

import csv
from datetime import UTC, date, datetime, timedelta
from decimal import Decimal
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sites import SITE, site_of

from companion.book.readings import frame_of
from companion.book.store import open_book
from companion.papers.daily import COLUMNS, daily, local_midnight, write_daily
from companion.settings.site import Site

LEVEL_SITE = SITE[: SITE.index("[tank.north.sensor]")] + '[tank.north.sensor]\nsignal = "level"\n'  # 80 m2, raw is the level


def readings(start: str, hours: float, level, every_s: int = 60) -> pd.DataFrame:
    """Levels [m] as a function of hours since start (UTC)."""
    t = np.arange(0, round(hours * 3600) + 1, every_s)
    return frame_of(np.datetime64(start) + t.astype("timedelta64[s]"), level(t / 3600.0) * np.ones(len(t)))


def drop(frame: pd.DataFrame, start: str, end: str) -> pd.DataFrame:
    """The frame without the readings from start to end (UTC)."""
    return frame[(frame["time"] < pd.Timestamp(start, tz="UTC")) | (frame["time"] >= pd.Timestamp(end, tz="UTC"))]


@pytest.fixture
def site(tmp_path: Path) -> Site:
    return site_of(tmp_path, LEVEL_SITE)


def log(site: Site, frame: pd.DataFrame, first: str, last: str) -> pd.DataFrame:
    return daily(site, site.tank("north"), frame, date.fromisoformat(first), date.fromisoformat(last))


def test_a_plain_day(site: Site) -> None:
    # Europe/Berlin in winter: the local day begins at 23:00 UTC. 0.1 m/h over 80 m2 is 8 m3/h.
    row = log(site, readings("2026-01-14T22:00:00", 30, lambda h: 2.0 + 0.1 * h), "2026-01-15", "2026-01-15").iloc[0]
    assert (row["opening_level_m"], row["closing_level_m"]) == (2.1, 4.5)
    assert (row["opening_volume_m3"], row["closing_volume_m3"], row["change_m3"]) == (168.0, 360.0, 192.0)
    assert (row["net_fill_m3"], row["net_draw_m3"]) == (192.0, 0.0)
    assert (row["readings"], row["complete_pct"], row["remarks"]) == (1440, 100.0, "")
    assert row["minimum_at"] == "2026-01-15T00:00:00+01:00" and row["maximum_at"] == "2026-01-16T00:00:00+01:00"


def test_midnight_is_interpolated_between_the_readings_either_side(site: Site) -> None:
    frame = readings("2026-01-14T22:07:30", 30, lambda h: 2.0 + 0.1 * h, 900)  # at 7.5, 22.5, ... minutes past
    row = log(site, frame, "2026-01-15", "2026-01-15").iloc[0]
    assert row["opening_level_m"] == pytest.approx(2.0 + 0.1 * 52.5 / 60.0, abs=0.0006)


@pytest.mark.parametrize(("day", "hours"), [("2026-03-29", 23), ("2026-10-25", 25), ("2026-06-01", 24)])
def test_days_of_23_and_25_hours(site: Site, day: str, hours: int) -> None:
    start = local_midnight(date.fromisoformat(day), site.timezone) - timedelta(hours=1)
    frame = readings(start.replace(tzinfo=None).isoformat(), 28, lambda h: 1.0 + 0.1 * h)
    row = log(site, frame, day, day).iloc[0]
    assert row["change_m3"] == pytest.approx(8.0 * hours) and row["readings"] == 60 * hours and row["complete_pct"] == 100.0
    assert (f"day of {hours} hours" in row["remarks"]) == (hours != 24)


def test_a_zone_that_skips_midnight_opens_at_the_first_moment_there_is() -> None:
    from zoneinfo import ZoneInfo

    # IANA time zone data: in America/Santiago clocks go from 24:00 on 5 September 2026 to 01:00
    assert local_midnight(date(2026, 9, 6), ZoneInfo("America/Santiago")) == datetime(2026, 9, 6, 4, tzinfo=UTC)


def test_a_gap_is_told_and_counted(site: Site) -> None:
    frame = drop(readings("2026-01-14T22:00:00", 30, lambda h: 2.0 + 0.1 * h), "2026-01-15T05:00:00", "2026-01-15T08:00:00")
    row = log(site, frame, "2026-01-15", "2026-01-15").iloc[0]
    assert row["remarks"] == "no level 06:00-09:00 (3 h 00 min)" and row["complete_pct"] == 87.5 and row["readings"] == 1260
    assert row["change_m3"] == 192.0


def test_a_gap_over_midnight_is_bridged_with_a_wider_doubt_up_to_six_hours(tmp_path: Path) -> None:
    site = site_of(tmp_path)
    t = np.arange(0, 54 * 60)
    frame = frame_of(
        np.datetime64("2026-01-14T20:00:00") + t.astype("timedelta64[m]"), np.round(16000 + 4000 * np.sin(t / 200.0))
    )
    whole = log(site, frame, "2026-01-15", "2026-01-15").iloc[0]
    short = log(site, drop(frame, "2026-01-14T21:30:00", "2026-01-15T01:00:00"), "2026-01-15", "2026-01-15").iloc[0]
    assert "opening: interpolated over a gap of 3 h 31 min" in short["remarks"]
    assert short["change_u95_m3"] > 5 * whole["change_u95_m3"]
    assert abs(short["change_m3"] - whole["change_m3"]) < short["change_u95_m3"]
    long = log(site, drop(frame, "2026-01-14T21:30:00", "2026-01-15T05:00:00"), "2026-01-15", "2026-01-15").iloc[0]
    assert np.isnan(long["opening_volume_m3"]) and np.isnan(long["change_m3"]) and np.isnan(long["net_fill_m3"])
    assert "opening: no readings for 7 h 31 min over midnight" in long["remarks"]
    assert long["closing_volume_m3"] == whole["closing_volume_m3"]


def test_a_day_without_readings_says_so(site: Site) -> None:
    frame = readings("2026-01-14T22:00:00", 30, lambda h: 3.0)
    table = log(site, frame, "2026-01-20", "2026-01-21")
    assert table["readings"].tolist() == [0, 0] and table["complete_pct"].tolist() == [0.0, 0.0]
    assert table["opening_level_m"].isna().all() and table["remarks"].str.startswith("no readings").all()
    assert log(site, frame.iloc[:0], "2026-01-20", "2026-01-20")["remarks"][0].startswith("no readings")


def test_a_file_of_one_local_day_is_closed_by_its_last_reading(site: Site) -> None:
    frame = readings("2026-01-14T23:00:00", 24, lambda h: 2.0 + 0.1 * h).iloc[:-1]  # 00:00 to 23:59
    row = log(site, frame, "2026-01-15", "2026-01-15").iloc[0]
    assert (
        row["closing_level_m"] == pytest.approx(4.398, abs=0.001)
        and "closing: taken from the reading nearest to midnight" in row["remarks"]
    )


def test_faults_and_overflow_are_told(tmp_path: Path) -> None:
    site = site_of(tmp_path)
    t = np.arange(0, 30 * 60)
    raw = np.round(6553 + 0.9 * 26214 + 0 * t)
    raw[600:660] = 5000
    raw[700:720] = 6553 + 0.95 * 26214
    frame = frame_of(np.datetime64("2026-01-14T22:00:00") + t.astype("timedelta64[m]"), raw)
    said = log(site, frame, "2026-01-15", "2026-01-15")["remarks"][0]
    assert "loop_low in 60 readings 09:00-09:59" in said and "no level 09:00-10:00 (1 h 00 min)" in said
    assert "at or above the overflow level in 20 readings 10:40-10:59" in said


amplitudes = st.lists(st.tuples(st.floats(0.05, 2.0), st.floats(2.0, 40.0), st.floats(0.0, 6.0)), min_size=1, max_size=3)


@settings(max_examples=30, deadline=None)
@given(waves=amplitudes, seed=st.integers(0, 1000), holes=st.lists(st.integers(0, 4 * 1440), max_size=4))
def test_every_row_adds_up_as_printed_and_days_join(waves, seed: int, holes: list[int], tmp_path_factory) -> None:
    folder = tmp_path_factory.mktemp("log")
    site = site_of(folder, LEVEL_SITE.replace('"sqlite', '"sqlite'))
    rng = np.random.default_rng(seed)
    t = np.arange(5 * 1440)
    level = (
        5.0
        + sum(a * np.sin(t / 60.0 / hours * 2 * np.pi + phase) for a, hours, phase in waves) / len(waves)
        + 0.003 * rng.standard_normal(len(t))
    )
    frame = frame_of(np.datetime64("2026-03-27T00:00:00") + t.astype("timedelta64[m]"), level)
    keep = np.ones(len(t), bool)
    for hole in holes:
        keep[hole : hole + 150] = False
    with open_book(site.store_url) as book:
        book.add("north", frame[keep])
    write_daily(folder / "d.csv", site, [site.tank("north")], date(2026, 3, 28), date(2026, 3, 30))
    with open(folder / "d.csv", newline="") as file:
        printed = list(csv.DictReader(file))
    assert tuple(printed[0]) == COLUMNS and len(printed) == 3
    for row in printed:
        opening, closing, change, fill, draw = (
            Decimal(row[name]) for name in ("opening_volume_m3", "closing_volume_m3", "change_m3", "net_fill_m3", "net_draw_m3")
        )
        assert closing - opening == change == fill - draw
        assert fill >= 0 and draw >= 0
        assert float(row["minimum_level_m"]) <= min(float(row["opening_level_m"]), float(row["closing_level_m"]))
        assert float(row["maximum_level_m"]) >= max(float(row["opening_level_m"]), float(row["closing_level_m"]))
    for before, after in zip(printed, printed[1:], strict=False):
        assert (
            before["closing_volume_m3"] == after["opening_volume_m3"] and before["closing_level_m"] == after["opening_level_m"]
        )


def test_a_log_over_many_days_has_the_same_rows_as_each_day_alone(tmp_path: Path) -> None:
    site = site_of(tmp_path, LEVEL_SITE)
    t = np.arange(6 * 1440)
    frame = frame_of(np.datetime64("2026-05-01T00:00:00") + t.astype("timedelta64[m]"), 5 + 2 * np.sin(t / 300.0))
    with open_book(site.store_url) as book:
        book.add("north", frame)
    write_daily(tmp_path / "all.csv", site, [site.tank("north")], date(2026, 5, 2), date(2026, 5, 5))
    rows = (tmp_path / "all.csv").read_text().splitlines()
    for n in range(4):
        day = date(2026, 5, 2) + timedelta(days=n)
        write_daily(tmp_path / "one.csv", site, [site.tank("north")], day, day)
        assert (tmp_path / "one.csv").read_text().splitlines()[1] == rows[1 + n]
