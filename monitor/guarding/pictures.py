"""Tile maps and close-ups as records: what a person wants to see of a growth. Pure."""

from __future__ import annotations

import base64
import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from monitor.measure import CloseUpCrops, TileGrid

Array = NDArray[np.float64]

MAP_CELLS = 1024
LEVELS = "0123456789abcdefghijklmnopqrstuvwxyz"
# Cells of a close-up in each of its two snapshots.
CLOSE_CELLS = 1600


def map_values(grid: TileGrid, of: int) -> dict[str, Any]:
    """Fields of a `TileMap` record that belongs to the snapshot record number `of`."""
    pooled = pool(grid.values.reshape(grid.tiling.counts))
    seen = np.isfinite(pooled)
    low, high = (pooled[seen].min(), pooled[seen].max()) if seen.any() else (0.0, 0.0)
    span = high - low if high > low else 1.0
    scaled = np.zeros(pooled.shape)
    np.divide(pooled - low, span, out=scaled, where=seen)
    places = np.clip(np.rint(scaled * (len(LEVELS) - 1)), 0, len(LEVELS) - 1).astype(int)
    cells = "".join(
        LEVELS[place] if shown else "."
        for place, shown in zip(places.ravel(), seen.ravel(), strict=True)
    )
    return {
        "of": of,
        "f": grid.field,
        "part": grid.part,
        "shape": pooled.shape,
        "cells": cells,
        "low": float(low),
        "high": float(high),
    }


def pool(values: Array) -> Array:
    """The largest finite value in each of at most `MAP_CELLS` blocks of neighbours, NaN where a
    block has none.

    values: of any number of axes. The longest axes are pooled first.
    """
    values = np.where(np.isfinite(values), values, -np.inf)
    while values.size > MAP_CELLS:
        axis = int(np.argmax(values.shape))
        values = np.maximum.reduceat(values, np.arange(0, values.shape[axis], 2), axis=axis)
    return np.where(np.isneginf(values), np.nan, values)


def closeup_values(crops: CloseUpCrops, of: int) -> dict[str, Any]:
    """Fields of a `CloseUp` record: the middle of the crops where they are too large."""
    shape = crops.now.shape
    most = math.floor(CLOSE_CELLS ** (1.0 / len(shape)) + 1e-9)
    if math.prod(shape) <= CLOSE_CELLS:
        most = max(shape)
    cut = tuple(_middle(n, most) for n in shape)
    lo = tuple(a + s.start for a, s in zip(crops.lo, cut, strict=True))
    hi = tuple(a + s.stop for a, s in zip(crops.lo, cut, strict=True))
    return {
        "of": of,
        "f": crops.field,
        "part": crops.part,
        "lo": lo,
        "hi": hi,
        "before": _base64(crops.before[cut]),
        "now": _base64(crops.now[cut]),
    }


def _middle(count: int, most: int) -> slice:
    kept = min(count, most)
    start = (count - kept) // 2
    return slice(start, start + kept)


def _base64(values: Array) -> str:
    with np.errstate(over="ignore"):
        return base64.b64encode(np.ascontiguousarray(values, dtype="<f4").tobytes()).decode("ascii")
