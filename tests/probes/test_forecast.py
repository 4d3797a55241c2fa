"""Ranges of steps, or a reason why there are none."""

from __future__ import annotations

import math

import pytest

from probes.forecast import steps_until


def test_steps_from_round_off_to_the_size_of_the_field() -> None:
    """At 1 % above the limit: 130 steps for second-order waves and 1,860 for heat, from 1e-16.

    Leapfrog for the wave equation: G = (r + sqrt(r**2 - 1))**2 (Strikwerda 2004, section 8.2);
    forward Euler for heat: G = 2 r - 1 (LeVeque 2007, section 9.6).
    """
    wave = (1.01 + math.sqrt(1.01**2 - 1)) ** 2
    heat = 2 * 1.01 - 1
    assert steps_until(1e-16, wave, wave, wave, 1.0).value == pytest.approx(130, abs=1)
    assert steps_until(1e-16, heat, heat, heat, 1.0).value == pytest.approx(1860, abs=1)


def test_the_range_holds_the_value() -> None:
    """Both the factor's interval and the size's doubt widen it."""
    r = steps_until(1e-6, 1.05, 1.04, 1.06, 2.0)
    assert r.low is not None
    assert r.value is not None
    assert r.high is not None
    assert r.low < r.value < r.high


@pytest.mark.parametrize(
    ("ratio", "factor", "low", "reason"),
    [(1e-3, 0.99, 0.98, "grows"), (0.0, 1.1, 1.05, "size"), (1e-3, 1.01, 0.99, "no growth")],
)
def test_a_reason_instead_of_a_number(ratio: float, factor: float, low: float, reason: str) -> None:
    """No growth, no size, or an interval down to no growth: no number, but why."""
    r = steps_until(ratio, factor, low, factor + 0.01, 2.0)
    assert r.value is None
    assert reason in r.reason


def test_ruined_already() -> None:
    """Nothing is left where the growing part is as large as the field."""
    assert steps_until(1.5, 1.1, 1.05, 1.2, 2.0).high == 0.0
