"""What is promised to be fast or small, measured against a named ceiling in the same run: `make bench`.

Times are ratios, since machines are noisy: each side is run in turn several times and the fastest of each is taken.
"""

from __future__ import annotations

import sys
import tempfile
import time
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pandas as pd

ROOT = Path(__file__).parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "tests"), str(ROOT / "tests" / "core_mp")]


def against(ours: Callable[[], object], ceiling: Callable[[], object], rounds: int = 5) -> tuple[float, float]:
    """Fastest seconds of each, run in turn."""
    best = [float("inf")] * 2
    for _ in range(rounds):
        for n, run in enumerate((ours, ceiling)):
            start = time.perf_counter()
            run()
            best[n] = min(best[n], time.perf_counter() - start)
    return best[0], best[1]


def tell(what: str, ours: float, ceiling: float, goal: float, note: str = "") -> None:
    ratio = ours / ceiling
    mark = "ok" if ratio <= goal else "OVER"
    print(f"{what:<62} {ratio:6.2f} of the ceiling, goal {goal:g}: {mark} ({ours:.3f} s, {ceiling:.3f} s{note})", flush=True)


def bench_site(folder: Path):
    """A tank with a table of 1,000 rows, 4-20 mA gauge sensor, vent above it."""
    from sites import site_of

    rows = [f"{1000 * x!r},{1000 * (50 * x + x**2.5)!r}" for x in np.linspace(0, 10, 1000).tolist()]
    return site_of(folder, table="level [mm],volume [L]\n" + "\n".join(rows) + "\n").tank("north")


def readings(n: int) -> pd.DataFrame:
    """One-minute readings of a tank that fills and empties twice a day, with temperature and barometer."""
    from companion.book.readings import frame_of

    rng = np.random.default_rng(1)
    minute = np.arange(n)
    raw = np.round(18000 + 9000 * np.sin(minute / 720 * 2 * np.pi) + 6 * rng.standard_normal(n))
    return frame_of(np.datetime64("2026-01-01T00:00:00") + minute * np.timedelta64(60, "s"), raw, life="b", seq=minute,
                    temperature_c=np.round(10 + 2 * np.sin(minute / 1440), 1), barometer_pa=np.round(97500 + 300 * np.sin(minute / 4000)))  # fmt: skip


def bench_columns(tank, n: int = 10_000_000) -> None:
    from companion.figures.convert import CHUNK, convert

    frame = readings(n)
    raw, t, b = (frame[name].to_numpy(float) for name in ("raw", "temperature_c", "barometer_pa"))
    period = tank.periods()[0]
    core, xs, ys = tank.core(period), period.strapping.levels_m, period.strapping.volumes_m3
    (air, rise), g, span = core.air, core.gravity, 1e5 / (32767 - 6553)

    def expression(raw: np.ndarray, t: np.ndarray, b: np.ndarray) -> tuple[np.ndarray, ...]:
        p = (raw - 6553) * span
        rho = 999.97495 - (t - 3.983035) ** 2 * (t + 301.797) / (522.542 * (t + 69.34881))
        rho = rho + rho * (0.5 * p) * (50.74e-11 + t * (0.00416e-11 * t - 0.326e-11))
        a = air * b
        level = 0.1 + (p + a * rise) / (g * rho - a)
        return p, level, np.interp(level, xs, ys), 100.0 + level

    def whole() -> None:
        expression(raw, t, b)

    def chunked() -> None:
        out = np.empty((4, n))
        for start in range(0, n, CHUNK):
            at = slice(start, start + CHUNK)
            out[:, at] = expression(raw[at], t[at], b[at])

    some = frame.iloc[:50_000]
    level = expression(raw[:50_000], t[:50_000], b[:50_000])[1]
    assert np.allclose(convert(tank, some, doubts=False)["level_m"], level, rtol=0, atol=1e-9), "the two sides differ"
    ours, ceiling = against(lambda: convert(tank, frame, doubts=False), whole, 3)
    tell("columns: 10 M readings, against the bare expression, whole", ours, ceiling, 1.5)
    ours, ceiling = against(lambda: convert(tank, frame, doubts=False), chunked, 3)
    tell("columns: the same, against the bare expression in our chunks", ours, ceiling, 1.5)
    ours, _ = against(lambda: convert(tank, frame), lambda: None, 2)
    tell("columns: with 95 % uncertainties, in chunks", ours, ceiling, 3.0)


def bench_file(tank, folder: Path) -> None:
    from companion.book.readings import read_csv
    from companion.figures.convert import convert
    from companion.figures.table import write_figures

    frame = readings(525_600)
    source = folder / "year.csv"
    text = pd.DataFrame({"time": frame["time"].dt.strftime("%Y-%m-%dT%H:%M:%SZ"), "raw": frame["raw"].astype(int),
                         "temperature_degC": frame["temperature_c"], "barometer_Pa": frame["barometer_pa"]})  # fmt: skip
    text.to_csv(source, index=False)

    def ours() -> None:
        write_figures(folder / "out.csv", convert(tank, read_csv(source)[0]))

    def parsed() -> None:
        pd.read_csv(source, parse_dates=["time"]).to_csv(folder / "back.csv", index=False)

    def as_text() -> None:
        pd.read_csv(source).to_csv(folder / "back.csv", index=False)

    took, ceiling = against(ours, parsed, 3)
    tell("convert a 525,600-row CSV, against pandas read and write", took, ceiling, 2.0)
    took, ceiling = against(ours, as_text, 3)
    tell("convert the same, against pandas with times left as text", took, ceiling, 2.0)


