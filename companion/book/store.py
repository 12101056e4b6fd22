"""The book: where raw readings lie, in SQLite or PostgreSQL.

Only what the sensor said is kept, with the time it arrived; figures are computed on reading. (tank, life, seq) is a
reading's identity: said again it is counted and not stored twice; said otherwise it is a conflict, and the first stays.
A commit is on the disk when add() returns. Open days lie as rows, closed days sealed (days.py).
"""

from __future__ import annotations

import contextlib
import sqlite3
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np
import pandas as pd

from companion.book import days
from companion.book.aside import Aside
from companion.book.engine import Engine
from companion.book.gaps import Gap, gaps, hear
from companion.book.postgres import Postgres
from companion.book.readings import COLUMNS, Row, empty_frame, frame_of, rows_of_frame
from companion.book.schema import POSTGRES, SQLITE
from companion.book.sqlite import Sqlite

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
FOREVER = 2**62
CONTENT = ("time_us", "raw", "temperature_c", "barometer_pa", "headspace_pa", "battery_v")
OPEN_DAYS = 2  # a day is sealed when it has been over for so long


class BookError(Exception):
    """A book that cannot be opened or is not one; the message names it and says what to do."""


@dataclass(frozen=True)
class Added:
    """What became of readings offered to the book: new ones stored, repeated ones dropped, conflicts not stored."""

    new: int
    repeated: int
    conflicts: pd.DataFrame


def open_book(url: str, create: bool = True) -> Book:
    """The book at sqlite:FILE or postgresql://HOST/NAME; made where there is none, unless create is False. BookError."""
    kind, _, rest = url.partition(":")
    if kind in ("postgresql", "postgres") and rest:
        return Book(_postgres(url))
    if kind != "sqlite" or not rest:
        raise BookError(f"store url '{url}': is no store; write sqlite:FILE, e.g. sqlite:book.db, or postgresql://HOST/NAME")
    path = Path(rest)
    if not path.exists() and not create:
        raise BookError(f"{path}: there is no book yet; put readings in it with levelbook load or levelbook listen")
    if not path.parent.is_dir():
        raise BookError(f"{path}: the folder {path.parent} does not exist; make it, or name another in [store] url")
    try:
        engine = Sqlite(path)
        version = engine.upgrade()
    except sqlite3.DatabaseError as error:
        raise BookError(f"{path}: cannot be used as a book ({error}); name another file in [store] url") from None
    if version > len(SQLITE):
        raise BookError(f"{path}: a book of version {version}, this levelbook reads version {len(SQLITE)}; upgrade levelbook")
    return Book(engine)


def _postgres(url: str) -> Engine:
    try:
        import psycopg
    except ImportError:
        raise BookError("psycopg is missing, for a book in PostgreSQL: pip install 'levelbook[postgres]'") from None
    try:
        engine = Postgres(url)
        version = engine.upgrade()
    except psycopg.Error as error:
        why = str(error).strip().splitlines()[-1]
        raise BookError(
            f"store url: the book in PostgreSQL cannot be opened ({why}); check [store] url and the server"
        ) from None
    if version > len(POSTGRES):
        raise BookError(
            f"{engine.name}: a book of version {version}, this levelbook reads version {len(POSTGRES)}; upgrade levelbook"
        )
    return engine


