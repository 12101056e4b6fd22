"""The trend: a tank's level, volume and hydraulic grade against local time, as PNG, SVG or PDF.

Gaps are gaps, limits are drawn and named where they run, and what is wrong with readings stands in words beside a mark of
its own shape, so that the picture can be read in grey.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

import matplotlib as mpl
import matplotlib.dates as mdates
import numpy as np
import numpy.typing as npt
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from companion.book.files import FileFault
from companion.papers.remarks import spoken
from companion.settings.site import Site
from companion.settings.tank import TankSettings
from core_mp import status as bits

Column = npt.NDArray[np.float64]

SUFFIXES = (".png", ".svg", ".pdf")
COLUMNS = 1600  # of the picture's width: a longer line is thinned to the lowest and highest reading in each
GAP = 3.0  # usual intervals without a reading that are shown as a gap
DAY_S = 86400.0
CAUTION = "levelbook is no protection system: overfill protection, tank entry and work at height follow local codes."

INK, WATER, PALE, GRID, ALERT = "#22313a", "#2a6f8a", "#dbe8ec", "#d9dee0", "#9a3b12"
MARKS = {
    bits.LOOP_LOW: "v", bits.LOOP_HIGH: "^", bits.NO_READING: "x", bits.UNDER_RANGE: "1", bits.OVER_RANGE: "2", bits.DRY: "s",
    bits.BELOW_TABLE: "<", bits.ABOVE_TABLE: ">", bits.NO_BAROMETER: "D", bits.NO_TEMPERATURE: "o",
}  # fmt: skip


@dataclass(frozen=True)
class Quantity:
    """One panel: the figures' column, what it is called, its unit for people and the factor to it."""

    column: str
    doubt: str
    word: str
    unit: str
    factor: float


METRIC = (Quantity("level_m", "level_u95_m", "Level", "m", 1.0), Quantity("volume_m3", "volume_u95_m3", "Volume", "m³", 1.0),
          Quantity("grade_m", "grade_u95_m", "Hydraulic grade", "m", 1.0))  # fmt: skip
US = (Quantity("level_m", "level_u95_m", "Level", "ft", 1 / 0.3048),
      Quantity("volume_m3", "volume_u95_m3", "Volume", "US kgal", 1 / 3.785411784),
      Quantity("grade_m", "grade_u95_m", "Hydraulic grade", "ft", 1 / 0.3048))  # fmt: skip


def draw_trend(site: Site, tank: TankSettings, figures: pd.DataFrame, start: datetime, end: datetime, path: Path) -> None:
    """Draw the figures of a tank from start to end (UTC) to path, by its suffix. FileFault for another suffix or folder.

    figures: as companion.figures.convert gives them, in order of time.
    """
    if path.suffix.lower() not in SUFFIXES:
        raise FileFault(f"{path}: a picture ends in {', '.join(SUFFIXES)}; name it so")
    if not path.parent.is_dir():
        raise FileFault(f"{path}: the folder {path.parent} does not exist; make it, or name another")
    summary = summary_of(site, tank, figures, start, end)
    figure = _figure(site, tank, figures, start, end, summary)
    waiting = path.with_name(f".{path.stem}.{os.getpid()}.part{path.suffix}")
    try:
        with mpl.rc_context({"svg.hashsalt": "levelbook", "svg.fonttype": "none", "pdf.fonttype": 42}):
            figure.savefig(waiting, dpi=120, metadata=_metadata(path.suffix.lower(), tank, summary))
        os.replace(waiting, path)
    finally:
        waiting.unlink(missing_ok=True)


def summary_of(site: Site, tank: TankSettings, figures: pd.DataFrame, start: datetime, end: datetime) -> str:
    """The picture in a sentence, for those who do not see it."""
    level = _panels(site)[0]
    values = figures["level_m"].to_numpy(float) * level.factor
    span = f"{_local(start, site):%Y-%m-%d %H:%M} to {_local(end, site):%Y-%m-%d %H:%M} {site.timezone.key}"
    if not np.isfinite(values).any():
        return f"{tank.title}, {span}: no readings with a level"
    last = values[np.isfinite(values)][-1]
    return (
        f"{tank.title}, {span}: {len(figures):,} readings, level {np.nanmin(values):.2f} to {np.nanmax(values):.2f} {level.unit}, "
        f"last {last:.2f} {level.unit}"
    )


