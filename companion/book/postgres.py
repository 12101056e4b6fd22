"""A book in PostgreSQL, for many desks."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from datetime import datetime, timedelta
from typing import Any

from companion.book.engine import COLUMNS, WAIT_S
from companion.book.schema import INCOMING, POSTGRES

LOCK = 7274  # our advisory locks in PostgreSQL: with a tank's number, 0 for the tables, -1 for partitions
EPOCH = datetime(1970, 1, 1)


class Postgres:
    """A book in PostgreSQL 15 or newer, through psycopg 3: many write at once, each reading stands once by its identity."""

    differs, by_bytes = "IS DISTINCT FROM", ' COLLATE "C"'

    def __init__(self, url: str) -> None:
        import psycopg

        self.name = psycopg.conninfo.make_conninfo(url, password="***") if "password" in url else url.split("@")[-1]
        self.troubles: tuple[type[Exception], ...] = (psycopg.OperationalError, OSError)
        self._url, self._psycopg = url, psycopg
        self._connect()

    def _connect(self) -> None:
        self.db = self._psycopg.connect(self._url, autocommit=True, connect_timeout=10)
        self.db.execute("SET client_min_messages = warning")
        self.db.execute(f"SET lock_timeout = '{WAIT_S:.0f}s'")

    def execute(self, sql: str, args: Sequence[Any] = ()) -> Any:
        """One statement; its cursor."""
        return self.db.execute(sql.replace("{differs}", self.differs).replace("?", "%s"), args)

    def many(self, sql: str, rows: Iterable[Sequence[Any]]) -> None:
        """One statement for many rows."""
        with self.db.cursor() as cursor:
            cursor.executemany(sql.replace("?", "%s"), rows)

    def store(self, rows: Sequence[Sequence[Any]]) -> int:
        """Put rows of incoming's columns into reading, but for those whose identity is there; returns how many were new."""
        self.incoming(rows)
        names = COLUMNS.strip("()")
        return int(
            self.db.execute(
                f"INSERT INTO reading {COLUMNS} SELECT {names} FROM incoming ORDER BY life, seq, row_ ON CONFLICT DO NOTHING"
            ).rowcount
        )

    def incoming(self, rows: Sequence[Sequence[Any]]) -> None:
        """Fill the table of what has come, incoming, anew; COPY is the fast way in."""
        self.db.execute("TRUNCATE incoming")
        with self.db.cursor() as cursor, cursor.copy("COPY incoming FROM STDIN (FORMAT BINARY)") as copy:
            copy.set_types(["int8", "int8", "int8", "int8", *["float8"] * 5, "int8", "int8"])
            for row in rows:
                copy.write_row(row)

    def begin(self) -> None:
        """Begin a transaction that may write, on a new connection where the old one broke."""
        if self.db.closed or self.db.broken:
            self._connect()
            self.db.execute(INCOMING)
        self.db.execute("BEGIN")

    def look(self) -> bool:
        """Begin a transaction in which all looks see one moment; False where one is going on already."""
        if self.db.info.transaction_status != self._psycopg.pq.TransactionStatus.IDLE:
            return False
        self.db.execute("BEGIN ISOLATION LEVEL REPEATABLE READ READ ONLY")
        return True

    def hold(self, tank: int, alone: bool = False) -> None:
        """Until the transaction ends nobody seals the tank's days; alone: nobody writes to it either."""
        self.db.execute(f"SELECT pg_advisory_xact_lock{'' if alone else '_shared'}({LOCK}, %s::int)", (tank,))

    def month(self, day: int) -> None:
        """Make room for sealed days of a day's month; day: since 1970."""
        first = (EPOCH + timedelta(days=day)).replace(day=1)
        end = (first + timedelta(days=32)).replace(day=1)
        if self.execute("SELECT to_regclass(?)", (f"sealed_{first:%Y_%m}",)).fetchone()[0] is None:
            self.db.execute(f"SELECT pg_advisory_xact_lock({LOCK}, -1)")
            self.db.execute(f"CREATE TABLE IF NOT EXISTS sealed_{first:%Y_%m} PARTITION OF sealed_day"
                            f" FOR VALUES FROM ({(first - EPOCH).days}) TO ({(end - EPOCH).days})")  # fmt: skip

    def upgrade(self) -> int:
        """Bring the tables to today's version; returns the version they have: a newer book stays as it is."""
        self.db.execute("BEGIN")
        try:
            self.db.execute(f"SELECT pg_advisory_xact_lock({LOCK}, 0)")
            self.db.execute("CREATE TABLE IF NOT EXISTS levelbook (version integer NOT NULL)")
            row = self.db.execute("SELECT version FROM levelbook").fetchone()
            version = int(row[0]) if row else 0
            for step in POSTGRES[version:]:
                self.db.execute(step)
            if version < len(POSTGRES):
                self.db.execute("DELETE FROM levelbook")
                self.db.execute("INSERT INTO levelbook VALUES (%s)", (len(POSTGRES),))
                version = len(POSTGRES)
            self.db.execute("COMMIT")
        except BaseException:
            if not self.db.closed:
                self.db.execute("ROLLBACK")
            raise
        self.db.execute(INCOMING)
        return version

    def close(self) -> None:
        """End the connection; what is committed is safe at any time."""
        self.db.close()
