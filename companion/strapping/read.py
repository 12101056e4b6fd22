"""A strapping table from a survey's CSV: levels and volumes, with the units in the header.

level [mm], volume [L]
0, 0
100, 7854
"""

from __future__ import annotations

import csv
import math
import re
from pathlib import Path

import numpy as np
import numpy.typing as npt

from companion.units import QuantityError, unit_factor

Column = npt.NDArray[np.float64]
HEADING = re.compile(r"\s*(level|volume)\s*\[([^\]]+)\]\s*")


class TableError(Exception):
    """A strapping table that cannot be used; the message names file, line and what to do."""


def read_table(path: str | Path) -> tuple[Column, Column]:
    """Levels [m], rising, shape (n,), and volumes [m3], rising, shape (n,), of a strapping CSV, n >= 2. TableError."""
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise TableError(
            f"{path}: cannot be read ({error.strerror}); name a CSV with the header level [m],volume [m^3]"
        ) from None
    except UnicodeDecodeError:
        raise TableError(f"{path}: is not UTF-8 text; save the table as CSV in UTF-8") from None
    lines = csv.reader(text.splitlines())
    order, factors = _header(path, next(lines, []))
    rows: list[tuple[float, float]] = []
    for cells in lines:
        if not any(cell.strip() for cell in cells):
            continue
        row = _row(path, lines.line_num, cells, order)
        scaled = (row[0] * factors[0], row[1] * factors[1])
        if rows and not (scaled[0] > rows[-1][0] and scaled[1] > rows[-1][1]):
            word = "level" if not scaled[0] > rows[-1][0] else "volume"
            raise TableError(
                f"{path}: line {lines.line_num}: the {word} must rise from row to row, but does not; mend this row or the one before"
            )
        rows.append(scaled)
    if len(rows) < 2:
        raise TableError(f"{path}: has {len(rows)} rows; a table needs two or more")
    levels, volumes = np.array(rows).T.copy()
    if volumes[0] < 0.0:
        raise TableError(f"{path}: the first volume is below zero; write what the tank holds at each level")
    return levels, volumes


def _header(path: Path, cells: list[str]) -> tuple[tuple[int, int], tuple[float, float]]:
    found = [HEADING.fullmatch(cell) for cell in cells]
    words = [match[1] if match else "" for match in found]
    if sorted(words) != ["level", "volume"]:
        raise TableError(f"{path}: line 1: the header must be like level [mm],volume [L], but is '{','.join(cells)}'")
    factors = {}
    for match in found:
        assert match is not None
        try:
            factors[match[1]] = unit_factor(match[2].strip(), "length" if match[1] == "level" else "volume")
        except QuantityError as fault:
            raise TableError(f"{path}: line 1: {match[1]}: {fault}") from None
    return (words.index("level"), words.index("volume")), (factors["level"], factors["volume"])


def _row(path: Path, line: int, cells: list[str], order: tuple[int, int]) -> tuple[float, float]:
    if len(cells) != 2:
        raise TableError(f"{path}: line {line}: has {len(cells)} values; write a level and a volume")
    numbers = []
    for word, place in zip(("level", "volume"), order, strict=True):
        try:
            number = float(cells[place])
        except ValueError:
            raise TableError(f"{path}: line {line}: the {word} '{cells[place].strip()}' is not a number") from None
        if not math.isfinite(number):
            raise TableError(
                f"{path}: line {line}: the {word} '{cells[place].strip()}' is not finite; leave the row out or measure it"
            )
        numbers.append(number)
    return numbers[0], numbers[1]
