"""Tests on series: noise stays quiet for as long as stated, growth is found."""

from __future__ import annotations

import math

import numpy as np
import pytest

from probes import onset


@pytest.mark.parametrize("rho", [0.0, 0.5])
def test_false_rises_on_noise_are_as_rare_as_stated(rho: float) -> None:
    """On long noise, white and correlated, no more snapshots show a rise than one in run_length
    (all window lengths together), up to three times as many on correlated noise."""
    rng = np.random.default_rng(860_213)
    n, run_length = 6000, 200.0
    noise = rng.standard_normal(n)
    for i in range(1, n):
        noise[i] = rho * noise[i - 1] + math.sqrt(1 - rho * rho) * noise[i]
    x = np.arange(300.0)
    hits = sum(
        onset.rising(x, noise[i : i + 300], run_length) is not None for i in range(0, n - 300, 3)
    )
    looks = (n - 300) / 3
    assert hits / looks < (1 if rho == 0.0 else 3) / run_length


def test_slow_growth_is_found_under_noise() -> None:
    """A rise of a tenth of the noise per snapshot is found well before a hundred snapshots: sums
    of increments, which telescope, never find growth below half their standard deviation."""
    rng = np.random.default_rng(33)
    x = np.arange(160.0)
    y = rng.standard_normal(160) + 0.1 * np.maximum(0, x - 80)
    first = next(n for n in range(60, 161) if onset.rising(x[:n], y[:n], 1e5) is not None)
    assert 85 < first < 140


def test_a_straight_rise_is_measured() -> None:
    """Two decades on a line: slope, rise and start; a bend or a floor spoils it."""
    x = np.arange(0.0, 400.0, 10.0)
    y = np.where(x < 200, -30.0, -30.0 + 0.05 * (x - 200))
    over = np.ones(len(x), dtype=bool)
    found = onset.straight_rise(x, y, over, math.log(100.0), 0.04)
    assert found is not None
    assert found.fit.slope == pytest.approx(0.05, rel=0.03)
    assert x[found.start] == pytest.approx(200.0, abs=40.0)
    assert onset.straight_rise(x, y, ~over, math.log(100.0), 0.04) is None
    assert onset.straight_rise(x, 0.1 * np.exp(x / 60), over, math.log(100.0), 0.04) is None


def test_fast_growth_needs_fewer_points() -> None:
    """Four points are enough where they rise by three decades, not for less."""
    x = np.arange(4.0)
    over = np.ones(4, dtype=bool)
    assert onset.straight_rise(x, 3.0 * x, over, math.log(100.0), 0.04) is not None
    assert onset.straight_rise(x, 1.6 * x, over, math.log(100.0), 0.04) is None


def test_correlation_is_bounded() -> None:
    """Alternating residuals do not narrow the error, a ramp does not blow it up."""
    assert onset.correlation(np.array([1.0, -1.0] * 40)) == 0.0
    assert onset.correlation(np.zeros(5)) == 0.0
    assert onset.correlation(np.linspace(-1, 1, 400)) <= 0.95


def test_a_rise_that_quickens_is_no_constant_factor() -> None:
    """A level that turns from a steady rise to one twice as steep over its last third (a front that
    forms) is not taken for a line, though it lies close to one; a settled one is."""
    x = np.arange(15.0)
    over = np.ones(15, dtype=bool)
    settling = 0.4 * x - 0.25 * np.log1p(x)
    quickening = 0.4 * x + 0.013 * np.maximum(0.0, x - 8.0) ** 2.2
    assert onset.straight_rise(x, settling, over, math.log(100.0), 0.04) is not None
    assert onset.straight_rise(x, quickening, over, math.log(100.0), 0.04) is None
    from probes.growth import fit_line

    fit = fit_line(x, quickening)
    assert fit.rms < 0.04 * fit.rise
