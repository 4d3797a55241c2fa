"""Where the leading channel grows: tiles, faces, crops, the box on the cells, contamination."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from monitor.growthlog.records import Box, Estimate, Mode, Worst
from monitor.measuring.memory import Place
from monitor.measuring.reading import Reading
from probes import locality
from probes.tiling import Tiling
from probes.wire import Crop

Array = NDArray[np.float64]
Crops = dict[tuple[str, str, tuple[int, ...]], Array]

# Neighbouring cells that a crop shows around its tile, and cells of one crop at most.
_CROP_HALO = 4
_CROP_CELLS = 8192
_SHORTEST_SHARE = 0.01
_WORST = 4
# Longest wavelength of a pair whose size counts as contamination.
_CONTAMINATING_CELLS = 8.0
# A pair that has not persisted yet has to make up this much of the last difference, to have come
# up in as many snapshots, and to grow by this factor per snapshot.
_TELLING_SHARE = 0.4
_TELLING_STEADY = 3
_TELLING_VALUE = 1.05
# The size of a growing part is known within about this factor.
_SIZE_DOUBT = 2.0


@dataclass(frozen=True)
class TileGrid:
    """Local amplification for a map: ln factor per snapshot by tile, NaN where not seen."""

    field: str
    part: str
    tiling: Tiling
    values: Array


@dataclass(frozen=True)
class CloseUpCrops:
    """Raw values of the worst place in two consecutive snapshots, shape hi - lo."""

    field: str
    part: str
    lo: tuple[int, ...]
    hi: tuple[int, ...]
    before: Array
    now: Array


def leading(readings: list[Reading]) -> Reading | None:
    """The channel to look at more closely: with the pair that has persisted longest, then with the
    largest straight rise, then with the most ripple above its floor."""

    def rank(r: Reading) -> tuple[int, float, float]:
        held = max((m.held for m in r.modes if m.cells is not None and m.cells < 6.0), default=0)
        rise = r.line.rise if r.line is not None else 0.0
        ripple, floor = r.record.ripple, r.record.floor
        over = ripple - floor if ripple is not None and floor is not None else -math.inf
        return held, rise, over

    seen = [r for r in readings if r.record.bulk is not None]
    return max(seen, key=rank, default=None)


def heaviest(r: Reading) -> Place:
    """The part with most of the growing energy."""
    return max(r.memory.places, key=lambda p: float(r.energy[p.tiles].sum()))


def worst_tiles(r: Reading, stride: int | None) -> tuple[Worst, ...]:
    """At most four tiles by their share of the growing energy."""
    total = float(r.energy.sum())
    if total <= 0.0:
        return ()
    out = []
    for tile in np.argsort(-r.energy)[:_WORST]:
        share = float(r.energy[tile]) / total
        if share < _SHORTEST_SHARE:
            break
        factor = 1.0
        if r.before is not None and np.isfinite(r.before[tile]):
            factor = math.exp((r.tile_levels[tile] - r.before[tile]) / (stride or 1))
        out.append(Worst(r.memory.global_tile(int(tile)), share, factor))
    return tuple(out)


def face_shares(r: Reading) -> dict[str, float]:
    """Share of the growing energy along each boundary; none where a field has several parts, whose
    place in the whole is not known."""
    if len(r.memory.places) != 1:
        return {}
    return locality.face_shares(r.energy, r.memory.places[0].layout.tiling)


def tile_grid(r: Reading) -> TileGrid | None:
    """Factors of the heaviest part's tiles, None at the first difference."""
    if r.before is None:
        return None
    place = heaviest(r)
    with np.errstate(invalid="ignore"):
        change = (r.tile_levels - r.before)[place.tiles]
    return TileGrid(r.memory.name, place.part, place.layout.tiling, change)


