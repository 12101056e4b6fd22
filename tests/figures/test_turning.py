"""Net fill and draw by turning points: right on clean levels, and not inflated by noise."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from companion.figures.turning import BAND, averaged, neighbours, noise, turning_points

MINUTES = np.arange(1440.0)


def sums(levels: np.ndarray) -> tuple[float, float]:
    steps = np.diff(levels)
    return float(steps[steps > 0].sum()), float(-steps[steps < 0].sum())


def by_turning_points(levels: np.ndarray) -> tuple[float, float]:
    sigma = noise(levels)
    m = neighbours(levels, sigma)
    smooth = averaged(levels, m)
    return sums(smooth[turning_points(smooth, max(BAND * sigma / np.sqrt(2 * m + 1), 1e-6))])


SHAPES = {
    "pump on and off": 3.0 + np.abs((MINUTES / 240.0) % 2 - 1),
    "day and night": 3.0 + np.sin(MINUTES / 720.0 * 2 * np.pi),
    "filled, then standing": np.minimum(2.0 + MINUTES / 300.0, 4.5),
    "standing": np.full(1440, 3.0),
}


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("sigma", [0.0005, 0.002, 0.005])
def test_noise_does_not_inflate_fill_and_draw(shape: str, sigma: float) -> None:
    true = SHAPES[shape]
    noisy = true + sigma * np.random.default_rng(7).standard_normal(1440)
    for got, want in zip(by_turning_points(noisy), sums(true), strict=True):
        assert abs(got - want) < 0.01 * want + 4.0 * sigma


def test_a_plain_sum_over_noisy_readings_would_have_said_much_more() -> None:
    noisy = SHAPES["standing"] + 0.002 * np.random.default_rng(7).standard_normal(1440)
    assert sums(noisy)[0] > 1.0
    assert by_turning_points(noisy)[0] < 0.01


@given(st.lists(st.floats(0.0, 10.0), min_size=2, max_size=200), st.floats(0.0, 2.0))
def test_between_turns_the_water_goes_one_way_but_for_the_band(values: list[float], band: float) -> None:
    levels = np.array(values)
    turns = turning_points(levels, band)
    assert turns[0] == 0 and turns[-1] == len(levels) - 1 and turns == sorted(set(turns))
    for a, b in zip(turns[1:-2], turns[2:-1], strict=False):
        assert abs(levels[b] - levels[a]) > band
    for a, b, c in zip(turns, turns[1:], turns[2:], strict=False):
        if c != len(levels) - 1 and a != 0:
            assert {np.sign(levels[b] - levels[a]), np.sign(levels[c] - levels[b])} == {-1.0, 1.0}
    fill, draw = sums(levels[turns])
    assert fill - draw == pytest.approx(levels[-1] - levels[0], abs=1e-9)


def test_noise_is_the_standard_deviation_of_white_noise_on_a_slope() -> None:
    rng = np.random.default_rng(3)
    levels = 0.004 * MINUTES + 0.002 * rng.standard_normal(1440)
    assert noise(levels) == pytest.approx(0.002, rel=0.08)
    assert np.isnan(noise(levels[:4]))


def test_the_scale_of_the_median_deviation_is_scipys() -> None:
    # scipy.stats.median_abs_deviation(scale="normal") (PyPI scipy) on the same second differences
    d = np.diff(np.random.default_rng(5).standard_normal(2000), 2)
    ours = noise(np.concatenate([[0.0, 0.0], np.cumsum(np.cumsum(d))]))
    assert ours == pytest.approx(
        stats.median_abs_deviation(d, center=lambda x, axis: 0.0, scale="normal") / np.sqrt(6.0), rel=2e-4
    )


def test_averaging_is_a_centred_mean_and_leaves_the_ends() -> None:
    levels = np.random.default_rng(1).standard_normal(50)
    mean = averaged(levels, 3)
    assert mean[0] == pytest.approx(levels[0]) and mean[-1] == pytest.approx(levels[-1])
    assert mean[10] == pytest.approx(levels[7:14].mean())
    assert mean[1] == pytest.approx(levels[0:3].mean())


def test_fast_water_is_not_averaged_away() -> None:
    hourly = np.array([1.0, 3.0, 5.0, 3.0, 1.0, 3.0, 5.0, 3.0, 1.0] * 3)
    assert neighbours(hourly, 0.002) == 0
