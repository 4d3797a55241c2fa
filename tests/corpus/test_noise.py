"""The bound on false alarms, and the short healthy runs that it comes from."""

from __future__ import annotations

import numpy as np
import pytest

from tests.corpus.healthy_noise import KINDS, judged, made, upper_limit


@pytest.mark.parametrize(
    ("events", "trials", "limit"),
    [
        # No event in n trials: 1 - 0.05**(1/n), near 3/n, the "rule of three" (Hanley and
        # Lippman-Hand 1983).
        (0, 2000, 1.0 - 0.05 ** (1.0 / 2000)),
        (0, 30, 1.0 - 0.05 ** (1.0 / 30)),
        # All of them.
        (5, 5, 1.0),
    ],
)
def test_the_upper_limit_of_a_rate(events: int, trials: int, limit: float) -> None:
    """Clopper and Pearson's limit has a closed form where nothing happened."""
    assert upper_limit(events, trials) == pytest.approx(limit, rel=1e-9)


def test_the_limit_is_where_so_few_events_are_unlikely() -> None:
    """At the limit for 3 of 50, three or fewer events have a chance of 5 % (the definition,
    summed by hand)."""
    p = upper_limit(3, 50)
    chance = sum(
        np.prod([(50 - i) / (i + 1) for i in range(k)]) * p**k * (1 - p) ** (50 - k)
        for k in range(4)
    )
    assert chance == pytest.approx(0.05, rel=1e-6)


def test_runs_are_of_all_kinds_and_repeat() -> None:
    """The number decides on the kind, the seed on the rest; all values are finite."""
    kinds = [made(k, seed=1)[0] for k in range(len(KINDS))]
    assert kinds == list(KINDS)
    for number in range(len(KINDS)):
        one, again = made(number, seed=1)[1], made(number, seed=1)[1]
        other = made(number, seed=2)[1]
        assert len(one.snapshots) >= 24
        first = one.snapshots[-1].fields["f"]
        np.testing.assert_array_equal(first, again.snapshots[-1].fields["f"])
        assert np.isfinite(first.astype(float)).all()
        second = other.snapshots[-1].fields["f"]
        assert first.shape != second.shape or not np.array_equal(first, second)


def test_no_false_alarm_in_a_few() -> None:
    """Of 21 short healthy runs, three of each kind, none is alarmed."""
    alarmed = [
        (kind, why) for k in range(21) for kind, alarm, _, why in [judged(k, seed=3)] if alarm
    ]
    assert alarmed == []
