"""The demo as people run it: one command, by itself, to the end; and stopped by Ctrl-C."""

from __future__ import annotations

import csv
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import needs
import pytest

from companion.book.store import open_book
from companion.cli import main

COMMAND = [sys.executable, "-c", "import sys; from companion.cli import main; sys.exit(main())", "demo"]
ENVIRONMENT = os.environ | {"PYTHONPATH": str(needs.ROOT)}
FILES = {"book.db", "daily.csv", "figures-hill.csv", "readings-hill.csv", "site.toml", "tower.csv", "vale.csv",
         *(f"trend-{name}.png" for name in ("hill", "tower", "vale", "creek", "lodge"))}  # fmt: skip


@pytest.mark.parametrize("program", ["mosquitto", "iotcore"])
def test_the_demo_runs_to_its_end_and_leaves_its_files(tmp_path: Path, program: str) -> None:
    needs.need(program, {"mosquitto": "Debian's mosquitto", "iotcore": "PyPI's iotcore"}[program])
    done = subprocess.run(
        [*COMMAND, "--for", "5", "--out", str(tmp_path / "d")],
        env=ENVIRONMENT | {"LEVELBOOK_BROKER": program},
        capture_output=True,
        text=True,
        timeout=120,
    )
    assert done.returncode == 0, done.stderr
    assert f"({program})" in done.stdout
    assert {path.name for path in (tmp_path / "d").iterdir()} == FILES
    live = re.findall(r"^  hill +\d+ counts +([\d.]+) m ±([\d.]+) +([\d.]+) m3 .* grade +([\d.]+) m .* ok$", done.stdout, re.M)
    assert live and all(float(level) + 186.2 == pytest.approx(float(grade), abs=0.0011) for level, _, _, grade in live)
    assert "the daily log of" in done.stdout and "no protection system" in done.stdout
    with open(tmp_path / "d" / "daily.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 5 * 30 and all(float(row["complete_pct"]) > 98.0 for row in rows)
    with open_book(f"sqlite:{tmp_path}/d/book.db") as book:
        seq = book.readings("hill")["seq"]
    assert seq.iloc[-1] >= 30 * 1440 + 10  # live readings came over the wire and follow the history's


def test_ctrl_c_ends_the_demo_cleanly_with_its_files(tmp_path: Path) -> None:
    child = subprocess.Popen(
        [*COMMAND, "--out", str(tmp_path / "d")], env=ENVIRONMENT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    end = time.monotonic() + 60
    for line in child.stdout:
        if line.startswith("  lodge") or time.monotonic() > end:
            break
    child.send_signal(signal.SIGINT)
    rest, errors = child.communicate(timeout=60)
    assert child.returncode == 0 and errors == "" and "the daily log of" in rest
    assert {path.name for path in (tmp_path / "d").iterdir()} == FILES


@pytest.mark.parametrize("name", ["site.toml", "book.db", "notes.txt"])
def test_a_folder_with_someones_files_is_left_alone(tmp_path: Path, name: str, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / name).write_text("mine")
    assert main(["demo", "--for", "1", "--out", str(tmp_path)]) == 1
    assert "holds files that are not a demo's; name a new or an empty folder" in capsys.readouterr().err
    assert [path.name for path in tmp_path.iterdir()] == [name] and (tmp_path / name).read_text() == "mine"


def test_without_a_broker_the_demo_says_what_to_install(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("LEVELBOOK_BROKER", "absent")
    assert main(["demo", "--for", "1", "--out", str(tmp_path / "d")]) == 1
    assert capsys.readouterr().err == "levelbook: no broker to start: install absent\n" and not (tmp_path / "d").exists()
