"""A book copied whole into another, of either kind, and the copy proved: row by row, by count and hash."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

from companion.book.store import Book, BookError

TOGETHER = 5_000  # rows put in at once
TABLES = {  # names' numbers differ between books: they are told by their words
    "reading": "tank, life, seq, time_us, raw, temperature_c, barometer_pa, headspace_pa, battery_v, arrived_us",
    "sealed_day": "tank, day, n, blob",
    "run": "tank, life, first, last, day, start_us, end_us",
    "refused": "tank, life, seq",
    "logger": "tank, life, oldest, said, heard_us",
    "quarantine": "arrived_us, topic, payload, digest, reason, times",
}


@dataclass(frozen=True)
class Proof:
    """What a table holds: rows, and the SHA-256 of all of them in order."""

    table: str
    rows: int
    digest: str


def move(source: Book, target: Book) -> list[Proof]:
    """Copy all of a book into an empty one, and prove it. BookError where the other is not empty, or the copy is not the same.

    The source may be written to meanwhile: what is copied is the book of one moment.
    """
    if any(target.engine.execute(f"SELECT count(*) FROM {table}").fetchone()[0] for table in TABLES):
        raise BookError(f"{target.name}: is not empty; name a new book")
    source.engine.look()
    try:
        with target.change():
            for table, columns in TABLES.items():
                _copy(source, target, table, columns)
        was = [proof(source, table) for table in TABLES]
    finally:
        source.engine.execute("COMMIT")
    is_now = [proof(target, table) for table in TABLES]
    for one, other in zip(was, is_now, strict=True):
        if one != other:
            raise BookError(
                f"{target.name}: {one.table}: the copy has {other.rows} rows where the book has {one.rows}, or others; do not use it"
            )
    return is_now


def proof(book: Book, table: str) -> Proof:
    """Count and hash of a table's rows, with names by their words."""
    digest, n = hashlib.sha256(), 0
    for row in _rows(book, table, TABLES[table]):
        digest.update(repr(tuple(_plain(value) for value in row)).encode())
        n += 1
    return Proof(table, n, digest.hexdigest())


def _rows(book: Book, table: str, columns: str) -> Iterator[Sequence[Any]]:
    """A table's rows in an order of their own, names by their words."""
    names = [name.strip() for name in columns.split(",")]
    words = [name for name in names if name in ("tank", "life")]
    told = ", ".join(f"{name}_name.word" if name in words else f"one.{name}" for name in names)
    joins = " ".join(f"JOIN name {name}_name ON {name}_name.id = one.{name}" for name in words)
    order = {"quarantine": "one.id"}.get(
        table, ", ".join(f"one.{name}" for name in names if name in ("seq", "day", "first")) or "1"
    )
    first = ", ".join(f"{name}_name.word" for name in words)
    by = f"{first}, {order}" if first else order
    by = ", ".join(f"{part}{book.engine.by_bytes}" if part.endswith(".word") else part for part in by.split(", "))
    cursor = book.engine.execute(f"SELECT {told} FROM {table} one {joins} ORDER BY {by}")
    while rows := cursor.fetchmany(TOGETHER):
        yield from rows


def _copy(source: Book, target: Book, table: str, columns: str) -> None:
    names = [name.strip() for name in columns.split(",")]
    words = [n for n, name in enumerate(names) if name in ("tank", "life")]
    sql = f"INSERT INTO {table} ({columns}) VALUES ({', '.join('?' * len(names))})"
    batch: list[tuple[Any, ...]] = []
    for row in _rows(source, table, columns):
        if table == "sealed_day":
            target.engine.month(row[1])
        batch.append(tuple(target.id_of(value) if n in words else _plain(value) for n, value in enumerate(row)))
        if len(batch) == TOGETHER:
            target.engine.many(sql, batch)
            batch = []
    target.engine.many(sql, batch)


def _plain(value: Any) -> Any:
    return bytes(value) if isinstance(value, memoryview) else value
