"""The wire: RFC 8428 as printed, the contract's packs, and nothing taken that is not one."""

from __future__ import annotations

import json
from collections.abc import Iterator

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from companion.book.store import Book, open_book
from companion.intake import wire
from companion.intake.senml import WireError, resolve
from companion.intake.wire import decode
from core_mp import senml

TOPIC = "levelbook/north/readings"
NOW = 1_770_000_000.0


def pack(*records: dict[str, object]) -> bytes:
    return json.dumps(list(records)).encode()


def read(payload: bytes, topic: str = TOPIC):
    return decode(topic, payload, lambda tank, when: {"north": "counts", "mill": "current"}.get(tank), NOW)


GOOD = ({"bn": "north/", "bt": 1767225600, "n": "counts", "v": 100}, {"n": "life", "vs": "k"}, {"n": "seq", "v": 7})


DEVICE = "urn:dev:ow:10e2073a01080063"
EXAMPLES = {  # RFC 8428, section 5.1, from memory of its text: the pack, and its records as (name, time, unit, value)
    "5.1.1": (
        [{"n": DEVICE, "u": "Cel", "v": 23.1}],
        [(DEVICE, 0, "Cel", 23.1)],
    ),
    "5.1.2, first": (
        [{"bn": DEVICE + ":", "n": "voltage", "u": "V", "v": 120.1}, {"n": "current", "u": "A", "v": 1.2}],
        [(DEVICE + ":voltage", 0, "V", 120.1), (DEVICE + ":current", 0, "A", 1.2)],
    ),
    "5.1.2, second": (
        [{"bn": DEVICE + ":", "bt": 1.276020076001e09, "bu": "A", "bver": 5, "n": "voltage", "u": "V", "v": 120.1},
         {"n": "current", "t": -5, "v": 1.2}, {"n": "current", "t": -4, "v": 1.3}, {"n": "current", "v": 1.7}],
        [(DEVICE + ":voltage", 1.276020076001e09, "V", 120.1), (DEVICE + ":current", 1.276020071001e09, "A", 1.2),
         (DEVICE + ":current", 1.276020072001e09, "A", 1.3), (DEVICE + ":current", 1.276020076001e09, "A", 1.7)],
    ),
    "5.1.3, resolved in 5.1.4": (
        [{"bn": DEVICE, "bt": 1.320067464e09, "bu": "%RH", "v": 20}, {"u": "lon", "v": 24.30621}, {"u": "lat", "v": 60.07965},
         {"t": 60, "v": 20.3}, {"u": "lon", "t": 60, "v": 24.30622}, {"u": "%EL", "t": 150, "v": 98}],
        [(DEVICE, 1.320067464e09, "%RH", 20), (DEVICE, 1.320067464e09, "lon", 24.30621), (DEVICE, 1.320067464e09, "lat", 60.07965),
         (DEVICE, 1.320067524e09, "%RH", 20.3), (DEVICE, 1.320067524e09, "lon", 24.30622), (DEVICE, 1.320067614e09, "%EL", 98)],
    ),
    "5.1.5": (
        [{"bn": DEVICE + ":", "n": "temp", "u": "Cel", "v": 23.1}, {"n": "label", "vs": "Machine Room"},
         {"n": "open", "vb": False}, {"n": "nfc-reader", "vd": "aGkgCg"}],
        [(DEVICE + ":temp", 0, "Cel", 23.1), (DEVICE + ":label", 0, None, "Machine Room"), (DEVICE + ":open", 0, None, False),
         (DEVICE + ":nfc-reader", 0, None, "aGkgCg")],
    ),
    "5.1.6": (
        [{"bn": "2001:db8::2/", "bt": 1.320078429e09, "n": "temperature", "u": "Cel", "v": 25.2}, {"n": "humidity", "u": "%RH", "v": 30},
         {"bn": "2001:db8::1/", "n": "temperature", "u": "Cel", "v": 12.3}, {"n": "humidity", "u": "%RH", "v": 67}],
        [("2001:db8::2/temperature", 1.320078429e09, "Cel", 25.2), ("2001:db8::2/humidity", 1.320078429e09, "%RH", 30),
         ("2001:db8::1/temperature", 1.320078429e09, "Cel", 12.3), ("2001:db8::1/humidity", 1.320078429e09, "%RH", 67)],
    ),
}  # fmt: skip


