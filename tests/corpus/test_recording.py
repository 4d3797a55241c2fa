"""The truth about snapshots that are put together by hand."""

from __future__ import annotations

import numpy as np
import pytest

from probes.spec import FieldSpec
from tests.corpus.recording import Recorder

N = 96
SMOOTH = np.sin(2.0 * np.pi * np.arange(N) / N)
ZIGZAG = (-1.0) ** np.arange(N)


def grown(recorder: Recorder, factor: float, start: float, count: int = 60) -> None:
    """A zigzag in cells 40 to 48 that grows by `factor` a snapshot on a smooth field."""
    part = np.zeros(N)
    part[40:48] = ZIGZAG[40:48]
    for k in range(count):
        growing = start * factor**k * part
        drift = SMOOTH * (1.0 + 1e-4 * k)
        if not recorder.take(10 * k, 0.1 * k, {"u": drift + growing}, {"u": growing}):
            break


def test_contamination_is_the_growing_part_over_the_variation() -> None:
    """rms of the zigzag, 1e-6 sqrt(8 / 96), over that of a sine, sqrt(1 / 2); local: in its tile of
    32 cells."""
    recorder = Recorder()
    grown(recorder, 2.0, 1e-6, count=3)
    truth = recorder.sick(0, 2.0).truth
    assert truth.contamination[0] == pytest.approx(1e-6 * (8 / N) ** 0.5 / 0.5**0.5)
    assert truth.local[0] == pytest.approx(1e-6 * (8 / 32) ** 0.5 / 0.5**0.5)
    assert truth.contamination[2] == pytest.approx(4.0 * truth.contamination[0], rel=1e-3)


def test_an_offset_does_not_hide_it() -> None:
    """300 added to the field changes nothing."""
    plain, lifted = Recorder(), Recorder()
    for recorder, offset in ((plain, 0.0), (lifted, 300.0)):
        recorder.take(0, 0.0, {"u": SMOOTH + offset}, {"u": 1e-3 * ZIGZAG})
    assert lifted.contamination[0] == pytest.approx(plain.contamination[0])


def test_it_emerges_from_the_rounding_of_storage() -> None:
    """Stored in single precision, a part that grows by 1.5 from 1e-12 emerges where its change in
    the tile, a third of its size over a quarter of the cells, is twice the rounding of a change,
    d / sqrt(6) with numbers d = 2**-25 to 2**-24 apart there."""
    recorder = Recorder("f4")
    grown(recorder, 1.5, 1e-12)
    size = 6.0 * 2.0 * 2.0**-24.5 / 6.0**0.5
    assert recorder.emergence() == pytest.approx(np.log(size / 1e-12) / np.log(1.5), abs=1.5)


def test_it_is_clear_only_above_the_rest_of_the_ripple() -> None:
    """With steady noise of 1e-6 in the rest, the part is above the rounding from the start, and
    clear when it is larger than the noise."""
    recorder, rng = Recorder(), np.random.default_rng(7)
    for k in range(60):
        growing = 1e-12 * 1.5**k * ZIGZAG
        recorder.take(k, k, {"u": SMOOTH + 1e-6 * rng.standard_normal(N) + growing}, {"u": growing})
    assert recorder.emergence() == 1
    expected = np.log(1e-6 / 1e-12) / np.log(1.5)
    assert recorder.emergence(clear=True) == pytest.approx(expected, abs=3.0)


def test_the_place_is_that_of_the_growing_part() -> None:
    """Box and largest cell of the part, only where the case has a place."""
    recorder = Recorder(placed=True)
    grown(recorder, 2.0, 1e-6, count=3)
    spot = recorder.sick(0, 2.0).truth.spots[2]
    assert spot is not None
    assert (spot.box, spot.peak[0] in range(40, 48), spot.local) == (((40, 48),), True, True)
    everywhere = Recorder()
    grown(everywhere, 2.0, 1e-6, count=3)
    assert everywhere.sick(0, 2.0).truth.spots[2] is None


def test_it_ends_when_the_field_is_ruined_or_has_overflowed() -> None:
    """A run ends once the growing part is thirty times the field, and two snapshots after values
    have ceased to be finite."""
    ruined = Recorder()
    grown(ruined, 2.0, 1.0)
    assert 30.0 < ruined.contamination[-1] < 60.0
    endless = Recorder("f2", end=np.inf)
    grown(endless, 2.0, 1.0)
    truth = endless.sick(0, 2.0).truth
    assert truth.overflow == 16  # 2**16 is above 65504
    assert len(truth.steps) == 19


def test_masked_cells_are_no_overflow() -> None:
    """NaN in the first snapshot is a mask; elsewhere and later it is an overflow."""
    recorder = Recorder()
    hole = np.where(np.arange(N) < 10, np.nan, SMOOTH)
    growing = np.where(np.arange(N) < 10, 0.0, 1e-4 * ZIGZAG)
    for k in range(3):
        recorder.take(k, k, {"u": hole + k}, {"u": growing})
    assert recorder.sick(0, None).truth.overflow is None
    assert recorder.contamination[1] == pytest.approx(1.4e-4, rel=0.1)
    recorder.take(3, 3, {"u": np.where(np.arange(N) == 50, np.nan, hole)}, {"u": growing})
    assert recorder.sick(0, None).truth.overflow == 3


def test_a_value_out_of_bounds_is_told() -> None:
    """`broken` is the first snapshot with a value below its bound."""
    recorder = Recorder()
    for k in range(5):
        recorder.take(k, k, {"h": np.full(N, 3.5 - k)})
    truth = recorder.broken(4, {"h": FieldSpec(min=0.0)}, "drained").truth
    assert (truth.broken, truth.cause, truth.factor) == (4, 4, None)
