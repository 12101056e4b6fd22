"""The book: where raw readings lie, in SQLite.

Only what the sensor said is kept, with the time it arrived; figures are computed on reading. (tank, life, seq) is a
reading's identity: said again it is counted and not stored twice; said otherwise it is a conflict, and the first stays.
One process writes, others read without being blocked (WAL); a commit is on the disk when add() returns (synchronous FULL).
"""

from __future__ import annotations

import contextlib
import sqlite3
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np
import pandas as pd

from companion.book.aside import Aside
from companion.book.gaps import Gap, gaps, hear
from companion.book.readings import COLUMNS, empty_frame, frame_of
from companion.book.schema import VERSION, upgrade

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
CONTENT = ("time_us", "raw", "temperature_c", "barometer_pa", "headspace_pa", "battery_v")


class BookError(Exception):
    """A book that cannot be opened or is not one; the message names it and says what to do."""


@dataclass(frozen=True)
class Added:
    """What became of readings offered to the book: new ones stored, repeated ones dropped, conflicts not stored."""

    new: int
    repeated: int
    conflicts: pd.DataFrame


def open_book(url: str, create: bool = True) -> Book:
    """The book at a URL such as sqlite:book.db; made where there is none, unless create is False. BookError."""
    kind, _, rest = url.partition(":")
    if kind != "sqlite" or not rest:
        raise BookError(f"store url '{url}': only SQLite books so far; write sqlite:FILE, e.g. sqlite:book.db")
    path = Path(rest)
    if not path.exists() and not create:
        raise BookError(f"{path}: there is no book yet; put readings in it with levelbook load or levelbook listen")
    if not path.parent.is_dir():
        raise BookError(f"{path}: the folder {path.parent} does not exist; make it, or name another in [store] url")
    return Book(path)


