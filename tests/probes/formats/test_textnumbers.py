"""Numbers as programs print them. What Fortran prints is checked against a Fortran compiler in
tests/demo_runs/test_slabs.py; here stand the forms of the standard and of C libraries."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from probes.formats.textnumbers import printed

FINITE = st.floats(allow_nan=False, allow_infinity=False)


@pytest.mark.parametrize(
    ("token", "value"),
    [
        ("1.0D-03", 1e-3),
        ("1.0d+02", 100.0),
        ("-1.25E+01", -12.5),
        ("1.0Q+00", 1.0),
        # Exponents of three digits lose their letter (Fortran 2018, 13.7.2.3.3, from memory).
        ("1.0-103", 1e-103),
        ("-2.5+105", -2.5e105),
        ("0.123456789-200", 0.123456789e-200),
        (".5", 0.5),
        ("5.", 5.0),
        ("+7", 7.0),
        ("-0", 0.0),
        ("1e5", 1e5),
    ],
)
def test_finite_numbers(token: str, value: float) -> None:
    """Each form has the value that it stands for."""
    found = printed(token)
    assert found is not None
    assert found.value == pytest.approx(value, rel=1e-15)


@pytest.mark.parametrize(
    "token",
    ["NaN", "nan", "-nan", "NAN", "-nan(ind)", "nan(snan)", "1.#QNAN", "-1.#IND", "NaNQ", "******"],
)
def test_what_is_no_number(token: str) -> None:
    """NaN in the spellings of C, Fortran and older Windows libraries, and stars where a number did
    not fit its width (Fortran 2018, 13.7.2.1, from memory)."""
    found = printed(token)
    assert found is not None
    assert math.isnan(found.value)


@pytest.mark.parametrize(
    ("token", "value"),
    [
        ("Inf", math.inf),
        ("-Infinity", -math.inf),
        ("+INF", math.inf),
        ("1.#INF", math.inf),
        ("1e999", math.inf),
    ],
)
def test_infinities(token: str, value: float) -> None:
    """Spelled, or too large for double precision."""
    found = printed(token)
    assert found is not None
    assert found.value == value


@pytest.mark.parametrize(
    "token", ["", "-", ".", "e5", "abc", "12-5", "1_000", "2026-01-01", "12:00", "0x1p3", "1.2.3"]
)
def test_what_is_no_print_of_a_number(token: str) -> None:
    """Dates, words and half numbers are told apart; underscores are Python's alone."""
    assert printed(token) is None


@settings(deadline=None)
@given(FINITE, st.integers(0, 16))
def test_scientific_print_is_read_back(value: float, digits: int) -> None:
    """NumPy's print and Python's own reading of it are the reference, and the unit is the distance
    of the neighbouring print."""
    text = np.format_float_scientific(value, precision=digits, unique=False)
    found = printed(text.replace("e", "D"))
    assert found is not None
    assert found.value == float(text)
    if abs(value) > 1e-280 and math.isfinite(found.value):
        exponent = int(text.partition("e")[2])
        assert found.unit == pytest.approx(
            max(10.0 ** (exponent - digits), 2.0**-52 * abs(found.value)), rel=1e-12
        )


def test_the_unit_of_a_fixed_print() -> None:
    """F10.4 has steps of 1e-4 whatever the value; no print is finer than double precision."""
    assert printed("12.3456") == pytest.approx((12.3456, 1e-4))
    found = printed("1234567.890123456789012")
    assert found is not None
    assert found.unit == pytest.approx(1234567.89 * 2.0**-52)
