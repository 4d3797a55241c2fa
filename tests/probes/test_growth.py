"""Floors, pooled levels, wavelengths and lines, against closed forms and naive versions."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from probes import growth


@pytest.mark.parametrize("order", [2, 4, 6, 8])
def test_gain_of_white_noise(order: int) -> None:
    """The rms gain is the root of the sum of squared weights (numpy's convolution as reference)."""
    weights = np.array([1.0])
    for _ in range(order):
        weights = np.convolve(weights, [0.5, -0.5])
    assert growth.difference_gain(order) == pytest.approx(float(np.sqrt((weights**2).sum())))


@given(st.floats(1e-300, 1e300))
def test_spacing_is_that_of_numpy(value: float) -> None:
    """Distance to the next double, as numpy.spacing gives it."""
    assert growth.spacing(np.array([value]), 2.0**-52)[0] == np.spacing(value)


def test_rounding_floor_of_stored_fields() -> None:
    """Rounding a smooth field to single precision makes ripple of the level foretold.

    Uniform quantisation noise has variance ulp**2 / 12 (Widrow, Kollar and Liu 1996).
    """
    x = np.linspace(0.0, 1.0, 20_000)
    before, now = 1.5 + 0.3 * np.sin(9 * x), 1.5 + 0.31 * np.sin(9 * x + 0.1)
    noise = now.astype("f4").astype(float) - before.astype("f4")
    d = np.diff(noise, n=8) / 2.0**8
    floor = growth.rounding_floor(np.array([1.8]), 2.0**-23, 8)[0]
    assert float(np.sqrt((d**2).mean())) == pytest.approx(floor, rel=0.1)


@given(st.floats(0.2, math.pi - 0.01), st.floats(1e-12, 1e12))
def test_wavelength_from_two_orders(theta: float, size: float) -> None:
    """Levels of a wave at two orders give its angle back."""
    low, high = (size * math.sin(theta / 2) ** p for p in (6, 8))
    assert growth.half_angle(low, high, 6, 8) == pytest.approx(theta, rel=1e-5)


def test_grid_limit_and_unseen_axes() -> None:
    """A ratio above one is the zigzag; no level no wave; two zigzags are sqrt(2) cells."""
    assert growth.half_angle(1.0, 1.2, 6, 8) == math.pi
    assert growth.half_angle(0.0, 1.0, 6, 8) == 0.0
    assert growth.cells_per_wavelength((0.0, 0.0)) is None
    assert growth.cells_per_wavelength((math.pi, math.pi)) == pytest.approx(math.sqrt(2.0))


@given(
    st.lists(st.floats(1e-3, 1e3), min_size=1, max_size=20), st.sampled_from([1e-300, 1.0, 1e300])
)
def test_pool_is_the_weighted_rms(values: list[float], scale: float) -> None:
    """Against the naive formula, at any scale."""
    level = np.array(values)
    weight = np.arange(1.0, len(values) + 1.0)
    naive = math.sqrt(float((level**2 * weight).sum() / weight.sum()))
    assert growth.pool(level * scale, weight) == pytest.approx(naive * scale, rel=1e-12)


def test_pool_of_nothing() -> None:
    """No positions or no level is zero; an infinite level stays infinite."""
    assert growth.pool(np.zeros(3), np.ones(3)) == 0.0
    assert growth.pool(np.ones(3), np.zeros(3)) == 0.0
    assert growth.pool(np.array([1.0, np.inf]), np.ones(2)) == math.inf


def test_line_agrees_with_the_reference() -> None:
    """Slope and its error against scipy.stats.linregress."""
    from scipy.stats import linregress

    rng = np.random.default_rng(271)
    x = np.cumsum(rng.uniform(1, 5, 40))
    y = 0.3 * x + rng.standard_normal(40)
    fit, reference = growth.fit_line(x, y), linregress(x, y)
    assert fit.slope == pytest.approx(reference.slope)
    assert fit.error == pytest.approx(reference.stderr)
    slopes, rms = growth.fit_lines(np.column_stack([y, 2 * y]))
    assert slopes[1] == pytest.approx(2 * slopes[0])
    assert rms[1] == pytest.approx(2 * rms[0])


def test_line_needs_points() -> None:
    """Two points leave no residuals."""
    with pytest.raises(ValueError, match="three points"):
        growth.fit_line(np.array([1.0, 2.0]), np.array([1.0, 2.0]))


@given(st.integers(6, 60), st.floats(0.01, 2.0), st.sampled_from([1, 2, 3]))
def test_the_late_slope_of_many_competing_modes(points: int, rate: float, dim: int) -> None:
    """A cloud of modes around the fastest grows as G**k / k**(dim / 4) (Laplace's method): the true
    rate lies in the range, and the late slope is nearer to it than the slope of the whole."""
    k = np.arange(4.0, 4.0 + points)
    y = rate * k - dim / 4.0 * np.log(k)
    slope, low, high = growth.late_slope(k, y)
    assert low <= slope <= rate <= high
    assert rate - slope < rate - growth.fit_line(k, y).slope


def test_the_late_slope_of_a_noisy_line() -> None:
    """With white noise on a line the true slope lies in the range in nine of ten cases at least."""
    rng = np.random.default_rng(71023)
    x, inside = np.arange(15.0), 0
    for _ in range(300):
        _, low, high = growth.late_slope(x, 0.4 * x + 0.1 * rng.standard_normal(15))
        inside += low <= 0.4 <= high
    assert inside >= 270
