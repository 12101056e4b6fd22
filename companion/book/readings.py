"""What a reading is, and the CSV in which people exchange readings.

A frame of readings has COLUMNS: time (UTC), raw (counts, A, V, Pa or m, as the sensor's signal), temperature_c,
barometer_pa, headspace_pa, battery_v (NaN where none), life and seq. (tank, life, seq) is a reading's identity: `life` is
drawn when a logger's spool is created, `seq` counts up in it. A file without them is the life "file", in which a reading's
time in microseconds is its seq: the same file read twice says the same readings.
"""

from __future__ import annotations

import csv
import difflib
import io
import math
import re
import sys
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from companion.book.files import FileFault, aside, rfc3339, write_csv

COLUMNS = ("time", "raw", "temperature_c", "barometer_pa", "headspace_pa", "battery_v", "life", "seq")
HEADINGS = {
    "temperature_degC": "temperature_c",
    "barometer_Pa": "barometer_pa",
    "headspace_Pa": "headspace_pa",
    "battery_V": "battery_v",
}
RAW_UNITS = {"current": {"mA": 1e-3, "A": 1.0}, "voltage": {"mV": 1e-3, "V": 1.0}, "level": {"mm": 1e-3, "m": 1.0},
             "pressure": {"Pa": 1.0, "kPa": 1e3, "bar": 1e5, "mbar": 1e2, "psi": 6894.757293168361},
             "counts": {"counts": 1.0}}  # fmt: skip
FROM_FILE = "file"
Row = tuple[
    int, float, float, float, float, float, str, int
]  # COLUMNS, the time in microseconds since 1970, NaN for what is missing

_RFC3339 = re.compile(r"\d{4}-\d\d-\d\d[Tt ]\d\d:\d\d:\d\d(\.\d+)?([Zz]|[+-]\d\d:\d\d)")
_NO_ZONE = re.compile(r"\d{4}-\d\d-\d\d([Tt ]\d\d:\d\d(:\d\d(\.\d+)?)?)?")


@dataclass
class Rejects:
    """Rows of a file that were not taken: (line number, reason, the row as it stood)."""

    source: str
    rows: list[tuple[int, str, str]] = field(default_factory=list)
    repeated: int = 0  # rows that say again what an earlier row said; left out, nothing lost
    out_of_order: int = 0  # rows earlier than the one before; taken, and sorted

    def write(self, path: str | Path) -> None:
        """Write the rejected rows as CSV: line, reason, row."""
        with aside(path) as file:
            out = csv.writer(file, lineterminator="\n")
            out.writerow(["line", "reason", "row"])
            out.writerows(self.rows)


def frame_of(times: Any, raw: Any, life: Any = FROM_FILE, seq: Any = None, **others: Any) -> pd.DataFrame:
    """A frame of readings from columns: times (UTC), raw, and any of COLUMNS by name; what is not given is missing."""
    stamps = pd.DatetimeIndex(pd.to_datetime(times, utc=True)).as_unit("us")
    n = len(stamps)
    columns: dict[str, Any] = {"time": stamps, "raw": np.asarray(raw, float)}
    for name in COLUMNS[2:6]:
        columns[name] = np.asarray(others.pop(name, np.full(n, np.nan)), float)
    if others:
        raise TypeError(f"a reading has no {', '.join(others)}; it has {', '.join(COLUMNS)}")
    columns["life"] = pd.Series([life] * n if isinstance(life, str) else list(life), dtype=object)
    columns["seq"] = np.asarray(stamps.asi8 if seq is None else seq, np.int64)
    return pd.DataFrame(columns)


def frame_of_rows(rows: Sequence[Row]) -> pd.DataFrame:
    """A frame of readings from rows."""
    if not rows:
        return empty_frame()
    times, raw, *others, life, seq = zip(*rows, strict=True)
    named: dict[str, Any] = dict(zip(COLUMNS[2:6], others, strict=True))
    return frame_of(np.array(times, np.int64).astype("datetime64[us]"), raw, life=life, seq=seq, **named)


def rows_of_frame(frame: pd.DataFrame) -> list[Row]:
    """The rows of a frame of readings."""
    times = pd.DatetimeIndex(frame["time"]).as_unit("us").asi8.tolist()
    return list(zip(times, *(frame[name].tolist() for name in COLUMNS[1:]), strict=True))


def empty_frame() -> pd.DataFrame:
    """A frame of no readings."""
    return frame_of([], [], life=[], seq=[])


def read_csv(
    source: str | Path, signal: str = "counts", limits: tuple[float, float] | None = None
) -> tuple[pd.DataFrame, Rejects]:
    """Readings from a CSV file ("-": standard input), sorted by time, and the rows that were rejected.

    signal: what raw is (counts, current, voltage, pressure, level); raw is in SI (A, V, Pa, m) unless the header names the
    unit, as in `raw [mA]`. limits: the least and most counts of the converter. FileFault where the file as a whole cannot be
    read: missing, empty, or with another header.
    """
    name = "standard input" if str(source) == "-" else str(source)
    text = _text(source, name)
    fields, factor = _header(text, name, signal)
    quick = _quickly(text, fields, factor, signal, limits)
    if quick is not None:
        return quick, Rejects(name)
    return _carefully(text, name, fields, factor, signal, limits)


