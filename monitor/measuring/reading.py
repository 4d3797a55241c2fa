"""One channel in one snapshot: levels, floors, extremes, wavelength. Pure but for its memory."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

import msgspec
import numpy as np
from numpy.typing import NDArray

from monitor.growthlog.numbers import spell
from monitor.growthlog.records import Channel, Line, Mode
from monitor.measuring.memory import Memory, Scaled
from probes import growth, locality
from probes.sketch import ORDERS, levels
from probes.wire import BlockReply

Array = NDArray[np.float64]

LOW, HIGH = ORDERS
# What a level must exceed its rounding floor by, in ln: solvers round every step, storage once.
OVER_FLOOR = math.log(6.0)
# A line in one tile has to be straighter than one of the whole field: a wave that arrives in a
# tile rises nearly exponentially too.
_TILE_RISE = math.log(100.0)
_TILE_STRAIGHT = 0.02
# An axis whose ripple is below this share of the strongest axis hardly takes part in a wave.
_AXIS_SHARE = 0.05


@dataclass
class Reading:
    """What one snapshot tells of one channel.

    energy: (tiles,) grid-scale energy of what grows: of the difference, or of the Ritz vector once
    there is one. tile_levels, tile_bulk, tile_floors: (tiles,) ln of ripple and bulk of the
    difference and of the ripple's floor, -inf for zero. before: tile_levels of the snapshot before.
    noise: norm of what rounding alone gives the ripple of a difference.
    """

    memory: Memory
    record: Channel
    positions: Array
    noise: float
    tile_floors: Array
    tile_levels: Array
    tile_bulk: Array
    energy: Array
    before: Array | None = None
    modes: list[Mode] = field(default_factory=list)
    line: Line | None = None

    @property
    def groups(self) -> dict[str, int]:
        return {g.name: i for i, g in enumerate(self.memory.places[0].layout.groups)}


def ln(value: float) -> float | None:
    """Natural logarithm, None for zero and for what is not finite."""
    return math.log(value) if value > 0.0 and math.isfinite(value) else None


def _raised(value: float | None, exponent: int) -> float | None:
    return None if value is None else value + exponent * math.log(2.0)


def _ln_each(values: Array) -> Array:
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.log(values)


def read_channel(memory: Memory, blocks: list[BlockReply]) -> tuple[Reading, Scaled]:
    """Levels of the snapshot itself, and its columns in one scale."""
    exponent = max(b.exponent for b in blocks)
    columns = Scaled(
        tuple(np.ldexp(b.columns.array(), b.exponent - exponent) for b in blocks), exponent
    )
    positions = np.concatenate([b.positions.array() for b in blocks])
    per_tile = tile_levels(memory, columns.parts, positions)
    groups = {g.name: i for i, g in enumerate(memory.places[0].layout.groups)}
    ripples = [groups[f"r{HIGH}.{a}"] for a in memory.axes]
    count = positions[:, ripples].sum(axis=1)
    peak = np.concatenate([b.peak.array() for b in blocks])
    floor = growth.rounding_floor(peak, blocks[0].spacing_of_storage, HIGH)
    floor_rms = growth.pool(floor, count)
    largest = max(max(abs(b.low), abs(b.high)) for b in blocks)
    record = Channel(
        f=memory.name,
        lo=spell(min(b.low for b in blocks)),
        hi=spell(max(b.high for b in blocks)),
        bad=sum(b.bad for b in blocks),
        own=_raised(ln(growth.pool_many(per_tile[:, ripples], positions[:, ripples])), exponent),
        floor=ln(floor_rms),
        vary=_raised(ln(_variation(memory, columns, largest)), exponent),
        total=spell(math.fsum(b.total for b in blocks)),
        top=_largest_number(blocks[0].dtype),
    )
    nothing = np.full(memory.tiles, -np.inf)
    reading = Reading(
        memory,
        record,
        positions,
        floor_rms * math.sqrt(float(count.sum())),
        _ln_each(np.where(count > 0, floor, 0.0)),
        nothing,
        nothing,
        np.zeros(memory.tiles),
    )
    return reading, columns


def read_change(reading: Reading, change: Scaled, gridded: bool) -> None:
    """Levels of the difference to the snapshot before, added to the reading."""
    memory, groups = reading.memory, reading.groups
    per_tile = tile_levels(memory, change.parts, reading.positions)
    pooled = {n: growth.pool(per_tile[:, g], reading.positions[:, g]) for n, g in groups.items()}
    energy, largest = ripple_energy(per_tile, reading)
    count = sum(reading.positions[:, groups[f"r{HIGH}.{a}"]] for a in memory.axes)
    level = np.sqrt(np.divide(energy, count, out=np.zeros_like(energy), where=count > 0))
    reading.energy = energy
    scale = change.exponent * math.log(2.0)
    reading.tile_levels = _ln_each(level) + math.log(largest) + scale
    reading.tile_bulk = _ln_each(per_tile[:, groups["bulk"]]) + scale
    reading.before = memory.tile_levels[-1] if memory.tile_levels else None
    ripple = cells = None
    if gridded:
        ripples = [groups[f"r{HIGH}.{a}"] for a in memory.axes]
        ripple = ln(growth.pool_many(per_tile[:, ripples], reading.positions[:, ripples]))
        angles = wave_angles(pooled, floor_in(reading.record.floor, change.exponent), memory.axes)
        cells = growth.cells_per_wavelength(angles)
    reading.record = msgspec.structs.replace(
        reading.record,
        bulk=_raised(ln(pooled["bulk"]), change.exponent),
        ripple=_raised(ripple, change.exponent),
        cells=cells,
    )


def tile_line(reading: Reading, change: Scaled) -> Line | None:
    """The straightest rise of the ripple in one tile, if there is one."""
    memory, groups = reading.memory, reading.groups
    found = locality.straightest_tile(
        np.array(memory.tile_levels),
        np.array(memory.tile_bulk),
        reading.tile_floors,
        _TILE_RISE,
        _TILE_STRAIGHT,
        OVER_FLOOR,
    )
    if found is None:
        return None
    tile, span, slope, rise, rms = found
    per_tile = tile_levels(memory, change.parts, reading.positions)
    angles = wave_angles({n: per_tile[tile, g] for n, g in groups.items()}, 0.0, memory.axes)
    return Line(
        f=memory.name,
        slope=slope,
        rise=rise,
        rms=rms,
        span=span,
        tile=memory.global_tile(tile),
        cells=growth.cells_per_wavelength(angles),
        over=float(reading.tile_levels[tile] - reading.tile_floors[tile]),
    )


def tile_levels(memory: Memory, parts: tuple[Array, ...], positions: Array) -> Array:
    """(tiles, groups): levels of some columns of a channel, all parts together."""
    return np.concatenate(
        [
            levels(columns, place.layout, positions[place.tiles])
            for columns, place in zip(parts, memory.places, strict=True)
        ]
    )


def ripple_energy(per_tile: Array, reading: Reading) -> tuple[Array, float]:
    """(tiles,): sum of squared ripple over the axes, in units of the square of the largest level,
    and that level: near the largest numbers the squares themselves would overflow."""
    ripples = [reading.groups[f"r{HIGH}.{a}"] for a in reading.memory.axes]
    part = per_tile[:, ripples]
    largest = float(np.abs(part).max(initial=0.0))
    if largest == 0.0 or not math.isfinite(largest):
        return np.zeros(per_tile.shape[0]), 1.0
    return ((part / largest) ** 2 * reading.positions[:, ripples]).sum(axis=1), largest


def floor_in(floor: float | None, exponent: int) -> float:
    """Level below which ripple does not count, in units of 2**exponent; 0 where unknown."""
    return math.exp(floor + OVER_FLOOR - exponent * math.log(2.0)) if floor is not None else 0.0


def wave_angles(pooled: Mapping[str, float], limit: float, axes: range) -> tuple[float, ...]:
    """Radians per cell and axis of a wave, from levels by group name; 0 where the axis is below
    `limit` or hardly takes part."""
    high = [float(pooled[f"r{HIGH}.{a}"]) for a in axes]
    least = max(limit, _AXIS_SHARE * max(high, default=0.0))
    return tuple(
        growth.half_angle(float(pooled[f"r{LOW}.{a}"]), h, LOW, HIGH) if h > least else 0.0
        for a, h in zip(axes, high, strict=True)
    )


def _variation(memory: Memory, columns: Scaled, largest: float) -> float:
    """Rms deviation of the field from its mean, in units of 2**exponent.

    The bulk group of a tile splits into its mean (first column) and what varies inside.
    """
    scale = math.ldexp(largest, -columns.exponent) if largest > 0.0 else 1.0
    inside, means, counts = 0.0, [], []
    for part, place in zip(columns.parts, memory.places, strict=True):
        bulk = place.layout.group("bulk").columns
        values = part[:, bulk] / scale
        inside += float((values[:, 1:] ** 2 * place.layout.energy[:, bulk][:, 1:]).sum())
        cells = place.layout.positions[:, 0]
        means.append(values[:, 0] / np.sqrt(cells))
        counts.append(cells)
    mean, count = np.concatenate(means), np.concatenate(counts)
    total = float(count.sum())
    centre = float((mean * count).sum()) / total
    between = float((count * (mean - centre) ** 2).sum())
    return scale * math.sqrt((inside + between) / total)


def _largest_number(dtype: str) -> float | None:
    """ln of the largest finite number of a storage type; None for float64 and integers."""
    kind = np.dtype(dtype)
    single = {"f": 8, "c": 16}.get(kind.kind)
    if single is None or kind.itemsize >= single:
        return None
    return math.log(float(np.finfo(kind).max))
