"""What came and could not be taken, kept in the book beside the readings: topic, payload, time and reason, until a person decides.

The seqs of readings among it are remembered for good, so that a logger's receipt goes past them: they are safe here.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta

from companion.book.engine import Engine

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


@dataclass(frozen=True)
class Refused:
    """A payload to be kept aside. at: its arrival [s since 1970]; tank, life, seqs: of readings in it that were refused, if told."""

    topic: str
    payload: bytes
    reason: str
    at: float
    tank: str | None = None
    life: str | None = None
    seqs: tuple[int, ...] = ()


@dataclass(frozen=True)
class Entry:
    """A payload in quarantine. times: how often it came."""

    id: int
    arrived: datetime
    topic: str
    payload: bytes
    reason: str
    times: int


class Aside:
    """The quarantine of an open book; id_of gives a name's number in it."""

    def __init__(self, engine: Engine, id_of: Callable[[str], int]) -> None:
        self._engine, self._id_of = engine, id_of

    def keep(self, refused: Iterable[Refused]) -> None:
        """Keep payloads, within the caller's transaction; one that is there already is counted."""
        for one in refused:
            self._engine.execute(
                "INSERT INTO quarantine (arrived_us, topic, payload, digest, reason) VALUES (?, ?, ?, ?, ?)"
                " ON CONFLICT (topic, digest) DO UPDATE SET times = quarantine.times + 1, reason = excluded.reason",
                (round(one.at * 1e6), one.topic, one.payload, hashlib.sha256(one.payload).digest(), one.reason))  # fmt: skip
            if one.tank is not None and one.life is not None:
                ids = self._id_of(one.tank), self._id_of(one.life)
                self._engine.many(
                    "INSERT INTO refused VALUES (?, ?, ?) ON CONFLICT DO NOTHING", [(*ids, seq) for seq in one.seqs]
                )

    def entries(self, ids: Sequence[int] = ()) -> list[Entry]:
        """What is in quarantine, the oldest first; only some of it where ids are given."""
        rows = self._engine.execute(
            "SELECT id, arrived_us, topic, payload, reason, times FROM quarantine ORDER BY id"
        ).fetchall()
        return [
            Entry(row[0], EPOCH + timedelta(microseconds=row[1]), row[2], bytes(row[3]), *row[4:])
            for row in rows
            if not ids or row[0] in ids
        ]

    def reason(self, id: int, reason: str) -> None:
        """Give another reason for a payload, within the caller's transaction."""
        self._engine.execute("UPDATE quarantine SET reason = ? WHERE id = ?", (reason, id))

    def drop(self, ids: Iterable[int]) -> int:
        """Drop payloads, within the caller's transaction; returns how many there were. Their seqs stay refused."""
        return sum(self._engine.execute("DELETE FROM quarantine WHERE id = ?", (one,)).rowcount for one in ids)
