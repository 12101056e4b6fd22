"""A strapping table from a tank's shape, where a survey is not at hand."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

Column = npt.NDArray[np.float64]


def upright_cylinder(diameter_m: float, height_m: float) -> tuple[Column, Column]:
    """Levels [m] and volumes [m3] of an upright cylinder with a flat floor: two rows, exact.

    >>> [float(x) for x in upright_cylinder(2.0, 10.0)[1].round(3)]
    [0.0, 31.416]
    """
    return np.array([0.0, height_m]), np.array([0.0, math.pi / 4.0 * diameter_m**2 * height_m])
