"""Curves in cells: axes, decimation, dots."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.desk.plotting import (
    Axis,
    beyond,
    braille,
    column_spans,
    decade_axis,
    nice_step,
    raster,
    running_axis,
    stepped_axis,
    suffixed,
    ticks_between,
)


@given(st.floats(1e-9, 1e9), st.integers(1, 20))
def test_a_nice_step_is_one_two_or_five_and_the_smallest(span: float, at_most: int) -> None:
    """It cuts the span at most so many times; the next smaller one would cut it more often."""
    step = nice_step(span, at_most)
    digit = step / 10.0 ** math.floor(math.log10(step) + 1e-9)
    assert min(abs(digit - d) for d in (1.0, 2.0, 5.0, 10.0)) < 1e-6
    assert span / step <= at_most * (1 + 1e-6)
    assert span / (step / 2.6) > at_most


def test_an_axis_stays_while_the_data_fit() -> None:
    """A new point within the margin changes nothing; one beyond gives a new axis with a margin of
    an eighth."""
    axis = running_axis(None, 0.0, 700.0, 6)
    assert axis.hi == pytest.approx(800.0)
    assert running_axis(axis, 0.0, 790.0, 6) is axis
    wider = running_axis(axis, 0.0, 801.0, 6)
    assert wider is not axis
    assert wider.hi > 900.0


def test_an_axis_that_has_become_far_too_wide_is_chosen_anew() -> None:
    """After a single early point at 100 has left the view, the axis closes in."""
    wide = stepped_axis(None, 0.9, 100.0, 5)
    assert stepped_axis(wide, 0.99, 1.02, 5).hi < 2.0


@given(st.floats(-300, 300), st.floats(0, 300), st.integers(2, 20))
def test_decades_are_whole_and_hold_the_data(lo: float, span: float, ticks: int) -> None:
    """Ends and ticks on whole decades, at least two of them, no more ticks than asked for."""
    axis = decade_axis(None, lo, lo + span, ticks)
    assert axis.lo <= lo + 1e-6
    assert axis.hi >= lo + span - 1e-6
    assert axis.hi - axis.lo >= 2
    assert all(v == round(v) for v in (axis.lo, axis.hi, *axis.ticks))
    assert len(axis.ticks) <= ticks + 2


@given(st.floats(-1e6, 1e6), st.floats(1e-3, 1e6), st.integers(2, 12))
def test_a_stepped_axis_holds_its_data(lo: float, span: float, ticks: int) -> None:
    """Whatever the data, they lie on the axis (to rounding), which has two ticks at least."""
    axis = stepped_axis(None, lo, lo + span, ticks)
    slack = 1e-6 * max(1.0, abs(lo), span)
    assert axis.lo <= lo + slack
    assert axis.hi >= lo + span - slack
    assert len(axis.ticks) >= 2


def test_ticks_are_multiples_with_both_ends() -> None:
    """0.98 to 1.02 in steps of 0.01 are five ticks, rounding notwithstanding."""
    assert ticks_between(0.98, 1.02, 0.01) == pytest.approx((0.98, 0.99, 1.0, 1.01, 1.02))


def naive_spans(x: np.ndarray, y: np.ndarray, axis: Axis, columns: int) -> dict[int, list[float]]:
    """Values by column, one point at a time."""
    out: dict[int, list[float]] = {}
    for a, b in zip(x, y, strict=True):
        column = math.floor((a - axis.lo) / axis.span * columns)
        if math.isfinite(b) and 0 <= column < columns:
            out.setdefault(column, []).append(float(b))
    return out


@given(
    st.lists(st.one_of(st.floats(-100, 100), st.just(math.nan)), min_size=1, max_size=60),
    st.integers(1, 25),
)
def test_decimation_keeps_every_extreme(values: list[float], columns: int) -> None:
    """Each column's span holds the lowest and highest of its points, as a naive count has them."""
    x, y = np.arange(len(values), dtype=float), np.array(values)
    axis = Axis(0.0, float(len(values)))
    low, high = column_spans(x, y, axis, columns)
    for column, points in naive_spans(x, y, axis, columns).items():
        assert low[column] <= min(points)
        assert high[column] >= max(points)


def test_spans_reach_to_their_neighbours_so_that_the_curve_is_unbroken() -> None:
    """A jump from 0 to 10 between two columns: the spans meet half way."""
    low, high = column_spans(np.array([0.0, 1.0]), np.array([0.0, 10.0]), Axis(0.0, 2.0), 2)
    assert high[0] == low[1] == 5.0


def test_columns_between_points_carry_the_straight_connection() -> None:
    """Two points eight columns apart: the middle column lies in the middle."""
    low, high = column_spans(np.array([0.0, 8.0]), np.array([0.0, 8.0]), Axis(0.0, 9.0), 9)
    assert np.isfinite(low).all()
    assert low[4] <= 4.0 <= high[4]
    assert np.all(np.diff(high) > 0)


def test_a_gap_in_the_values_is_a_gap_in_the_curve() -> None:
    """NaN between two points: no connection across."""
    x, y = np.arange(9.0), np.array([1, 1, 1, math.nan, math.nan, math.nan, 1, 1, 1])
    low, _ = column_spans(x, y, Axis(0.0, 9.0), 9)
    assert np.isnan(low[4])
    assert np.isfinite(low[[1, 7]]).all()


def test_a_single_spike_in_a_million_points_is_seen() -> None:
    """Decimated ten thousand to one, the one high point is still in its column's span."""
    y = np.zeros(1_000_000)
    y[765_432] = 7.0
    _, high = column_spans(np.arange(1e6), y, Axis(0.0, 1e6), 100)
    assert high[76] == 7.0
    assert np.nanmax(np.delete(high, [75, 76, 77])) == 0.0


def test_dots_stand_at_their_heights() -> None:
    """Four rows from 0 to 4: a value in [k, k + 1) is in row k from below, the upper end on top."""
    values = np.array([0.0, 1.5, 2.0, 3.999, 4.0, 9.0, math.nan])
    dots = raster(values, values, Axis(0.0, 4.0), 4)
    rows = [list(np.flatnonzero(dots[:, c])) for c in range(7)]
    assert rows == [[3], [2], [1], [0], [0], [], []]


def test_what_lies_beyond_the_axis_is_told() -> None:
    """Columns 0 and 3 above, column 5 below; two columns make a cell."""
    low = np.array([9.0, 1.0, 1.0, 8.0, 1.0, -5.0])
    above, below = beyond(low, low + 0.5, Axis(0.0, 2.0), 2)
    assert (above, below) == ([0, 1], [2])


def test_braille_bits_match_the_code_chart() -> None:
    """Unicode's chart: dot 1 upper left is U+2801, dot 8 lower right U+2880, all dots U+28FF."""
    dots = np.zeros((4, 6), dtype=bool)
    dots[0, 0] = dots[3, 3] = True
    dots[:, 4:] = True
    assert braille(dots) == ["\u2801\u2880\u28ff"]


@pytest.mark.parametrize(
    ("value", "step", "shown"),
    [(0, 500, "0"), (1500, 500, "1.5k"), (2e6, 1e6, "2M"), (1_234_500, 100, "1234.5k")],
)
def test_ticks_carry_suffixes(value: float, step: float, shown: str) -> None:
    """Counts as short as they can be told apart."""
    assert suffixed(value, step) == shown