class Book:
    """An open book. Use one in each thread, and close it, or use it as a context manager."""

    def __init__(self, engine: Engine) -> None:
        self.engine, self.name, self.troubles = engine, engine.name, engine.troubles
        self._ids: dict[str, int] = {}
        self._whole: dict[tuple[str, str], int] = {}
        self.aside = Aside(engine, self.id_of)

    @contextlib.contextmanager
    def change(self) -> Iterator[None]:
        """One transaction: what is put and kept in the block is committed when it ends, or nothing of it."""
        self.engine.begin()
        try:
            yield
            self.engine.execute("COMMIT")
        except BaseException:
            self._ids.clear()
            with contextlib.suppress(*self.troubles):  # a connection that is gone has rolled back
                self.engine.execute("ROLLBACK")
            raise

    def add(self, tank: str, frame: pd.DataFrame) -> Added:
        """Store a frame of readings of a tank; committed on return."""
        with self.change():
            return self.put(tank, frame)

    def put(self, tank: str, frame: pd.DataFrame, timed: bool = True) -> Added:
        """Store a frame of readings of a tank, within change(); see put_rows()."""
        new, clash = self.put_rows(tank, rows_of_frame(frame), timed)
        return Added(new, len(frame) - new - len(clash), frame.iloc[clash])

    def put_rows(self, tank: str, rows: Sequence[Row], timed: bool = True) -> tuple[int, list[int]]:
        """Store rows of readings of a tank, within change(). Returns how many were new, and the places of those in conflict.

        timed: the times are the logger's own; where they are told from the arrival, because it has no clock, the first time told
        stays, and another is no conflict.
        """
        if not rows:
            return 0, []
        where, lives = self.id_of(tank), {life: self.id_of(life) for life in {row[6] for row in rows}}
        self.engine.hold(where)
        sealed = days.sealed_already(self.engine, where, lives, rows, timed)
        arrived = time.time_ns() // 1000
        told = [(where, lives[life], seq, at, *(None if number != number else number for number in numbers), arrived, n)
                for n, (at, *numbers, life, seq) in enumerate(rows) if n not in sealed]  # fmt: skip
        told.sort(
            key=lambda row: (row[1], row[2])
        )  # many writers take rows in one order, so that none waits for another in a ring
        new = self.engine.store(told) if told else 0
        clash = [place for place, same in sealed.items() if not same]
        if new < len(told):
            self.engine.incoming(told)
            other = " OR ".join(f"i.{name} {{differs}} r.{name}" for name in (CONTENT if timed else CONTENT[1:]))
            clash += [row for (row,) in self.engine.execute(
                f"SELECT i.row_ FROM incoming i JOIN reading r ON r.tank = i.tank AND r.life = i.life AND r.seq = i.seq WHERE {other}").fetchall()]  # fmt: skip
        return new, sorted(clash)

    def seal(self, now: datetime | None = None) -> int:
        """Seal the days that have been over for OPEN_DAYS; returns how many. Readings do not change by it."""
        before = (now or datetime.now(UTC)) - timedelta(days=OPEN_DAYS)
        due = days.due(self.engine, (before - EPOCH) // timedelta(microseconds=1))
        for tank, day in due:
            with self.change():
                self.engine.hold(tank, alone=True)
                days.seal_day(self.engine, tank, day, self.id_of)
        return len(due)

    def readings(self, tank: str, start: datetime | None = None, end: datetime | None = None) -> pd.DataFrame:
        """The tank's readings with start <= time < end, in order of time (and of identity at one time)."""
        where = self._known(tank)
        if where is None:
            return empty_frame()
        stretch = _stamp(start, -FOREVER), _stamp(end, FOREVER)
        with self._still():
            late = days.rows(self.engine, where, *stretch)
            parts = days.blobs(self.engine, where, *stretch) + ([late] if late else [])
        if not parts:
            return empty_frame()
        whole = days.joined(parts)
        inside = slice(*np.searchsorted(whole["time_us"], stretch))
        part = {name: column[inside] for name, column in whole.items()}
        if not len(part["seq"]):
            return empty_frame()
        named = {name: part[name] for name in COLUMNS[2:6]}
        return frame_of(part["time_us"].astype("datetime64[us]"), part["raw"], life=part["life"], seq=part["seq"], **named)

    @contextlib.contextmanager
    def _still(self) -> Iterator[None]:
        """Two looks at one moment: what is sealed between them is in neither or in both else."""
        inside = self.engine.look()
        try:
            yield
        finally:
            if inside:
                self.engine.execute("COMMIT")

    def last(self, tank: str) -> pd.DataFrame:
        """The tank's latest reading, as a frame of one row; of none where there is none."""
        where = self._known(tank)
        found = [] if where is None else [
            self.engine.execute("SELECT max(time_us) FROM reading WHERE tank = ?", (where,)).fetchone()[0],
            self.engine.execute(f"SELECT max(day) * {days.DAY_US} FROM sealed_day WHERE tank = ?", (where,)).fetchone()[0]]  # fmt: skip
        times = [int(at) for at in found if at is not None]
        if not times:
            return empty_frame()
        return self.readings(tank, EPOCH + timedelta(microseconds=max(times))).tail(1).reset_index(drop=True)

    def tanks(self) -> list[str]:
        """Names of the tanks that have readings."""
        rows = self.engine.execute(
            "SELECT word FROM name WHERE id IN (SELECT tank FROM reading UNION SELECT tank FROM sealed_day)"
        )
        return sorted(word for (word,) in rows.fetchall())

    def hear(self, tank: str, life: str, oldest: int | None, said: dict[str, Any], at: float) -> None:
        """Note what a logger says of itself, within change(): the lowest seq it still holds, its troubles."""
        hear(self.engine, self.id_of(tank), self.id_of(life), oldest, said, at)

    def gaps(self) -> list[Gap]:
        """Readings that are missing, by tank and time."""
        return gaps(self.engine)

    def kept(self, tank: str, life: str, oldest: int | None = None) -> int | None:
        """The highest seq of a life up to which every reading that still existed is stored or in quarantine; None where that is none.

        oldest: the lowest seq that the logger's spool still holds; what is missing below it is gone and no hole.
        """
        key = (tank, life)
        ids = [self._known(word) for word in key]
        if None in ids:
            return None
        seq = self._whole.get(key)
        if seq is None or (oldest is not None and oldest - 1 > seq):
            least = oldest or 0
            low = min((max(first, least) for first, _ in self._runs(ids, least)), default=None)
            if low is None or (oldest is not None and low > oldest):
                return seq
            seq = low - 1
        for first, last in self._runs(ids, seq + 1):
            if first > seq + 1:
                break
            seq = max(seq, last)
        self._whole[key] = seq
        return seq

    def _runs(self, ids: list[int | None], least: int) -> Iterator[tuple[int, int]]:
        """Runs of a life's seqs in the book that end at a seq or above, in order."""
        row = "SELECT seq, seq AS last FROM {} WHERE tank = ? AND life = ? AND seq >= ?"
        run = "SELECT first, last FROM run WHERE tank = ? AND life = ? AND last >= ?"
        sql = f"{row.format('reading')} UNION ALL {row.format('refused')} UNION ALL {run} ORDER BY 1"
        yield from self.engine.execute(sql, (*ids, least) * 3)

    def id_of(self, word: str) -> int:
        """The number of a name in the book, made where it has none, within change()."""
        known = self._known(word)
        if known is None:
            self.engine.execute("INSERT INTO name (word) VALUES (?) ON CONFLICT DO NOTHING", (word,))
            known = self._known(word)
            assert known is not None
        return known

    def _known(self, word: str) -> int | None:
        if word not in self._ids:
            row = self.engine.execute("SELECT id FROM name WHERE word = ?", (word,)).fetchone()
            if row is None:
                return None
            self._ids[word] = int(row[0])
        return self._ids[word]

    def close(self) -> None:
        """Close the book; what is committed is safe at any time, closed or not."""
        self.engine.close()

    def __enter__(self) -> Book:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        self.close()


def _stamp(time: datetime | None, without: int) -> int:
    return without if time is None else (time - EPOCH) // timedelta(microseconds=1)