def contamination(r: Reading) -> tuple[Estimate, Estimate]:
    """Share of the growing part in the field's variation: over the field, and in the worst tile
    (there too against the variation of the whole field, since a calm tile has none of its own)."""
    # A vector that does not grow as its value says still holds parts of something else.
    sized = [
        m
        for m in r.modes
        if m.amp is not None
        and m.cells is not None
        and m.cells < _CONTAMINATING_CELLS
        and (m.held or _telling(m))
    ]
    if not sized:
        return (Estimate(reason="no growing mode stands out"),) * 2
    if r.record.vary is None:
        return (Estimate(reason="the field does not vary"),) * 2
    mode = max(sized, key=lambda m: (m.held, m.amp or -math.inf))
    ratio = math.exp(min(700.0, (mode.amp or 0.0) - r.record.vary))
    total = float(r.energy.sum())
    local = ratio
    if total > 0.0:
        local *= math.sqrt(float(r.energy.max()) / total * len(r.energy))
    return _about(ratio), _about(local)


def _telling(m: Mode) -> bool:
    """Whether a pair that has not persisted over a window says how large the growing part is: it
    makes up much of the difference, came up before, and is no neutral motion."""
    return (
        m.share >= _TELLING_SHARE
        and m.steady >= _TELLING_STEADY
        and abs(complex(m.re, m.im)) >= _TELLING_VALUE
    )


def _about(value: float) -> Estimate:
    return Estimate(value, value / _SIZE_DOUBT, value * _SIZE_DOUBT, 0.8)


def crops_to_watch(r: Reading, watched: tuple[Crop, ...], most: int) -> tuple[Crop, ...]:
    """Boxes to see in the next snapshot: the worst tiles, and those in the outer layers of what
    grows. Boxes watched already stay while there is room, since two looks make a difference."""
    place = heaviest(r)
    tiling = place.layout.tiling
    energy = r.energy[place.tiles]
    total = float(energy.sum())
    if total <= 0.0:
        return ()
    chosen = [int(t) for t in np.argsort(-energy)[:2]]
    grid = energy.reshape(tiling.counts)
    for axis in range(grid.ndim):
        others = tuple(a for a in range(grid.ndim) if a != axis)
        filled = np.cumsum(grid.sum(axis=others)) / total
        for quantile in (0.025, 0.975):
            layer = min(int(np.searchsorted(filled, quantile)), grid.shape[axis] - 1)
            inside = np.take(grid, layer, axis=axis)
            at = [int(i) for i in np.unravel_index(int(np.argmax(inside)), inside.shape)]
            chosen.append(tiling.number([*at[:axis], layer, *at[axis:]]))
    boxes = {}
    for tile in dict.fromkeys(chosen):
        lo = tuple(max(0, a - _CROP_HALO) for a, _ in tiling.box(tile))
        hi = tuple(
            min(n, b + _CROP_HALO) for (_, b), n in zip(tiling.box(tile), tiling.shape, strict=True)
        )
        if math.prod(b - a for a, b in zip(lo, hi, strict=True)) <= _CROP_CELLS:
            boxes[lo] = Crop(field=r.memory.name, part=place.part, lo=lo, hi=hi)
    for crop in watched:
        if crop.field == r.memory.name and crop.part == place.part:
            boxes.setdefault(crop.lo, crop)
    return tuple(boxes.values())[:most]


def on_the_cells(
    r: Reading, before: Crops, now: Crops
) -> tuple[tuple[str, str], Box | None, CloseUpCrops | None]:
    """Field and part, the index box on the cells, and the raw values around the worst tile."""
    place = heaviest(r)
    tiling, energy = place.layout.tiling, r.energy[place.tiles]
    profiles: dict[int, tuple[Box, Array]] = {}
    closeup, most = None, -1.0
    for (name, part, lo), values in now.items():
        old = before.get((name, part, lo))
        if (name, part) != (r.memory.name, place.part) or old is None:
            continue
        hi = tuple(a + n for a, n in zip(lo, values.shape, strict=True))
        # The tile of a crop is the one at its middle: the halo is narrower than half a tile, or
        # cut off at the grid's edge.
        tile = tiling.holding([(a + b - 1) // 2 for a, b in zip(lo, hi, strict=True)])
        profiles[tile] = (tuple(zip(lo, hi, strict=True)), locality.cell_energy(old, values))
        if energy[tile] > most:
            most = float(energy[tile])
            closeup = CloseUpCrops(name, part, lo, hi, old, values)
    box = locality.quantile_box(energy, tiling, profiles)
    return (r.memory.name, place.part), box, closeup
