"""Approaches to a bound: their ranges cover the truth, and what comes to rest is left alone. The
truths are the curves' own zeros."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from probes.bounds import AHEAD, approach

Curve = Callable[[np.ndarray], np.ndarray]

# Distances that reach zero at 1, by what one minus time to the end makes of them.
CURVES: dict[str, Curve] = {
    "steady": lambda t: 1.0 - t,
    "faster": lambda t: 1.0 - t**2,
    "swinging down": lambda t: np.cos(0.5 * np.pi * t),
    "slower": lambda t: 1.3 - 1.6 * t + 0.3 * t**2,
}


def noisy(
    curve: Curve, end: float, points: int, noise: float, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    x = 10.0 * np.arange(points)
    return x, curve(x / end) + noise * rng.standard_normal(points)


@pytest.mark.parametrize("name", CURVES)
def test_ranges_cover_the_truth_as_often_as_they_claim(name: str) -> None:
    """Of 300 approaches of random pace, noise and progress, the true number of steps lies in four
    of five ranges that are told; and enough are told."""
    rng = np.random.default_rng(480_221)
    told = covered = 0
    for _ in range(300):
        end, noise = rng.uniform(500.0, 3000.0), 10.0 ** rng.uniform(-4.0, -1.7)
        points = max(9, int(rng.uniform(0.5, 0.95) * end / 10.0))
        x, gap = noisy(CURVES[name], end, points, noise, rng)
        found = approach(x, gap, 1e5) if gap[-1] > 0.0 else None
        if found is None or not found.near:
            continue
        told += 1
        assert found.left.low is not None
        assert found.left.high is not None
        covered += found.left.low <= end - x[-1] <= found.left.high
    assert told >= 15
    assert covered / told >= 0.8


def test_a_steady_approach_is_extrapolated() -> None:
    """A straight line without noise gives its own zero, within a narrow range."""
    x = 10.0 * np.arange(60)
    found = approach(x, 1.0 - x / 800.0, 1e5)
    assert found is not None
    assert found.near
    assert found.left.value == pytest.approx(800.0 - 590.0, rel=1e-9)
    assert found.left.high == pytest.approx(found.left.low, rel=1e-6)


def test_far_ahead_is_not_near() -> None:
    """A bound ten stretches ahead is not worth a warning yet."""
    x = 10.0 * np.arange(60)
    found = approach(x, 1.0 - x / 6000.0, 1e5)
    assert found is not None
    assert not found.near
    assert found.left.low is not None
    assert found.left.low > AHEAD * found.span


@pytest.mark.parametrize("noise", [0.0, 1e-3, 1e-2])
def test_what_relaxes_towards_the_bound_is_left_alone(noise: float) -> None:
    """A temperature that decays exponentially towards the wall's never gets there: no snapshot of
    its way raises a warning."""
    rng = np.random.default_rng(91_007)
    x = 10.0 * np.arange(120)
    gap = np.exp(-x / 400.0) + noise * rng.standard_normal(120)
    for n in range(8, 121):
        if gap[n - 1] > 0.0:
            found = approach(x[:n], gap[:n], 1e5)
            assert found is None or not found.near


def test_a_pace_that_comes_to_rest_gives_a_reason() -> None:
    """Where the pace drops so fast that it may vanish before the bound: no number, but why."""
    rng = np.random.default_rng(3)
    x = np.arange(40.0)
    found = approach(x, np.exp(-x / 15.0) + 0.03 * rng.standard_normal(40), 1e4)
    assert found is not None
    assert found.left.value is None
    assert "slows down" in found.left.reason


def test_noise_is_no_approach() -> None:
    """Neither white noise nor a distance that grows."""
    rng = np.random.default_rng(61)
    x = np.arange(100.0)
    assert approach(x, 1.0 + 0.1 * rng.standard_normal(100), 1e5) is None
    assert approach(x, 1.0 + 0.01 * x, 1e5) is None
