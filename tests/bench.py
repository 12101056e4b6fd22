"""What is promised to be fast or small, measured against a named ceiling in the same run: `make bench`.

Times are ratios, since machines are noisy: each side is run in turn several times and the fastest of each is taken.
"""

from __future__ import annotations

import sys
import tempfile
import time
from collections.abc import Callable
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
    (air, rise), g, span = core.air, core.filling[2], 1e5 / (32767 - 6553)

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


def main() -> None:
    with tempfile.TemporaryDirectory() as name:
        tank = bench_site(Path(name))
        bench_columns(tank)
        bench_file(tank, Path(name))
    bench_board()


if __name__ == "__main__":
    main()
