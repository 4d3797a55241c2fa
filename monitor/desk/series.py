"""Columns of numbers over the snapshots of one segment, and the growth factors fitted to them.

A log may hold a million snapshots, so nothing is kept per snapshot but the numbers that are drawn,
8 bytes each.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from monitor.growthlog.records import Channel, Snapshot

Array = NDArray[np.float64]

# The factor at a snapshot is fitted to the levels of this many, itself the last.
WINDOW = 8

# A mode's factor is drawn once it has been found in as many snapshots in a row.
_STEADY = 3

_X, _AT, _STRIDE = range(3)
_BULK, _RIPPLE, _OWN, _FLOOR, _VARY, _MODE = range(6)
_START = 256
_PACE_OVER = 16


class _Table:
    """Rows of numbers that grow at the end."""

    def __init__(self, columns: int) -> None:
        self._room = np.full((_START, columns), np.nan)
        self.length = 0

    def set(self, row: int, values: tuple[float, ...]) -> None:
        """Write one row; rows skipped on the way are NaN."""
        if row >= len(self._room):
            bigger = np.full((2 * len(self._room), self._room.shape[1]), np.nan)
            bigger[: self.length] = self._room[: self.length]
            self._room = bigger
        self._room[row] = values
        self.length = row + 1

    def column(self, number: int, rows: int) -> Array:
        """The first `rows` values of a column, NaN where it was not written."""
        while rows > len(self._room):
            self.set(len(self._room), (np.nan,) * self._room.shape[1])
        return self._room[:rows, number]


class Series:
    """What is plotted of one segment.

    x: step, or number of the snapshot where the run's steps are unknown; seconds: when each
    snapshot was written (or judged, where the file's time is unknown), since the epoch.
    Levels are natural logarithms, NaN where there is none.
    """

    def __init__(self) -> None:
        self._base = _Table(3)
        self._fields: dict[str, _Table] = {}
        self._fitted: dict[tuple[str, bool, bool], Array] = {}
        self.uneven = False
        self.top: dict[str, float] = {}

    def __len__(self) -> int:
        return self._base.length

    @property
    def fields(self) -> list[str]:
        """Names of the fields, in the order met."""
        return list(self._fields)

    def append(self, snapshot: Snapshot) -> None:
        """Take one snapshot in. One that does not lie beyond the last is not taken."""
        x = float(snapshot.index if snapshot.step is None else snapshot.step)
        row = len(self)
        if row and x <= self._base.column(_X, row)[-1]:
            return
        evidence = snapshot.evidence
        self.uneven = self.uneven or evidence.uneven
        self._base.set(row, (x, snapshot.mtime or snapshot.at, float(evidence.stride or 1)))
        modes: dict[str, float] = {}
        for mode in evidence.modes:
            if mode.held or mode.steady >= _STEADY:
                modes.setdefault(mode.f, mode.factor)
        for channel in evidence.channels:
            self._take(channel, row, modes.get(channel.f))

    def _take(self, channel: Channel, row: int, mode: float | None) -> None:
        table = self._fields.get(channel.f)
        if table is None:
            table = self._fields[channel.f] = _Table(6)
        levels = (channel.bulk, channel.ripple, channel.own, channel.floor, channel.vary, mode)
        table.set(row, tuple(math.nan if v is None else v for v in levels))
        if channel.top is not None:
            self.top[channel.f] = channel.top

    @property
    def x(self) -> Array:
        return self._base.column(_X, len(self))

    @property
    def seconds(self) -> Array:
        return self._base.column(_AT, len(self))

    def bulk(self, field: str) -> Array:
        """Level of the differences; per step where strides are uneven, so that they compare."""
        level = self._column(field, _BULK)
        if not self.uneven:
            return level
        return level - np.log(np.maximum(self._base.column(_STRIDE, len(self)), 1.0))

    def ripple(self, field: str) -> Array:
        """Ripple level of the differences; of the snapshots themselves where strides are uneven."""
        return self._column(field, _OWN if self.uneven else _RIPPLE)

    def floor(self, field: str) -> Array:
        """Ripple that rounding in storage alone would make."""
        return self._column(field, _FLOOR)

    def mode(self, field: str) -> Array:
        """Factor per step of the mode that has persisted longest, NaN where none has."""
        return self._column(field, _MODE)

    def vary(self, field: str) -> Array:
        """Size of the field's variation."""
        return self._column(field, _VARY)

    def _column(self, field: str, number: int) -> Array:
        table = self._fields.get(field)
        return np.full(len(self), np.nan) if table is None else table.column(number, len(self))

    def factors(self, field: str, *, ripple: bool) -> Array:
        """Growth factor per unit of x at each snapshot; only new rows are fitted anew."""
        # Once strides turn out uneven, other levels are used for the past as well.
        key = (field, ripple, self.uneven)
        known = self._fitted.get(key, np.empty(0))
        done = len(known)
        if done < len(self):
            first = max(0, done - WINDOW + 1)
            level = self.ripple(field) if ripple else self.bulk(field)
            fresh = fitted_factors(self.x[first:], level[first:])
            known = self._fitted[key] = np.concatenate([known, fresh[done - first :]])
        return known

    def pace(self) -> float | None:
        """Median wall-clock seconds per unit of x over the last snapshots."""
        if len(self) < 3:
            return None
        x, seconds = self.x[-_PACE_OVER:], self.seconds[-_PACE_OVER:]
        pace = float(np.median(np.diff(seconds) / np.diff(x)))
        return pace if pace > 0.0 else None

    def spacing(self) -> float | None:
        """Median wall-clock seconds between two of the last snapshots."""
        if len(self) < 3:
            return None
        spacing = float(np.median(np.diff(self.seconds[-_PACE_OVER:])))
        return spacing if spacing > 0.0 else None


def fitted_factors(x: Array, level: Array, window: int = WINDOW) -> Array:
    """exp of the least-squares slope of `level` (natural logarithm) over the last `window` points.

    x, level: (n,); result (n,), NaN where fewer than three points of the window have a level. The
    slope of a straight level is found exactly whatever points are missing.
    """
    n = len(x)
    if n == 0:
        return np.empty(0)
    pad = np.full(window - 1, np.nan)
    xs = sliding_window_view(np.concatenate([np.full(window - 1, x[0]), x]), window)
    ys = sliding_window_view(np.concatenate([pad, level]), window)
    seen = np.isfinite(ys)
    count = seen.sum(axis=1)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        mean_x = np.where(seen, xs, 0.0).sum(axis=1) / count
        mean_y = np.where(seen, ys, 0.0).sum(axis=1) / count
        away = np.where(seen, xs - mean_x[:, None], 0.0)
        rise = (away * np.where(seen, ys - mean_y[:, None], 0.0)).sum(axis=1)
        slope = rise / (away**2).sum(axis=1)
        factor = np.exp(slope)
    return np.where((count >= 3) & np.isfinite(level), factor, np.nan)
