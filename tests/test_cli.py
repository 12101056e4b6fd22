"""The command line as a technician uses it: from files to figures, book, log and picture; and what it says when it cannot."""

from __future__ import annotations

import io
import subprocess
import sys
from pathlib import Path

import needs
import pandas as pd
import pytest
from sites import SITE, write_site

from companion.cli import main

HEADER = "time,raw,temperature_degC\n"


def lines(n: int, start: str = "2026-03-01T") -> str:
    return "".join(f"{start}{m // 60:02d}:{m % 60:02d}:00Z,{18000 + 10 * m},10.0\n" for m in range(n))


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    write_site(tmp_path)
    (tmp_path / "r.csv").write_text(HEADER + lines(1440) + lines(60, "2026-03-02T"))
    monkeypatch.chdir(tmp_path)
    return tmp_path


def test_from_a_file_to_figures_book_log_and_picture(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["check", "site.toml"]) == 0
    assert "north, floor at 100 m on test datum" in capsys.readouterr().out
    assert main(["convert", "site.toml", "north", "r.csv", "-o", "f.csv"]) == 0
    assert len(pd.read_csv("f.csv")) == 1500
    assert main(["load", "site.toml", "north", "r.csv"]) == 0
    assert main(["load", "site.toml", "north", "r.csv"]) == 0
    assert "north: 0 new readings, 1500 already in the book" in capsys.readouterr().err
    assert (
        main(["export", "site.toml", "north", "--from", "2026-03-01T10:00:00Z", "--to", "2026-03-01T11:00:00Z", "-o", "e.csv"])
        == 0
    )
    out = pd.read_csv("e.csv")
    assert out.columns.tolist() == [
        "time",
        "raw",
        "temperature_degC",
        "barometer_Pa",
        "headspace_Pa",
        "battery_V",
        "life",
        "seq",
    ]
    assert out["raw"].tolist() == [18000 + 10 * m for m in range(600, 660)]
    assert main(["daily", "site.toml", "--from", "2026-03-01", "--to", "2026-03-01", "-o", "d.csv"]) == 0
    day = pd.read_csv("d.csv").iloc[0]
    assert day["tank"] == "north" and day["readings"] == 1380
    assert main(["trend", "site.toml", "north", "--from", "2026-03-01", "--to", "2026-03-01", "-o", "t.png"]) == 0
    assert (folder / "t.png").stat().st_size > 10_000


