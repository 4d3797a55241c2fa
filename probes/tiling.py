"""Cut a grid into rectangular tiles, the unit of localisation. Pure integer arithmetic."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

Box = tuple[tuple[int, int], ...]

# Cells per tile edge by number of axes. A tile has to be wide enough for the order-8 stencil to
# have positions of its own, and small enough to say where.
_EDGE = {1: 32, 2: 16, 3: 8}


@dataclass(frozen=True, slots=True)
class Tiling:
    """Tiles of `edge` cells per axis over `shape`; the last one along an axis may be shorter.

    Tiles are numbered in C order of the tile grid.
    """

    shape: tuple[int, ...]
    edge: tuple[int, ...]

    @property
    def counts(self) -> tuple[int, ...]:
        """Tiles per axis."""
        return tuple(-(-n // t) for n, t in zip(self.shape, self.edge, strict=True))

    @property
    def count(self) -> int:
        """Tiles in all."""
        return math.prod(self.counts)

    def place(self, tile: int) -> tuple[int, ...]:
        """Position of a tile in the tile grid. Raises IndexError outside 0 <= tile < count."""
        if not 0 <= tile < self.count:
            raise IndexError(f"tile {tile} is outside 0..{self.count - 1}")
        place = []
        for n in reversed(self.counts):
            tile, rest = divmod(tile, n)
            place.append(rest)
        return tuple(reversed(place))

    def number(self, place: Sequence[int]) -> int:
        """Number of the tile at a position of the tile grid."""
        tile = 0
        for n, i in zip(self.counts, place, strict=True):
            tile = tile * n + i
        return tile

    def box(self, tile: int) -> Box:
        """Index box [lo, hi) per axis of a tile."""
        return tuple(
            (i * t, min((i + 1) * t, n))
            for i, t, n in zip(self.place(tile), self.edge, self.shape, strict=True)
        )

    def holding(self, cell: Sequence[int]) -> int:
        """Number of the tile that holds a cell."""
        return self.number([c // t for c, t in zip(cell, self.edge, strict=True)])


def choose(shape: tuple[int, ...], max_tiles: int = 4096, edge: int = 0) -> Tiling:
    """Tiling of a grid of one to three axes with at most `max_tiles` tiles.

    edge 0 starts from 32 cells in 1-D, 16 in 2-D and 8 in 3-D and grows the edge until the tiles
    are few enough; a given edge is kept. The edge is then adapted per axis so that the last tile
    is about as long as the others. Raises ValueError for other dimensions or an empty grid.
    """
    if not 1 <= len(shape) <= 3 or min(shape) < 1:
        raise ValueError(f"a grid needs one to three axes with at least one cell each, got {shape}")
    wanted = float(edge or _EDGE[len(shape)])
    while True:
        per_axis = [max(1, round(n / wanted)) for n in shape]
        if edge or math.prod(per_axis) <= max_tiles:
            return Tiling(shape, tuple(-(-n // k) for n, k in zip(shape, per_axis, strict=True)))
        wanted *= 1.25
