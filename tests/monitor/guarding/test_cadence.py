"""Spacing in time, strides in steps."""

from __future__ import annotations

import pytest

from monitor.guarding.cadence import Spacing, Strides


def test_usual_spacing_is_a_median() -> None:
    """One long pause (a queue, a night) does not change what is usual."""
    spacing = Spacing()
    assert spacing.usual is None
    for time in (0.0, 10.0, 20.0, 3000.0, 3010.0, 3020.0):
        spacing.add(time)
    assert spacing.usual == 10.0


def test_times_that_go_backwards_say_nothing() -> None:
    """Copied files come in any order of times."""
    spacing = Spacing()
    for time in (100.0, 50.0, 55.0):
        spacing.add(time)
    assert spacing.usual == 5.0


@pytest.mark.parametrize(
    ("steps", "missed"),
    [
        ((0, 20, 40, 60, 80), ()),
        ((0, 20, 40, 60, 120), (80, 100)),
        ((0, 20, 40, 120), ()),  # three strides make a rule, two do not
        ((0, 20, 40, 60, 90), ()),  # not a multiple: the cadence has changed
        ((0, 20, 50, 70, 110), ()),  # uneven anyway
        ((0, 20, 40, 60, None), ()),
        ((0, 0, 0, 0, 20), ()),
    ],
)
def test_a_jump_over_places_of_a_regular_stride(
    steps: tuple[int | None, ...], missed: tuple[int, ...]
) -> None:
    """Steps 0, 20, 40, 60 and then 120: 80 and 100 came and went unseen."""
    strides = Strides()
    found: tuple[int, ...] = ()
    for step in steps:
        found = strides.add(step)
    assert found == missed


def test_a_gap_is_told_once() -> None:
    """After it the stride has to become regular again."""
    strides = Strides()
    told = [strides.add(step) for step in (0, 20, 40, 60, 120, 140, 160)]
    assert [bool(t) for t in told] == [False] * 4 + [True, False, False]


def test_it_goes_on_after_a_restart_of_guard() -> None:
    """With the steps it held."""
    before = Strides()
    for step in (0, 20, 40, 60):
        before.add(step)
    assert Strides(before.steps).add(100) == (80,)
