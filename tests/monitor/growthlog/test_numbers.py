"""Digits in the log."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.growthlog.numbers import factor, number, rounded, significant, spell
from monitor.growthlog.records import Channel, Estimate, Verdict

FINITE = st.floats(allow_nan=False, allow_infinity=False)


@settings(deadline=None)
@given(st.floats())
def test_spelling_loses_nothing(value: float) -> None:
    """`number` undoes `spell`, and only non-finite values are spelled as words."""
    spelled = spell(value)
    assert isinstance(spelled, str) == (not math.isfinite(value))
    np.testing.assert_equal(number(spelled), value)


@settings(deadline=None)
@given(FINITE.filter(lambda v: abs(v) < 1.79e308))
def test_four_digits_as_numpy_prints_them(value: float) -> None:
    """NumPy's own formatting with three decimals in scientific notation is the reference."""
    assert significant(value) == float(np.format_float_scientific(value, 3, unique=False))


def test_the_largest_numbers_stay_finite() -> None:
    """1.7977e308 rounds up to a number that does not exist; the log keeps a finite one."""
    largest = float(np.finfo(np.float64).max)
    assert significant(largest) == 1.797e308
    assert significant(-largest) == -1.797e308


@settings(deadline=None)
@given(st.floats(1.0001, 1.9))
def test_a_factor_near_one_keeps_its_logarithm(value: float) -> None:
    """ln of a growth factor, the rate that is compared with the truth, is kept to 0.1 %."""
    assert math.log(factor(value)) == pytest.approx(math.log(value), rel=1.1e-3)


def test_four_digits_would_not_do_for_a_factor() -> None:
    """The reason for the rule: 1.0204 in four digits is 1.020, whose logarithm is off by 2 %."""
    assert math.log(significant(1.0204)) / math.log(1.0204) == pytest.approx(0.98, abs=0.002)
    assert factor(1.0204) == 1.0204


@settings(deadline=None)
@given(FINITE)
def test_rounding_twice_is_idle(value: float) -> None:
    """A record that was read can be written again without change."""
    for rule in (significant, factor):
        assert rule(rule(value)) == rule(value)


@settings(deadline=None)
@given(st.floats(-800.0, 800.0))
def test_a_level_is_exact_to_a_tenth_of_a_per_cent(level: float) -> None:
    """Levels are logarithms: three decimals, whatever their size."""
    kept = rounded(Channel("h", 0.0, 1.0, ripple=level)).ripple
    assert kept == pytest.approx(level, abs=5.01e-4)
    assert kept is not None
    assert len(f"{kept!r}".partition(".")[2].partition("e")[0]) <= 3 or abs(kept) < 1e-3


def test_an_estimate_is_rounded_like_what_it_estimates() -> None:
    """Value and ends of the interval of a factor carry the digits of a factor, those of a time to
    ruin four."""
    verdict = Verdict(
        condition="runaway",
        factor=Estimate(1.020412, 1.020398, 1.020431, 0.9),
        ruin=Estimate(123.4567, 100.04, math.inf, 0.8),
    )
    kept = rounded(verdict)
    assert kept.factor == Estimate(1.02041, 1.0204, 1.02043, 0.9)
    assert kept.ruin == Estimate(123.5, 100.0, "inf", 0.8)


def test_extremes_of_a_field_with_bounds_carry_eight_digits() -> None:
    """How far a pressure is from its bound must be known; elsewhere four digits do."""
    lo, hi = 101_324.2375, 101_377.4
    assert rounded(Channel("p", lo, hi)).lo == 101_300.0
    kept = rounded(Channel("p", lo, hi, bounded=True))
    assert (kept.lo, kept.hi) == (101_324.24, 101_377.4)
    assert rounded(kept) == kept
