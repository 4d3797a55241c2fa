"""The two ten-line rules on series that are made to set them off, or just not."""

from __future__ import annotations

import numpy as np

from tests.corpus.case import Stored
from tests.corpus.rules import maximum_rule, rising_rule


def series(values: list[float]) -> list[Stored]:
    """Two cells that hold a value and half of it."""
    return [Stored(k, float(k), {"u": np.array([v, 0.5 * v])}) for k, v in enumerate(values)]


def test_ten_times_the_median() -> None:
    """11 after a median of 1 is too much, 9 is not; infinity always is."""
    assert maximum_rule(series([1, 1, 1, 9, 1, 11])) == 5
    assert maximum_rule(series([1, 1, 9.9])) is None
    assert maximum_rule(series([1, np.inf])) == 1


def test_five_rises_in_a_row() -> None:
    """Differences 1, 2, 4, 8, 16, 32 rise five times with the last; a pause begins the count
    anew."""
    assert rising_rule(series([0, 1, 3, 7, 15, 31, 63])) == 6
    assert rising_rule(series([0, 1, 3, 7, 7, 15, 31, 63])) is None


def test_a_mask_is_left_out() -> None:
    """Cells that are no numbers in the first snapshot are looked at by neither rule."""
    masked = [Stored(k, float(k), {"u": np.array([np.nan, 1.0])}) for k in range(9)]
    assert maximum_rule(masked) is None
    assert rising_rule(masked) is None
