"""Bad payloads by the million: mutations of good packs, random bytes, deep JSON, huge numbers, wrong types, hostile topics.

    python -m tests.fuzz_wire [HOW MANY] [SEED]         the long form: a million (make fuzz); tests/intake/test_fuzz.py runs a short one

Each is either refused with a reason or taken as readings; nothing else may be raised, a reading that is taken has numbers that are
finite and a time that may be, and the quick way and the strict way of wire.py say the same. What became of all of them is counted.
"""

from __future__ import annotations

import json
import math
import random
import sys
from collections.abc import Callable

from companion.intake import wire
from companion.intake.senml import WireError
from core_mp import senml

NOW = 1_772_400_000.0
TOPIC = "levelbook/north/readings"
ODD = [
    "null",
    "true",
    "1e999",
    "-1e999",
    "NaN",
    "1e-400",
    "9" * 40,
    "-0",
    '""',
    '"x"',
    "[]",
    "{}",
    "0.1",
    "1e15",
    str(2**63),
    str(2**64),
    "946684800",
]
TOPICS = [
    "levelbook//readings",
    "levelbook/north/readings/x",
    "levelbook/NORTH/readings",
    "levelbook/../readings",
    "levelbook/north\n/readings",
    "#",
    "\udcff",
    "x" * 70_000,
]


def good(rng: random.Random) -> bytes:
    rows = [
        (seq, int(NOW) - 9000 + 60 * seq, rng.randrange(65536), *(rng.choice([None, 9.5, 98012.25]) for _ in range(4)))
        for seq in range(rng.randrange(1, 6))
    ]
    return senml.pack("north", "counts", "k3f9", rng.randrange(5), rows).encode()


def flipped(rng: random.Random) -> bytes:
    data = bytearray(good(rng))
    for _ in range(rng.randrange(1, 5)):
        data[rng.randrange(len(data))] = rng.randrange(256)
    return bytes(data)


def cut(rng: random.Random) -> bytes:
    data = good(rng)
    a, b = sorted(rng.randrange(len(data) + 1) for _ in range(2))
    return rng.choice([data[:a], data[:a] + data[b:], data[:b] + data[a:]])


def odd(rng: random.Random) -> bytes:
    """A value of another kind or size in a place of a good pack."""
    parts = good(rng).decode().split(":")
    n = rng.randrange(1, len(parts))
    _, comma, rest = parts[n].partition(rng.choice([",", "}"]))
    parts[n] = rng.choice(ODD) + comma + rest if comma else rng.choice(ODD)
    return ":".join(parts).encode()


def rearranged(rng: random.Random) -> bytes:
    records = json.loads(good(rng))
    for _ in range(rng.randrange(1, 4)):
        one = rng.choice(records)
        match rng.randrange(5):
            case 0:
                rng.shuffle(records)
            case 1:
                one[rng.choice(["n", "u", "v", "t", "bt", "bn", "bv", "vs", "vb", "s", "x_"])] = rng.choice(
                    [None, True, -1, 1e308, "north/", "seq", "Cel", [], {}]
                )
            case 2:
                records.insert(rng.randrange(len(records)), dict(one))
            case 3:
                one.pop(rng.choice(list(one)), None) if one else None
            case _:
                records[records.index(one)] = rng.choice([7, None, "x", []])
                break
    return json.dumps(records).encode()


def deep(rng: random.Random) -> bytes:
    n = rng.choice([10, 1000, 60_000])
    return rng.choice([b"[" * n, b'{"a":' * n, b"[" * n + b"]" * n])


def noise(rng: random.Random) -> bytes:
    return rng.randbytes(rng.randrange(300))


KINDS: tuple[tuple[Callable[[random.Random], bytes], int], ...] = (
    (flipped, 30),
    (cut, 15),
    (odd, 25),
    (rearranged, 20),
    (noise, 9),
    (deep, 1),
)


def fuzz(many: int, seed: int) -> dict[str, int]:
    """What became of so many payloads: refused, taken whole, taken in part, readings. AssertionError where a promise is broken."""
    rng = random.Random(seed)
    out = {"refused": 0, "taken": 0, "in part": 0, "readings": 0}
    makers, weights = zip(*KINDS, strict=True)

    def signal(tank: str, when: float) -> str | None:
        return "counts" if tank == "north" else None

    for maker in rng.choices(makers, weights, k=many):
        payload = maker(rng)
        topic = TOPIC if rng.random() < 0.98 else rng.choice(TOPICS)
        try:
            pack = wire.decode(topic, payload, signal, NOW)
        except WireError as error:
            assert str(error)
            out["refused"] += 1
            continue
        careful = wire.strict("north", payload, signal, NOW)
        assert repr(pack.rows) == repr(careful.rows) and pack.faults == careful.faults, payload
        for at, raw, *others, life, seq in pack.rows:
            assert math.isfinite(raw) and all(number != number or math.isfinite(number) for number in others), payload
            assert wire.EARLIEST * 1e6 <= at <= (NOW + wire.AHEAD_S) * 1e6 and life and 0 <= seq < 2**63, payload
        out["in part" if pack.faults else "taken"] += 1
        out["readings"] += len(pack.rows)
    assert out["refused"] + out["taken"] + out["in part"] == many
    return out


def main() -> None:
    many, seed = (int(word) for word in (sys.argv[1:] + ["1000000", "1"][len(sys.argv) - 1 :])[:2])
    print(f"{many:,} payloads: {fuzz(many, seed)}")


if __name__ == "__main__":
    main()
