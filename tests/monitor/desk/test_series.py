"""Columns of numbers, and growth factors fitted to levels."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from msgspec.structs import replace

from monitor.desk.series import WINDOW, Series, fitted_factors
from monitor.growthlog.records import Snapshot
from tests.monitor.desk.made_runs import FACTOR, SEEN, Maker, healthy, runaway


def series_of(made: Maker) -> Series:
    series = Series()
    for record in made.records:
        if isinstance(record, Snapshot):
            series.append(record)
    return series


@given(st.floats(-0.2, 0.2), st.integers(3, 40), st.integers(1, 50))
def test_a_straight_level_gives_its_factor(slope: float, n: int, stride: int) -> None:
    """exp(slope) at every point from the third on, whatever the stride."""
    x = np.arange(n, dtype=float) * stride
    got = fitted_factors(x, 1.0 + slope * x)
    assert np.isnan(got[:2]).all()
    assert got[2:] == pytest.approx(math.exp(slope), rel=1e-9)


def test_factors_agree_with_polyfit() -> None:
    """Reference: numpy.polyfit of degree one over the same window."""
    rng = np.random.default_rng(40127)
    x, y = np.cumsum(rng.integers(1, 9, 60)).astype(float), rng.normal(0, 1, 60)
    got = fitted_factors(x, y)
    for k in range(WINDOW, 60):
        window = slice(k - WINDOW + 1, k + 1)
        assert got[k] == pytest.approx(math.exp(np.polyfit(x[window], y[window], 1)[0]))


def test_missing_levels_do_not_bend_the_fit() -> None:
    """Half of the points gone: the factor of a straight level stays exact where there is one."""
    x = np.arange(30.0)
    y = 0.03 * x
    y[::2] = math.nan
    got = fitted_factors(x, y)
    assert np.isnan(got[::2]).all()
    assert got[9::2] == pytest.approx(math.exp(0.03))


def test_fitting_bit_by_bit_is_fitting_at_once() -> None:
    """A live desk, which asks after every snapshot, shows what a log opened later shows."""
    whole = series_of(runaway())
    growing = Series()
    for record in runaway().records:
        if isinstance(record, Snapshot):
            growing.append(record)
            growing.factors("T", ripple=True)
    np.testing.assert_array_equal(
        growing.factors("T", ripple=True), whole.factors("T", ripple=True)
    )


def test_the_made_run_grows_by_its_factor() -> None:
    """In the last third the ripple's factor is the made one to 2 per cent of its logarithm, the
    bulk's is below one."""
    series = series_of(runaway())
    ripple, bulk = series.factors("T", ripple=True), series.factors("T", ripple=False)
    assert math.log(ripple[-1]) == pytest.approx(math.log(FACTOR), rel=0.02)
    assert bulk[-1] < 1.0
    assert abs(math.log(ripple[SEEN - 5])) < 0.005


def test_many_snapshots_keep_their_order_and_values() -> None:
    """Room is made as needed; a thousand rows come back as they were put in."""
    series = series_of(healthy(1000))
    assert len(series) == 1000
    np.testing.assert_array_equal(series.x, np.arange(1, 1001) * 20.0)
    assert np.isfinite(series.ripple("T")).all()
    assert np.isnan(series.ripple("no such field")).all()


def test_a_snapshot_that_is_not_later_is_left_out() -> None:
    """The same step twice would make the curve double back."""
    made = healthy(10)
    series = series_of(made)
    series.append(made.records[-1] if isinstance(made.records[-1], Snapshot) else made.records[-2])
    assert len(series) == 10


def test_uneven_strides_use_the_snapshots_own_ripple() -> None:
    """Differences over unlike strides do not compare; the bulk is then told per step."""
    made = healthy(20)
    records = [r for r in made.records if isinstance(r, Snapshot)]
    series = Series()
    for record in records:
        series.append(replace(record, evidence=replace(record.evidence, uneven=True)))
    own = [r.evidence.channels[0].own for r in records]
    bulk = [r.evidence.channels[0].bulk - math.log(20.0) for r in records]
    assert series.ripple("T") == pytest.approx(own)
    assert series.bulk("T") == pytest.approx(bulk)


def test_the_pace_is_that_of_the_files() -> None:
    """Fifteen seconds and twenty steps between snapshots."""
    series = series_of(healthy(30))
    assert series.pace() == pytest.approx(0.75)
    assert series.spacing() == pytest.approx(15.0)
    assert Series().pace() is None