def write_readings(path: str | Path, frame: pd.DataFrame) -> None:
    """Write readings as CSV with life and seq, in the form that read_csv takes."""
    with aside(path) as file:
        times = rfc3339(frame["time"].to_numpy(dtype="datetime64[us]"))
        numbers = [_texts(frame[name].to_numpy(float)) for name in COLUMNS[1:6]]
        write_csv(file, ",".join(["time", "raw", *HEADINGS, "life", "seq"]), "%s,%s,%s,%s,%s,%s,%s,%s",
                  [times, *numbers, frame["life"].to_numpy(object), frame["seq"].to_numpy(np.int64)])  # fmt: skip


def _texts(numbers: npt.NDArray[np.float64]) -> npt.NDArray[np.object_]:
    """Numbers as the shortest text that reads back as the same number; nothing for NaN."""
    texts = ["" if x != x else repr(int(x)) if x == int(x) else repr(x) for x in numbers.tolist()]
    return np.array(texts, dtype=object)


def _text(source: str | Path, name: str) -> str:
    try:
        data = sys.stdin.buffer.read() if str(source) == "-" else Path(source).read_bytes()
    except OSError as error:
        raise FileFault(f"{name}: cannot be read ({error.strerror}); name a CSV file of readings") from None
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise FileFault(f"{name}: byte {error.start} is not UTF-8 text; save the file as CSV in UTF-8") from None
    if "\0" in text:
        raise FileFault(f"{name}: holds NUL bytes, so it is no CSV; save the readings as CSV in UTF-8")
    return text


def _header(text: str, name: str, signal: str) -> tuple[list[str], float]:
    """The columns' names in a frame, and the factor that brings raw to SI."""
    first = next(csv.reader([text.split("\n", 1)[0]]), [])
    headings = [heading.strip() for heading in first]
    fields, factor = [], 1.0
    for heading in headings:
        unit = re.fullmatch(r"raw \[(.+)\]", heading)
        if unit:
            units = RAW_UNITS[signal]
            if unit[1] not in units:
                raise FileFault(
                    f"{name}: line 1: raw in '{unit[1]}', but the sensor sends {signal}; write one of {', '.join(units)}"
                )
            factor = units[unit[1]]
            fields.append("raw")
        elif heading in ("time", "raw", "life", "seq"):
            fields.append(heading)
        elif heading in HEADINGS:
            fields.append(HEADINGS[heading])
        else:
            known = ["time", "raw", *HEADINGS, "life", "seq"]
            near = difflib.get_close_matches(heading, known, 1, 0.5)
            if ";" in heading:
                raise FileFault(
                    f"{name}: line 1: columns are separated by semicolons; save the file with commas, and decimal points"
                )
            hint = f"did you mean {near[0]}?" if near else f"the columns are {', '.join(known)}"
            raise FileFault(f"{name}: line 1: unknown column '{heading}'; {hint}")
    for needed in ("time", "raw"):
        if needed not in fields:
            raise FileFault(f"{name}: line 1: the header must name time and raw, but is '{','.join(headings)}'")
    if len(set(fields)) < len(fields):
        raise FileFault(f"{name}: line 1: a column is named twice in '{','.join(headings)}'; name each once")
    if ("life" in fields) != ("seq" in fields):
        raise FileFault(f"{name}: line 1: life and seq stand together or not at all; add the other, or leave both out")
    return fields, factor


def _quickly(text: str, fields: list[str], factor: float, signal: str,
             limits: tuple[float, float] | None) -> pd.DataFrame | None:  # fmt: skip
    """The readings of a file in which nothing is amiss; None where something is, which _carefully then tells."""
    kinds: dict[str, Any] = dict.fromkeys(fields, np.float64)
    kinds |= {name: kind for name, kind in (("time", str), ("life", str), ("seq", np.int64)) if name in fields}
    try:
        table = pd.read_csv(io.StringIO(text), names=fields, header=0, dtype=kinds, skip_blank_lines=False, index_col=False,
                            na_values=[""], keep_default_na=False)  # fmt: skip
        stamps = _utc(table["time"].to_numpy(dtype=object))
    except (ValueError, OverflowError, pd.errors.ParserError):
        return None
    raw = table["raw"].to_numpy(float) * factor
    good = (
        stamps is not None
        and len(raw) > 0
        and np.isfinite(raw).all()
        and bool((np.diff(stamps) > np.timedelta64(0, "us")).all())
    )
    if not good or (signal == "current" and raw.max() > 1.0):
        return None
    if limits is not None and not limits[0] <= raw.min() <= raw.max() <= limits[1]:
        return None
    others = {name: table[name].to_numpy(float) for name in fields if name in COLUMNS[2:6]}
    if any(np.isinf(column).any() for column in others.values()):
        return None
    if "life" in fields:
        if table["life"].isna().any():
            return None
        others |= {"life": table["life"].to_numpy(object), "seq": table["seq"].to_numpy(np.int64)}
    return frame_of(stamps, raw, **others)