class Book:
    """An open book. Use one in each thread, and close it, or use it as a context manager."""

    def __init__(self, path: Path) -> None:
        self.path = path
        try:
            self._db = sqlite3.connect(path, timeout=30.0, isolation_level=None)
            self._db.execute("PRAGMA journal_mode = WAL")
            self._db.execute("PRAGMA synchronous = FULL")
            version = upgrade(self._db)
        except sqlite3.DatabaseError as error:
            raise BookError(f"{path}: cannot be used as a book ({error}); name another file in [store] url") from None
        if version > VERSION:
            raise BookError(f"{path}: a book of version {version}, this levelbook reads version {VERSION}; upgrade levelbook")
        self._ids: dict[str, int] = {}
        self.aside = Aside(self._db, self._id)
        self._whole: dict[tuple[str, str], int] = {}

    @contextlib.contextmanager
    def change(self) -> Iterator[None]:
        """One transaction: what is put and kept in the block is committed when it ends, or nothing of it."""
        self._db.execute("BEGIN IMMEDIATE")
        try:
            yield
            self._db.execute("COMMIT")
        except BaseException:
            self._db.execute("ROLLBACK")
            self._ids.clear()
            raise

    def add(self, tank: str, frame: pd.DataFrame) -> Added:
        """Store a frame of readings of a tank; committed on return."""
        with self.change():
            return self.put(tank, frame)

    def put(self, tank: str, frame: pd.DataFrame, timed: bool = True) -> Added:
        """Store a frame of readings of a tank, within change().

        timed: the times are the logger's own; where they are told from the arrival, because it has no clock, the first time told
        stays, and another is no conflict.
        """
        lives = {life: self._id(life) for life in frame["life"].unique()}
        columns = [frame["life"].map(lives).tolist(), frame["seq"].tolist(), _microseconds(frame["time"])]
        columns += [_nullable(frame[name]) for name in COLUMNS[1:6]]
        db, where = self._db, self._id(tank)
        db.execute("DELETE FROM temp.incoming")
        db.executemany(
            "INSERT INTO temp.incoming VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)", zip(*columns, range(len(frame)), strict=True)
        )
        arrived = (datetime.now(UTC) - EPOCH) // timedelta(microseconds=1)
        new = db.execute(
            "INSERT OR IGNORE INTO reading SELECT ?, life, seq, time_us, raw, temperature_c, barometer_pa, headspace_pa, battery_v, ?"
            " FROM temp.incoming ORDER BY row", (where, arrived)).rowcount  # fmt: skip
        other = " OR ".join(f"i.{name} IS NOT r.{name}" for name in (CONTENT if timed else CONTENT[1:]))
        rows = db.execute(
            f"SELECT i.row FROM temp.incoming i JOIN reading r ON r.tank = ? AND r.life = i.life AND r.seq = i.seq WHERE {other}",
            (where,)).fetchall() if new < len(frame) else []  # fmt: skip
        return Added(new, len(frame) - new - len(rows), frame.iloc[[row for (row,) in rows]])

    def readings(self, tank: str, start: datetime | None = None, end: datetime | None = None) -> pd.DataFrame:
        """The tank's readings with start <= time < end, in order of time (and of identity at one time)."""
        rows = self._db.execute(
            "SELECT time_us, raw, temperature_c, barometer_pa, headspace_pa, battery_v, n.word, seq FROM reading r"
            " JOIN name n ON n.id = r.life WHERE tank = (SELECT id FROM name WHERE word = ?) AND time_us >= ? AND time_us < ?"
            " ORDER BY time_us, n.word, seq", (tank, _stamp(start, -(2**62)), _stamp(end, 2**62))).fetchall()  # fmt: skip
        if not rows:
            return empty_frame()
        time_us, raw, *others, life, seq = zip(*rows, strict=True)
        named = dict(zip(COLUMNS[2:6], (np.array(column, float) for column in others), strict=True))
        return frame_of(np.array(time_us, "datetime64[us]"), np.array(raw, float), life=list(life), seq=list(seq), **named)

    def last(self, tank: str) -> pd.DataFrame:
        """The tank's latest reading, as a frame of one row; of none where there is none."""
        row = self._db.execute(
            "SELECT max(time_us) FROM reading WHERE tank = (SELECT id FROM name WHERE word = ?)", (tank,)
        ).fetchone()
        if row[0] is None:
            return empty_frame()
        return self.readings(tank, EPOCH + timedelta(microseconds=row[0])).tail(1).reset_index(drop=True)

    def tanks(self) -> list[str]:
        """Names of the tanks that have readings."""
        rows = self._db.execute("SELECT word FROM name WHERE id IN (SELECT DISTINCT tank FROM reading) ORDER BY word")
        return [word for (word,) in rows]

    def hear(self, tank: str, life: str, oldest: int | None, said: dict[str, Any], at: float) -> None:
        """Note what a logger says of itself, within change(): the lowest seq it still holds, its troubles."""
        hear(self._db, self._id(tank), self._id(life), oldest, said, at)

    def gaps(self) -> list[Gap]:
        """Readings that are missing, by tank and time."""
        return gaps(self._db)

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
            low = min((first for (first,) in self._seqs(ids, "min(seq)", oldest or 0) if first is not None), default=None)
            if low is None or (oldest is not None and low > oldest):
                return seq
            seq = low
        for (stored,) in self._seqs(ids, "seq", seq + 1):
            if stored != seq + 1:
                break
            seq = stored
        self._whole[key] = seq
        return seq

    def _seqs(self, ids: list[int | None], what: str, least: int) -> sqlite3.Cursor:
        of = f"SELECT {what} AS seq FROM {{}} WHERE tank = ? AND life = ? AND seq >= ?"
        return self._db.execute(f"{of.format('reading')} UNION {of.format('refused')} ORDER BY 1", (*ids, least, *ids, least))

    def _id(self, word: str) -> int:
        known = self._known(word)
        if known is None:
            known = self._ids[word] = int(
                self._db.execute("INSERT INTO name (word) VALUES (?) RETURNING id", (word,)).fetchone()[0]
            )
        return known

    def _known(self, word: str) -> int | None:
        if word not in self._ids:
            row = self._db.execute("SELECT id FROM name WHERE word = ?", (word,)).fetchone()
            if row is None:
                return None
            self._ids[word] = int(row[0])
        return self._ids[word]

    def close(self) -> None:
        """Close the book; the file is whole at any time, closed or not."""
        self._db.close()

    def __enter__(self) -> Book:
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        self.close()


def _microseconds(times: pd.Series) -> list[int]:
    stamps = pd.DatetimeIndex(times).as_unit("us").asi8.tolist()
    return [int(stamp) for stamp in stamps]


def _nullable(numbers: pd.Series) -> list[float | None]:
    return [None if number != number else number for number in numbers.tolist()]


def _stamp(time: datetime | None, without: int) -> int:
    return without if time is None else (time - EPOCH) // timedelta(microseconds=1)
