"""Growth in a number that comes line by line: an energy, a residual, a largest divergence. Pure.

As with snapshots it is *changes* that are judged, since a large steady value does not hide them,
and their level is a natural logarithm: ln of the rms change per unit of x. A constant factor per
step shows as a straight rise. Beside the changes stand fourth differences, which a smooth course
hides even less; what alternates from line to line shows in them long before.

Histories may have millions of lines, so levels are kept at several resolutions: the last ones as
they are, and rms values over blocks of 4, 16, 64 and so on.
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

from probes.growth import difference_gain, late_slope
from probes.onset import rising, straight_rise, windows

# Points kept at each resolution, and how many of one make a point of the next.
KEPT = 96
_BLOCK = 4
# At the finest resolution every so manyth point is looked at, elsewhere every one.
_LOOK_EVERY = 4
# What changes must exceed the rounding of their print by, in ln.
_OVER_FLOOR = math.log(6.0)
# A rise that is suspicious but not on a straight line, in ln, and how often it is looked for, in
# points of a resolution that averages.
_SUSPICIOUS = math.log(10.0)
_SUSPICION_EVERY = 8
# Units of print are taken from the finest of so many lines: "0.5" may stand for "0.500000".
_UNITS = 8
# Order of the rough differences; strides that differ by more than this spoil them.
_ROUGH = 4
_UNEVEN = 1.02
# Signs of the last changes that are looked at, and the share of flips that makes them alternate.
_SIGNS = 9
_FLIPS = 0.9


_WEIGHTS = {
    order: [(-1.0) ** k * math.comb(order, k) / 2.0**order for k in range(order + 1)]
    for order in (1, _ROUGH)
}


@dataclass(frozen=True, slots=True)
class Growth:
    """A rise of the level, per unit of x.

    straight: it holds one factor over as many decades as were asked for. slope: of the level, with
    a range. rise: in ln, over `span` of x. onset: interval of the x at which it began. at: x of its
    last point. size: ln of the growing part's size there, at least and at most.
    """

    straight: bool
    slope: float
    low: float
    high: float
    rise: float
    span: float
    onset: tuple[float, float]
    at: float
    size: tuple[float, float]


class Track:
    """One stretch of a history, x increasing.

    decades, straight, run_length: as in ``[alarm]``.
    """

    def __init__(self, decades: float, straight: float, run_length: float) -> None:
        self._settings = decades * math.log(10.0), straight, run_length
        self._units: deque[float] = deque(maxlen=_UNITS)
        self.interrupt()

    @property
    def level(self) -> float | None:
        """ln of the rms of the last four changes per unit of x; None before there are as many."""
        return self._changes.averaged

    @property
    def floor(self) -> float | None:
        """ln of what the rounding of the print alone makes of a change."""
        return self._changes.floor

    def interrupt(self) -> None:
        """A value that is no number came: changes on both sides of it are not comparable."""
        self._recent: deque[tuple[float, float]] = deque(maxlen=_ROUGH + 1)
        self._changes, self._rough = _Chain(*self._settings), _Chain(*self._settings)

    def add(self, x: float, value: float, unit: float) -> Growth | None:
        """Take a finite value; x must exceed the last one. Returns growth that shows with it, in
        the changes or else in the fourth differences.

        unit: distance of neighbouring numbers as printed, above zero.
        """
        self._units.append(unit)
        self._recent.append((x, value))
        if len(self._recent) < 2:
            return None
        finest = math.log(min(self._units)) - 0.5 * math.log(12.0)
        strides = [b[0] - a[0] for a, b in pairwise(self._recent)]
        found = self._changes.add(x, _difference(self._recent, 1), finest, strides[-1], 1)
        if max(strides) > _UNEVEN * min(strides):
            self._rough = _Chain(*self._settings)
        elif len(strides) == _ROUGH:
            rough = _difference(self._recent, _ROUGH)
            found = found or self._rough.add(x, rough, finest, strides[-1], _ROUGH)
        return found


def _difference(points: deque[tuple[float, float]], order: int) -> float:
    """The last difference of an order, over 2**order so that it overflows only where values do."""
    weights = _WEIGHTS[order]
    return math.fsum(w * v for w, (_, v) in zip(weights, reversed(points), strict=False))


@dataclass(slots=True)
class _Resolution:
    x: deque[float] = field(default_factory=lambda: deque(maxlen=KEPT))
    level: deque[float] = field(default_factory=lambda: deque(maxlen=KEPT))
    floor: deque[float] = field(default_factory=lambda: deque(maxlen=KEPT))
    count: int = 0
    open: list[tuple[float, float]] = field(default_factory=list)


class _Chain:
    """Levels of the differences of one order, at all resolutions."""

    def __init__(self, rise: float, straight: float, run_length: float) -> None:
        self._rise, self._straight, self._run_length = rise, straight, run_length
        self._resolutions: list[_Resolution] = [_Resolution()]
        self._signs: deque[bool] = deque(maxlen=_SIGNS)
        self._stride, self._order = 1.0, 1

    @property
    def averaged(self) -> float | None:
        coarse = self._resolutions[1:2]
        return coarse[0].level[-1] if coarse and coarse[0].level else None

    @property
    def floor(self) -> float | None:
        return self._resolutions[0].floor[-1] if self._resolutions[0].floor else None

    def add(
        self, x: float, difference: float, finest: float, stride: float, order: int
    ) -> Growth | None:
        """difference: over 2**order. finest: ln of the rms error of a printed value."""
        self._stride, self._order = stride, order
        self._signs.append(difference > 0.0)
        # First differences are told per unit of x, whole; higher ones as they are.
        scale = math.log(2.0 / stride) if order == 1 else 0.0
        floor = finest + math.log(difference_gain(order)) + scale
        level = math.log(abs(difference)) + scale if difference != 0.0 else floor
        return self._push(0, x, max(level, floor), floor)

    def _push(self, number: int, x: float, level: float, floor: float) -> Growth | None:
        if number == len(self._resolutions):
            self._resolutions.append(_Resolution())
        here = self._resolutions[number]
        here.x.append(x)
        here.level.append(level)
        here.floor.append(floor)
        here.count += 1
        here.open.append((level, floor))
        found = None
        if len(here.open) == _BLOCK:
            levels, floors = zip(*here.open, strict=True)
            here.open.clear()
            found = self._push(number + 1, x, _rms(levels), _rms(floors))
        return self._look(number, here) or found

    def _look(self, number: int, here: _Resolution) -> Growth | None:
        """Growth at one resolution."""
        if here.level[-1] <= here.floor[-1] + _OVER_FLOOR or len(here.level) < _BLOCK:
            return None
        may_alarm = number > 0 or here.count % _LOOK_EVERY == 0
        may_swell = number > 0 and here.count % _SUSPICION_EVERY == 0
        levels = list(here.level)
        may_alarm = may_alarm and _perhaps(levels, self._rise)
        may_swell = may_swell and _perhaps(levels, _SUSPICIOUS)
        if not may_alarm and not may_swell:
            return None
        x, y, floor = np.array(here.x), np.array(levels), np.array(here.floor)
        line = None
        if may_alarm:
            line = straight_rise(x, y, y > floor + _OVER_FLOOR, self._rise, self._straight)
        straight = line is not None
        if line is None and may_swell:
            line = rising(x, y, self._run_length)
        if line is None or line.fit.rise < _SUSPICIOUS:
            return None
        slope, low, high = late_slope(x[line.start :], y[line.start :])
        if slope <= 0.0:
            return None
        first, last = float(x[line.start]), float(x[-1])
        back = float(y[-1] - floor[-1]) / slope
        onset = (max(float(x[0]), min(first, last - back)), first)
        size = self._size(float(y[-1]), slope)
        return Growth(straight, slope, low, high, line.fit.rise, last - first, onset, last, size)

    def _size(self, level: float, slope: float) -> tuple[float, float]:
        """ln of what grows by exp(slope) per unit of x and makes such differences: whether it
        alternates, the signs of the last ones tell, else both are possible."""
        decay = math.exp(-min(700.0, slope * self._stride))
        scale = math.log(2.0 / self._stride) if self._order == 1 else 0.0
        ends = [
            level - scale - self._order * math.log((1.0 + s * decay) / 2.0) for s in (1.0, -1.0)
        ]
        flips = sum(a != b for a, b in pairwise(self._signs)) / max(1, len(self._signs) - 1)
        if flips >= _FLIPS:
            return ends[0], ends[0]
        return (ends[1], ends[1]) if flips <= 1.0 - _FLIPS else (ends[0], ends[1])


def _perhaps(levels: list[float], rise: float) -> bool:
    """A quick look whether a line of so much rise may end here, which spares most points the fits:
    two thirds of it, less what a line may scatter, lie between the first and the last third."""
    if levels[-1] - levels[-_BLOCK] >= rise:
        return True
    for n in windows(len(levels)):
        third = n // 3
        if sum(levels[-third:]) - sum(levels[-n : third - n]) >= 0.58 * rise * third:
            return True
    return False


def _rms(levels: tuple[float, ...]) -> float:
    """ln of the rms of what the levels are logarithms of, without leaving their range."""
    top = max(levels)
    return top + 0.5 * math.log(sum(math.exp(2.0 * (v - top)) for v in levels) / len(levels))