@pytest.mark.parametrize("section", EXAMPLES)
def test_rfc_8428_examples_resolve_to_their_records(section: str) -> None:
    records, resolved = EXAMPLES[section]
    found = resolve(pack(*records))
    assert [(record.name, record.unit, record.value) for record in found] == [(name, u, v) for name, _, u, v in resolved]
    assert [record.time for record in found] == [pytest.approx(time, abs=1e-6) for _, time, _, _ in resolved]


def test_rfc_8428_base_value_is_added_and_base_records_may_stand_alone() -> None:
    records = resolve(
        pack({"bn": "a:", "bv": 10}, {"n": "x", "v": 1.5}, {"n": "y"}, {"bn": "b:", "bv": 0, "n": "z", "vb": True})
    )
    assert [(record.name, record.value) for record in records[:3]] == [("a:", 10), ("a:x", 11.5), ("a:y", 10)]
    assert records[3].value is True


def test_a_pack_is_read() -> None:
    found = read(
        pack(
            *GOOD,
            {"n": "temperature", "u": "Cel", "v": 9.5},
            {"n": "oldest", "v": 5},
            {"t": 60, "n": "counts", "v": 101},
            {"t": 60, "n": "seq", "v": 8},
        )
    )
    assert found.frame["raw"].tolist() == [100.0, 101.0] and found.frame["seq"].tolist() == [7, 8]
    assert (found.life, found.oldest, found.faults) == ("k", 5, [])
    assert found.frame["time"].astype(str).tolist() == ["2026-01-01 00:00:00+00:00", "2026-01-01 00:01:00+00:00"]


def test_a_logger_without_a_clock_says_how_long_ago() -> None:
    found = read(
        pack(
            {"bn": "north/", "n": "counts", "v": 1, "t": -90},
            {"n": "seq", "v": 1, "t": -90},
            {"n": "counts", "v": 2},
            {"n": "seq", "v": 2},
        )
    )
    assert [at.timestamp() for at in found.frame["time"]] == [NOW - 90, NOW]


def test_a_good_reading_beside_a_bad_one_is_kept() -> None:
    found = read(
        pack(
            *GOOD,
            {"t": 60, "n": "counts", "v": 5},
            {"t": 60, "n": "seq", "v": 1.5},
            {"t": 120, "n": "counts", "v": 6},
            {"t": 120, "n": "seq", "v": 9},
        )
    )
    assert found.frame["seq"].tolist() == [7, 9]
    assert found.faults == ["reading of 1767225660: seq 1.5 is no whole number from 0 up"]


@pytest.mark.parametrize(
    ("records", "says"),
    [
        (({**GOOD[0]}, {"n": "temperature", "u": "K", "v": 280}), "temperature in 'K', wanted is 'Cel'"),
        (({**GOOD[0]}, {"n": "temperature", "v": 8}), "temperature in None"),
        (
            ({"bn": "north/", "bt": 1767225600, "n": "current", "u": "A", "v": 0.01},),
            "sends current, the site file says counts",
        ),
        (({"bn": "north/", "bt": 1767225600, "n": "seq", "v": 3},), "sends no raw signal"),
        (({**GOOD[0], "bt": 300_000_000},), "before 2015"),
        (({**GOOD[0]}, {"n": "mood", "v": 3}), "'mood' is no name known here"),
        (({"bn": "north/", "bt": 1767225600, "n": "counts", "vs": "100"},), "counts is no number"),
        (({**GOOD[0]}, {"n": "seq", "v": -1}), "seq -1 is no whole number"),
    ],
)
def test_a_bad_reading_is_told(records: tuple[dict[str, object], ...], says: str) -> None:
    found = read(pack(*records))
    assert found.frame.empty and says in found.faults[0]


