"""The book: each reading once, by identity; what is committed stays; readers are not blocked."""

from __future__ import annotations

import itertools
import os
import signal
import sqlite3
import subprocess
import sys
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd
import postgres
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from companion.book import sealed
from companion.book.readings import frame_of
from companion.book.store import Book, BookError, open_book

MARCH = np.datetime64("2026-03-01T00:00:00")


def some(first: int, n: int, life: str = "a1", raw: float = 6000.0) -> pd.DataFrame:
    seq = np.arange(first, first + n)
    return frame_of(MARCH + seq * np.timedelta64(60, "s"), raw + seq, life=life, seq=seq, temperature_c=np.full(n, 11.5))


def new_url(kind: str, folder: Path) -> str:
    """A place for a new book of each kind."""
    return f"sqlite:{folder}/book.db" if kind == "sqlite" else postgres.server().database()


@pytest.fixture(params=["sqlite", "postgres"])
def url(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    return new_url(request.param, tmp_path)


@pytest.fixture
def book(url: str):
    with open_book(url) as opened:
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


steps = st.lists(st.one_of(st.integers(0, 4000), st.just("seal")), max_size=12)


@pytest.mark.parametrize("kind", ["sqlite", "postgres"])
@given(steps)
@settings(max_examples=40)
def test_whatever_the_order_of_packs_and_sealing_each_reading_stands_once(
    kind: str, tmp_path_factory: pytest.TempPathFactory, steps: list[int | str]
) -> None:
    """Readings of three days in packs of 300, sealed at any moment in between."""
    with open_book(new_url(kind, tmp_path_factory.mktemp("any"))) as book:
        starts = [step for step in steps if step != "seal"]
        told = []
        for step in steps:
            if step == "seal":
                book.seal(datetime(2026, 3, 5, 12, tzinfo=UTC))
            else:
                told.append(book.add("north", some(int(step), 300)))
        expected = sorted({seq for start in starts for seq in range(int(start), int(start) + 300)})
        found = book.readings("north")
        assert found["seq"].tolist() == expected and (found["raw"] == 6000.0 + found["seq"]).all()
        assert sum(added.new for added in told) == len(expected) and not any(len(added.conflicts) for added in told)
        assert sum(added.new + added.repeated for added in told) == 300 * len(starts)
        holes = [(gap.first, gap.last) for gap in book.gaps()]
        assert holes == [(a + 1, b - 1) for a, b in itertools.pairwise(expected) if b > a + 1]
        ends = [seq for seq in expected if seq + 1 not in set(expected)]
        assert book.kept("north", "a1") == (ends[0] if ends else None)


WRITER = """
import sys; sys.path[:0] = [sys.argv[2], sys.argv[2] + "/tests", sys.argv[2] + "/tests/book"]
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


def test_sealed_readings_come_back_as_they_were_in_any_stretch(book: Book) -> None:
    frame = some(0, 5000)
    book.add("north", frame)
    book.add("south", frame)
    assert book.seal(datetime(2026, 3, 5, tzinfo=UTC)) == 4  # two days that are over for two days, of two tanks
    pd.testing.assert_frame_equal(book.readings("north"), frame)
    start, end = datetime(2026, 3, 1, 23, 58, tzinfo=UTC), datetime(2026, 3, 2, 0, 3, tzinfo=UTC)
    assert book.readings("north", start, end)["seq"].tolist() == list(range(1438, 1443))
    assert book.last("north")["seq"].tolist() == [4999] and book.tanks() == ["north", "south"]
    assert book.seal(datetime(2026, 4, 1, tzinfo=UTC)) == 4 and book.last("south")["seq"].tolist() == [4999]
    assert book.engine.execute("SELECT count(*) FROM reading").fetchone()[0] == 0


def test_late_readings_open_a_day_and_what_is_said_again_of_a_sealed_day_is_known(book: Book) -> None:
    later = datetime(2026, 3, 9, tzinfo=UTC)
    book.add("north", some(0, 100))
    book.add("north", some(200, 100))
    book.seal(later)
    added = book.add("north", some(50, 200))  # 50 to 99 and 200 to 249 are there
    assert (added.new, added.repeated) == (100, 100) and not len(added.conflicts)
    assert book.readings("north")["seq"].tolist() == list(range(300)) and book.gaps() == []
    clash = book.add("north", some(295, 10, raw=1.0))
    assert (clash.new, clash.conflicts["seq"].tolist()) == (5, [295, 296, 297, 298, 299])
    assert book.seal(later) == 1 and book.readings("north")["seq"].tolist() == list(range(305))
    assert book.kept("north", "a1") == 304
    with book.change():
        moved = some(0, 5)
        moved["time"] += pd.Timedelta(7, "s")
        assert book.put("north", moved, timed=False).repeated == 5 and len(book.put("north", moved).conflicts) == 5


def test_a_files_readings_are_sealed_too(book: Book) -> None:
    frame = frame_of(MARCH + np.arange(1000) * np.timedelta64(60, "s"), np.arange(1000.0))
    book.add("north", frame)
    book.seal(datetime(2026, 3, 9, tzinfo=UTC))
    assert book.add("north", frame).repeated == 1000 and book.gaps() == []
    assert book.engine.execute("SELECT count(*) FROM run").fetchone()[0] == 1
    pd.testing.assert_frame_equal(book.readings("north"), frame)


def test_a_day_that_is_sealed_takes_eight_bytes_a_reading_or_fewer() -> None:
    """A tank as the demo's: counts with noise, temperature, barometer, battery, times of arrival in packs of five."""
    from test_sealed import day

    assert len(sealed.seal(day())) <= 8 * 1440


def test_what_is_no_book_is_one_clear_error(tmp_path: Path) -> None:
    (tmp_path / "text.db").write_text("this is not a database, and long enough to be taken for one" * 20)
    with pytest.raises(BookError, match=r"text\.db: cannot be used as a book"):
        open_book(f"sqlite:{tmp_path}/text.db")
    with pytest.raises(BookError, match="there is no book yet"):
        open_book(f"sqlite:{tmp_path}/none.db", create=False)
    with pytest.raises(BookError, match="is no store; write sqlite:FILE"):
        open_book("mysql://host/book")
    with pytest.raises(BookError, match="cannot be opened"):
        open_book("postgresql:///book?host=/nowhere")
    with pytest.raises(BookError, match="does not exist; make it"):
        open_book(f"sqlite:{tmp_path}/no/book.db")
    newer = sqlite3.connect(tmp_path / "newer.db")
    newer.execute("PRAGMA user_version = 99")
    newer.close()
    with pytest.raises(BookError, match="version 99"):
        open_book(f"sqlite:{tmp_path}/newer.db")
