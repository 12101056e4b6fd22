"""Readings that are missing from the book: holes in the seqs of a tank's logger."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta

from companion.book.engine import Engine

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
HOLES = """
SELECT t.word, l.word, last, next, after_us, before_us, g.oldest FROM (
    SELECT tank, life, last, end_us AS after_us, lead(first) OVER one AS next, lead(start_us) OVER one AS before_us FROM (
        SELECT tank, life, seq AS first, seq AS last, time_us AS start_us, time_us AS end_us FROM reading
        UNION ALL SELECT tank, life, seq, seq, NULL, NULL FROM refused
        UNION ALL SELECT tank, life, first, last, start_us, end_us FROM run
        UNION ALL SELECT tank, life, -1, -1, NULL, NULL FROM logger) AS runs
    WINDOW one AS (PARTITION BY tank, life ORDER BY first, last)) AS holes
JOIN name t ON t.id = tank JOIN name l ON l.id = life LEFT JOIN logger g USING (tank, life)
WHERE next > last + 1 AND l.word NOT IN ('file', 'wire') ORDER BY t.word, after_us, l.word, last
"""  # a file's and a strange logger's seqs are times; a logger of ours that was heard began at 0


@dataclass(frozen=True)
class Gap:
    """Readings first to last of a tank's life that are not in the book; after and before: times of those around, where known.

    gone: the logger no longer holds them, so they cannot come; else they may still.
    """

    tank: str
    life: str
    first: int
    last: int
    after: datetime | None
    before: datetime | None
    gone: bool

    @property
    def missing(self) -> int:
        """How many readings."""
        return self.last - self.first + 1

    def line(self) -> str:
        """What there is to say of it."""
        n = self.missing
        when = " to ".join("?" if at is None else f"{at:%Y-%m-%dT%H:%M:%SZ}" for at in (self.after, self.before))
        fate = "the logger no longer has them" if self.gone else "they may still come"
        return f"{self.tank}: {n} reading{'s' if n > 1 else ''} missing, life {self.life}, seq {self.first} to {self.last}, {when}; {fate}"


def summary(found: Sequence[Gap]) -> list[str]:
    """A line a tank: how many readings are missing, how many of them may still come, and the longest gap."""
    lines = []
    for tank in dict.fromkeys(gap.tank for gap in found):
        of = [gap for gap in found if gap.tank == tank]
        missing, coming = sum(gap.missing for gap in of), sum(gap.missing for gap in of if not gap.gone)
        longest = max(of, key=lambda gap: gap.missing)
        fate = f"{coming} may still come" if coming else "the loggers no longer have them"
        lines.append(
            f"{tank}: {missing} reading{'s' if missing > 1 else ''} missing in {len(of)} gap{'s' if len(of) > 1 else ''}; {fate}"
        )
        lines.append(f"  the longest: {longest.line().partition(': ')[2]}")
    return lines


def gaps(engine: Engine) -> list[Gap]:
    """The book's gaps, by tank and time; one that the logger has half let go stands as two."""
    found = []
    for tank, life, seq, following, after, before, oldest in engine.execute(HOLES).fetchall():
        ends = [seq + 1, following] if oldest is None or not seq + 1 < oldest < following else [seq + 1, oldest, following]
        for first, end in zip(ends, ends[1:], strict=False):
            found.append(Gap(tank, life, first, end - 1, _time(after), _time(before), oldest is not None and first < oldest))
    return found


def hear(engine: Engine, tank: int, life: int, oldest: int | None, said: dict[str, object], at: float) -> None:
    """Note what a logger says of itself: the lowest seq it still holds, its troubles; within the caller's transaction."""
    row = engine.execute("SELECT oldest, said FROM logger WHERE tank = ? AND life = ?", (tank, life)).fetchone()
    known, before = (row[0], json.loads(row[1])) if row else (None, {})
    oldest = max((seq for seq in (known, oldest) if seq is not None), default=None)
    engine.execute(
        "INSERT INTO logger VALUES (?, ?, ?, ?, ?) ON CONFLICT (tank, life) DO UPDATE SET oldest = excluded.oldest, said = excluded.said,"
        " heard_us = excluded.heard_us", (tank, life, oldest, json.dumps(before | said), round(at * 1e6)))  # fmt: skip


def _time(microseconds: int | None) -> datetime | None:
    return None if microseconds is None else EPOCH + timedelta(microseconds=microseconds)
