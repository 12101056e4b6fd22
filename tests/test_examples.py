"""The examples run as their pages say, and come to the numbers that the pages state."""

from __future__ import annotations

import re
import shutil
from pathlib import Path

import needs
import pandas as pd
import pytest

from companion.cli import main

FIRST = needs.ROOT / "examples" / "first-tank"


def commands_in(page: Path) -> list[list[str]]:
    """The levelbook commands of a page's indented blocks, in order."""
    return [line.split("#")[0].split()[1:] for line in re.findall(r"^    (levelbook .*)$", page.read_text(), re.M)]


@pytest.fixture(scope="module")
def first(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("examples") / "first"
    shutil.copytree(FIRST, folder)
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        for words in commands_in(FIRST / "README.md"):
            assert main(words) == 0, words
    return folder


def test_the_readme_gives_the_same_commands() -> None:
    assert commands_in(needs.ROOT / "README.md") == commands_in(FIRST / "README.md")


def test_the_worked_reading_comes_out_as_the_readme_says(first: Path) -> None:
    readme = (needs.ROOT / "README.md").read_text()
    row = pd.read_csv(first / "figures.csv").iloc[0]
    assert pd.read_csv(first / "readings.csv")["raw"][0] == 21621
    assert f"| {row['pressure_Pa']:,.0f} Pa |" in readme
    assert f"| {row['level_m']:.4f} m, ± {row['level_u95_m']:.3f} m |" in readme
    assert f"| {row['volume_m3']:.1f} m3, ± {row['volume_u95_m3']:.1f} m3 |" in readme
    assert f"| {row['grade_m']:.3f} m |" in readme


def test_the_readmes_table_can_be_followed_by_hand() -> None:
    """Each step's printed numbers, put through its printed formula, give the printed result."""
    milliamperes = 4 + (21621 - 6553) / (32767 - 6553) * 16
    head = (57481 - 1.1877 * 9.81836 * 8.75) / ((999.865 - 1.1877) * 9.81836)
    assert milliamperes == pytest.approx(13.197, abs=5e-4)
    assert pytest.approx(57481, abs=1.0) == (13.197 - 4) / 16 * 1e5
    assert head == pytest.approx(5.8518, abs=1e-4) and 0.15 + head == pytest.approx(6.0018, abs=1e-4)
    assert pytest.approx(950.5, abs=0.05) == 158.37 * 6.0018


def test_the_day_closes_as_the_pages_say(first: Path) -> None:
    day = pd.read_csv(first / "daily.csv").iloc[0]
    sum_ = "{opening_volume_m3:.3f} + net fill {net_fill_m3:.3f} - net draw {net_draw_m3:.3f} = closing {closing_volume_m3:.3f} m3".format(
        **day
    )
    assert sum_ in (needs.ROOT / "README.md").read_text()
    assert sum_.replace("net fill ", "").replace("net draw ", "").replace("closing ", "") in (FIRST / "README.md").read_text()


def test_the_odd_days_say_what_the_page_says(first: Path) -> None:
    days = pd.read_csv(first / "daily.csv")
    assert "day of 23 hours" in days["remarks"][1] and days["complete_pct"][1] == 84.8
    figures = pd.read_csv(first / "figures.csv").set_index("time")
    assert figures.loc["2026-03-30T05:10:00Z", "status"].startswith("loop_low")
    assert figures.loc["2026-03-30T05:10:00Z"].drop("status").isna().all()


def test_the_picture_in_the_readme_is_what_the_command_draws(first: Path) -> None:
    from matplotlib import image

    assert image.imread(first / "trend.png").shape == image.imread(FIRST / "trend.png").shape
