"""The spool: what add() returned stays, once, under one identity: over restarts, power cuts, faults and flipped bits."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import needs
import pytest
from hypothesis import given
from hypothesis import strategies as st
from ports import on_unix, on_wasm

from companion.intake.wire import decode
from core_mp import senml
from core_mp.spool import SIZE, Spool


def power_cuts(kind: str, what: str) -> str:
    return on_unix("tests/core_mp/power_cuts.py", kind, what).strip().splitlines()[-1]


@pytest.mark.parametrize("torn", ["clean", "torn"])
@pytest.mark.parametrize("kind", ["VfsLfs2", "VfsFat"])
def test_no_reading_is_lost_or_named_twice_whatever_write_the_power_fails_at(kind: str, torn: str) -> None:
    """Every operation of a session with turns and receipts, on the real LittleFS and FAT, the last write whole or half done."""
    assert int(re.findall(r"(\d+) cuts, 34 readings", power_cuts(kind, torn))[0]) > 90


@pytest.mark.parametrize("kind", ["VfsLfs2", "VfsFat"])
def test_a_flash_that_falters_once_keeps_each_reading_once(kind: str) -> None:
    """A fault at every operation in turn; the reading is added again, and must not stand twice."""
    assert int(re.findall(r"(\d+) readings added again", power_cuts(kind, "falter"))[0]) > 30


def test_a_reading_wears_the_flash_by_what_the_page_says() -> None:
    said = (needs.ROOT / "core_mp" / "README.md").read_text()
    for kind in ("VfsLfs2", "VfsFat"):
        writes, erasures = re.findall(r"reading: ([\d.]+), of them erasures: ([\d.]+)", power_cuts(kind, "wear"))[0]
        assert f"{float(writes):.1f}" in said and f"{float(erasures):.1f}" in said


SESSION = """
from core_mp.spool import Spool
spool = Spool("%s", 7, "a")
for n in range(40):
    spool.add(1767225600 + 60 * n, 7000 + n if n %% 3 else 0.25 * n, 9.5 if n %% 2 else None, None, None, 3.61, n %% 5 > 0)
    if n %% 4 == 0:
        spool.receipt("a", n - 3)
again = Spool("%s", 7)
for s in (spool, again):
    print(s.life, s.next_seq, s.oldest, s.dropped, s.last_time, list(s.waiting()))
