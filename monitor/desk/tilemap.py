"""A pooled tile map of the log as numbers, as planes, and as steps of a ramp. Pure."""

from __future__ import annotations

import math
import string

import numpy as np
from numpy.typing import NDArray

from monitor.growthlog.records import TileMap

Array = NDArray[np.float64]

_DIGITS = {c: n for n, c in enumerate(string.digits + string.ascii_lowercase)}
_STEPS = len(_DIGITS) - 1


def values(record: TileMap) -> Array | None:
    """ln factor per snapshot, shape as in the record, NaN where there is no value; None where the
    record contradicts itself."""
    count = math.prod(record.shape)
    if not record.shape or min(record.shape) < 1 or count != len(record.cells):
        return None
    steps = np.array([_DIGITS.get(c, math.nan) for c in record.cells], dtype=float)
    out: Array = record.low + steps / _STEPS * (record.high - record.low)
    return out.reshape(record.shape)


def planes(array: Array) -> Array:
    """The same numbers as (planes, rows, columns); one and two axes make one plane, leading axes of
    more than three are taken together."""
    shape = (1,) * max(0, 3 - array.ndim) + array.shape
    return array.reshape(-1, *shape[-2:])


def worst_plane(stack: Array) -> int:
    """The plane that holds the largest value; 0 where there is none."""
    if not np.isfinite(stack).any():
        return 0
    return int(np.unravel_index(int(np.nanargmax(stack)), stack.shape)[0])


def pooled(plane: Array, rows: int, columns: int) -> Array:
    """At most rows x columns numbers: the largest of each group of neighbours, so that a single
    growing tile stays visible. NaN only where a whole group has no value."""
    out = np.where(np.isfinite(plane), plane, -np.inf)
    for axis, room in ((0, rows), (1, columns)):
        group = -(-out.shape[axis] // max(1, room))
        if group > 1:
            starts = np.arange(0, out.shape[axis], group)
            out = np.maximum.reduceat(out, starts, axis=axis)
    return np.where(np.isfinite(out), out, np.nan)


def ramp_steps(plane: Array, top: float, steps: int) -> NDArray[np.int64]:
    """0 for what does not grow, 1 to steps - 1 for growth up to `top` and beyond, -1 for no
    value."""
    share = np.nan_to_num(plane, nan=0.0) / top
    out = np.clip(np.ceil(share * (steps - 1)), 0, steps - 1).astype(np.int64)
    out[~np.isfinite(plane)] = -1
    return out
