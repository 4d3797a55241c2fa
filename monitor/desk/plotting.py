"""Curves in character cells. Pure: arrays in, characters out.

A curve is drawn with two columns and four rows of dots per cell (braille) or, in plain ASCII, one
dot per cell. Many points per column become the span from the lowest to the highest, so that no
extreme gets lost. Axes are sticky: they stay as they are while the data fit, because every change
of an axis repaints the whole plot.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Dots = NDArray[np.bool_]

# Free room to the right of the last point when an axis is chosen anew, as a share of its length.
MARGIN = 1.0 / 8.0
# A kept axis is chosen anew when the data fill less than this share of it.
SPARSE = 0.45

# Bit of each dot of a braille cell, by row and column (Unicode 15, block "Braille Patterns").
_BITS = np.array([[0x01, 0x08], [0x02, 0x10], [0x04, 0x20], [0x40, 0x80]])
_BRAILLE = 0x2800


@dataclass(frozen=True, slots=True)
class Axis:
    """A stretch of numbers, lo < hi, and where its ticks stand."""

    lo: float
    hi: float
    ticks: tuple[float, ...] = ()

    @property
    def span(self) -> float:
        return self.hi - self.lo

    def holds(self, lo: float, hi: float) -> bool:
        return self.lo <= lo and hi <= self.hi

    def position(self, value: float, places: int) -> int:
        """Place 0 to places - 1 of a value on the axis; may lie outside."""
        return math.floor((value - self.lo) / self.span * places)


def nice_step(span: float, at_most: int) -> float:
    """The smallest of 1, 2, 5 times a power of ten that cuts `span` at most so many times."""
    if span <= 0.0 or not math.isfinite(span):
        return 1.0
    rough = span / max(1, at_most)
    size = 10.0 ** math.floor(math.log10(rough))
    return next(m * size for m in (1.0, 2.0, 5.0, 10.0) if m * size >= rough * (1.0 - 1e-9))


def ticks_between(lo: float, hi: float, step: float) -> tuple[float, ...]:
    """Multiples of `step` from lo to hi, both ends included."""
    first, last = math.ceil(lo / step - 1e-9), math.floor(hi / step + 1e-9)
    return tuple(k * step for k in range(first, last + 1))


def running_axis(before: Axis | None, lo: float, hi: float, ticks: int) -> Axis:
    """An axis that new points are appended to on the right: kept while they fit."""
    hi = max(hi, lo + 1.0)
    if before is not None and before.holds(lo, hi) and hi - lo >= SPARSE * before.span:
        return before
    end = hi + MARGIN / (1.0 - MARGIN) * (hi - lo)
    return Axis(lo, end, ticks_between(lo, end, max(1.0, nice_step(end - lo, ticks))))


def stepped_axis(before: Axis | None, lo: float, hi: float, ticks: int) -> Axis:
    """An axis whose ends are nice numbers: kept while the data fit and fill it."""
    if before is not None and before.holds(lo, hi) and hi - lo >= SPARSE * before.span:
        return before
    step = nice_step(hi - lo, ticks)
    low, high = math.floor(lo / step + 1e-9) * step, math.ceil(hi / step - 1e-9) * step
    if high <= low:
        low, high = low - step, high + step
    return Axis(low, high, ticks_between(low, high, step))


def decade_axis(before: Axis | None, lo: float, hi: float, ticks: int) -> Axis:
    """An axis of decimal exponents: whole decades, at least two; ticks on whole decades."""
    low, high = math.floor(lo + 1e-9), math.ceil(hi - 1e-9)
    if high - low < 2:
        high = low + 2
    if before is not None and before.holds(lo, hi) and high - low >= SPARSE * before.span:
        return before
    return Axis(low, high, ticks_between(low, high, max(1.0, nice_step(high - low, ticks))))


def column_spans(x: Array, y: Array, axis: Axis, columns: int) -> tuple[Array, Array]:
    """Lowest and highest value of a curve in each of `columns` columns, NaN where it is not.

    x: ascending; y: same length, NaN where there is no value (the curve has a gap there). Columns
    between two points of the curve carry its straight connection, and each span reaches half way to
    its neighbours, so that the curve is unbroken.
    """
    low, high = np.full(columns, np.nan), np.full(columns, np.nan)
    first = max(0, int(np.searchsorted(x, axis.lo)) - 1)
    last = min(len(x), int(np.searchsorted(x, axis.hi, side="right")) + 1)
    x, y = x[first:last], y[first:last]
    seen = np.isfinite(y)
    if not seen.any():
        return low, high
    place = np.floor((x - axis.lo) / axis.span * columns)
    inside = seen & (place >= 0) & (place < columns)
    start, end = np.full(columns, np.nan), np.full(columns, np.nan)
    if inside.any():
        at, values = place[inside].astype(np.intp), y[inside]
        heads = np.flatnonzero(np.diff(at, prepend=-1))
        tails = np.append(heads[1:], len(at)) - 1
        filled = at[heads]
        low[filled] = np.minimum.reduceat(values, heads)
        high[filled] = np.maximum.reduceat(values, heads)
        start[filled], end[filled] = values[heads], values[tails]
    _connect(x, y, seen, place, columns, low, high, start, end)
    # Half way to the right-hand neighbour, and back from there.
    reach = (end[:-1] + start[1:]) / 2.0
    joined = np.isfinite(reach)
    for column, here in ((low, np.minimum), (high, np.maximum)):
        column[:-1][joined] = here(column[:-1][joined], reach[joined])
        column[1:][joined] = here(column[1:][joined], reach[joined])
    return low, high


def _connect(
    x: Array,
    y: Array,
    seen: Dots,
    place: Array,
    columns: int,
    low: Array,
    high: Array,
    start: Array,
    end: Array,
) -> None:
    """Fill the empty columns between two neighbouring points of the curve."""
    wide = np.flatnonzero(seen[:-1] & seen[1:] & (np.diff(place) > 1.0))
    for k in wide:
        a, b = max(0, int(place[k]) + 1), min(columns, int(place[k + 1]))
        if b <= a:
            continue
        share = (np.arange(a, b) + 0.5 - place[k] - 0.5) / (place[k + 1] - place[k])
        values = y[k] + share * (y[k + 1] - y[k])
        for column in (low, high, start, end):
            column[a:b] = np.where(np.isnan(column[a:b]), values, column[a:b])


def raster(low: Array, high: Array, axis: Axis, rows: int) -> Dots:
    """Dots (rows, columns), row 0 on top, of the spans from `column_spans`.

    What lies beyond the axis is cut; `beyond` tells where.
    """
    columns = len(low)
    seen = np.isfinite(low)
    scale = rows / axis.span
    bottom = np.floor((np.nan_to_num(low) - axis.lo) * scale)
    top = np.floor((np.nan_to_num(high) - axis.lo) * scale)
    # A value on the upper end itself belongs to the topmost row.
    bottom, top = (np.where(v * 1.0 == rows, rows - 1, v) for v in (bottom, top))
    up = np.arange(rows)[::-1, None]
    dots: Dots = seen[None, :] & (up >= bottom[None, :]) & (up <= top[None, :])
    assert dots.shape == (rows, columns)
    return dots


def beyond(low: Array, high: Array, axis: Axis, per_cell: int) -> tuple[list[int], list[int]]:
    """Cells in which a curve lies wholly above, and wholly below, its axis."""
    with np.errstate(invalid="ignore"):
        above, below = low > axis.hi, high < axis.lo
    return (
        sorted({int(c) // per_cell for c in np.flatnonzero(above)}),
        sorted({int(c) // per_cell for c in np.flatnonzero(below)}),
    )


def braille(dots: Dots) -> list[str]:
    """Rows of braille characters from dots (4 x rows, 2 x columns); blank where no dot is."""
    rows, columns = dots.shape[0] // 4, dots.shape[1] // 2
    cells = dots.reshape(rows, 4, columns, 2).transpose(0, 2, 1, 3)
    codes = (cells * _BITS).sum(axis=(2, 3))
    return ["".join(chr(_BRAILLE + int(c)) if c else " " for c in row) for row in codes]


def suffixed(value: float, step: float) -> str:
    """A tick on an axis of counts: "0", "400", "1.2k", "3M"."""
    for size, letter in ((1e9, "G"), (1e6, "M"), (1e3, "k")):
        if abs(value) >= size and step >= 0.001 * size:
            return f"{value / size:.3f}".rstrip("0").rstrip(".") + letter
    return f"{value:.0f}"


def decimals(step: float) -> int:
    """Decimals that tell ticks apart which are `step` apart."""
    return max(0, -math.floor(math.log10(step) + 1e-9))