def _figure(site: Site, tank: TankSettings, figures: pd.DataFrame, start: datetime, end: datetime, summary: str) -> Figure:
    flags = _flags(figures)
    strip = 0.32 * len(flags)
    figure = Figure(figsize=(11.0, 7.2 + strip), facecolor="white", layout="constrained")
    FigureCanvasAgg(figure)
    rows = 4 if flags else 3
    ratios = [3.0, strip * 0.78, 1.7, 1.7] if flags else [3.0, 1.7, 1.7]
    axes = figure.subplots(rows, 1, sharex=True, height_ratios=ratios)
    panels = [axes[0], *axes[rows - 2 :]]
    time = mdates.date2num(figures["time"].dt.tz_localize(None).to_numpy()) if len(figures) else np.empty(0)
    gaps = list(_gaps(time, start, end))
    for axis, quantity in zip(panels, _panels(site), strict=True):
        _panel(axis, site, quantity, time, figures)
        _shade(axis, gaps, named=axis is panels[0], width=_days(start, end))
    _limits(panels[0], tank, _panels(site)[0])
    if flags:
        _strip(axes[1], time, figures["status"].to_numpy(), flags)
    _time_axis(axes[-1], site, start, end)
    figure.suptitle(f"{tank.title}    {summary.split(', ', 1)[1]}", x=0.01, ha="left", fontsize=11, color=INK)
    figure.supxlabel(CAUTION, x=0.01, ha="left", fontsize=7, color="#5a6870")
    return figure


def _panels(site: Site) -> tuple[Quantity, ...]:
    return US if site.units == "us" else METRIC


def _panel(axis: Axes, site: Site, quantity: Quantity, time: Column, figures: pd.DataFrame) -> None:
    values = figures[quantity.column].to_numpy(float) * quantity.factor
    doubts = figures[quantity.doubt].to_numpy(float) * quantity.factor
    x, y, u = thinned(time, values, doubts)
    axis.plot(x, y, color=WATER, linewidth=1.1, solid_joinstyle="round")
    alone = np.isfinite(y) & ~np.isfinite(np.roll(y, 1)) & ~np.isfinite(np.roll(y, -1))
    axis.plot(x[alone], y[alone], ".", color=WATER, markersize=4)
    if np.isfinite(u).any():
        axis.fill_between(x, y - u, y + u, color=WATER, alpha=0.18, linewidth=0)
        axis.set_title(f"± {float(np.nanmedian(doubts)):.2g} {quantity.unit} (95 %)", loc="right", fontsize=8, color=INK, pad=2)
    if not np.isfinite(values).any():
        axis.text(0.5, 0.5, "no readings", transform=axis.transAxes, ha="center", va="center", color=INK)
        axis.set_yticks([])
    on = f"\n(on {site.datum})" if quantity.column == "grade_m" else ""
    axis.set_ylabel(f"{quantity.word} [{quantity.unit}]{on}", color=INK, fontsize=9)
    axis.grid(color=GRID, linewidth=0.6)
    axis.tick_params(colors=INK, labelsize=9)
    axis.ticklabel_format(axis="y", useOffset=False, style="plain")
    for side in ("top", "right"):
        axis.spines[side].set_visible(False)


def _limits(axis: Axes, tank: TankSettings, quantity: Quantity) -> None:
    """Overflow, high and low level, each named on its own line."""
    lines = (("overflow", tank.overflow_level_m, (0, (6, 2)), ALERT), ("high", tank.high_level_m, (0, (2, 2)), INK),
             ("low", tank.low_level_m, (0, (1, 2)), ALERT))  # fmt: skip
    for word, level, dashes, colour in lines:
        if level is None:
            continue
        value = level * quantity.factor
        axis.axhline(value, color=colour, linewidth=1.2, linestyle=dashes)
        axis.annotate(f"{word} {value:.2f} {quantity.unit}", (0.004, value), xycoords=("axes fraction", "data"), xytext=(0, -2 if word == "high" else 2),
                      textcoords="offset points", fontsize=8, color=colour, va="top" if word == "high" else "bottom")  # fmt: skip
    axis.margins(y=0.08)


def _flags(figures: pd.DataFrame) -> list[int]:
    """Status bits that some reading has, faults first; a default temperature that always serves is no news."""
    status = figures["status"].to_numpy()
    order = [bit for bit in MARKS if ((status & bit) != 0).any()]
    usable = (status & bits.FAULT) == 0
    return [bit for bit in order if bit != bits.NO_TEMPERATURE or not ((status & bit) != 0)[usable].all()]


def _strip(axis: Axes, time: Column, status: npt.NDArray[np.int64], flags: list[int]) -> None:
    """One row a status word: a bar while it lasts, and its mark where it begins."""
    width = np.median(np.diff(time)) if len(time) > 1 else 1.0 / 1440.0
    for row, bit in enumerate(reversed(flags)):
        hit = np.flatnonzero((status & bit) != 0)
        runs = np.split(hit, np.flatnonzero(np.diff(hit) > 1) + 1)
        first, last = np.array([time[run[0]] for run in runs]), np.array([time[run[-1]] for run in runs])
        axis.hlines([row] * len(runs), first, last + width, color=ALERT, linewidth=3)
        axis.plot(first, [row] * len(runs), MARKS[bit], color=ALERT, markersize=5)
    axis.set_yticks(range(len(flags)), [bits.words(bit) for bit in reversed(flags)], fontsize=8, color=INK)
    axis.set_ylim(-0.6, len(flags) - 0.4)
    axis.tick_params(axis="y", length=0)
    for side in ("top", "right", "bottom"):
        axis.spines[side].set_visible(False)
    axis.set_facecolor("#fbf7f4")


