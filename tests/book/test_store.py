"""The book: each reading once, by identity; what is committed stays; readers are not blocked."""

from __future__ import annotations

import os
import signal
import sqlite3
import subprocess
import sys
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from companion.book.readings import frame_of
from companion.book.store import Book, BookError, open_book

MARCH = np.datetime64("2026-03-01T00:00:00")


def some(first: int, n: int, life: str = "a1", raw: float = 6000.0) -> pd.DataFrame:
    seq = np.arange(first, first + n)
    return frame_of(MARCH + seq * np.timedelta64(60, "s"), raw + seq, life=life, seq=seq, temperature_c=np.full(n, 11.5))


@pytest.fixture
def book(tmp_path: Path):
    with open_book(f"sqlite:{tmp_path}/book.db") as opened:
        yield opened


def test_readings_come_back_as_they_were(book: Book) -> None:
    frame = some(0, 100)
    assert book.add("north", frame).new == 100
    pd.testing.assert_frame_equal(book.readings("north"), frame)


def test_a_reading_said_twice_is_stored_once_and_counted(book: Book) -> None:
    book.add("north", some(0, 100))
    added = book.add("north", some(50, 100))
    assert (added.new, added.repeated, len(added.conflicts)) == (50, 50, 0)
    assert len(book.readings("north")) == 150


def test_the_first_of_two_contradicting_readings_stays_and_the_second_is_handed_back(book: Book) -> None:
    book.add("north", some(0, 10))
    added = book.add("north", some(5, 10, raw=9000.0))
    assert (added.new, added.repeated) == (5, 0)
    assert added.conflicts["seq"].tolist() == [5, 6, 7, 8, 9]
    assert book.readings("north")["raw"].tolist()[5] == 6005.0


def test_a_contradiction_inside_one_pack_is_a_conflict_too(book: Book) -> None:
    twice = pd.concat([some(0, 1), some(0, 1, raw=7000.0), some(0, 1)], ignore_index=True)
    added = book.add("north", twice)
    assert (added.new, added.repeated, len(added.conflicts)) == (1, 1, 1)


def test_tanks_and_lives_do_not_mix(book: Book) -> None:
    with book.change():
        for tank, frame in (("north", some(0, 5)), ("south", some(0, 5)), ("north", some(0, 5, life="b2"))):
            book.put(tank, frame)
    assert book.tanks() == ["north", "south"]
    assert len(book.readings("north")) == 10 and len(book.readings("south")) == 5
    assert book.readings("nowhere").empty and book.last("nowhere").empty
    assert book.last("south")["seq"].tolist() == [4]


def test_a_stretch_takes_its_start_and_leaves_its_end(book: Book) -> None:
    book.add("north", some(0, 10))
    start, end = (datetime(2026, 3, 1, 0, minute, tzinfo=UTC) for minute in (2, 5))
    assert book.readings("north", start, end)["seq"].tolist() == [2, 3, 4]


def test_kept_ends_before_the_first_hole_and_goes_on_when_it_is_filled(book: Book) -> None:
    assert book.kept("north", "a1") is None
    book.add("north", some(0, 10))
    assert book.kept("north", "a1") == 9
    book.add("north", some(12, 5))
    assert book.kept("north", "a1") == 9
    book.add("north", some(10, 2))
    assert book.kept("north", "a1") == 16
    book.add("north", some(30, 5))
    assert book.kept("north", "a1", oldest=30) == 34  # 17 to 29 are gone from the logger too


@given(st.lists(st.integers(0, 30), max_size=60))
def test_whatever_the_order_of_packs_each_reading_stands_once(
    tmp_path_factory: pytest.TempPathFactory, starts: list[int]
) -> None:
    path = tmp_path_factory.mktemp("any") / "book.db"
    with open_book(f"sqlite:{path}") as book:
        told = [book.add("north", some(start, 3)) for start in starts]
        expected = sorted({seq for start in starts for seq in range(start, start + 3)})
        assert book.readings("north")["seq"].tolist() == expected
        assert sum(added.new for added in told) == len(expected)
        assert sum(added.new + added.repeated for added in told) == 3 * len(starts)


WRITER = """
import sys; sys.path.insert(0, sys.argv[2])
from tests.book.test_store import some
from companion.book.store import open_book
with open_book("sqlite:" + sys.argv[1]) as book:
    for n in range(10_000):
        book.add("north", some(n * 10, 10))
        print(n, flush=True)
"""


def test_what_add_returned_from_survives_a_kill(tmp_path: Path) -> None:
    root = Path(__file__).parents[2]
    path = tmp_path / "book.db"
    child = subprocess.Popen([sys.executable, "-c", WRITER, str(path), str(root)], stdout=subprocess.PIPE, text=True)
    said = [child.stdout.readline() for _ in range(50)]
    os.kill(child.pid, signal.SIGKILL)
    said += child.stdout.readlines()
    child.wait()
    child.stdout.close()
    committed = int([line for line in said if line.endswith("\n")][-1]) + 1
    with open_book(f"sqlite:{path}") as book:
        found = book.readings("north")["seq"].tolist()
    assert found[: committed * 10] == list(range(committed * 10))
    assert len(found) in (committed * 10, committed * 10 + 10)


def test_a_reader_is_not_blocked_by_a_writer_in_mid_transaction(tmp_path: Path) -> None:
    url = f"sqlite:{tmp_path}/book.db"
    with open_book(url) as book:
        book.add("north", some(0, 10))
        writer = sqlite3.connect(tmp_path / "book.db", isolation_level=None)
        writer.execute("BEGIN IMMEDIATE")
        writer.execute("DELETE FROM reading")
        with open_book(url) as reader:
            assert len(reader.readings("north")) == 10
        writer.execute("ROLLBACK")
        writer.close()


def test_what_is_no_book_is_one_clear_error(tmp_path: Path) -> None:
    (tmp_path / "text.db").write_text("this is not a database, and long enough to be taken for one" * 20)
    with pytest.raises(BookError, match=r"text\.db: cannot be used as a book"):
        open_book(f"sqlite:{tmp_path}/text.db")
    with pytest.raises(BookError, match="there is no book yet"):
        open_book(f"sqlite:{tmp_path}/none.db", create=False)
    with pytest.raises(BookError, match="only SQLite books so far"):
        open_book("postgresql://host/book")
    with pytest.raises(BookError, match="does not exist; make it"):
        open_book(f"sqlite:{tmp_path}/no/book.db")
    newer = sqlite3.connect(tmp_path / "newer.db")
    newer.execute("PRAGMA user_version = 99")
    newer.close()
    with pytest.raises(BookError, match="version 99"):
        open_book(f"sqlite:{tmp_path}/newer.db")
