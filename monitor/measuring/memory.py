"""What the measurement remembers of one channel (a field's component, all parts together)."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, field

import msgspec
import numpy as np
from numpy.typing import NDArray

from probes.sketch import Layout
from probes.spec import SketchSpec
from probes.wire import BlockReply, Packed

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Scaled:
    """Columns of every part of a channel, all to be multiplied by 2**exponent.

    The common exponent keeps differences of fields near the largest number finite.
    """

    parts: tuple[Array, ...]
    exponent: int

    def at(self, exponent: int) -> tuple[Array, ...]:
        """The columns in another scale."""
        return tuple(np.ldexp(p, self.exponent - exponent) for p in self.parts)

    def minus(self, other: Scaled) -> Scaled:
        """Difference, in the coarser of both scales."""
        exponent = max(self.exponent, other.exponent)
        return Scaled(
            tuple(a - b for a, b in zip(self.at(exponent), other.at(exponent), strict=True)),
            exponent,
        )

    def single(self) -> Scaled:
        """Rounded to single precision, as differences are kept and stored."""
        return _restored(_columns(self, single=True))


@dataclass(frozen=True)
class Place:
    """One part of a channel: its layout, where its tiles stand in the channel's own numbering
    (`start`) and in that over all blocks of a snapshot (`first`)."""

    part: str
    layout: Layout
    start: int
    first: int

    @property
    def tiles(self) -> slice:
        return slice(self.start, self.start + self.layout.tiling.count)


@dataclass
class Tracked:
    """A Ritz pair of one snapshot, kept until it can be compared with a later one.

    size: ln of its norm in the last difference. held: snapshots over which it has persisted.
    grown: ln gain since then.
    """

    value: complex
    size: float
    basis: NDArray[np.float32]
    match: float = 0.0
    gain: float = 0.0
    foretold: float = 0.0
    kept: bool = False
    held: int = 0
    grown: float = 0.0
    steady: int = 1


@dataclass
class Memory:
    """Everything kept of one channel between snapshots of a segment."""

    name: str
    places: tuple[Place, ...]
    last: Scaled | None = None
    differences: deque[Scaled] = field(default_factory=deque)
    tile_levels: deque[Array] = field(default_factory=deque)
    tile_bulk: deque[Array] = field(default_factory=deque)
    tracks: dict[str, deque[list[Tracked]]] = field(default_factory=dict)

    @property
    def tiles(self) -> int:
        """Tiles of all parts."""
        return sum(p.layout.tiling.count for p in self.places)

    @property
    def axes(self) -> range:
        return range(len(self.places[0].layout.tiling.shape))

    def global_tile(self, tile: int) -> int:
        """From the channel's own numbering to that over all blocks of the snapshot."""
        place = next(p for p in reversed(self.places) if p.start <= tile)
        return place.first + tile - place.start

    def vectors(self, kinds: tuple[str, ...]) -> tuple[Array, int]:
        """(numbers, differences): columns of some kinds, weighted so that the square of a vector's
        norm estimates a sum of squares, and their common exponent."""
        top = max(d.exponent for d in self.differences)
        out = []
        for difference in self.differences:
            pieces = []
            for columns, place in zip(difference.at(top), self.places, strict=True):
                weights = np.sqrt(place.layout.energy)
                pieces += [
                    (columns[:, g.columns] * weights[:, g.columns]).ravel()
                    for g in place.layout.groups
                    if g.kind in kinds
                ]
            out.append(np.concatenate(pieces))
        return np.column_stack(out), top


def memories(blocks: tuple[BlockReply, ...], sketch: SketchSpec) -> dict[str, Memory]:
    """Empty memories for the channels of a snapshot, in order of their blocks."""
    places: dict[str, list[Place]] = {}
    first = 0
    for block in blocks:
        layout = Layout.of(block.shape, sketch, block.tile)
        before = places.setdefault(block.field, [])
        start = sum(p.layout.tiling.count for p in before)
        before.append(Place(block.part, layout, start, first))
        first += layout.tiling.count
    return {name: Memory(name, tuple(p)) for name, p in places.items()}