def _utc(texts: npt.NDArray[np.object_]) -> npt.NDArray[np.datetime64] | None:
    """Times of the commonest form, 2026-01-31T23:59:00Z; None where another form stands among them."""
    if len(texts) == 0 or {len(text) for text in texts.tolist()} != {20}:
        return None
    letters = texts.astype("S20").view("S1").reshape(len(texts), 20)
    if (letters[:, 19] != b"Z").any() or (letters[:, 10] != b"T").any():
        return None
    return np.array(letters[:, :19]).view("S19").reshape(-1).astype("datetime64[us]")


def _carefully(text: str, name: str, fields: list[str], factor: float, signal: str,
               limits: tuple[float, float] | None) -> tuple[pd.DataFrame, Rejects]:  # fmt: skip
    rejects = Rejects(name)
    rows: list[tuple[Any, ...]] = []
    seen: dict[Any, tuple[int, tuple[Any, ...]]] = {}
    lines = csv.reader(io.StringIO(text), strict=False)
    next(lines)
    for cells in lines:
        if not cells:
            continue
        try:
            row = _row(cells, fields, factor, signal, limits)
            identity = (row[6], row[7]) if "life" in fields else row[0]
            if identity in seen:
                line, before = seen[identity]
                if _same(row, before):
                    rejects.repeated += 1
                    continue
                what = f"life {row[6]}, seq {row[7]}" if "life" in fields else "this time"
                raise ValueError(f"line {line} has another reading of {what}; keep the right one")
        except ValueError as fault:
            rejects.rows.append((lines.line_num, str(fault), ",".join(cells)))
            continue
        seen[identity] = (lines.line_num, row)
        rejects.out_of_order += bool(rows) and row[0] < rows[-1][0]
        rows.append(row)
    rows.sort(key=lambda row: row[0])
    times, raw, *others, life, seq = zip(*rows, strict=True) if rows else ([],) * 8
    columns = dict(zip(COLUMNS[2:6], others, strict=True))
    return frame_of(list(times), list(raw), life=list(life), seq=list(seq), **columns), rejects


def _row(
    cells: list[str], fields: list[str], factor: float, signal: str, limits: tuple[float, float] | None
) -> tuple[Any, ...]:
    if len(cells) != len(fields):
        raise ValueError(f"{len(cells)} values, but the header names {len(fields)}")
    found = dict(zip(fields, (cell.strip() for cell in cells), strict=True))
    time = _time(found["time"])
    raw = _number(found["raw"], "raw") * factor
    if raw != raw:
        raise ValueError("raw is missing")
    if limits is not None and not limits[0] <= raw <= limits[1]:
        raise ValueError(f"raw {found['raw']} is beyond the converter's {limits[0]:g} to {limits[1]:g} (counts_limits)")
    if signal == "current" and raw > 1.0:
        raise ValueError(f"raw {found['raw']} A is no loop current; if it is in mA, write `raw [mA]` in the header")
    others = [_number(found.get(name, ""), name) for name in COLUMNS[2:6]]
    seq = int(time.value // 1000)
    if "seq" in found:
        if not found["life"]:
            raise ValueError("life is missing")
        if not re.fullmatch(r"\d{1,18}", found["seq"]):
            raise ValueError(f"seq '{found['seq']}' is not a whole number from 0 up")
        seq = int(found["seq"])
    return (time, raw, *others, found.get("life", FROM_FILE), seq)


def _time(text: str) -> pd.Timestamp:
    if _NO_ZONE.fullmatch(text):
        raise ValueError(
            f"time '{text}' has no zone; write it as {text.replace(' ', 'T')[:19]}Z for UTC, or with an offset like +02:00"
        )
    if not _RFC3339.fullmatch(text):
        raise ValueError(f"time '{text}' is not RFC 3339; write it like 2026-01-31T23:59:00Z")
    try:
        return pd.Timestamp(text.upper()).tz_convert("UTC")
    except ValueError:
        raise ValueError(f"time '{text}' is not on the calendar") from None


def _number(text: str, name: str) -> float:
    if text == "" or text.lower() == "nan":
        return math.nan
    try:
        number = float(text)
    except ValueError:
        raise ValueError(f"{name} '{text}' is not a number") from None
    if math.isinf(number):
        raise ValueError(f"{name} '{text}' is not finite")
    return number


def _same(row: tuple[Any, ...], other: tuple[Any, ...]) -> bool:
    return all(a == b or (a != a and b != b) for a, b in zip(row, other, strict=True))
