"""Quarantine and gaps: what could not be taken, tried again; what is missing, and whether it may still come; books of older versions."""

from __future__ import annotations

import sqlite3
import time
from pathlib import Path

import pytest
from sites import SITE, site_of

from companion.book.aside import Refused
from companion.book.schema import FIRST
from companion.book.store import Book, open_book
from companion.cli import main
from companion.intake.quarantine import retry
from core_mp import senml

NOW = 1767225600


def pack(first: int, n: int, tank: str = "north", at: int = NOW) -> bytes:
    return senml.pack(
        tank, "counts", "k", 0, [(seq, at + 60 * seq, 7000 + seq, 9.5, None, None, None) for seq in range(first, first + n)]
    ).encode()


@pytest.fixture
def site(tmp_path: Path) -> Path:
    site_of(tmp_path)
    return tmp_path / "site.toml"


@pytest.fixture
def book(tmp_path: Path, site: Path):
    with open_book(f"sqlite:{tmp_path / 'book.db'}") as book:
        yield book


def keep(book: Book, *refused: Refused) -> None:
    with book.change():
        book.aside.keep(refused)


def test_a_tank_that_was_not_known_is_taken_once_the_site_file_knows_it(
    book: Book, site: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    keep(
        book, Refused("levelbook/south/readings", pack(0, 3, "south"), "there is no tank 'south' in the site file", time.time())
    )
    assert (
        main(["quarantine", str(site), "list"]) == 0 and "levelbook/south/readings: there is no tank" in capsys.readouterr().out
    )
    assert (
        main(["quarantine", str(site), "retry"]) == 1
        and "0 new readings; 1 payloads are still refused" in capsys.readouterr().out
    )
    south = SITE[SITE.index("[tank.north]") :].replace("north]", "south]").replace("north.sensor", "south.sensor")
    site.write_text(SITE + south)
    assert main(["quarantine", str(site), "retry"]) == 0 and "3 new readings; 0 payloads" in capsys.readouterr().out
    assert book.readings("south")["seq"].tolist() == [0, 1, 2] and not book.aside.entries()


def test_the_good_readings_of_a_pack_are_not_taken_twice_and_the_bad_stay(book: Book, site: Path) -> None:
    one = pack(0, 3).replace(b'"v":7001', b'"v":"x"')
    keep(book, Refused("levelbook/north/readings", one, "bad", time.time(), "north", "k", (1,)))
    assert retry(site_of(site.parent), book).refused == 1
    assert retry(site_of(site.parent), book).readings == 0 or book.readings("north")["seq"].tolist() in ([0, 2], [])
    assert len(book.aside.entries()) == 1


def test_what_a_person_drops_is_gone_and_needs_a_number(book: Book, site: Path, capsys: pytest.CaptureFixture[str]) -> None:
    keep(book, Refused("t", b"a", "no SenML", time.time()), Refused("t", b"b", "no SenML", time.time()))
    assert main(["quarantine", str(site), "drop"]) == 2 and "name what to drop" in capsys.readouterr().err
    assert main(["quarantine", str(site), "drop", "1", "9"]) == 0 and "1 payloads dropped" in capsys.readouterr().out
    assert [entry.payload for entry in book.aside.entries()] == [b"b"]


def test_gaps_tell_what_is_missing_and_whether_it_may_still_come(
    book: Book, site: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    tank = site_of(site.parent)
    from companion.intake.wire import decode

    def store(first: int, n: int, oldest: int) -> None:
        got = decode("levelbook/north/readings", pack(first, n), tank.signal, NOW + 10**6)
        with book.change():
            book.put("north", got.frame)
            book.hear("north", "k", oldest, {}, NOW)

    assert main(["gaps", str(site)]) == 0 and "no reading is missing" in capsys.readouterr().out
    store(0, 5, 0)
    store(10, 5, 0)
    assert main(["gaps", str(site)]) == 1
    assert capsys.readouterr().out.startswith(
        "north: 5 readings missing in 1 gap; 5 may still come\n  the longest: 5 readings missing"
    )
    assert main(["gaps", str(site), "--each"]) == 1
    assert (
        "north: 5 readings missing, life k, seq 5 to 9, 2026-01-01T00:04:00Z to 2026-01-01T00:10:00Z; they may still come"
        in capsys.readouterr().out
    )
    store(10, 5, 7)  # its spool was full: 5 and 6 went
    assert [(gap.first, gap.last, gap.gone) for gap in book.gaps()] == [(5, 6, True), (7, 9, False)]
    store(7, 3, 7)
    assert [(gap.first, gap.last, gap.gone) for gap in book.gaps()] == [(5, 6, True)]
    keep(book, Refused("t", b"x", "bad", NOW, "north", "k", (5, 6)))
    assert book.gaps() == [] and main(["gaps", str(site), "--tank", "north"]) == 0


def test_a_book_of_the_first_version_becomes_one_of_today_with_its_readings(tmp_path: Path) -> None:
    old = sqlite3.connect(tmp_path / "old.db")
    old.executescript(FIRST)
    old.execute("INSERT INTO name VALUES (1, 'north'), (2, 'k')")
    old.execute("INSERT INTO reading VALUES (1, 2, 0, 1767225600000000, 7000, NULL, NULL, NULL, NULL, 0)")
    old.execute("PRAGMA user_version = 1")
    old.commit()
    old.close()
    for _ in range(2):
        with open_book(f"sqlite:{tmp_path / 'old.db'}") as book:
            assert book.readings("north")["raw"].tolist() == [7000.0] and book.gaps() == [] and book.aside.entries() == []
