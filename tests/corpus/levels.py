"""Sizes, places and ripple levels of arrays, written apart from the detector's own."""

from __future__ import annotations

import math

import numpy as np

from tests.corpus.case import Array, Box

ORDER = 8
# What white noise keeps of its size in a ripple: root of the sum of squared binomial weights.
WHITE = math.sqrt(math.comb(2 * ORDER, ORDER)) / 2.0**ORDER
# The truth's tiles: cells per edge by number of axes. Fixed here, whatever the sketch uses.
EDGE = {1: 32, 2: 16, 3: 8}


def rms(values: Array) -> float:
    """Root mean square that does not overflow before the values do; infinite where they have."""
    if values.size == 0:
        return 0.0
    top = float(np.abs(values).max())
    if top == 0.0 or not math.isfinite(top):
        return 0.0 if top == 0.0 else math.inf
    return top * math.sqrt(float(np.mean(np.square(values / top, dtype=np.float64))))


def variation(values: Array) -> float:
    """Root mean square deviation from the mean."""
    with np.errstate(all="ignore"):
        return rms(values - values.mean())


def ripple(values: Array, axis: int) -> Array:
    """Normalised 8th difference along an axis, the shape of `values` with zeros at the ends; a
    zigzag keeps its size (symbol sin(theta / 2)**8 in modulus)."""
    out = np.zeros(values.shape)
    half = ORDER // 2
    if values.shape[axis] > ORDER:
        inner = [slice(None)] * values.ndim
        inner[axis] = slice(half, values.shape[axis] - half)
        out[tuple(inner)] = np.diff(values, n=ORDER, axis=axis) / 2.0**ORDER
    return out


def tile_means(values: Array) -> Array:
    """Mean of `values` over each tile, in the tile grid; tiles at the end may be smaller."""
    edge = EDGE[values.ndim]
    sums, count = np.asarray(values, dtype=np.float64), np.ones(values.shape)
    for axis, n in enumerate(values.shape):
        starts = np.arange(0, n, edge)
        sums = np.add.reduceat(sums, starts, axis=axis)
        count = np.add.reduceat(count, starts, axis=axis)
    return sums / count


def tile_rms(values: Array) -> Array:
    """Root mean square per tile, scaled so that nothing overflows early."""
    top = float(np.abs(values).max()) if values.size else 0.0
    if top == 0.0 or not math.isfinite(top):
        return np.full_like(tile_means(np.zeros(values.shape)), 0.0 if top == 0.0 else math.inf)
    return top * np.sqrt(tile_means(np.square(np.asarray(values / top, dtype=np.float64))))


def rounding(steps: Array, gridded: bool) -> list[Array]:
    """What storing gives `channels` of a change between two snapshots: the rounding is spread
    evenly over the distance of two numbers (`steps`), in either snapshot."""
    bulk = tile_rms(steps) * math.sqrt(2.0 / 12.0)
    return [bulk] + [bulk * WHITE] * (steps.ndim if gridded else 0)


def channels(values: Array, gridded: bool) -> list[Array]:
    """Levels per tile of the bulk and of the ripple along each axis."""
    out = [tile_rms(values)]
    if gridded:
        out += [tile_rms(ripple(values, axis)) for axis in range(values.ndim)]
    return out


def energy_box(values: Array, share: float = 0.95) -> Box | None:
    """Index box [lo, hi) that holds `share` of the energy along every axis, half of the rest left
    out at either end. None for zero or non-finite values."""
    top = float(np.abs(values).max()) if values.size else 0.0
    if top == 0.0 or not math.isfinite(top):
        return None
    energy = np.square(np.asarray(values / top, dtype=np.float64))
    box = []
    for axis in range(energy.ndim):
        profile = energy.sum(axis=tuple(a for a in range(energy.ndim) if a != axis))
        filled = np.cumsum(profile) / profile.sum()
        lo = int(np.searchsorted(filled, (1.0 - share) / 2.0))
        hi = int(np.searchsorted(filled, 1.0 - (1.0 - share) / 2.0)) + 1
        box.append((lo, min(hi, energy.shape[axis])))
    return tuple(box)
