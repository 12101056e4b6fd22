"""A strapping CSV: units in its header, rows that rise, one clear line for what is wrong."""

from __future__ import annotations

import math
from pathlib import Path

import pytest
from fluids.geometry import TANK

from companion.strapping.read import TableError, read_table
from companion.strapping.shapes import upright_cylinder


@pytest.mark.parametrize(
    ("text", "levels", "volumes"),
    [
        ("level [mm],volume [L]\n0,0\n1000,2000\n", [0.0, 1.0], [0.0, 2.0]),
        ("volume [US_gallon], level [ft]\n0,0\n1000,10\n", [0.0, 3.048], [0.0, 3.785411784]),
        ("\ufefflevel [m],volume [m^3]\n\n0, 1.5\n2, 3.5\n\n", [0.0, 2.0], [1.5, 3.5]),
        ("level [in],volume [ft3]\n10,1\n20,2\n", [0.254, 0.508], [0.028316846592, 0.056633693184]),
    ],
)
def test_a_table_is_read_in_its_units(tmp_path: Path, text: str, levels: list[float], volumes: list[float]) -> None:
    (tmp_path / "t.csv").write_text(text, encoding="utf-8")
    found = read_table(tmp_path / "t.csv")
    assert found[0].tolist() == pytest.approx(levels) and found[1].tolist() == pytest.approx(volumes)


HEADER = "level [m],volume [m^3]\n"


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "line 1: the header must be like level [mm],volume [L]"),
        ("height,volume\n0,0\n", "line 1: the header must be like level [mm],volume [L], but is 'height,volume'"),
        (
            "level [m],volume [gal]\n0,0\n1,1\n",
            'line 1: volume: "gal" can mean more than one unit; write US_gallon or imperial_gallon',
        ),
        ("level [kg],volume [L]\n0,0\n1,1\n", 'line 1: level: "kg" is no unit of length'),
        ("level [m],volume [foo]\n0,0\n1,1\n", 'line 1: volume: "foo" is no unit known here'),
        (HEADER + "0,0\n1,x\n", "line 3: the volume 'x' is not a number"),
        (HEADER + "0,0\n1,NaN\n", "line 3: the volume 'NaN' is not finite"),
        (HEADER + "0,0\n1,5\n1,6\n", "line 4: the level must rise"),
        (HEADER + "0,0\n1,5\n2,4\n", "line 4: the volume must rise"),
        (HEADER + "0,0\n1,5,6\n", "line 3: has 3 values"),
        (HEADER + "0,0\n", "has 1 rows; a table needs two or more"),
        (HEADER + "0,-1\n1,2\n", "the first volume is below zero"),
    ],
)
def test_a_bad_table_is_one_clear_line_with_file_and_place(tmp_path: Path, text: str, says: str) -> None:
    (tmp_path / "t.csv").write_text(text)
    with pytest.raises(TableError) as told:
        read_table(tmp_path / "t.csv")
    assert str(told.value).startswith(f"{tmp_path / 't.csv'}: ") and says in str(told.value) and "\n" not in str(told.value)


def test_a_missing_table_is_one_clear_line(tmp_path: Path) -> None:
    with pytest.raises(TableError, match="cannot be read"):
        read_table(tmp_path / "none.csv")


def test_an_upright_cylinder_is_the_librarys() -> None:
    # PyPI fluids, geometry.TANK(D, L, horizontal=False)
    levels, volumes = upright_cylinder(9.1, 4.2)
    assert levels.tolist() == [0.0, 4.2]
    assert volumes[1] == pytest.approx(TANK(D=9.1, L=4.2, horizontal=False).V_total, rel=1e-12)
    assert volumes[1] == pytest.approx(math.pi / 4 * 9.1**2 * 4.2, rel=1e-15)
