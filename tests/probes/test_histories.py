"""Growth in a series of numbers: found with the right factor, and not where there is none. The
truths are the formulas that the series are made of."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest

from probes.formats.textnumbers import printed
from probes.histories import Growth, Track

STEPS = np.arange(4000.0)
SMOOTH = 1000.0 * np.exp(-STEPS / 3000.0)


def followed(values: np.ndarray, form: str = "", x: np.ndarray | None = None) -> list[Growth]:
    """Everything that is found in a series; form: how it is printed ("" as doubles are)."""
    track = Track(2.0, 0.03, 1e5)
    found = []
    for i, value in enumerate(values):
        number = printed(format(value, form)) if form else None
        told = number if number is not None else (float(value), 2.0**-52 * abs(value) + 5e-324)
        growth = track.add(float(i if x is None else x[i]), *told)
        if growth is not None:
            found.append(growth)
    return found


def first_straight(found: list[Growth]) -> Growth:
    return next(g for g in found if g.straight)


@pytest.mark.parametrize("rate", [1.002, 1.01, 1.1, 2.0])
def test_a_constant_factor_is_measured(rate: float) -> None:
    """A residual that grows by a factor per line: found on a straight line, with the factor, the
    stretch it began in, and its size."""
    values = 1e-12 * rate ** np.minimum(STEPS, 300.0 / math.log10(rate))
    found = first_straight(followed(values, ".9e"))
    assert found.slope == pytest.approx(math.log(rate), rel=1e-3)
    assert found.low <= math.log(rate) <= found.high * (1.0 + 1e-9)
    assert found.rise >= 2.0 * math.log(10.0)
    size = math.log(values[int(found.at)])
    # A level over several lines is that of their rms.
    assert found.size[0] == pytest.approx(size, abs=max(0.3, 4.0 * math.log(rate)))
    assert found.size[1] == pytest.approx(size, abs=max(0.3, 4.0 * math.log(rate)))


@pytest.mark.parametrize(("base", "share"), [(1.01, 1e-2), (-1.01, 1e-9)])
def test_growth_under_a_large_smooth_course(base: float, share: float) -> None:
    """1e-9 that grows by 1 % a line under a cooling from 1000: seen while it is a small share of
    the value, and where it alternates from line to line as soon as it stands out of the print."""
    grows = 1e-9 * base**STEPS
    found = first_straight(followed(SMOOTH + grows, ".16e"))
    at = int(found.at)
    assert abs(grows[at]) / SMOOTH[at] < share
    assert found.slope == pytest.approx(math.log(1.01), rel=0.05)
    assert found.low <= math.log(1.01) <= found.high * (1.0 + 1e-6)
    assert found.size[0] == pytest.approx(math.log(abs(grows[at])), abs=0.3)


def test_fewer_digits_see_later() -> None:
    """What the print rounds away cannot be seen: each two digits cost time, none gives a false
    find before."""
    grows = 1e-9 * 1.01**STEPS
    at = [first_straight(followed(SMOOTH + grows, form)).at for form in (".16e", ".10e", ".6e")]
    assert at == sorted(at)
    assert at[0] < at[-1]


COURSES: dict[str, Callable[[np.random.Generator], np.ndarray]] = {
    "cooling": lambda rng: SMOOTH,
    "relaxing": lambda rng: 1.0 - np.exp(-STEPS / 300.0),
    "swinging": lambda rng: np.sin(STEPS / 30.0),
    "beating": lambda rng: np.sin(STEPS / 30.0) * np.sin(STEPS / 401.0),
    "ramp": lambda rng: STEPS.copy(),
    "noise": lambda rng: 1000.0 + rng.standard_normal(4000),
    "correlated noise": lambda rng: np.convolve(rng.standard_normal(4060), np.ones(61), "valid"),
    "random walk": lambda rng: np.cumsum(rng.standard_normal(4000)),
    "steps": lambda rng: np.repeat(rng.standard_normal(40), 100),
    "constant": lambda rng: np.full(4000, 3.25),
    "growth by a power": lambda rng: (STEPS + 1.0) ** 3,
}


@pytest.mark.parametrize("name", COURSES)
@pytest.mark.parametrize("form", ["", ".5e", ".4f", "g"])
def test_healthy_courses_show_no_exponential(name: str, form: str) -> None:
    """Nothing rises straight over two decades in them, however they are printed."""
    found = followed(COURSES[name](np.random.default_rng(77_201)), form)
    assert not any(g.straight for g in found)


def test_uneven_strides() -> None:
    """A log line at wall-clock intervals: the factor is per step all the same."""
    rng = np.random.default_rng(5)
    x = np.cumsum(rng.integers(5, 9, 700)).astype(float)
    found = first_straight(followed(1e-9 * 1.01**x, ".9e", x))
    assert found.slope == pytest.approx(math.log(1.01), rel=0.02)


def test_an_interruption_starts_afresh() -> None:
    """A jump over a value that is no number is not a change."""
    track = Track(2.0, 0.03, 1e5)
    for i in range(30):
        track.add(float(i), 1.0 + 1e-3 * (i % 2), 1e-12)
    track.interrupt()
    assert track.level is None
    track.add(31.0, 5e8, 1e-12)
    assert track.level is None
    for i in range(32, 40):
        track.add(float(i), 5e8 + (i % 2), 1e-12)
    assert track.level == pytest.approx(0.0, abs=1e-6)


def test_values_near_the_largest_number() -> None:
    """Levels stay finite up to overflow."""
    track = Track(2.0, 0.03, 1e5)
    for i in range(40):
        track.add(float(i), (-1.0) ** i * 1.7e308, 1e292)
    assert track.level == pytest.approx(math.log(1.7e308) + math.log(2.0), abs=1e-6)


def test_long_histories_cost_little_memory() -> None:
    """Every resolution keeps as many points, and there are as many as four goes into the lines."""
    track = Track(2.0, 0.03, 1e5)
    for i in range(20_000):
        track.add(float(i), 1.0 + 1e-3 * (i % 7), 1e-12)
    resolutions = track._changes._resolutions
    assert len(resolutions) == math.floor(math.log(19_999, 4)) + 1
    assert all(len(r.level) <= 96 for r in resolutions)
