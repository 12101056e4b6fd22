"""Files that people exchange: written whole or not at all.

`aside` opens a file beside its place and moves it there when all is written; `write_csv` prints columns as rows.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TextIO

import numpy as np
import numpy.typing as npt

ROWS_AT_ONCE = 50_000


class FileFault(Exception):
    """A file that cannot be read or written as it should; the message names it and says what to do."""


@contextmanager
def aside(path: str | Path) -> Iterator[TextIO]:
    """A text file that takes path's place only when the block ends well. "-" is standard output."""
    if str(path) == "-":
        yield sys.stdout
        sys.stdout.flush()
        return
    path = Path(path)
    if not path.parent.is_dir():
        raise FileFault(f"{path}: the folder {path.parent} does not exist; make it, or name another")
    waiting = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with open(waiting, "w", encoding="utf-8", newline="") as file:
            yield file
        os.replace(waiting, path)
    finally:
        waiting.unlink(missing_ok=True)


def write_csv(file: TextIO, header: str, row: str, columns: Sequence[npt.NDArray[np.generic]]) -> None:
    """Print equally long columns as rows of a % format, e.g. row = "%s,%.4f", after the header."""
    file.write(header + "\n")
    line = row + "\n"
    for start in range(0, len(columns[0]), ROWS_AT_ONCE):
        part = [column[start : start + ROWS_AT_ONCE].tolist() for column in columns]
        file.write("".join([line % values for values in zip(*part, strict=True)]).replace("nan", "NaN"))


def rfc3339(times: npt.NDArray[np.datetime64]) -> npt.NDArray[np.str_]:
    """UTC times as RFC 3339 text, with as many decimals of a second as they need."""
    for unit in ("s", "ms", "us"):
        short = times.astype(f"datetime64[{unit}]")
        if unit == "us" or np.array_equal(short, times):
            break
    return np.char.add(np.datetime_as_string(short), "Z")
