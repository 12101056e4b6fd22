"""Figures as people exchange them: the CSV of contract figures."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from companion.book.files import aside, rfc3339, write_csv
from companion.figures.convert import DOUBTS, FIGURES
from core_mp import status as bits

HEADER = "time,status,pressure_Pa,level_m,volume_m3,grade_m,level_u95_m,volume_u95_m3,grade_u95_m"
ROW = "%s,%s,%.2f,%.4f,%.4f,%.4f,%.4f,%.4f,%.4f"


def write_figures(path: str | Path, figures: pd.DataFrame) -> None:
    """Write figures as CSV ("-": standard output): times in UTC, status in words, NaN where there is no number."""
    times = rfc3339(figures["time"].to_numpy(dtype="datetime64[us]"))
    numbers = [figures[name].to_numpy(float) for name in FIGURES + DOUBTS]
    with aside(path) as file:
        write_csv(file, HEADER, ROW, [times, status_words(figures["status"].to_numpy()), *numbers])


def status_words(status: np.ndarray) -> np.ndarray:
    """Status bits, shape (n,), as words, shape (n,)."""
    kinds, which = np.unique(status, return_inverse=True)
    return np.array([bits.words(int(kind)) for kind in kinds], dtype=object)[which]