@pytest.mark.parametrize(
    ("payload", "says"),
    [
        (b"", "is no JSON"),
        (b"\xff\xfe", "is no JSON"),
        (b"[" * 100_000, "is no JSON"),
        (b'[{"bn":"north/","n":"counts","v":NaN}]', "is no JSON"),
        (b"{}", "is no SenML pack"),
        (b"[]", "is no SenML pack"),
        (b"[1]", "is no SenML pack"),
        (b'[{"bn":"north/","n":"counts","v":"5"}]', "record 1: v '5' is no number"),
        (b'[{"bn":"north/","n":"counts","v":true}]', "record 1: v 'True' is no number"),
        (b'[{"bn":"north/","n":"counts","v":1e999}]', "record 1: v 'inf' is no number"),
        (b'[{"bn":5,"n":"counts","v":1}]', "record 1: bn '5' is no text"),
        (b'[{"bn":"north/","bt":"x","n":"counts","v":1}]', "record 1: bt 'x' is no number"),
        (b'[{"bn":"north/","n":"counts","v":1,"vs":"a"}]', "more than one value"),
        (b'[{"bn":"north/","n":"counts","v":1,"new_":2}]', "'new_' must be understood"),
        (b'[{"bn":"north/","bver":11,"n":"counts","v":1}]', "SenML version 11"),
        (b'[{"bn":"north/","n":"<script>","v":1}]', "is no SenML name"),
        (b'[{"bn":"mill/","n":"counts","v":1}]', "'mill/counts' is not of tank 'north'"),
        (b'[{"bn":"north/","n":"counts","v":1},{"n":"life","vb":true}]', "life 'True' is neither"),
        (b'[{"bn":"north/","n":"counts","v":1},{"n":"life","vs":"\\ud800"}]', "is neither text of 1 to 64 printable"),
        (
            b'[{"bn":"north/","n":"counts","v":1},{"n":"life","vs":"' + b"k" * 65 + b'"}]',
            "is neither text of 1 to 64 printable",
        ),
        (b'[{"bn":"north/","n":"counts","v":1},{"n":"life","vs":"a"},{"n":"life","vs":"b"}]', "tells two lives"),
        (b'[{"bn":"north/","n":"counts","v":1' + b"0" * 400 + b"}]", "is no number"),
        (b'[{"bn":"north/","bv":1e308,"n":"counts","v":1e308}]', "record 1: v 'inf' is no number"),
        (b'[{"bn":"north/","n":"counts","v":1},{"bv":1e308,"n":"oldest","v":1e308}]', "record 2: v 'inf' is no number"),
        (b'[{"bn":"north/","bt":1e308,"n":"counts","v":1,"t":1e308}]', "record 1: t 'inf' is no number"),
        (b'[{"bn":"north/","n":"temperature","u":["Cel"],"v":1}]', "is no text"),
        (b'[{"bn":"north/","n":"life","vs":{}}]', "is no text"),
    ],
)
def test_a_payload_that_is_no_pack_is_refused_with_the_reason(payload: bytes, says: str) -> None:
    with pytest.raises(WireError) as told:
        read(payload)
    assert says in str(told.value) and "\n" not in str(told.value) and len(str(told.value)) < 300


@pytest.mark.parametrize(("topic", "says"), [("levelbook/nowhere/readings", "there is no tank 'nowhere'"), ("levelbook/north/kept", "is not levelbook/<tank>/readings"),
                                             ("levelbook/North/readings", "is not"), ("x" * 5000, "is not")])  # fmt: skip
def test_a_topic_of_no_tank_is_refused(topic: str, says: str) -> None:
    with pytest.raises(WireError, match=says):
        read(pack(*GOOD), topic)


json_values = st.recursive(st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=8)),
                           lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(st.text(max_size=4), inner, max_size=3)), max_leaves=8)  # fmt: skip
labels = st.sampled_from(["bn", "bt", "bu", "bv", "bver", "n", "u", "v", "vs", "vb", "vd", "s", "t", "ut", "x_", "other"])
records = st.lists(
    st.dictionaries(
        labels, st.one_of(json_values, st.sampled_from(["north/", "counts", "seq", "life", 5, 1767225600])), max_size=5
    ),
    max_size=6,
)