def _gaps(time: Column, start: datetime, end: datetime) -> Iterator[tuple[float, float]]:
    """Stretches without readings [days], in the asked time and longer than GAP usual intervals."""
    if not len(time):
        return
    usual = float(np.median(np.diff(time))) if len(time) > 1 else 1.0 / 1440.0
    edges = np.concatenate([[mdates.date2num(start.replace(tzinfo=None))], time, [mdates.date2num(end.replace(tzinfo=None))]])
    for n in np.flatnonzero(np.diff(edges) > GAP * usual):
        yield float(edges[n]), float(edges[n + 1])


def _shade(axis: Axes, gaps: list[tuple[float, float]], named: bool, width: float) -> None:
    for a, b in gaps:
        axis.axvspan(a, b, facecolor="#f3f3f1", edgecolor="#b9bfc2", hatch="////", linewidth=0, zorder=0)
        if named and b - a > 0.03 * width:
            axis.text((a + b) / 2, 0.5, f"no readings\n{spoken((b - a) * DAY_S)}", transform=axis.get_xaxis_transform(), ha="center",
                      va="center", fontsize=8, color=INK, rotation=90 if b - a < 0.12 * width else 0)  # fmt: skip


def _time_axis(axis: Axes, site: Site, start: datetime, end: datetime) -> None:
    locator = mdates.AutoDateLocator(tz=site.timezone, minticks=4, maxticks=10)
    axis.xaxis.set_major_locator(locator)
    axis.xaxis.set_major_formatter(mdates.ConciseDateFormatter(locator, tz=site.timezone))
    axis.set_xlim(mdates.date2num(start.replace(tzinfo=None)), mdates.date2num(end.replace(tzinfo=None)))
    shift = _local(end, site).utcoffset() != _local(start, site).utcoffset()
    note = "; clocks change in this time" if shift else ""
    axis.set_xlabel(f"Local time, {site.timezone.key} (UTC{_local(end, site):%z}{note})", color=INK, fontsize=9)


def thinned(time: Column, values: Column, doubts: Column) -> tuple[Column, Column, Column]:
    """The line as drawn: NaN where readings are missing, and of a long line the lowest and highest reading of each column.

    time [days], values and doubts have shape (n,); so has what is returned, with another n. No spike is lost.
    """
    n = len(time)
    if n > 4 * COLUMNS:
        column = ((time - time[0]) / (time[-1] - time[0]) * COLUMNS).astype(int)
        edges = np.flatnonzero(np.diff(column, prepend=-1))
        low = np.minimum.reduceat(np.where(np.isfinite(values), values, np.inf), edges)
        high = np.maximum.reduceat(np.where(np.isfinite(values), values, -np.inf), edges)
        size = np.diff(np.append(edges, n))
        usual = np.median(np.diff(time))
        broken = np.diff(time, prepend=time[0]) > GAP * usual
        keep = broken | np.roll(broken, -1)
        for marked in (values == np.repeat(low, size), values == np.repeat(high, size), ~np.isfinite(values)):
            place = np.flatnonzero(marked)
            keep[place[np.flatnonzero(np.diff(column[place], prepend=-1))]] = True
        time, values, doubts = time[keep], values[keep], doubts[keep]
        gap = np.flatnonzero(broken[keep])
    else:
        gap = np.flatnonzero(np.diff(time) > GAP * np.median(np.diff(time))) + 1 if n > 1 else np.empty(0, int)
    middle = (time[gap - 1] + time[gap]) / 2.0
    return np.insert(time, gap, middle), np.insert(values, gap, np.nan), np.insert(doubts, gap, np.nan)


def _metadata(suffix: str, tank: TankSettings, summary: str) -> dict[str, Any]:
    if suffix == ".svg":
        return {"Title": tank.title, "Description": summary, "Date": None, "Creator": "levelbook"}
    if suffix == ".pdf":
        return {"Title": tank.title, "Subject": summary, "Creator": "levelbook", "CreationDate": None}
    return {"Title": tank.title, "Description": summary, "Software": "levelbook"}


def _local(at: datetime, site: Site) -> datetime:
    return at.astimezone(site.timezone)


def _days(start: datetime, end: datetime) -> float:
    return (end - start).total_seconds() / DAY_S
