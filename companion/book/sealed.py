"""A sealed day: one tank's readings of a closed UTC day in one compact blob, exactly as they were.

Each column is told by its differences, in as few bytes as the largest needs, the bytes of one place together, and all of it
deflated. A number with few decimals goes as a whole number; one without goes as its bits. Nothing is rounded but the time of
arrival, to milliseconds.
"""

from __future__ import annotations

import json
import zlib
from typing import Any

import numpy as np
import numpy.typing as npt

FORMAT = 1
FLOATS = ("raw", "temperature_c", "barometer_pa", "headspace_pa", "battery_v")
DECIMALS = range(7)
LEVEL = 6  # of deflation: higher ones gain little

Ints = npt.NDArray[np.int64]
Columns = dict[str, Any]


def seal(columns: Columns) -> bytes:
    """The blob of a day's readings. columns: time_us, life (text), seq, arrived_us and FLOATS, shape (n,) each, in order of time."""
    lives = sorted(set(columns["life"]))
    places = np.array([lives.index(life) for life in columns["life"]], np.int64) if len(lives) > 1 else np.zeros(0, np.int64)
    parts = [
        _ints(np.asarray(columns["time_us"], np.int64)),
        _ints(np.asarray(columns["seq"], np.int64)),
        _ints(np.asarray(columns["arrived_us"], np.int64) // 1000),
        _ints(places),
        *(_floats(np.asarray(columns[name], float)) for name in FLOATS),
    ]
    head = json.dumps(
        {"format": FORMAT, "n": len(columns["seq"]), "lives": lives, "parts": [part[0] for part in parts]}
    ).encode()
    return len(head).to_bytes(4, "little") + head + zlib.compress(b"".join(part[1] for part in parts), LEVEL)


def unseal(blob: bytes) -> Columns:
    """The columns of a blob, as seal() took them; life as an array of text. ValueError where it is none, or damaged."""
    size = int.from_bytes(blob[:4], "little")
    try:
        head = json.loads(blob[4 : 4 + size])
        body = memoryview(zlib.decompress(blob[4 + size :]))
    except (zlib.error, UnicodeDecodeError, ValueError) as error:
        raise ValueError(f"a sealed day is damaged ({error})") from None
    if head["format"] != FORMAT:
        raise ValueError(f"a sealed day of format {head['format']}, known is {FORMAT}")
    n, at = head["n"], 0
    out: list[Any] = []
    for told in head["parts"]:
        size = told["bytes"]
        part = body[at : at + size]
        out.append(_to_floats(told, part, n) if "decimals" in told else _to_ints(told, part))
        at += size
    time_us, seq, arrived_ms, places, *floats = out
    lives = np.array(head["lives"], dtype=object)
    life = lives[places] if len(lives) > 1 else np.repeat(lives, n)
    return {
        "time_us": time_us,
        "seq": seq,
        "arrived_us": arrived_ms * 1000,
        "life": life,
        **dict(zip(FLOATS, floats, strict=True)),
    }


def _ints(values: Ints) -> tuple[dict[str, Any], bytes]:
    """First differences or second ones, whichever are smaller; zigzag, so that small ones have few bytes."""
    kinds = []
    for order in (1, 2) if len(values) > 1 else (1,):
        steps = np.diff(values, n=order, prepend=np.zeros(order, np.int64))
        zigzag = ((steps << 1) ^ (steps >> 63)).view(np.uint64)
        rest = zigzag[order:]
        kinds.append((int(np.count_nonzero(rest)) * (int(rest.max(initial=0)).bit_length() + 1), order, zigzag))
    _, order, zigzag = min(kinds, key=lambda kind: kind[:2])
    start, rest = zigzag[:order].astype("<u8").tobytes(), zigzag[order:]
    width = next(width for width in (1, 2, 4, 8) if width == 8 or int(rest.max(initial=0)) < 1 << 8 * width)
    data = start + rest.astype(f"<u{width}").view(np.uint8).reshape(-1, width).T.tobytes()
    return {"order": order, "width": width, "bytes": len(data)}, data


def _to_ints(told: dict[str, Any], data: memoryview) -> Ints:
    order, width = told["order"], told["width"]
    start = np.frombuffer(data[: 8 * order], "<u8")
    rest = np.frombuffer(data[8 * order :], np.uint8).reshape(width, -1).T
    zigzag = np.concatenate([start, np.ascontiguousarray(rest).view(f"<u{width}").ravel().astype(np.uint64)])
    steps = (zigzag >> np.uint64(1)).astype(np.int64) ^ -(zigzag & np.uint64(1)).astype(np.int64)
    for _ in range(order):
        steps = np.cumsum(steps)
    return steps


def _floats(values: npt.NDArray[np.float64]) -> tuple[dict[str, Any], bytes]:
    """Numbers with up to six decimals as whole numbers, others as their bits; where some are missing, which stands first."""
    here = np.isfinite(values)
    mask = b"" if here.all() or not here.any() else np.packbits(here).tobytes()
    some = values[here]
    for decimals in DECIMALS:
        with np.errstate(over="ignore"):
            scaled = np.round(some * 10.0**decimals)
        if (
            np.abs(scaled).max(initial=0.0) < 2**52
            and np.array_equal(scaled / 10.0**decimals, some)
            and not np.any((some == 0) & np.signbit(some))
        ):
            told, data = _ints(scaled.astype(np.int64))
            break
    else:
        decimals = -1
        told, data = _ints(some.view(np.int64))
    return told | {"decimals": decimals, "mask": len(mask), "some": len(some), "bytes": len(mask) + len(data)}, mask + data


def _to_floats(told: dict[str, Any], data: memoryview, n: int) -> npt.NDArray[np.float64]:
    size, decimals = told["mask"], told["decimals"]
    if not told["some"]:
        return np.full(n, np.nan)
    whole = _to_ints(told, data[size:])
    some = whole.view(np.float64) if decimals < 0 else whole / 10.0**decimals
    if not size:
        return some
    out = np.full(n, np.nan)
    out[np.unpackbits(np.frombuffer(data[:size], np.uint8), count=n).astype(bool)] = some
    return out
