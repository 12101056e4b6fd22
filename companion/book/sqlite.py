"""A book in a SQLite file."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

from companion.book.engine import COLUMNS, WAIT_S
from companion.book.schema import INCOMING, SQLITE


class Sqlite:
    """A book in a file: one process writes, others read without being blocked (WAL); a commit is on the disk (synchronous FULL)."""

    differs, by_bytes = "IS NOT", ""
    troubles: tuple[type[Exception], ...] = (sqlite3.OperationalError, OSError)

    def __init__(self, path: Path) -> None:
        self.name = str(path)
        self.db = sqlite3.connect(path, timeout=WAIT_S, isolation_level=None)
        self.db.execute("PRAGMA journal_mode = WAL")
        self.db.execute("PRAGMA synchronous = FULL")

    def execute(self, sql: str, args: Sequence[Any] = ()) -> Any:
        """One statement; its cursor."""
        return self.db.execute(sql.replace("{differs}", self.differs), args)

    def many(self, sql: str, rows: Iterable[Sequence[Any]]) -> None:
        """One statement for many rows."""
        self.db.executemany(sql, rows)

    def store(self, rows: Sequence[Sequence[Any]]) -> int:
        """Put rows of incoming's columns into reading, but for those whose identity is there; returns how many were new."""
        return int(
            self.db.executemany(
                f"INSERT INTO reading {COLUMNS} VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?) ON CONFLICT DO NOTHING",
                (row[:10] for row in rows),
            ).rowcount
        )

    def incoming(self, rows: Sequence[Sequence[Any]]) -> None:
        """Fill the table of what has come, incoming, anew."""
        self.db.execute("DELETE FROM incoming")
        self.db.executemany("INSERT INTO incoming VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)", rows)

    def begin(self) -> None:
        """Begin a transaction that may write: there is only one at a time."""
        self.db.execute("BEGIN IMMEDIATE")

    def look(self) -> bool:
        """Begin a transaction in which all looks see one moment; False where one is going on already."""
        if self.db.in_transaction:
            return False
        self.db.execute("BEGIN")
        return True

    def hold(self, tank: int, alone: bool = False) -> None:
        """Nothing: there is only one writer."""

    def month(self, day: int) -> None:
        """Nothing: there are no partitions."""

    def upgrade(self) -> int:
        """Bring the tables to today's version; returns the version they have: a newer book stays as it is."""
        if self._version() < len(SQLITE):
            self.begin()
            try:
                for step in SQLITE[self._version() :]:  # another process may have been first
                    for statement in step.split(";"):
                        self.db.execute(statement)
                self.db.execute(f"PRAGMA user_version = {max(len(SQLITE), self._version())}")
                self.db.execute("COMMIT")
            except BaseException:
                self.db.execute("ROLLBACK")
                raise
        self.db.execute(INCOMING)
        return self._version()

    def _version(self) -> int:
        return int(self.db.execute("PRAGMA user_version").fetchone()[0])

    def close(self) -> None:
        """End the connection; the file is whole at any time."""
        self.db.close()