def bench_board() -> None:
    import test_engines

    mean, worst, heap, _ = test_engines.board_day()
    tell("board: instructions of a mean reading, of 25,000", mean / 1e6, 25_000 / 1e6, 1.0, " are millions of instructions")
    tell("board: instructions of the worst reading, of 25,000", worst / 1e6, 25_000 / 1e6, 3.0, " are millions of instructions")
    print(f"{'board: heap a reading':<62} {heap} bytes, goal 0")
    print(f"{'board: heap free with the core and 40 rows loaded':<62} {test_engines.board_heap()} bytes, goal 4,500")
    ten, thousand = (test_engines.board_lookup(rows) for rows in (10, 1000))
    tell("board: a look-up in 1,000 rows, against one in 10", thousand / 1e6, ten / 1e6, 1.5, " are millions of instructions")


def bench_book(folder: Path) -> None:
    """A tank's year from sealed days into figures, against sqlite3 fetching the same rows from a plain table; bytes a reading."""
    import sqlite3

    from sites import site_of

    from companion.book.store import open_book
    from companion.figures.convert import convert

    frame = readings(525_600)
    with open_book(f"sqlite:{folder}/year.db") as book:
        book.add("north", frame)
        plain = sqlite3.connect(folder / "plain.db")
        plain.execute(
            "CREATE TABLE reading (life TEXT, seq INTEGER, time_us INTEGER, raw REAL, temperature_c REAL, barometer_pa REAL, headspace_pa REAL, battery_v REAL)"
        )
        plain.executemany("INSERT INTO reading VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
                          zip(frame["life"], frame["seq"].tolist(), frame["time"].astype("int64").tolist(), *(frame[name].tolist() for name in list(frame)[1:6]), strict=True))  # fmt: skip
        plain.commit()
        book.seal(datetime(2027, 2, 1, tzinfo=UTC))
        size = book.engine.execute("SELECT sum(length(blob)) FROM sealed_day").fetchone()[0]
        tank = site_of(folder).tank("north")
        ours, ceiling = against(
            lambda: convert(tank, book.readings("north"), doubts=False),
            lambda: plain.execute("SELECT * FROM reading").fetchall(),
            3,
        )
    tell("book: a year of sealed days into figures, against a plain fetch", ours, ceiling, 0.25)
    print(f"{'book: a reading in a sealed day':<62} {size / len(frame):.2f} bytes, goal 8")


def bench_listen(folder: Path, packs: int, each: int) -> float:
    """Packs a second into SQLite, acknowledged after the commit, against a paho-mqtt subscriber that counts and throws away; both drain
    a backlog of the same mosquitto. Returns readings a second.
    """
    import threading

    import paho.mqtt.client as mqtt
    from paho.mqtt.enums import CallbackAPIVersion
    from sites import SITE, site_of

    from companion.field.broker import local_broker
    from companion.intake.connect import session_name
    from companion.intake.listen import Listener
    from core_mp import senml

    def client(name: str, **told: object) -> mqtt.Client:
        one = mqtt.Client(CallbackAPIVersion.VERSION2, name, clean_session=False)
        for key, value in told.items():
            setattr(one, key, value)
        one.max_inflight_messages_set(1000)
        one.connect("127.0.0.1", broker.port)
        one.loop_start()
        return one

    def fill(name: str) -> None:
        ready = threading.Event()
        absent = client(
            name, on_connect=lambda c, *_: c.subscribe("levelbook/+/readings", 1), on_subscribe=lambda *_: ready.set()
        )
        ready.wait(10)
        absent.disconnect()
        absent.loop_stop()
        logger = client("logger")
        for n in range(packs):
            rows = [
                (seq, 1767225600 + 60 * seq, 7000 + seq % 900, 9.5, None, None, 3.6) for seq in range(n * each, (n + 1) * each)
            ]
            last = logger.publish("levelbook/north/readings", senml.pack("north", "counts", "k", 0, rows), qos=1)
        last.wait_for_publish(60)
        logger.disconnect()
        logger.loop_stop()

    with local_broker(program="mosquitto") as broker:
        (folder / f"listen{each}").mkdir()
        site = site_of(folder / f"listen{each}", SITE + f"[mqtt]\nport = {broker.port}\n")
        fill("counter")
        got, done = [0], threading.Event()

        def count(*_: object) -> None:
            got[0] += 1
            if got[0] == packs:
                done.set()

        start = time.perf_counter()
        counter = client("counter", on_message=count)
        done.wait(120)
        ceiling = time.perf_counter() - start
        counter.disconnect()
        counter.loop_stop()
        fill(session_name(site))
        listener, stop = Listener(site, lambda line: None), threading.Event()
        thread = threading.Thread(target=listener.run, args=(stop,))
        start = time.perf_counter()
        thread.start()
        while listener.tally.packs < packs:
            time.sleep(0.005)
        ours = time.perf_counter() - start
        stop.set()
        thread.join()
    tell(f"listen: {packs:,} packs of {each} into SQLite, against counting them", ours, ceiling, 1.0)
    return packs * each / ours


def main() -> None:
    with tempfile.TemporaryDirectory() as name:
        tank = bench_site(Path(name))
        bench_columns(tank)
        bench_file(tank, Path(name))
        bench_book(Path(name))
        one, ten = bench_listen(Path(name), 20_000, 1), bench_listen(Path(name), 5_000, 10)
        print(f"{'listen: readings a second in packs of ten, against packs of one':<62} {ten / one:6.2f} times, goal 5")
    bench_board()


if __name__ == "__main__":
    main()