numbers = st.one_of(st.integers(-(10**320), 10**320), st.floats(), st.sampled_from([1e308, 10**308, 2**63, -1, True]))
words = st.one_of(st.text(max_size=8), st.just("\ud800"), st.just("x" * 200))
nearly = st.fixed_dictionaries(  # packs that are good but for a value or two: what gets furthest in
    {"bn": st.just("north/"), "n": st.sampled_from(["counts", "seq", "oldest", "life", "temperature", "battery"])},
    optional={"v": numbers, "t": numbers, "bt": st.one_of(numbers, st.just(1767225600)), "bv": numbers, "vs": words,
              "u": st.one_of(st.sampled_from(["Cel", "V"]), words)})  # fmt: skip
near_packs = st.lists(nearly, max_size=4).map(lambda more: json.dumps([*GOOD, *more]).encode())


@pytest.fixture(scope="module")
def book() -> Iterator[Book]:
    with open_book("sqlite::memory:") as opened:
        yield opened


@given(st.one_of(st.binary(max_size=200), records.map(lambda r: json.dumps(r).encode()), near_packs))
def test_no_payload_breaks_the_reader_or_the_book(book: Book, payload: bytes) -> None:
    try:
        found = read(payload)
    except WireError as error:
        assert str(error)
    else:
        assert np.isfinite(found.frame["raw"]).all() and (found.frame["seq"] >= 0).all()
        book.add("north", found.frame)


value = st.one_of(st.integers(-5, 70000), st.floats(allow_nan=False, width=32), st.just("x"), st.none(), st.booleans())
record = st.dictionaries(st.sampled_from(["n", "v", "u", "t", "vs", "bt"]), st.one_of(value, st.sampled_from(["counts", "seq", "temperature", "Cel", "dropped", "faults:link"])), max_size=5)  # fmt: skip
good_reading = st.tuples(
    st.integers(0, 3), st.integers(0, 40), st.integers(0, 60000), st.one_of(st.none(), st.floats(0, 30, width=32))
)


@given(st.lists(good_reading, max_size=5), st.lists(st.tuples(st.integers(0, 12), record), max_size=3), st.integers(-100, 100))
def test_the_quick_way_says_what_the_strict_way_says_or_nothing(
    readings: list[tuple], strange: list[tuple[int, dict]], later: int
) -> None:
    """Packs as a logger writes them, with records of any kind thrown in."""
    records: list[dict[str, object]] = [
        {"bn": "north/", "bt": int(NOW) - 50 + later, "n": "life", "vs": "k"},
        {"n": "oldest", "v": 0},
    ]
    at = 0
    for step, seq, raw, warm in readings:
        at += step
        t = {"t": at} if at else {}
        records += [
            {**t, "n": "counts", "v": raw},
            *([{**t, "n": "temperature", "u": "Cel", "v": warm}] if warm is not None else []),
            {**t, "n": "seq", "v": seq},
        ]
    for place, one in strange:
        records.insert(min(place, len(records)), one)
    payload, signal_of = json.dumps(records).encode(), lambda tank, when: "counts"
    plain = wire.quick("north", payload, signal_of, NOW)
    if plain is None:
        return
    careful = wire.strict("north", payload, signal_of, NOW)
    assert not careful.faults and (plain.life, plain.oldest, plain.said, plain.relative) == (
        careful.life,
        careful.oldest,
        careful.said,
        False,
    )
    assert repr(plain.rows) == repr(careful.rows)


def test_a_loggers_own_pack_goes_the_quick_way() -> None:
    rows = [(seq, 1767225600 + 60 * seq, 7000 + seq, 9.5, None, None, 3.6) for seq in range(3)]
    plain = wire.quick("north", senml.pack("north", "counts", "k", 0, rows).encode(), lambda tank, when: "counts", NOW)
    assert plain is not None and len(plain.rows) == 3 and plain.oldest == 0
