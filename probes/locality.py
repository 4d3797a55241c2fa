"""Where something grows: tiles, boundary shares, and the box on the cells."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from probes.growth import fit_lines
from probes.tiling import Box, Tiling

Array = NDArray[np.float64]

# Largest rise of a tile's bulk, as a share of that of its ripple, for which the ripple counts as
# growing by itself.
_BULK_RISE = 0.25


def face_shares(energy: Array, tiling: Tiling) -> dict[str, float]:
    """Share of the energy in the tiles along each boundary face ("axis 0 low"), from 1 % on.

    A tile in a corner counts for both faces. A grid one tile wide along an axis has no faces there.
    """
    total = float(energy.sum())
    if total <= 0.0:
        return {}
    grid = energy.reshape(tiling.counts)
    out = {}
    for axis, n in enumerate(tiling.counts):
        if n < 3:
            continue
        for side, at in (("low", 0), ("high", n - 1)):
            share = float(np.take(grid, at, axis=axis).sum()) / total
            if share >= 0.01:
                out[f"axis {axis} {side}"] = share
    return out


def straightest_tile(
    levels: Array, bulk: Array, floor: Array, rise: float, straight: float, over: float
) -> tuple[int, int, float, float, float] | None:
    """The tile whose level rose most on a straight line: (tile, span, slope, rise, rms) or None.

    levels, bulk: (snapshots, tiles), natural logarithms of ripple and of everything, oldest first,
    -inf for zero. floor: (tiles,), of the ripple now. A window counts if the line rises by at least
    `rise`, its residual rms is at most `straight` times that, and its later half stands `over`
    above the floor. What arrives in a tile or grows there while resolved raises the bulk too: a
    window counts only if the bulk rose by less than a quarter of the ripple. Window lengths grow
    geometrically.
    """
    best = None
    n = 6
    while n <= levels.shape[0]:
        window = levels[-n:]
        seen = np.isfinite(window).all(axis=0)
        seen &= (window[n // 2 :] > floor + over).all(axis=0)
        with np.errstate(invalid="ignore"):
            risen = window[-1] - window[0]
            seen &= risen > 0.8 * rise
            seen &= bulk[-1] - bulk[-n] < _BULK_RISE * risen
        at = np.flatnonzero(seen)
        if at.size:
            slope, rms = fit_lines(window[:, at])
            rises = slope * (n - 1)
            good = (rises >= rise) & (rms <= straight * rises)
            if good.any():
                k = int(np.argmax(np.where(good, rises, -np.inf)))
                if best is None or rises[k] > best[3]:
                    best = (int(at[k]), n, float(slope[k]), float(rises[k]), float(rms[k]))
        n = max(n + 1, round(n * 1.4))
    return best


def cell_energy(before: Array, now: Array) -> Array:
    """Grid-scale energy of the change between two snapshots, per cell of a small box.

    before, now: raw values of the same box (NaN where masked). The change is sharpened by a fourth
    difference along each axis of at least five cells; the outermost cells, which it does not reach,
    take a second difference, so that a mode at a boundary is seen too. Scaled to a largest value of
    one at most; zero where nothing differs.
    """
    with np.errstate(over="ignore", invalid="ignore"):
        change = np.nan_to_num(now - before, nan=0.0, posinf=0.0, neginf=0.0)
    size = float(np.abs(change).max(initial=0.0))
    energy = np.zeros(change.shape)
    if size == 0.0:
        return energy
    for axis, n in enumerate(change.shape):
        if n < 5:
            continue
        u = np.moveaxis(change / size, axis, 0)
        ripple = np.empty_like(u)
        ripple[2:-2] = (u[:-4] - 4 * u[1:-3] + 6 * u[2:-2] - 4 * u[3:-1] + u[4:]) / 16
        ripple[:2] = (u[0] - 2 * u[1] + u[2]) / 4
        ripple[-2:] = (u[-1] - 2 * u[-2] + u[-3]) / 4
        energy += np.moveaxis(ripple, 0, axis) ** 2
    return energy


def quantile_box(
    energy: Array, tiling: Tiling, profiles: dict[int, tuple[Box, Array]], share: float = 0.95
) -> Box | None:
    """Index box that holds `share` of a tile-wise energy along every axis, on the cells.

    energy: (tiles,). profiles: by tile, an index box and cell-wise energies inside it (any tile's
    box may be wider than the tile; the part inside the tile is used). The outer layers of tiles are
    cut at the cell where their own profile says; without a profile the whole layer is kept.
    """
    total = float(energy.sum())
    if total <= 0.0 or not math.isfinite(total):
        return None
    grid = energy.reshape(tiling.counts)
    tail = (1.0 - share) / 2.0
    box = []
    for axis, (n, edge) in enumerate(zip(tiling.shape, tiling.edge, strict=True)):
        others = tuple(a for a in range(grid.ndim) if a != axis)
        layers = grid.sum(axis=others) / total
        filled = np.cumsum(layers)
        low = min(int(np.searchsorted(filled, tail, side="right")), len(layers) - 1)
        high = min(int(np.searchsorted(filled, 1.0 - tail, side="left")), len(layers) - 1)
        lo, hi = low * edge, min((high + 1) * edge, n)
        along = _layer_profile(low, axis, tiling, profiles)
        if along is not None:
            need = tail - (filled[low] - layers[low])
            lo += int(np.searchsorted(np.cumsum(along) * layers[low], need, side="right"))
        along = _layer_profile(high, axis, tiling, profiles)
        if along is not None:
            need = 1.0 - tail - (filled[high] - layers[high])
            inside = int(np.searchsorted(np.cumsum(along) * layers[high], need, side="left"))
            hi = min(hi, high * edge + inside + 1)
        box.append((lo, max(hi, lo + 1)))
    return tuple(box)


def _layer_profile(
    layer: int, axis: int, tiling: Tiling, profiles: dict[int, tuple[Box, Array]]
) -> Array | None:
    """Energy along one axis within a tile layer, summing to one, from the tiles that were seen."""
    start = layer * tiling.edge[axis]
    length = min(tiling.edge[axis], tiling.shape[axis] - start)
    out = np.zeros(length)
    for tile, (box, cells) in profiles.items():
        if tiling.place(tile)[axis] != layer:
            continue
        inside = tuple(
            slice(max(t[0], b[0]) - b[0], min(t[1], b[1]) - b[0])
            for t, b in zip(tiling.box(tile), box, strict=True)
        )
        part = cells[inside]
        along = part.sum(axis=tuple(a for a in range(part.ndim) if a != axis))
        first = max(box[axis][0], start) - start
        out[first : first + along.size] += along
    size = float(out.sum())
    return out / size if size > 0.0 else None
