"""The logger's loop, second by second: what it samples, says, keeps and lets go, whatever fails. On real MQTT: test_field_day.py."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path

import pytest
from boards import board

from companion.intake.wire import Pack, decode
from core_mp.clock import Clock
from core_mp.logger import Logger
from core_mp.settings import Settings
from core_mp.spool import Spool

NOW = 1767225600


class Link:
    """A client that keeps what it was told, or fails: for faults that a real broker does not give on demand."""

    def __init__(self) -> None:
        self.said: list[tuple[str, bytes]] = []
        self.inbox: list[tuple[str, bytes]] = []
        self.down = False
        self.pings = self.left = 0

    def _try(self, *_: object) -> None:
        if self.down:
            raise OSError("down")

    connect = subscribe = _try

    def publish(self, topic: str, payload: bytes, retain: bool = False) -> None:
        self._try()
        self.said.append((topic, bytes(payload) if not isinstance(payload, str) else payload.encode()))

    def ping(self) -> None:
        self._try()
        self.pings += 1

    def messages(self, wait_ms: int = 0) -> list[tuple[str, bytes]]:
        self._try()
        inbox, self.inbox = self.inbox, []
        return inbox

    def leave(self) -> None:
        self.left += 1


class Bench:
    """A logger on a bench: its sensor, clock, link and watchdog in the test's hand."""

    def __init__(self, folder: Path, **changed: object) -> None:
        self.folder = board(folder, **changed)
        self.raw: list[object] = [12000]
        self.ms, self.fed = 0, 0
        self.time: int | None = NOW
        self.link = Link()
        self.network: object = None
        self.begin()

    def begin(self, life: str = "a", records: int = 100) -> None:
        """The board starts."""
        self.spool = Spool(str(self.folder), records, life)
        self.clock = Clock(lambda: self.ms, self.ask, self.spool.last_time)
        self.logger = Logger(Settings(str(self.folder)), self.spool, self.clock, self.link, self, self.network, self, 1024)

    def read(self) -> tuple[object, ...]:
        raw = self.raw.pop(0) if len(self.raw) > 1 else self.raw[0]
        if raw is None:
            raise OSError("the converter does not answer")
        return raw, 9.5, None, None, None

    def feed(self) -> None:
        self.fed += 1

    def ask(self) -> int:
        if self.time is None:
            raise OSError("no answer")
        return self.time

    def run(self, seconds: int) -> None:
        for _ in range(seconds):
            self.logger.step()
            self.ms += 1000
            self.time = None if self.time is None else self.time + 1

    def hear(self, what: str, payload: object) -> None:
        self.link.inbox.append(
            (f"levelbook/north/{what}", payload if isinstance(payload, bytes) else json.dumps(payload).encode())
        )

    def receipt(self, seq: int) -> None:
        self.hear("kept", {"life": self.spool.life, "seq": seq})

    def packs(self) -> list[Pack]:
        sent = [(topic, payload) for topic, payload in self.link.said if topic.endswith("/readings")]
        assert all(len(payload) <= 1024 for _, payload in sent)
        packs = [decode(topic, payload, lambda tank, when: "counts", NOW + self.ms // 1000) for topic, payload in sent]
        assert not [pack.faults for pack in packs if pack.faults]
        return packs

    def said(self) -> dict[str, object]:
        """What the logger said of itself, the last of each."""
        return {name: value for pack in self.packs() for name, value in pack.said.items()}

    def waiting(self) -> list[tuple[object, ...]]:
        return list(self.spool.waiting())


@pytest.fixture
def bench(tmp_path: Path) -> Bench:
    return Bench(tmp_path)


def test_a_reading_is_the_median_of_five_samples(bench: Bench) -> None:
    bench.raw = [12000, 30000, 12002, 12001, 7000, 12003]
    bench.run(1)
    assert bench.waiting()[0][2] == 12001 and bench.logger.figures[0] == 0
    assert bench.logger.figures[2] == pytest.approx(0.1 + 20780.6 / 9795, abs=0.02)


def test_presence_is_said_and_the_watchdog_fed(bench: Bench) -> None:
    bench.run(3)
    assert ("levelbook/north/presence", b"online") in bench.link.said and bench.fed >= 3


def test_a_pack_is_sent_again_ever_more_rarely_until_its_receipt_and_then_let_go(bench: Bench) -> None:
    bench.run(59)
    sent = [pack for pack in bench.packs() if len(pack.frame)]
    assert len(sent) == 2 and sent[0].frame.equals(sent[1].frame)  # at 0 and 20 s; then 40 s later
    bench.hear("kept", {"life": "other", "seq": 9})
    bench.hear("kept", b"nonsense")
    bench.hear("kept", [1])
    bench.run(1)
    assert len(bench.waiting()) == 1 and bench.logger.troubles["link"] == 2
    bench.receipt(0)
    bench.run(2)
    bench.receipt(1)
    bench.run(100)
    assert bench.spool.oldest == 2 and bench.link.pings > 1  # the next report is due later
    assert bench.said()["faults:link"] == 2


def test_a_backlog_goes_out_in_packs_of_a_stated_size_without_waiting_for_each_receipt(bench: Bench) -> None:
    bench.link.down = True
    bench.run(60 * 40)
    bench.link.down = False
    bench.run(90)
    sent = [seq for pack in bench.packs() for seq in pack.frame["seq"]]
    assert sent[:40] == list(range(40)) and bench.spool.oldest == 0
    assert max(len(pack.frame) for pack in bench.packs()) < 10
    bench.receipt(39)
    bench.run(2)
    assert bench.spool.oldest == 40


def test_a_fast_change_and_a_change_of_status_are_reported_at_once(bench: Bench) -> None:
    bench.run(2)
    bench.receipt(0)
    bench.run(63)
    sent = len(bench.packs())
    bench.raw = [12000 + 140]  # 5.4 cm
    bench.run(60)
    assert len(bench.packs()) == sent + 1
    bench.receipt(2)
    bench.run(60)
    sent = len(bench.packs())
    bench.raw = [5000]  # a broken loop
    bench.run(60)
    assert len(bench.packs()) == sent + 1 and bench.logger.figures[0] & 1
    assert bench.packs()[-1].frame["raw"].iloc[-1] == 5000


def test_while_the_link_is_down_readings_wait_and_attempts_grow_rare(bench: Bench) -> None:
    bench.link.down = True
    bench.run(600)
    assert len(bench.waiting()) == 10 and 8 < bench.logger.troubles["link"] < 20
    bench.link.down = False
    bench.run(70)
    assert max(pack.frame["seq"].max() for pack in bench.packs()) == 11
    assert bench.said()["faults:link"] == bench.logger.troubles["link"]


def test_a_converter_that_does_not_answer_is_counted_and_told_and_the_loop_goes_on(bench: Bench) -> None:
    bench.run(2)
    bench.receipt(0)
    bench.raw = [None]
    bench.run(62)
    assert bench.said()["faults:sensor"] == 1 and not len(bench.packs()[-1].frame)
    bench.raw = [float("nan"), 12000, None, 12001, 12002, 12002]
    bench.run(60)
    assert [reading[2] for reading in bench.waiting()] == [12001]


def test_a_flash_that_takes_nothing_holds_readings_in_memory_and_loses_none_when_it_mends(
    bench: Bench, monkeypatch: pytest.MonkeyPatch
) -> None:
    add = bench.spool.add

    def full(*_: object) -> int:
        raise OSError(28)

    monkeypatch.setattr(bench.spool, "add", full)
    bench.run(60 * 20)
    assert not bench.waiting() and bench.logger.troubles["flash"] == 60
    monkeypatch.setattr(bench.spool, "add", add)
    bench.run(60)
    assert [reading[1] for reading in bench.waiting()][1:] == [NOW + 60 * n for n in range(1, 21)] and bench.spool.dropped == 0
    monkeypatch.setattr(bench.spool, "add", full)
    bench.run(60 * 33)
    assert bench.spool.dropped == 3


def test_where_the_desk_sends_no_receipts_the_brokers_word_lets_readings_go(tmp_path: Path) -> None:
    bench = Bench(tmp_path, receipts=0)
    bench.run(3)
    assert bench.spool.oldest == 1 and not bench.waiting()


def test_a_logger_that_does_not_stay_leaves_in_order_between_reports(tmp_path: Path) -> None:
    bench = Bench(tmp_path, stay=0)
    calls: list[str] = []
    bench.network = type("Wifi", (), {"up": lambda self: calls.append("up"), "down": lambda self: calls.append("down")})()
    bench.begin()
    bench.run(3)
    bench.receipt(0)
    bench.run(2)
    assert bench.link.left == 1 and calls == ["up", "down"] and not bench.logger.connected
    assert bench.logger.step() > 30  # to the next reading
    bench.run(290)
    assert calls == ["up", "down"]
    bench.run(10)
    assert calls[2:] == ["up"]
    bench.run(400)  # without a receipt it gives up until the next report
    assert calls[3:5] == ["down", "up"]


def test_rest_is_told_so_that_a_board_can_sleep(bench: Bench) -> None:
    assert bench.logger.step() <= 1
    bench.receipt(0)
    bench.run(3)
    assert 10 < bench.logger.step() <= 60


# Time


def test_a_reading_from_before_the_clock_was_known_gets_its_time_when_it_is(bench: Bench) -> None:
    bench.time, bench.link.down = None, True
    bench.run(200)
    assert [reading[7] for reading in bench.waiting()] == [False] * 4
    bench.time, bench.link.down = NOW + 200, False
    bench.run(70)
    times = {
        seq: time
        for pack in bench.packs()
        for seq, time in zip(pack.frame["seq"], pack.frame["time"].astype("int64") // 10**6, strict=True)
    }
    assert not any(pack.relative for pack in bench.packs()[1:])
    assert [times[seq] - NOW for seq in range(4)] == pytest.approx([0, 60, 120, 180], abs=1) or bench.packs()[0].relative


def test_a_logger_without_any_clock_says_how_long_ago(bench: Bench) -> None:
    bench.time, bench.link.down = None, True
    bench.run(200)
    bench.link.down = False
    bench.run(70)
    packs = [pack for pack in bench.packs() if len(pack.frame)]
    assert packs[0].relative and json.loads(bench.link.said[1][1])[0]["bt"] < 0
    gaps = packs[0].frame["time"].diff().dt.total_seconds().iloc[1:].unique().tolist()
    assert gaps == [60.0]
    bench.time = NOW  # a clock at last: what went out in relative time stays so, or it would stand twice
    bench.run(400)
    again = [pack for pack in bench.packs() if 0 in pack.frame["seq"].tolist()]
    assert len(again) > 1 and all(pack.relative for pack in again)
    assert bench.said()["faults:clock"] > 0


def test_readings_of_an_earlier_run_without_a_clock_are_never_told_in_the_future_nor_in_1970(bench: Bench) -> None:
    bench.time, bench.link.down = None, True
    bench.run(200)
    bench.ms = 0
    bench.begin()  # power was cut
    bench.run(100)
    bench.time, bench.link.down = NOW, False
    bench.run(100)
    frames = [pack.frame for pack in bench.packs() if len(pack.frame)]
    relative = [pack.relative for pack in bench.packs() if len(pack.frame)]
    assert relative[0] and not all(relative)
    for frame in frames:
        seconds = frame["time"].astype("int64") // 10**6 - NOW
        assert seconds.between(-500, 200).all()


def test_a_clock_that_jumps_is_doubted_until_it_insists(bench: Bench) -> None:
    bench.run(10)
    assert bench.clock.now() == NOW + 10 and bench.clock.doubts == 0
    bench.time = NOW + 10**6
    bench.clock._ask_at = 0
    bench.run(2)
    assert bench.clock.doubts == 1 and bench.clock.now() == NOW + 12 and bench.logger.troubles["clock"] == 1
    bench.run(60)
    assert bench.clock.now() == NOW + 72 and bench.clock.jumps == 0
    bench.run(130)  # asked again every minute: the third time it is believed
    assert bench.clock.jumps == 1 and abs(bench.clock.now() - bench.time) <= 1


def test_a_clock_that_is_out_of_its_mind_once_changes_nothing(bench: Bench) -> None:
    bench.run(10)
    for wrong in (0, NOW + 500, NOW - 10**8, NOW + 10**8):
        assert not bench.clock.hear(wrong)
    assert bench.clock.now() == NOW + 10 and bench.clock.jumps == 0
    assert bench.clock.hear(NOW + 12)  # an oscillator's drift


def test_ticks_that_begin_again_are_no_matter(tmp_path: Path) -> None:
    now = [2**30 - 500]
    clock = Clock(lambda: now[0] % 2**30)
    now[0] += 1500
    assert clock.seconds() == 1
    for _ in range(100):
        now[0] += 2**29
        clock.seconds()
    assert clock.seconds() == (1500 + 100 * 2**29) // 1000


# Settings from the desk


def signed(body: bytes) -> bytes:
    return hashlib.sha256(body).hexdigest().encode() + b"\n" + body


def settings(version: int = 2, **told: object) -> bytes:
    return signed(json.dumps({"tank": "north", "version": version} | told).encode())


def test_settings_of_the_desk_are_used_kept_and_told(bench: Bench) -> None:
    bench.run(2)
    bench.hear("settings", settings(every_s=10, line=[6300, 33000, 6500, 100.0, 3.9]))
    bench.run(2)
    assert bench.said()["settings"] == 2 and bench.logger.settings.values["every_s"] == 10
    bench.run(30)
    assert bench.waiting()[-1][0] >= 3 and bench.logger.figures[1] == pytest.approx(100.0 + 5500 * 3.9)
    bench.begin()
    assert bench.logger.settings.version == 2 and bench.logger.settings.values["every_s"] == 10
    bench.hear("settings", settings(every_s=10, line=[6300, 33000, 6500, 100.0, 3.9]))  # retained, at each connection
    bench.run(3)
    assert bench.logger.troubles["settings"] == 0


@pytest.mark.parametrize(
    ("message", "why"),
    [
        (b"", "hash"),
        (b"\xff" * 200, "hash"),
        (settings().replace(b"2}", b"3}"), "hash"),
        (settings(version=0), "older"),
        (settings(tank="south"), "not for this tank"),
        (settings(version=2.5), "version"),
        (settings(every_s=0), "every_s must be from 1 to 86400"),
        (settings(every_s="60"), "every_s"),
        (settings(every_s=True), "every_s"),
        (settings(report_s=1e9), "report_s"),
        (settings(line=[1, 2, 3]), "line must be 5 numbers"),
        (settings(line=[6000, 33000, 6500, 100.0, -3.9]), "rise"),
        (settings(line=[33000, 6000, 6500, 100.0, 3.9]), "rise"),
        (settings(limits=[5, 4, 3, 2, 1, 0]), "rise"),
        (settings(limits=[0, 40000, 41000, 42000, 43000, 65535]), "lie within limits"),
        (settings(host="elsewhere"), "unknown key"),
        (signed(b"[" * 3000), ""),
        (signed(b'{"a":' * 3000), ""),
        (signed(b"[]"), "not for this tank"),
        (signed(b"\xff\xfe"), ""),
    ],
)
def test_bad_settings_are_refused_whole_and_said_so(bench: Bench, message: bytes, why: str) -> None:
    bench.run(2)
    before = dict(bench.logger.settings.values)
    bench.hear("settings", message)
    bench.run(2)
    assert bench.logger.settings.values == before and bench.logger.settings.version == 1
    said = bench.said()
    assert why in said["refused"] and said["settings"] == 1 and said["faults:settings"] == 1
    bench.begin()
    bench.run(2)
    assert bench.logger.settings.version == 1


def test_a_power_cut_while_settings_are_written_leaves_those_in_use(bench: Bench) -> None:
    bench.run(1)
    bench.hear("settings", settings(2, every_s=10))
    bench.run(1)
    whole = settings(3, every_s=20)
    names = ("settings.0", "settings.1")
    other = next(name for name in names if not (bench.folder / name).exists())
    for cut in range(len(whole)):
        (bench.folder / other).write_bytes(whole[:cut])
        assert Settings(str(bench.folder)).values["every_s"] == 10
    (bench.folder / other).write_bytes(whole)
    assert Settings(str(bench.folder)).values["every_s"] == 20


def test_settings_that_the_flash_cannot_keep_are_refused(bench: Bench) -> None:
    for name in ("settings.0", "settings.1"):
        (bench.folder / name).mkdir()
    bench.hear("settings", settings(every_s=10))
    bench.run(2)
    assert bench.logger.settings.version == 1 and "flash" in bench.said()["refused"]
