"""Ages of provisional pins: spread, few, and one always old enough."""

from __future__ import annotations

from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.actions.spacing import EVERY, OLD, surplus, wanted


def rotate(slots: int, snapshots: int) -> list[list[int]]:
    """Ages that are held after each of so many snapshots, oldest first."""
    pins: list[int] = []
    history = []
    for now in range(snapshots):
        if wanted([now - p for p in pins], slots):
            pins.append(now)
            while (least := surplus([now - p for p in pins], slots)) is not None:
                del pins[least]
        history.append([now - p for p in pins])
    return history


@pytest.mark.parametrize("slots", [1, 2, 3, 4, 7])
def test_never_more_than_allowed(slots: int) -> None:
    """The number of pins stays within the setting, and pins are made at all."""
    assert {len(ages) for ages in rotate(slots, 700)} == set(range(1, slots + 1))


def test_no_pins_without_slots() -> None:
    """provisional = 0 means none."""
    assert not wanted([], 0)


@pytest.mark.parametrize("slots", [2, 3, 4, 7])
def test_one_is_always_old(slots: int) -> None:
    """From OLD snapshots on the oldest pin is at least OLD snapshots old, and at most three times:
    an alarm 100 snapshots after the growth began finds a pin from before it."""
    oldest = [max(ages) for ages in rotate(slots, 3000)]
    assert all(age >= min(n, OLD) for n, age in enumerate(oldest))
    assert max(oldest[OLD:]) <= 3 * OLD


def test_three_are_young_old_and_between() -> None:
    """Of three the youngest is less than EVERY snapshots old and the middle one less than OLD."""
    for ages in rotate(3, 2000)[3 * EVERY :]:
        assert ages[-1] < EVERY
        assert ages[1] <= OLD


def test_the_middle_one_spreads_early() -> None:
    """While the first snapshot is the oldest pin, the middle one is at most half as old, give or
    take one pin's time: otherwise two would be held for the same purpose."""
    for n, ages in enumerate(rotate(3, OLD)):
        if n >= 4 * EVERY:
            assert ages[1] <= n / 2 + EVERY


@given(st.lists(st.integers(0, 5000), min_size=1, max_size=12), st.integers(1, 12))
def test_letting_go_always_ends(ages: list[int], slots: int) -> None:
    """Whatever is held (the setting may have been lowered), it shrinks to what is allowed."""
    left = list(ages)
    while (least := surplus(left, slots)) is not None:
        del left[least]
    assert len(left) == min(len(ages), slots)


def test_copying_takes_a_quarter_at_most() -> None:
    """New pins are at least EVERY snapshots apart."""
    history = rotate(3, 1000)
    made = [n for n, ages in enumerate(history) if ages[-1] == 0]
    assert min(b - a for a, b in pairwise(made)) == EVERY
