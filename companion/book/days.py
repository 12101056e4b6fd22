"""Closed days: rows into sealed blobs, and what of what comes is in one already.

A day is a UTC day of one tank, by its number since 1970. Late readings of a sealed day lie beside its blob as rows until the day is
sealed again. A blob's seqs are told as runs, so that receipts and gaps need not open it; a life whose seqs are times (a file's, a
strange logger's) is told as one run from its first to its last.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from companion.book.engine import Engine
from companion.book.readings import Row
from companion.book.sealed import FLOATS, Columns, seal, unseal

DAY_US = 86_400_000_000
TIMES = ("file", "wire")  # lives whose seqs are times
ROWS = f"SELECT time_us, n.word, seq, arrived_us, {', '.join(FLOATS)} FROM reading r JOIN name n ON n.id = r.life WHERE tank = ? AND time_us >= ? AND time_us < ?"


def rows(engine: Engine, tank: int, start_us: int, end_us: int) -> Columns | None:
    """The columns of a stretch's rows, in no order; None where there are none."""
    found = engine.execute(ROWS, (tank, start_us, end_us)).fetchall()
    if not found:
        return None
    time_us, life, seq, arrived_us, *floats = zip(*found, strict=True)
    named: dict[str, Any] = dict(zip(FLOATS, (np.array(column, float) for column in floats), strict=True))
    return {"time_us": np.array(time_us, np.int64), "life": np.array(life, object), "seq": np.array(seq, np.int64),
            "arrived_us": np.array(arrived_us, np.int64), **named}  # fmt: skip


def blobs(engine: Engine, tank: int, start_us: int, end_us: int) -> list[Columns]:
    """The columns of the sealed days that a stretch touches, in order of days."""
    days = max(start_us // DAY_US, -(2**40)), min((end_us - 1) // DAY_US, 2**40)
    found = engine.execute("SELECT blob FROM sealed_day WHERE tank = ? AND day >= ? AND day <= ? ORDER BY day", (tank, *days))
    return [unseal(bytes(blob)) for (blob,) in found.fetchall()]


def joined(parts: list[Columns]) -> Columns:
    """Columns one after another, in order of time, and of identity at one time."""
    whole = parts[0] if len(parts) == 1 else {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    times = whole["time_us"]
    if len(times) > 1 and not np.all(times[1:] > times[:-1]):
        order = np.lexsort((whole["seq"], whole["life"].astype(str), times))
        whole = {name: column[order] for name, column in whole.items()}
    return whole


def due(engine: Engine, before_us: int) -> list[tuple[int, int]]:
    """Tanks (by number) and days that have rows and end before a time."""
    last = before_us // DAY_US
    sql = f"SELECT DISTINCT tank, time_us / {DAY_US} FROM reading WHERE time_us >= 0 AND time_us < ? ORDER BY 1, 2"
    return [(int(tank), int(day)) for tank, day in engine.execute(sql, (last * DAY_US,)).fetchall()]


def seal_day(engine: Engine, tank: int, day: int, id_of: Any) -> None:
    """Seal a tank's day, within the caller's transaction, in which nobody else may write to the tank."""
    stretch = day * DAY_US, (day + 1) * DAY_US
    late = rows(engine, tank, *stretch)
    if late is None:
        return
    columns = joined([*blobs(engine, tank, *stretch), late])
    engine.month(day)
    engine.execute("DELETE FROM sealed_day WHERE tank = ? AND day = ?", (tank, day))
    engine.execute("INSERT INTO sealed_day VALUES (?, ?, ?, ?)", (tank, day, len(columns["seq"]), seal(columns)))
    engine.execute("DELETE FROM run WHERE tank = ? AND day = ?", (tank, day))
    engine.many("INSERT INTO run VALUES (?, ?, ?, ?, ?, ?, ?)", [(tank, id_of(life), first, last, day, start, end) for life, first, last, start, end in _runs(columns)])  # fmt: skip
    engine.execute("DELETE FROM reading WHERE tank = ? AND time_us >= ? AND time_us < ?", (tank, *stretch))


def _runs(columns: Columns) -> list[tuple[str, int, int, int, int]]:
    """Seqs that follow each other, as (life, first, last, time of the first, time of the last)."""
    out = []
    for life in sorted(set(columns["life"])):
        here = columns["life"] == life
        seq, times = columns["seq"][here], columns["time_us"][here]
        order = np.argsort(seq, kind="stable")
        seq, times = seq[order], times[order]
        breaks = np.zeros(0, np.intp) if life in TIMES else np.flatnonzero(np.diff(seq) != 1) + 1
        for first, end in zip([0, *breaks], [*breaks, len(seq)], strict=True):
            out.append((life, int(seq[first]), int(seq[end - 1]), int(times[first]), int(times[end - 1])))
    return out


def sealed_already(engine: Engine, tank: int, ids: dict[str, int], rows: Sequence[Row], timed: bool) -> dict[int, bool]:
    """Places of the rows whose identity a sealed day has: True where it has the same of them, False where not."""
    days: set[int] = set()
    for life, number in ids.items():
        seqs = [row[7] for row in rows if row[6] == life]
        found = engine.execute("SELECT DISTINCT day FROM run WHERE tank = ? AND life = ? AND first <= ? AND last >= ?",
                               (tank, number, max(seqs), min(seqs)))  # fmt: skip
        days |= {day for (day,) in found.fetchall()}
    known: dict[tuple[str, int], Sequence[float]] = {}
    for day in days:
        for columns in blobs(engine, tank, day * DAY_US, (day + 1) * DAY_US):
            content = zip(columns["time_us"].tolist(), *(columns[name].tolist() for name in FLOATS), strict=True)
            known |= dict(zip(zip(columns["life"], columns["seq"].tolist(), strict=True), content, strict=True))
    out = {}
    for place, row in enumerate(rows) if known else ():
        of = known.get((row[6], row[7]))
        if of is not None:
            out[place] = all(a == b or (a != a and b != b) for a, b in list(zip(row[:6], of, strict=True))[not timed :])
    return out