# --- stored form ------------------------------------------------------------------------------


class _StoredColumns(msgspec.Struct, frozen=True):
    parts: tuple[Packed, ...]
    sizes: tuple[float, ...]
    exponent: int


class _StoredTrack(msgspec.Struct, frozen=True, array_like=True):
    real: float
    imaginary: float
    size: float
    basis: Packed
    held: int
    grown: float
    steady: int


class _StoredMemory(msgspec.Struct, frozen=True):
    name: str
    places: tuple[tuple[str, tuple[int, ...], tuple[int, ...], int, int], ...]
    last: _StoredColumns | None
    differences: tuple[_StoredColumns, ...]
    levels: Packed
    bulk: Packed
    tracks: dict[str, tuple[tuple[_StoredTrack, ...], ...]]


def _columns(scaled: Scaled, single: bool) -> _StoredColumns:
    sizes = tuple(float(np.abs(p).max(initial=0.0)) or 1.0 for p in scaled.parts)
    dtype = np.float32 if single else np.float64
    parts = tuple(
        Packed.of((p / size).astype(dtype) if single else p)
        for p, size in zip(scaled.parts, sizes, strict=True)
    )
    return _StoredColumns(parts, sizes if single else (1.0,) * len(parts), scaled.exponent)


def _restored(stored: _StoredColumns) -> Scaled:
    return Scaled(
        tuple(p.array() * size for p, size in zip(stored.parts, stored.sizes, strict=True)),
        stored.exponent,
    )


def _history(rows: deque[Array], tiles: int) -> Packed:
    stacked = np.array(rows, dtype=np.float32) if rows else np.zeros((0, tiles), np.float32)
    return Packed.of(stacked)


def store(memory: Memory) -> bytes:
    """Everything, so that what is restored goes on exactly as the original.

    The last sketch keeps its precision, since the next difference is taken from it; differences,
    levels and vectors are single precision in memory too.
    """
    return msgspec.msgpack.encode(
        _StoredMemory(
            memory.name,
            tuple(
                (p.part, p.layout.tiling.shape, p.layout.tiling.edge, p.start, p.first)
                for p in memory.places
            ),
            _columns(memory.last, single=False) if memory.last is not None else None,
            tuple(_columns(d, single=True) for d in memory.differences),
            _history(memory.tile_levels, memory.tiles),
            _history(memory.tile_bulk, memory.tiles),
            {
                view: tuple(tuple(_stored_track(t) for t in now) for now in track)
                for view, track in memory.tracks.items()
            },
        )
    )


def _stored_track(t: Tracked) -> _StoredTrack:
    return _StoredTrack(
        t.value.real, t.value.imag, t.size, Packed.of(t.basis), t.held, t.grown, t.steady
    )


def _track(t: _StoredTrack) -> Tracked:
    basis = t.basis.array().astype(np.float32)
    return Tracked(
        complex(t.real, t.imaginary), t.size, basis, held=t.held, grown=t.grown, steady=t.steady
    )


def restore(data: bytes, sketch: SketchSpec) -> Memory:
    """The inverse of `store`. Raises msgspec.MsgspecError or ValueError for damaged data."""
    stored = msgspec.msgpack.decode(data, type=_StoredMemory)
    places = tuple(
        Place(part, Layout.of(shape, sketch, edge), start, first)
        for part, shape, edge, start, first in stored.places
    )
    return Memory(
        stored.name,
        places,
        _restored(stored.last) if stored.last is not None else None,
        deque(_restored(d) for d in stored.differences),
        deque(_rows(stored.levels)),
        deque(_rows(stored.bulk)),
        {
            view: deque([_track(t) for t in now] for now in track)
            for view, track in stored.tracks.items()
        },
    )


def _rows(packed: Packed) -> Iterator[Array]:
    yield from packed.array()
