"""Rows of the published check values in tests/reference, as dictionaries; each file has a `source` column."""

from __future__ import annotations

import csv
from collections.abc import Callable
from pathlib import Path

FOLDER = Path(__file__).parent / "reference"


def rows(name: str, keep: Callable[[dict[str, str]], bool] = lambda row: True) -> list[dict[str, str]]:
    """The rows of tests/reference/<name>.csv for which keep is true; there must be some."""
    with open(FOLDER / f"{name}.csv", newline="") as file:
        found = [row for row in csv.DictReader(file) if keep(row)]
    assert found, name
    return found


def number(text: str) -> float | None:
    """The number in a cell, None where it is empty."""
    return float(text) if text else None