"""


@pytest.mark.parametrize("port", ["unix", "wasm"])
def test_a_session_goes_the_same_way_on_micropython(tmp_path: Path, port: str) -> None:
    for name in "ab":
        (tmp_path / name).mkdir()
    here = (
        on_unix("-c", SESSION % (tmp_path / "a", tmp_path / "a"))
        if port == "unix"
        else on_wasm(SESSION % ("/tmp", "/tmp"), "spool")
    )
    there = subprocess.run(
        [sys.executable, "-c", SESSION % (tmp_path / "b", tmp_path / "b")], cwd=needs.ROOT, capture_output=True, text=True
    )
    assert here.strip() == there.stdout.strip() and len(here.splitlines()) == 2


def fill(spool: Spool, first: int, n: int) -> list[int]:
    return [spool.add(1767225600 + 60 * k, 7000 + k, 9.5, None, None, 3.6) for k in range(first, first + n)]


def seqs(spool: Spool) -> list[int]:
    return [reading[0] for reading in list(spool.waiting())]


def test_readings_wait_until_their_receipt(tmp_path: Path) -> None:
    spool = Spool(str(tmp_path), 100)
    assert fill(spool, 0, 10) == list(range(10)) and seqs(spool) == list(range(10))
    spool.receipt(spool.life, 6)
    assert seqs(spool) == [7, 8, 9] and spool.oldest == 7
    spool.receipt("other", 9)
    spool.receipt(spool.life, 3)
    assert seqs(spool) == [7, 8, 9]
    spool.receipt(spool.life, 10**6)
    assert seqs(spool) == [] and spool.oldest == spool.next_seq == 10


def test_a_restart_goes_on_in_the_same_life_with_the_next_seq(tmp_path: Path) -> None:
    spool = Spool(str(tmp_path), 8)
    fill(spool, 0, 13)
    again = Spool(str(tmp_path), 8)
    assert again.life == spool.life and again.next_seq == 13 and seqs(again) == list(range(13))
    assert fill(again, 13, 1) == [13]


def test_lives_differ(tmp_path: Path) -> None:
    for name in "ab":
        (tmp_path / name).mkdir()
    assert Spool(str(tmp_path / "a")).life != Spool(str(tmp_path / "b")).life


def test_when_it_is_full_the_oldest_go_first_and_are_counted(tmp_path: Path) -> None:
    spool = Spool(str(tmp_path), 10)
    fill(spool, 0, 35)
    assert seqs(spool) == list(range(20, 35)) and spool.dropped == 20 and spool.oldest == 20
    assert Spool(str(tmp_path), 10).dropped == 20
    spool.receipt(spool.life, 34)
    fill(spool, 35, 30)
    assert spool.dropped == 35 and spool.next_seq == 65  # 35 to 49 went without receipt


def test_values_survive_to_the_book_as_they_were(tmp_path: Path) -> None:
    spool = Spool(str(tmp_path))
    spool.add(1767225600, -(2**31), 9.5, 98012.0, 150.0, 3.612)
    spool.add(1767225660, 0.0123)
    text = senml.pack("north", "counts", spool.life, spool.oldest, list(spool.waiting()))
    frame = decode("levelbook/north/readings", text.encode(), lambda tank, when: "counts").frame
    assert frame["raw"].tolist() == [-(2.0**31), pytest.approx(0.0123, rel=1e-7)]
    assert frame[["temperature_c", "barometer_pa", "headspace_pa", "battery_v"]].iloc[0].tolist() == [
        9.5,
        98012.0,
        150.0,
        3.612,
    ]
    assert frame["temperature_c"].isna().tolist() == [False, True]


steps = st.lists(
    st.one_of(
        st.tuples(st.just("add"), st.integers(1, 9)), st.tuples(st.just("receipt"), st.integers(0, 60)), st.just(("restart", 0))
    ),
    max_size=25,
)


@given(steps)
def test_any_course_of_events_keeps_order_and_identity(
    tmp_path_factory: pytest.TempPathFactory, steps: list[tuple[str, int]]
) -> None:
    folder = str(tmp_path_factory.mktemp("spool"))
    spool, added, kept = Spool(folder, 7), 0, -1
    for what, n in steps:
        if what == "add":
            assert fill(spool, added, n) == list(range(added, added + n))
            added += n
        elif what == "receipt":
            spool.receipt(spool.life, n)
            kept = max(kept, min(n, added - 1))
        else:
            spool, kept = Spool(folder, 7), -1  # receipts are not written down: what was receipted is offered again
        held = seqs(spool)
        assert held == list(range(spool.oldest, added)) and spool.oldest > kept
        assert len(held) >= min(7, added - 1 - kept) and all(
            reading[2] == 7000 + reading[0] for reading in list(spool.waiting())
        )


@given(
    st.integers(0, 40), st.lists(st.tuples(st.integers(0, 1), st.integers(0, 10**6), st.integers(0, 7)), min_size=1, max_size=3)
)
def test_flipped_bits_cost_no_more_than_the_readings_they_hit(
    tmp_path_factory, n: int, flips: list[tuple[int, int, int]]
) -> None:
    folder = tmp_path_factory.mktemp("flip")
    spool = Spool(str(folder), 9)
    fill(spool, 0, n)
    before = {reading[0]: reading for reading in list(spool.waiting())}
    hit = set()
    for file, place, bit in flips:
        path = folder / f"spool.{file}"
        data = bytearray(path.read_bytes()) if path.exists() else b""
        if data:
            data[place % len(data)] ^= 1 << bit
            path.write_bytes(data)
            hit.add((file, place % len(data) // SIZE))
    again = Spool(str(folder), 9)
    held = {reading[0]: reading for reading in list(again.waiting())}
    if again.life == spool.life:
        assert all(before[seq] == reading for seq, reading in held.items())
        assert len(held) >= len(before) - len(hit)
        assert again.add(1, 2) not in before  # a seq is not given twice in one life
    else:
        assert len({file for file, slot in hit if slot == 0}) >= 1  # only where no header was left whole
        assert again.next_seq == 0 and not held


def test_a_folder_that_cannot_be_written_is_an_error_and_not_a_silence(tmp_path: Path) -> None:
    with pytest.raises(OSError):
        Spool(str(tmp_path / "nowhere"))
