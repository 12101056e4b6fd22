"""Net fill and net draw of a tank from its levels, by turning points.

In: times and levels of one stretch. Out: the places where the water turned, and the levels there with the noise averaged out.

Between two turning points the water only rose or only fell, so what came in net and what went out net are the sums of those
rises and falls. Noise would add a rise and a fall at every reading; so a turn counts only when the water has come back
by more than a band, which is tied to the noise of the readings themselves. And a turn taken at the highest of many noisy
readings stands too high, so levels are first averaged over as many neighbours as pays: the error of a mean of 2 m + 1
readings is sigma / sqrt(2 m + 1), but a mean over a turn of slope s cuts about s m / 2 off it.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Column = npt.NDArray[np.float64]

BAND = 8.0  # in standard deviations of the averaged readings: of some 1,440 a day none comes so far by chance
WIDEST = 15  # m at most: readings either side
MAD = 1.4826  # standard deviation of a normal distribution / its median absolute deviation


def noise(levels: Column) -> float:
    """Standard deviation [m] of the readings' noise, from the median size of their second differences.

    Steady rise and fall have no second difference; a few turns and spikes do not move a median. NaN for fewer than 5 readings.
    Source: for white noise the second difference has 6 times the variance; median absolute deviation, Hampel 1974.
    """
    if len(levels) < 5:
        return float("nan")
    return float(MAD * np.median(np.abs(np.diff(levels, 2))) / np.sqrt(6.0))


def neighbours(levels: Column, sigma: float) -> int:
    """How many readings either side to average: the m with the least error, of noise and of cut turns together."""
    if len(levels) < 3 or not sigma > 0.0:
        return 0
    reach = min(30, max(1, len(levels) // 8))
    slope = float(np.median(np.abs(levels[reach:] - levels[:-reach]))) / reach
    m = np.arange(WIDEST + 1)
    return int(np.argmin((slope * m / 2.0) ** 2 + sigma**2 / (2 * m + 1)))


def averaged(levels: Column, m: int) -> Column:
    """Each reading's mean with m neighbours either side, fewer by the ends and always as many on both sides."""
    n = len(levels)
    sums = np.concatenate([[0.0], np.cumsum(levels)])
    place = np.arange(n)
    reach = np.minimum(m, np.minimum(place, n - 1 - place))
    return np.asarray((sums[place + reach + 1] - sums[place - reach]) / (2 * reach + 1))


def turning_points(levels: Column, band: float) -> list[int]:
    """Places where the water turned, by more than band [m] each way; the first and the last place are always among them."""
    if len(levels) < 2:
        return list(range(len(levels)))
    turns = [0]
    high = low = 0
    rising: bool | None = None
    for i, level in enumerate(levels.tolist()):
        if rising is not False and level > levels[high]:
            high = i
        if rising is not True and level < levels[low]:
            low = i
        if rising is None:
            if levels[high] - levels[low] > band:
                rising = high > low
                if rising and low > 0:
                    turns.append(low)
                elif not rising and high > 0:
                    turns.append(high)
                low = high = high if rising else low
        elif rising and levels[high] - level > band:
            turns.append(high)
            rising, low = False, i
        elif not rising and level - levels[low] > band:
            turns.append(low)
            rising, high = True, i
    if turns[-1] != len(levels) - 1:
        turns.append(len(levels) - 1)
    return turns
