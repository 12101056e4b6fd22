"""The trend picture: what it must show, found again in the files it writes."""

from __future__ import annotations

import dataclasses
import re
import xml.etree.ElementTree as ET
from datetime import UTC, datetime, timedelta
from pathlib import Path

import matplotlib.image
import numpy as np
import pytest
from sites import SITE, site_of

from companion.book.files import FileFault
from companion.book.readings import frame_of
from companion.figures.convert import convert
from companion.papers.trend import draw_trend, summary_of, thinned
from companion.settings.site import Site

START = datetime(2026, 3, 28, 23, tzinfo=UTC)


@pytest.fixture
def site(tmp_path: Path) -> Site:
    return site_of(tmp_path, SITE.replace('low_level = "1 m"', 'low_level = "1 m"\nhigh_level = "9 m"'))


def figures(site: Site, hours: float = 48.0, gap: tuple[int, int] | None = None, fault: tuple[int, int] | None = None):
    t = np.arange(round(hours * 60))
    raw = np.round(16000 + 6000 * np.sin(t / 150.0))
    if fault:
        raw[slice(*fault)] = 5000
    frame = frame_of(
        np.datetime64(START.replace(tzinfo=None)) + t.astype("timedelta64[m]"), raw, temperature_c=np.full(len(t), 9.0)
    )
    if gap:
        frame = frame.drop(range(*gap)).reset_index(drop=True)
    return convert(site.tank("north"), frame)


def words_of(path: Path) -> str:
    return " ".join("".join(text.itertext()) for text in ET.parse(path).iter() if text.tag.endswith("text"))


def test_the_svg_names_units_limits_zone_gaps_and_faults(site: Site, tmp_path: Path) -> None:
    path = tmp_path / "t.svg"
    draw_trend(
        site, site.tank("north"), figures(site, gap=(700, 1100), fault=(1500, 1560)), START, START + timedelta(hours=48), path
    )
    said = words_of(path)
    for word in ("Level [m]", "Volume [m³]", "Hydraulic grade [m]", "(on test datum)", "Local time, Europe/Berlin", "clocks change in this time",
                 "overflow 9.50 m", "low 1.00 m", "high 9.00 m", "no readings", "6 h 41 min", "loop_low", "(95 %)", "no protection system"):  # fmt: skip
        assert word in said, word
    described = re.search(r"<dc:description>(.*?)</dc:description>", path.read_text(), re.S)
    assert described and "level 1.43 to 6.10 m" in described[1] and "2,480 readings" in described[1]


def test_us_units_are_shown_where_the_site_asks(site: Site, tmp_path: Path) -> None:
    us = dataclasses.replace(site, units="us")
    draw_trend(us, us.tank("north"), figures(us), START, START + timedelta(hours=48), tmp_path / "t.svg")
    said = words_of(tmp_path / "t.svg")
    assert "Level [ft]" in said and "Volume [US kgal]" in said and "overflow 31.17 ft" in said


@pytest.mark.parametrize("hours", [0.0, 1 / 60, 1.0, 48.0])
@pytest.mark.parametrize("suffix", [".png", ".svg", ".pdf"])
def test_a_picture_is_drawn_of_much_little_and_nothing(site: Site, tmp_path: Path, hours: float, suffix: str) -> None:
    path = tmp_path / f"t{suffix}"
    draw_trend(site, site.tank("north"), figures(site, hours), START, START + timedelta(hours=48), path)
    head = path.read_bytes()[:8]
    assert head.startswith({".png": b"\x89PNG", ".svg": b"<?xml", ".pdf": b"%PDF"}[suffix])
    if suffix == ".png":
        height, width, _ = matplotlib.image.imread(path).shape
        assert width == 1320 and height > 800
    if suffix == ".svg" and hours == 0.0:
        assert "no readings" in words_of(path)


def test_the_same_readings_give_the_same_file(site: Site, tmp_path: Path) -> None:
    for name in ("a.svg", "b.svg"):
        draw_trend(site, site.tank("north"), figures(site), START, START + timedelta(hours=48), tmp_path / name)
    assert (tmp_path / "a.svg").read_bytes() == (tmp_path / "b.svg").read_bytes()


def test_a_line_breaks_where_readings_are_missing() -> None:
    time = np.array([0.0, 1.0, 2.0, 8.0, 9.0]) / 1440.0
    _, values, _ = thinned(time, np.arange(5.0), np.ones(5))
    assert np.isnan(values).tolist() == [False, False, False, True, False, False]


def test_thinning_loses_no_spike_no_gap_and_keeps_time_in_order() -> None:
    n = 525_600
    time = np.arange(n) / 1440.0
    values = 5.0 + np.sin(time * 6.28)
    values[[77_777, 300_001]] = [0.5, 9.5]
    values[400_000:400_500] = np.nan
    here = np.ones(n, bool)
    here[200_000:210_000] = False
    x, y, u = thinned(time[here], values[here], np.ones(here.sum()))
    assert len(x) < 12_000 and len(x) == len(y) == len(u)
    assert np.nanmin(y) == 0.5 and np.nanmax(y) == 9.5 and (np.diff(x) > 0).all()
    assert np.isnan(y[(x > 200_000 / 1440) & (x < 210_000 / 1440)]).any()
    assert np.isnan(y[(x > 400_000 / 1440) & (x < 400_500 / 1440)]).any()


def test_a_long_plateau_with_one_spike_keeps_the_spike() -> None:
    values = np.full(100_000, 3.0)
    values[50_000] = 4.0
    _, y, _ = thinned(np.arange(100_000) / 1440.0, values, values)
    assert np.nanmax(y) == 4.0


def test_another_suffix_or_folder_is_one_clear_error(site: Site, tmp_path: Path) -> None:
    for path, says in (
        (tmp_path / "t.bmp", "a picture ends in .png, .svg, .pdf"),
        (tmp_path / "no" / "t.png", "does not exist"),
    ):
        with pytest.raises(FileFault, match=re.escape(says)):
            draw_trend(site, site.tank("north"), figures(site), START, START + timedelta(hours=48), path)


def test_the_summary_is_in_words(site: Site) -> None:
    said = summary_of(site, site.tank("north"), figures(site), START, START + timedelta(hours=48))
    assert said.startswith("north, 2026-03-29 00:00 to 2026-03-31 01:00 Europe/Berlin: 2,880 readings, level ")
    assert "no readings with a level" in summary_of(
        site, site.tank("north"), figures(site, 0.0), START, START + timedelta(hours=48)
    )