def test_what_was_exported_loads_again_as_the_same_readings(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    main(["load", "site.toml", "north", "r.csv"])
    main(["export", "site.toml", "north", "--from", "2026-03-01", "--to", "2026-03-02", "-o", "e.csv"])
    capsys.readouterr()
    assert main(["load", "site.toml", "north", "e.csv"]) == 0
    assert "north: 0 new readings, 1500 already in the book" in capsys.readouterr().err


def test_standard_input_to_standard_output(
    folder: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr("sys.stdin", io.TextIOWrapper(io.BytesIO((folder / "r.csv").read_bytes())))
    assert main(["convert", "site.toml", "north", "-"]) == 0
    assert len(capsys.readouterr().out.splitlines()) == 1501


def test_good_rows_beside_bad_ones_are_converted_and_the_bad_ones_kept_with_reasons(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (folder / "bad.csv").write_text(HEADER + lines(3) + "2026-03-01T00:03:00,18000,10\n2026-03-01T00:04:00Z,abc,10\n")
    assert main(["convert", "site.toml", "north", "bad.csv", "-o", "f.csv"]) == 1
    said = capsys.readouterr().err
    assert said.count("\n") == 1
    assert (
        "bad.csv: 3 rows converted, 2 rejected to bad.rejects.csv; the first: line 5: time '2026-03-01T00:03:00' has no zone"
        in said
    )
    assert len(pd.read_csv("f.csv")) == 3
    assert pd.read_csv("bad.rejects.csv")["line"].tolist() == [5, 6]


def test_a_reading_that_contradicts_the_book_is_kept_aside(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    main(["load", "site.toml", "north", "r.csv"])
    (folder / "other.csv").write_text(HEADER + lines(2).replace("18010", "19999"))
    assert main(["load", "site.toml", "north", "other.csv"]) == 1
    assert "1 readings differ from what the book has of them; they are in other.conflicts.csv" in capsys.readouterr().err
    assert "19999" in (folder / "other.conflicts.csv").read_text()


@pytest.mark.parametrize(
    ("words", "status", "says"),
    [
        (["check", "none.toml"], 2, "none.toml: there is no such site file"),
        (["convert", "site.toml", "south", "r.csv"], 2, "there is no tank 'south'; its tanks are north"),
        (["convert", "site.toml", "north", "none.csv"], 2, "none.csv: there is no such file"),
        (["convert", "site.toml", "north", "north.csv"], 1, "north.csv: line 1: unknown column 'level [mm]'"),
        (["convert", "site.toml", "north", "r.csv", "-o", "no/f.csv"], 1, "no/f.csv: the folder no does not exist"),
        (["daily", "site.toml", "--from", "2026-03-02", "--to", "2026-03-01"], 2, "--from 2026-03-02 is after --to 2026-03-01"),
        (
            ["daily", "site.toml", "--from", "2026-02-30", "--to", "2026-03-01"],
            2,
            "--from 2026-02-30: write a day like 2026-03-01",
        ),
        (
            ["daily", "site.toml", "--from", "2026-03-01", "--to", "2026-03-01"],
            1,
            "there is no book yet; put readings in it with levelbook load",
        ),
        (["daily", "site.toml", "--from", "2026-03-01", "--to", "2026-03-01", "--tank", "x"], 2, "there is no tank 'x'"),
        (
            ["export", "site.toml", "north", "--from", "2026-03-01T00:00:00", "--to", "2026-03-02"],
            2,
            "has no zone; write 2026-03-01T00:00:00Z",
        ),
        (["export", "site.toml", "north", "--from", "soon", "--to", "2026-03-02"], 2, "--from soon: write a day like"),
        (
            ["export", "site.toml", "north", "--from", "2026-03-02T00:00:00Z", "--to", "2026-03-01T00:00:00Z"],
            2,
            "is not before --to",
        ),
    ],
)
def test_what_cannot_be_done_is_one_clear_line_on_standard_error(
    folder: Path, capsys: pytest.CaptureFixture[str], words: list[str], status: int, says: str
) -> None:
    assert main(words) == status
    said = capsys.readouterr()
    assert said.out == "" and says in said.err and said.err.count("\n") == 1
    assert sorted(path.name for path in folder.iterdir()) == ["north.csv", "r.csv", "site.toml"]  # nothing half-written


def test_all_faults_of_a_site_file_are_told_a_line_each(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write_site(folder, SITE.replace('"100 m"', "100").replace("52.0", "95"))
    assert main(["check", "site.toml"]) == 1
    said = capsys.readouterr().err.splitlines()
    assert len(said) == 2 and "site.latitude" in said[0] and "tank.north.floor_elevation" in said[1]


def test_wrong_words_are_told_with_the_usage(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as ended:
        main(["konvert"])
    assert ended.value.code == 2 and "convert" in capsys.readouterr().err


@pytest.mark.parametrize("command", ["", "demo", "check", "convert", "load", "export", "daily", "trend", "listen"])
def test_every_command_has_help_with_an_example(command: str) -> None:
    done = subprocess.run([sys.executable, "-c", "import sys; from companion.cli import main; main()", *command.split(), "--help"], capture_output=True, text=True,
                          cwd=needs.ROOT, check=True)  # fmt: skip
    assert (
        ("example: levelbook " + command in done.stdout) if command else "no protection system" in " ".join(done.stdout.split())
    )
