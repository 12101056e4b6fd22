"""The wire: a topic and a SenML pack (RFC 8428, JSON) to readings.

    pack = decode("levelbook/north/readings", payload, site.signal)

site.signal gives what a tank's logger sends at a time (counts, current, voltage, pressure, level), None for a tank it does not know. A pack
that is no SenML, or is of another tank than its topic, raises WireError; of a pack with good and bad readings the good
ones are taken and the bad ones told in faults.
"""

from __future__ import annotations

import functools
import math
import re
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import pandas as pd

from companion.book.readings import Row, frame_of_rows
from companion.intake.senml import Record, WireError, resolve

TOPIC = re.compile(r"levelbook/([a-z0-9_-]+)/readings")
LIFE = re.compile(r"[!-~]{1,64}")
RELATIVE = 2**28  # s: resolved times below are relative to now, RFC 8428, 4.5.3
UNITS = {"counts": None, "current": "A", "voltage": "V", "pressure": "Pa", "level": "m", "temperature": "Cel",
         "barometer": "Pa", "headspace": "Pa", "battery": "V", "seq": None}  # fmt: skip
PLACES = ("temperature", "barometer", "headspace", "battery")
SIGNALS = ("counts", "current", "voltage", "pressure", "level")
LOGGER = re.compile(r"life|oldest|dropped|settings|refused|faults:[a-z]+")  # what a logger says of itself, not of a reading
EARLIEST = 1420070400.0  # 2015-01-01: an earlier time comes from a clock that was lost
AHEAD_S = 3600.0  # a later time than the arrival's by more than this comes from a wrong clock
HEAD = re.compile(
    rb'\[\{"bn":"([a-z0-9_-]+)/","bt":([1-9][0-9]{9}),"n":"life","vs":"([A-Za-z0-9]{1,64})"\},\{"n":"oldest","v":(0|[1-9][0-9]{0,17})\}'
    rb'((?:,\{"n":"(?:dropped|settings|faults:[a-z]+)","v":(?:0|[1-9][0-9]{0,17})\})*)'
)
SAID = re.compile(rb'"n":"([a-z:]+)","v":([0-9]+)')
NAN = math.nan
SignalOf = Callable[[str, float], str | None]
NO_LIFE = "wire"  # of a logger that says neither life nor seq: its seq is the time in microseconds


@dataclass(frozen=True)
class Pack:
    """A tank's readings from the wire. life as it came (text or number), None where none; oldest: seq the spool still holds.

    refused: seqs of its readings that are told in faults, where they could be read.
    relative: the logger has no clock, so the times are told from the arrival, and said again they differ. said: what the logger
    says of itself: dropped (readings that went unreceipted), settings (version in use), refused (why the desk's last settings
    were), faults:sensor and the like (how often).
    """

    tank: str
    rows: list[Row]
    life: str | int | None
    oldest: int | None
    faults: list[str]
    refused: tuple[int, ...] = ()
    relative: bool = False
    said: dict[str, Any] = field(default_factory=dict)

    @property
    def frame(self) -> pd.DataFrame:
        """The readings as a frame."""
        return frame_of_rows(self.rows)


def decode(topic: str, payload: bytes, signal_of: SignalOf, now: float | None = None) -> Pack:
    """The readings of a pack. now: time of arrival [s since 1970], the clock's where not given. WireError."""
    match = TOPIC.fullmatch(topic)
    if match is None:
        raise WireError(f"topic '{topic[:80]}' is not levelbook/<tank>/readings")
    tank = match[1]
    arrived = time.time() if now is None else now
    if signal_of(tank, arrived) is None:
        raise WireError(f"there is no tank '{tank}' in the site file")
    plain = quick(tank, payload, signal_of, arrived)
    return strict(tank, payload, signal_of, arrived) if plain is None else plain


def strict(tank: str, payload: bytes, signal_of: SignalOf, arrived: float) -> Pack:
    """decode() by the letter of RFC 8428, whatever the pack."""
    records = resolve(payload)
    strange = next((record.name for record in records if not record.name.startswith(f"{tank}/")), None)
    if strange is not None:
        raise WireError(f"'{strange[:80]}' is not of tank '{tank}', whose topic it came on")
    told = [(record.name[len(tank) + 1 :], record) for record in records]
    life = _life([record.value for name, record in told if name == "life"])
    said = {name: record.value for name, record in told if LOGGER.fullmatch(name) and name != "life"}
    rows: list[Row] = []
    faults, refused = [], []
    relative = False
    for group in _readings(told):
        relative |= next(iter(group.values())).time < RELATIVE
        try:
            rows.append(_row(tank, group, signal_of, NO_LIFE if life is None else str(life), arrived))
        except ValueError as fault:
            faults.append(str(fault))
            refused.append(_whole(group["seq"].value) if "seq" in group else None)
    return Pack(tank, rows, life, _whole(said.pop("oldest", None)), faults,
                tuple(seq for seq in refused if seq is not None), relative, said)  # fmt: skip


