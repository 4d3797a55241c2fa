"""Sizes, ripples and boxes of arrays that can be worked out by hand."""

from __future__ import annotations

import math

import numpy as np
import pytest

from tests.corpus import levels
from tests.corpus.storing import STORES, significant, steps_between, stored


def test_the_ripple_of_a_wave_is_the_power_of_a_sine() -> None:
    """The normalised 8th difference of exp(i theta j) has modulus sin(theta / 2)**8 (LeVeque 2007,
    appendix E, for the second difference); a zigzag keeps its size, the ends stay out."""
    j = np.arange(40)
    for theta in (0.5, 1.3, math.pi):
        found = levels.ripple(np.cos(theta * j), 0)[4:-4]
        expected = math.sin(theta / 2.0) ** 8 * np.cos(theta * j)[4:-4]
        np.testing.assert_allclose(np.abs(found), np.abs(expected), atol=1e-12)
    assert not levels.ripple(np.cos(j), 0)[:4].any()


def test_what_noise_keeps_in_the_ripple() -> None:
    """White noise keeps the root of the sum of squared weights, within the scatter of a sample."""
    noise = np.random.default_rng(5).standard_normal(200_000)
    kept = levels.ripple(noise, 0)[4:-4]
    assert levels.rms(kept) / levels.rms(noise) == pytest.approx(levels.WHITE, rel=0.01)


def test_rounding_has_the_size_of_even_noise() -> None:
    """Storing values in float16 twice changes them by what `rounding` foretells, in the bulk and in
    the ripple, within 10 %."""
    x = np.random.default_rng(4).uniform(1.0, 1.9, size=32 * 400)
    one, two = (stored(x + shift, "f2").astype(float) - (x + shift) for shift in (0.0, 0.011))
    found = levels.channels(two - one, gridded=True)
    expected = levels.rounding(steps_between(x, "f2"), gridded=True)
    for a, b in zip(found, expected, strict=True):
        assert np.sqrt(np.mean(a**2)) == pytest.approx(np.sqrt(np.mean(b**2)), rel=0.1)


def test_norms_do_not_overflow_early() -> None:
    """1e300 and 1e-300 have norms although their squares have none."""
    assert levels.rms(np.full(7, 1e300)) == pytest.approx(1e300)
    assert levels.rms(np.full(7, 1e-300)) == pytest.approx(1e-300)
    assert levels.rms(np.array([1.0, np.inf])) == math.inf
    assert levels.variation(np.array([300.0, 302.0])) == pytest.approx(1.0)


def test_tiles_at_the_end_may_be_smaller() -> None:
    """40 cells are tiles of 32 and 8; each has the norm of its own cells."""
    values = np.concatenate([np.full(32, 2.0), np.full(8, 3.0)])
    np.testing.assert_allclose(levels.tile_rms(values), [2.0, 3.0])


def test_the_box_leaves_out_half_of_the_rest_at_either_end() -> None:
    """95 % of the energy of ten equal cells in a field of thirty is in those ten; a weak fringe
    stays outside."""
    values = np.zeros((30, 20))
    values[10:20, 3:7] = 1.0
    values[2, 3] = 0.1
    assert levels.energy_box(values) == ((10, 20), (3, 7))
    assert levels.energy_box(np.zeros(4)) is None
    assert levels.energy_box(np.array([1.0, np.nan])) is None


def test_stored_numbers_are_those_of_the_type() -> None:
    """Values come back within half the distance of two numbers of their type; float16 ends at 65504
    (IEEE 754-2019, table 3.5, from memory)."""
    values = np.random.default_rng(6).uniform(-50.0, 50.0, size=1000)
    for store in STORES:
        kept = stored(values, store).astype(float)
        assert np.all(np.abs(kept - values) <= 0.5 * steps_between(values, store) * (1.0 + 1e-9))
    assert np.isinf(stored(np.array([1e5]), "f2"))[0]


def test_three_digits() -> None:
    """Significant digits, not decimals; zero and infinity stay what they are."""
    found = significant(np.array([123456.0, -0.00123456, 0.0, np.inf]), 3)
    np.testing.assert_allclose(found, [123000.0, -0.00123, 0.0, np.inf], rtol=1e-12)
