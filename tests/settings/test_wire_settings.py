"""Faults of [wire.NAME] that would show only once a payload comes, or a fault of another table: told when the file is read."""

from __future__ import annotations

from pathlib import Path

import pytest
from sites import SITE, site_of

from companion.settings.errors import SiteError

MEADOW = (
    '[wire.meadow]\ntopic = "meadow/{tank}/up"\nraw = "v"\ntime = "ts"\ntime_format = "%d.%m.%Y %H:%M"\ntime_zone = "UTC"\n'
)


def faults(folder: Path, text: str) -> list[str]:
    with pytest.raises(SiteError) as told:
        site_of(folder, text)
    return told.value.faults


def test_the_mapping_that_these_tests_spoil_is_good(tmp_path: Path) -> None:
    assert site_of(tmp_path, SITE + MEADOW).wire["meadow"].filter == "meadow/+/up"


@pytest.mark.parametrize(
    "pattern", ["%d.%m.%Y %d %H:%M", "%Q", "%d.%m. %H:%M", "%d.%m.%Y", "%d.%m.%Y %H:%M %Z", "%d.%m.%Y %H:%M %"]
)
def test_a_pattern_that_no_time_can_come_through_is_a_fault(tmp_path: Path, pattern: str) -> None:
    [fault] = faults(tmp_path, SITE + MEADOW.replace("%d.%m.%Y %H:%M", pattern))
    assert "wire.meadow.time_format: must be a pattern of date and time" in fault


@pytest.mark.parametrize(
    "topic", ["m{tank}/up", "{tank}/north/readings", "$SYS/{tank}", "meadow/{tank}/#", "meadow/{tank}/{tank}"]
)
def test_a_topic_that_is_no_filter_or_is_not_for_other_makes_is_a_fault(tmp_path: Path, topic: str) -> None:
    assert "wire.meadow.topic: " in faults(tmp_path, SITE + MEADOW.replace("meadow/{tank}/up", topic))[0]


def test_two_mappings_of_one_topic_are_a_fault(tmp_path: Path) -> None:
    other = MEADOW.replace("wire.meadow", "wire.other").replace("meadow/{tank}/up", "{tank}/north/up")
    [fault] = faults(tmp_path, SITE + MEADOW + other)
    assert "wire.other.topic: takes topics that [wire.meadow] takes" in fault


def test_a_unit_without_its_path_is_a_fault(tmp_path: Path) -> None:
    [fault] = faults(tmp_path, SITE + MEADOW + 'battery_unit = "mV"\n')
    assert "wire.meadow.battery: is missing, and battery_unit is told" in fault


def test_a_tank_with_a_fault_of_its_own_is_still_a_tank(tmp_path: Path) -> None:
    [fault] = faults(tmp_path, SITE.replace('"100 m"', "100") + MEADOW + 'devices = { "A1" = "north" }\n')
    assert "tank.north.floor_elevation" in fault