def quick(tank: str, payload: bytes, signal_of: SignalOf, arrived: float) -> Pack | None:
    """decode() for a pack exactly as core_mp/senml.py writes it, with nothing wrong in it: the same, sooner. None for any other."""
    head = HEAD.match(payload)
    if head is None or head[1].decode() != tank:
        return None
    start, life, signal = int(head[2]), head[3].decode(), signal_of(tank, int(head[2]))
    last = min(arrived, start + 1e9)
    if signal is None or not EARLIEST <= start <= last or signal_of(tank, last) != signal:
        return None
    rows: list[Row] = []
    end = head.end()
    for found in _reading(signal).finditer(payload, end):
        t, raw, temperature, barometer, headspace, battery, seq = found.groups()
        when = start + int(t[4:-1]) if t else start
        if found.start() != end or when > last:
            return None
        end = found.end()
        rows.append((when * 1_000_000, float(raw), float(temperature or NAN), float(barometer or NAN), float(headspace or NAN),
                     float(battery or NAN), life, int(seq)))  # fmt: skip
    if payload[end:] != b"]":
        return None
    said: dict[str, Any] = {name.decode(): int(value) for name, value in SAID.findall(head[5])}
    return Pack(tank, rows, life, int(head[4]), [], (), False, said)


@functools.cache
def _reading(signal: str) -> re.Pattern[bytes]:
    """A reading's records as core_mp/senml.py writes them: all with the first one's t, or all without."""
    parts = []
    for name in (signal, *PLACES, "seq"):
        unit = f',"u":"{UNITS[name]}"' if UNITS[name] else ""
        t = '(?P<t>"t":[1-9][0-9]{0,8},)?' if name == signal else "(?(t)(?P=t)|)"
        number = (
            "(0|[1-9][0-9]{0,17})"
            if name == "seq"
            else r"((?:-?[1-9][0-9]{0,14}|0|-0(?=[.]))(?:\.[0-9]{1,17})?(?:e[+-]?[0-9]{1,2})?)"
        )
        record = rf',\{{{t}"n":"{name}"{unit},"v":{number}\}}'
        parts.append(f"(?:{record})?" if name in PLACES else record)
    return re.compile("".join(parts).encode())


def _life(told: list[Any]) -> str | int | None:
    """The life that a pack tells; None where it tells none."""
    if not told:
        return None
    life = told[0]
    if any(other != life for other in told):
        raise WireError(f"tells two lives, {life!r} and others; send a pack for each")
    if isinstance(life, (bool, float)) or not isinstance(life, (str, int)) or not LIFE.fullmatch(str(life)):
        raise WireError(f"life {str(life)[:80]!r} is neither text of 1 to 64 printable ASCII letters nor a whole number")
    return life


def _readings(told: list[tuple[str, Record]]) -> list[dict[str, Record]]:
    """Records of one reading together: those of one time, until a name comes again."""
    groups: list[dict[str, Record]] = []
    for name, record in told:
        if LOGGER.fullmatch(name):
            continue
        if not groups or name in groups[-1] or next(iter(groups[-1].values())).time != record.time:
            groups.append({})
        groups[-1][name] = record
    return groups


def _row(tank: str, group: dict[str, Record], signal_of: SignalOf, life: str, arrived: float) -> Row:
    when = next(iter(group.values())).time
    when = when if when >= RELATIVE else arrived + when
    told = f"reading of {when:.0f}"
    if not when >= EARLIEST:
        raise ValueError(f"{told}: the time is before 2015, so the logger's clock was lost")
    if when > arrived + AHEAD_S:
        raise ValueError(
            f"{told}: the time is {(when - arrived) / 3600:.0f} h after its arrival, so the logger's clock is wrong"
        )
    signal = signal_of(tank, when)
    assert signal is not None
    for name, record in group.items():
        if name not in UNITS:
            raise ValueError(f"{told}: '{name[:40]}' is no name known here; known are {', '.join(UNITS)}")
        if record.unit != UNITS[name] and not (record.unit is None and name not in PLACES):
            raise ValueError(f"{told}: {name} in {record.unit!r}, wanted is {UNITS[name]!r}")
        if isinstance(record.value, bool) or not isinstance(record.value, (int, float)):
            raise ValueError(f"{told}: {name} is no number")
    if signal not in group:
        sent = [name for name in SIGNALS if name in group]
        raise ValueError(f"{told}: sends {sent[0] if sent else 'no raw signal'}, the site file says {signal}")
    microseconds = round(when * 1e6)
    seq = _whole(group["seq"].value) if "seq" in group else microseconds
    if seq is None:
        raise ValueError(f"{told}: seq {group['seq'].value!r} is no whole number from 0 up")
    others = (float(group[name].value) if name in group else NAN for name in PLACES)
    return (microseconds, float(group[signal].value), *others, life, seq)  # type: ignore[return-value]


def _whole(value: Any) -> int | None:
    good = isinstance(value, (int, float)) and not isinstance(value, bool) and value == int(value) and 0 <= value < 2**63
    return int(value) if good else None
