"""SenML packs in JSON (RFC 8428) to records with their base fields applied, strictly.

>>> resolve(b'[{"bn":"north/","bt":1767225600,"n":"counts","v":19660},{"t":60,"n":"counts","v":19664}]')[1]
Record(name='north/counts', time=1767225660, unit=None, value=19664)
"""

from __future__ import annotations

import json
import re
import sys
from dataclasses import dataclass
from typing import Any

NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9\-:./_]*")  # RFC 8428, 4.5.1
VERSION = 10  # of SenML, RFC 8428, 4.4
VALUES = ("v", "vs", "vb", "vd")
KINDS: dict[str, tuple[type | tuple[type, ...], str]] = {  # of labels, RFC 8428, 4.3
    **dict.fromkeys(("bn", "bu", "n", "u", "vs", "vd"), (str, "text")),
    **dict.fromkeys(("bt", "bv", "bver", "t", "v"), ((int, float), "number")),
    "vb": (bool, "true or false"),
}


class WireError(ValueError):
    """A payload that cannot be taken as a whole; the message says why."""


@dataclass(frozen=True)
class Record:
    """A resolved SenML record (RFC 8428, 4.6): full name, time [s since 1970, or since now when relative], unit, value."""

    name: str
    time: float
    unit: str | None
    value: Any


def resolve(payload: bytes) -> list[Record]:
    """The records of a SenML pack with base fields applied (RFC 8428, 4.6). WireError where it is none."""
    try:
        items = json.loads(payload.decode("utf-8"), parse_constant=_constant)
    except (UnicodeDecodeError, ValueError, RecursionError) as error:
        raise WireError(f"is no JSON: {str(error)[:80]}") from None
    if not isinstance(items, list) or not items or not all(isinstance(item, dict) for item in items):
        raise WireError("is no SenML pack: a list of one or more records")
    base: dict[str, Any] = {"bn": "", "bt": 0, "bu": None, "bv": None, "bver": VERSION}
    records = []
    for n, item in enumerate(items, 1):
        for label in item:
            if label.endswith("_"):
                raise WireError(f"record {n}: '{label[:40]}' must be understood and is not (RFC 8428, 4.4)")
        base |= {label: _checked(n, label, item[label]) for label in base if label in item}
        if base["bver"] > VERSION:
            raise WireError(f"record {n}: SenML version {base['bver']}, known are those up to {VERSION}")
        name = base["bn"] + _checked(n, "n", item.get("n", ""))
        told = [label for label in VALUES if label in item]
        if not told and "s" not in item and base["bv"] is None:
            continue  # a record of base fields alone
        if NAME.fullmatch(name) is None:
            raise WireError(f"record {n}: '{name[:80]}' is no SenML name")
        if len(told) > 1:
            raise WireError(f"record {n}: has more than one value ({', '.join(told)})")
        value = item[told[0]] if told else None
        if told and told != ["v"]:
            _checked(n, told[0], value)
        elif told or base["bv"] is not None:
            value = _checked(n, "v", _checked(n, "v", item.get("v", 0)) + (base["bv"] or 0))
        at = _checked(n, "t", base["bt"] + _checked(n, "t", item.get("t", 0)))
        records.append(Record(name, at, _checked(n, "u", item["u"]) if "u" in item else base["bu"], value))
    return records


def _checked(n: int, label: str, value: Any) -> Any:
    """The value of a label, of the type that RFC 8428, 4.3 gives it; a number is finite as a float too."""
    kind, called = KINDS[label]
    good = isinstance(value, kind) and isinstance(value, bool) == (kind is bool)
    if not good or (called == "number" and not abs(value) <= sys.float_info.max):
        raise WireError(f"record {n}: {label} {str(value)[:40]!r} is no {called}")
    return value


def _constant(word: str) -> float:
    raise ValueError(f"{word} is no number in JSON")
