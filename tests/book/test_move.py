"""A book copied into another of either kind: the same readings, quarantine and gaps, proved by count and hash; backup and restore."""

from __future__ import annotations

import threading
from datetime import UTC, datetime
from pathlib import Path

import pandas as pd
import pytest
from sites import SITE, site_of
from test_store import new_url, some

from companion.book.aside import Refused
from companion.book.move import TABLES, move, proof
from companion.book.store import Book, BookError, open_book
from companion.cli import main


def fill(book: Book) -> None:
    book.add("south", some(0, 10))
    book.add("north", some(0, 4000))
    book.seal(datetime(2026, 3, 4, tzinfo=UTC))
    book.add("north", some(4003, 10, life="Z9"))
    with book.change():
        book.aside.keep([Refused("t", b"\x00\xff", "bad", 1.5, "north", "a1", (4000,))])
        book.hear("north", "a1", 7, {"dropped": 3}, 2.0)


@pytest.mark.parametrize("there", ["sqlite", "postgres"])
@pytest.mark.parametrize("here", ["sqlite", "postgres"])
def test_a_book_moves_whole_between_either_kind(tmp_path: Path, here: str, there: str) -> None:
    for name in "ab":
        (tmp_path / name).mkdir()
    with open_book(new_url(here, tmp_path / "a")) as one, open_book(new_url(there, tmp_path / "b")) as other:
        fill(one)
        proofs = move(one, other)
        assert [p.table for p in proofs] == list(TABLES) and all(p.rows for p in proofs)
        for tank in ("north", "south"):
            pd.testing.assert_frame_equal(one.readings(tank), other.readings(tank))
        assert one.gaps() == other.gaps() and [e.payload for e in other.aside.entries()] == [b"\x00\xff"]
        assert other.kept("north", "a1", 0) == one.kept("north", "a1", 0) == 4000
        assert other.add("north", some(4000, 5)).new == 5  # it goes on
        with pytest.raises(BookError, match="is not empty"):
            move(one, other)
        assert proof(one, "reading") != proof(other, "reading")


def test_a_backup_is_of_one_moment_while_readings_pour_in_and_is_restored(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    site = site_of(tmp_path)
    with open_book(site.store_url) as book:
        fill(book)
    stop = threading.Event()

    def pour() -> None:
        with open_book(site.store_url) as book:
            n = 5000
            while not stop.is_set():
                book.add("north", some(n, 5))
                n += 5

    pouring = threading.Thread(target=pour)
    pouring.start()
    try:
        assert main(["backup", str(tmp_path / "site.toml"), "-o", str(tmp_path / "backup.db")]) == 0
    finally:
        stop.set()
        pouring.join()
    assert "proved" in capsys.readouterr().out
    assert main(["backup", str(tmp_path / "site.toml"), "-o", str(tmp_path / "backup.db")]) == 2
    assert "is there already" in capsys.readouterr().err
    (tmp_path / "new").mkdir()
    site_of(tmp_path / "new", SITE)
    assert main(["restore", str(tmp_path / "new/site.toml"), str(tmp_path / "backup.db")]) == 0
    with open_book(f"sqlite:{tmp_path / 'new/book.db'}") as restored, open_book(site.store_url) as book:
        seqs = restored.readings("north")["seq"]
        assert seqs.is_unique and set(range(4000)) <= set(seqs) <= set(book.readings("north")["seq"])
    assert main(["restore", str(tmp_path / "new/site.toml"), str(tmp_path / "backup.db")]) == 1
    assert "is not empty" in capsys.readouterr().err


def test_the_command_moves_to_postgresql(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    site = site_of(tmp_path)
    with open_book(site.store_url) as book:
        fill(book)
    url = new_url("postgres", tmp_path)
    assert main(["move", str(tmp_path / "site.toml"), "--to", url]) == 0
    said = capsys.readouterr().out
    assert "reading: " in said and "write url =" in said
