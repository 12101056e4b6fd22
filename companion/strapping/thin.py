"""Thin a strapping table: the fewest of its rows that keep every volume within a stated error, and the proof of it."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Column = npt.NDArray[np.float64]


def thin(levels_m: Column, volumes_m3: Column, most_m3: float) -> npt.NDArray[np.intp]:
    """Places of the fewest rows whose straight lines stay within most_m3 of the table, first and last row among them.

    levels_m, volumes_m3: shape (n,), both rising. Exact: each line from row to row that stays within most_m3 is an edge, and the
    fewest rows are the shortest way through them. A line's error between two rows of the table is largest at one of them.

    >>> thin(np.array([0.0, 1.0, 2.0, 3.0]), np.array([0.0, 10.0, 20.0, 40.0]), 0.0).tolist()
    [0, 2, 3]
    """
    n = len(levels_m)
    steps = np.full(n, n)
    steps[0] = 0
    before = np.zeros(n, np.intp)
    for i in range(n - 1):
        run, rise = levels_m[i + 1 :] - levels_m[i], volumes_m3[i + 1 :] - volumes_m3[i]
        low, high = np.maximum.accumulate((rise - most_m3) / run), np.minimum.accumulate((rise + most_m3) / run)
        good = np.flatnonzero((rise / run >= low) & (rise / run <= high)) + i + 1
        better = good[steps[good] > steps[i] + 1]
        steps[better], before[better] = steps[i] + 1, i
    way = [n - 1]
    while way[-1]:
        way.append(int(before[way[-1]]))
    return np.array(way[::-1], np.intp)


def largest_error(levels_m: Column, volumes_m3: Column, thin_levels_m: Column, thin_volumes_m3: Column) -> float:
    """The largest difference [m3] between two tables at any level; outside a table its end row serves. Exact, as between thin's."""
    at = np.union1d(levels_m, thin_levels_m)
    return float(np.abs(np.interp(at, levels_m, volumes_m3) - np.interp(at, thin_levels_m, thin_volumes_m3)).max())
