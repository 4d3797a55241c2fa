"""The sketch: one streaming pass turns a gridded field into tiles x columns random sums.

Each tile is contracted, axis by axis, with a few fixed vectors. Along an axis a column is one of

* ``mean``: the constant vector;
* ``sign``: a random vector orthogonal to the constant one (made from random signs);
* ``r6``, ``r8``: random signs over the positions of the normalised 6th or 8th difference
  (binomial weights divided by 2**p), whose stencils reach over the tile's edge;
* ``edge``: the second difference over the first or last four cells of the grid, in tiles that
  touch that boundary.

A column of a tile is a product of one such vector per axis. The *bulk* group takes mean and sign
along every axis, a *ripple* group takes r6 or r8 along one axis and mean or sign along the others.
Because mean and sign split each axis into orthogonal parts, the squared columns, weighted, give an
unbiased estimate of the squared norm of a tile's values (bulk) or differences (ripple): Johnson and
Lindenstrauss 1984; Halko, Martinsson and Tropp 2011, section 4. Everything is linear in the
field, so S(u - v) = S(u) - S(v), and a vector that only changes by a factor keeps it exactly.

Product columns are contracted one axis after the other by matrix products over strided views, so
that no copy into tiles is made. Their variance is larger than that of independent signs (the
fourth moment of a product is the product of fourth moments); ratios between snapshots, which is
what is used, do not suffer.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.lib.stride_tricks import as_strided
from numpy.typing import NDArray

from probes.spec import SketchSpec
from probes.tiling import Tiling, choose

Array = NDArray[np.float64]

ORDERS = (6, 8)
HALO = max(ORDERS) // 2
EDGE_ORDER = 2
EDGE_CELLS = 4
# Sign sets repeat after this many tiles along an axis: with one set for all, a zigzag over the
# whole grid gives the same sketch in every tile and nothing averages.
_SETS = 64
# Values above this are scaled down by a power of two, so that no sum overflows before the field.
_LARGE = 1e150


@dataclass(frozen=True, slots=True)
class Group:
    """Columns that measure one thing.

    name: "bulk", "r6.0", "r8.2", "edge.1" (kind and axis). axis is -1 and order 0 for the bulk.
    start, stop: column range in the sketch.
    """

    name: str
    kind: str
    axis: int
    order: int
    start: int
    stop: int

    @property
    def columns(self) -> slice:
        return slice(self.start, self.stop)


def binomial(order: int) -> Array:
    """Weights of the normalised difference of an even order: (-1)**k C(p, k) / 2**p, p + 1 values.

    Applied to exp(i theta j) it has modulus sin(theta / 2)**p: 1 for the zigzag (LeVeque 2007,
    appendix E, for the symbol of the second difference).
    """
    return np.array([(-1.0) ** k * math.comb(order, k) for k in range(order + 1)]) / 2.0**order


@dataclass(frozen=True)
class AxisColumns:
    """Vectors along one axis: weights (tiles, window, width) and how they are normalised.

    A tile's window covers its cells and `HALO` cells on both sides; weights outside the grid
    are zero. Widths: `mean` 1, `sign` m - 1, then m each for r6, r8 and edge.
    signs: (tiles, edge, m): the random signs themselves, by cell.
    energy: (tiles, width): factor by which a squared column is multiplied, so that the sum over
    the columns of a kind estimates the sum of squares. places: (tiles, 4): cells, r6, r8 and
    edge positions.
    """

    weights: Array
    energy: Array
    places: NDArray[np.int64]
    signs: Array
    columns: int

    def span(self, kind: str) -> slice:
        """Columns of a kind along this axis ("flat" is mean and sign together)."""
        m = self.columns
        return {
            "flat": slice(0, m),
            "r6": slice(m, 2 * m),
            "r8": slice(2 * m, 3 * m),
            "edge": slice(3 * m, 4 * m),
        }[kind]


KINDS = ("r6", "r8", "edge")
_ORDER = {"r6": 6, "r8": 8, "edge": EDGE_ORDER}


def _axis_columns(n: int, edge: int, tiles: int, m: int, seed: int, axis: int) -> AxisColumns:
    window = edge + 2 * HALO
    weights = np.zeros((tiles, window, 4 * m))
    energy = np.zeros((tiles, 4 * m))
    places = np.zeros((tiles, 4), dtype=np.int64)
    all_signs = np.empty((tiles, edge, m))
    for j in range(tiles):
        rng = np.random.default_rng([seed, axis, j % _SETS])
        lo, hi = j * edge, min((j + 1) * edge, n)
        cells = hi - lo
        signs = all_signs[j] = rng.choice([-1.0, 1.0], size=(edge, m))
        frame = np.column_stack([np.ones(cells), signs[:cells, 1:]])
        q = np.linalg.qr(frame)[0]
        kept = min(q.shape[1], cells)
        inside = slice(HALO, HALO + cells)
        weights[j, inside, 0] = 1.0 / math.sqrt(cells)
        energy[j, 0] = 1.0
        if kept > 1:
            # An orthonormal random frame of the zero-mean space: E (q.x)^2 = |x|^2 / (cells - 1).
            weights[j, inside, 1:kept] = q[:, 1:kept]
            energy[j, 1:kept] = (cells - 1) / (kept - 1)
        places[j, 0] = cells
        for kind_at, kind in enumerate(KINDS):
            order = _ORDER[kind]
            half = order // 2
            span = slice((1 + kind_at) * m, (2 + kind_at) * m)
            centres = list(range(max(lo, half), min(hi, n - half)))
            if kind == "edge":
                near = set(range(half, EDGE_CELLS - half)) | set(
                    range(n - EDGE_CELLS + half, n - half)
                )
                centres = [c for c in centres if c in near] if n >= 2 * EDGE_CELLS else []
            stencil = binomial(order)
            for c in centres:
                at = c - half - lo + HALO
                # Signs belong to the centre cell, so that all orders of an axis share them.
                weights[j, at : at + order + 1, span] += stencil[:, None] * signs[c - lo]
            energy[j, span] = 1.0 / m
            places[j, 1 + kind_at] = len(centres)
    return AxisColumns(weights, energy, places, all_signs, m)


@dataclass(frozen=True)
class Layout:
    """Where the columns of a sketch stand and how they are weighted. Depends on shape and settings
    only, so that a log with both can be read without the snapshots."""

    tiling: Tiling
    columns: int
    seed: int

    @classmethod
    def of(
        cls, shape: tuple[int, ...], spec: SketchSpec, tile: tuple[int, ...] | None = None
    ) -> Layout:
        """Layout for a grid; raises ValueError for a grid without cells or with over three axes."""
        tiling = Tiling(shape, tile) if tile else choose(shape, spec.max_tiles, spec.tile)
        wide = {1: 16, 2: 4, 3: 3 if tiling.count <= 1024 else 2}[len(shape)]
        return cls(tiling, spec.columns or wide, spec.seed)

    @cached_property
    def axes(self) -> tuple[AxisColumns, ...]:
        t = self.tiling
        return tuple(
            _axis_columns(n, edge, count, self.columns, self.seed, axis)
            for axis, (n, edge, count) in enumerate(zip(t.shape, t.edge, t.counts, strict=True))
        )

    @cached_property
    def groups(self) -> tuple[Group, ...]:
        width = self.columns ** len(self.tiling.shape)
        names = [("bulk", -1, 0)]
        for axis in range(len(self.tiling.shape)):
            names += [(kind, axis, _ORDER[kind]) for kind in KINDS]
        return tuple(
            Group(f"{kind}.{axis}" if kind != "bulk" else kind, kind, axis, order, *at)
            for i, (kind, axis, order) in enumerate(names)
            for at in [(i * width, (i + 1) * width)]
        )

    @property
    def width(self) -> int:
        """Columns per tile."""
        return self.groups[-1].stop

    def group(self, name: str) -> Group:
        return next(g for g in self.groups if g.name == name)

    def _kind(self, group: Group, axis: int) -> str:
        return group.kind if group.axis == axis else "flat"

    @cached_property
    def positions(self) -> Array:
        """(tiles, groups): cells or stencil positions behind each group, without a mask."""
        at = {"flat": 0, "r6": 1, "r8": 2, "edge": 3}
        out = np.ones((self.tiling.count, len(self.groups)))
        for g, group in enumerate(self.groups):
            per_axis = [
                ax.places[:, at[self._kind(group, a)]].astype(float)
                for a, ax in enumerate(self.axes)
            ]
            out[:, g] = _outer(per_axis).ravel()
        return out

    @cached_property
    def energy(self) -> Array:
        """(tiles, width): weights that turn squared columns into a sum of squares."""
        out = np.zeros((self.tiling.count, self.width))
        for group in self.groups:
            per_axis = [
                ax.energy[:, ax.span(self._kind(group, a))] for a, ax in enumerate(self.axes)
            ]
            out[:, group.columns] = _paired_outer(per_axis)
        return out


def _outer(vectors: Sequence[Array]) -> Array:
    out = vectors[0]
    for v in vectors[1:]:
        out = out[..., None] * v
    return out


def _paired_outer(per_axis: Sequence[Array]) -> Array:
    """From (tiles_a, width_a) per axis to (all tiles, all widths) in C order of both."""
    d = len(per_axis)
    out = np.ones([1] * (2 * d))
    for a, values in enumerate(per_axis):
        shape = [1] * (2 * d)
        shape[a], shape[d + a] = values.shape
        out = out * values.reshape(shape)
    tiles = math.prod(v.shape[0] for v in per_axis)
    return out.reshape(tiles, -1)


def contract(values: Array, weights: Array, edge: int) -> Array:
    """Contract the last axis: (..., n) with (tiles, window, K) gives (tiles, K, ...).

    The windows of the inner tiles are overlapping views of `values`, not copies; the first and
    last tiles, whose windows leave the grid, use the part of their weights that lies inside.
    """
    n = values.shape[-1]
    tiles, window, width = weights.shape
    flat = values.reshape(-1, n)
    rows = flat.shape[0]
    out = np.empty((tiles, width, rows))
    first = -(-HALO // edge)
    last = max(first, (n - edge - HALO) // edge + 1)
    if last > first:
        start = first * edge - HALO
        stride = flat.strides
        view = as_strided(
            flat[:, start:],
            shape=(last - first, window, rows),
            strides=(edge * stride[1], stride[1], stride[0]),
            writeable=False,
        )
        np.matmul(weights[first:last].transpose(0, 2, 1), view, out=out[first:last])
    for j in itertools.chain(range(min(first, tiles)), range(last, tiles)):
        lo, hi = max(0, j * edge - HALO), min(n, (j + 1) * edge + HALO)
        at = lo - (j * edge - HALO)
        np.matmul(weights[j, at : at + hi - lo].T, flat[:, lo:hi].T, out=out[j])
    return out.reshape(tiles, width, *values.shape[:-1])


class Pass:
    """One streaming pass over a grid, given as slabs along axis 0 of any thickness.

    Holds (axis-0 width) x tiles sums only; the result does not depend on the slabs beyond
    rounding. Not thread-safe.
    """

    def __init__(self, layout: Layout) -> None:
        self.layout = layout
        self.exponent = 0
        self._at = 0
        t = layout.tiling
        m, d = layout.columns, len(t.shape)
        inner = [x for c in t.counts[1:] for x in (c, m)]
        # Per group the running sums, ordered (tile 0, column 0, tile 1, column 1, ...).
        self._sums = {g.name: np.zeros((t.counts[0], m, *inner)) for g in layout.groups}
        self._d = d

    def add(self, slab: Array, peak: float) -> None:
        """Take the next slab: (n, *shape[1:]), float64, finite. peak: its largest |value|."""
        if peak > _LARGE:
            needed = math.frexp(peak)[1] - math.frexp(_LARGE)[1] + 1
            if needed > self.exponent:
                for sums in self._sums.values():
                    sums *= 2.0 ** (self.exponent - needed)
                self.exponent = needed
        if self.exponent:
            slab = np.ldexp(slab, -self.exponent)
        axes, edges = self.layout.axes, self.layout.tiling.edge
        # Axes from last to second: the part that is flat along all of them so far may still take
        # any kind along the next; a part with a ripple takes only flat from there on.
        flat: Array = slab
        rippled: dict[str, Array] = {}
        for a in range(self._d - 1, 0, -1):
            w, span = axes[a].weights, axes[a].span
            both = contract(flat, w, edges[a])
            rippled = {
                name: contract(part, w[..., span("flat")], edges[a])
                for name, part in rippled.items()
            }
            for kind in KINDS:
                rippled[f"{kind}.{a}"] = both[:, span(kind)]
            flat = both[:, span("flat")]
        self._fold("bulk", flat, "flat")
        for kind in KINDS:
            self._fold(f"{kind}.0", flat, kind)
        for name, part in rippled.items():
            self._fold(name, part, "flat")
        self._at += slab.shape[0]

    def _fold(self, name: str, part: Array, kind: str) -> None:
        """Add planes, stored as (tile, column, ..., planes), to the sums of the axis-0 tiles."""
        axis, edge = self.layout.axes[0], self.layout.tiling.edge[0]
        weights = axis.weights[..., axis.span(kind)]
        planes = part.shape[-1]
        sums = self._sums[name]
        first = max(0, (self._at - HALO) // edge)
        last = min(sums.shape[0] - 1, (self._at + planes - 1 + HALO) // edge)
        rows = part.reshape(-1, planes)
        alone: Iterable[int] = range(first, last + 1)
        if self._d == 1:
            whole = self._fold_whole(sums, rows, weights, range(first, last + 1))
            alone = [j for j in alone if j not in whole]
        for j in alone:
            self._fold_tile(sums, rows, weights, j)

    def _fold_tile(self, sums: Array, rows: Array, weights: Array, j: int) -> None:
        window = weights.shape[1]
        start = j * self.layout.tiling.edge[0] - HALO
        lo, hi = max(self._at, start), min(self._at + rows.shape[1], start + window)
        if lo < hi:
            piece = weights[j, lo - start : hi - start].T @ rows[:, lo - self._at : hi - self._at].T
            sums[j] += piece.reshape(sums.shape[1:])

    def _fold_whole(self, sums: Array, rows: Array, weights: Array, tiles: range) -> range:
        """One axis only: the tiles whose whole window lies in the slab go through one product
        (there may be thousands of them). Returns these tiles."""
        edge, window = self.layout.tiling.edge[0], weights.shape[1]
        i = max(tiles.start, -(-(self._at + HALO) // edge))
        k = min(tiles.stop, (self._at + rows.shape[1] - HALO) // edge)
        if k <= i:
            return range(0)
        step = rows.strides[1]
        view = as_strided(
            rows[0, i * edge - HALO - self._at :],
            shape=(k - i, window),
            strides=(edge * step, step),
            writeable=False,
        )
        sums[i:k] += np.einsum("tw,twk->tk", view, weights[i:k])
        return range(i, k)

    def finish(self) -> Array:
        """(tiles, width): the columns, scaled by 2**-exponent. Raises ValueError if planes are
        missing."""
        n = self.layout.tiling.shape[0]
        if self._at != n:
            raise ValueError(f"{self._at} of {n} planes were given")
        d, tiles = self._d, self.layout.tiling.count
        order = [*range(0, 2 * d, 2), *range(1, 2 * d, 2)]
        return np.concatenate(
            [self._sums[g.name].transpose(order).reshape(tiles, -1) for g in self.layout.groups],
            axis=1,
        )


def reverse_axes(
    layout: Layout, columns: Array, positions: Array, peak: Array
) -> tuple[Layout, Array, Array, Array]:
    """Turn a sketch made in storage order (slowest axis first) into one of the logical axes.

    Axis a becomes axis d - 1 - a in the tile order, the columns and the groups' names.
    """
    t = layout.tiling
    d, m = len(t.shape), layout.columns
    turned = Layout(Tiling(t.shape[::-1], t.edge[::-1]), m, layout.seed)
    tiles = list(range(d))[::-1]

    def by_tile(values: Array) -> Array:
        rest = values.shape[1:]
        return (
            values.reshape(*t.counts, *rest)
            .transpose(*tiles, *range(d, d + len(rest)))
            .reshape(-1, *rest)
        )

    new_columns = np.empty_like(columns)
    new_positions = np.empty_like(positions)
    for g, group in enumerate(turned.groups):
        axis = group.axis if group.axis < 0 else d - 1 - group.axis
        old_at = next(
            i for i, o in enumerate(layout.groups) if o.kind == group.kind and o.axis == axis
        )
        part = columns[:, layout.groups[old_at].columns].reshape(-1, *[m] * d)
        part = part.transpose(0, *[d - i for i in range(d)]).reshape(columns.shape[0], -1)
        new_columns[:, group.columns] = by_tile(part)
        new_positions[:, g] = by_tile(positions[:, old_at])
    return turned, new_columns, new_positions, by_tile(peak)


def levels(columns: Array, layout: Layout, positions: Array | None = None) -> Array:
    """(tiles, groups): rms per cell or stencil position, in the units of the columns.

    positions: (tiles, groups) where a mask has taken some away. 0 where there are none.
    Values are scaled before squaring, so that neither overflow nor underflow shortens the range.
    """
    where = layout.positions if positions is None else positions
    out = np.zeros((columns.shape[0], len(layout.groups)))
    energy = layout.energy
    for g, group in enumerate(layout.groups):
        part = columns[:, group.columns]
        size = np.abs(part).max(axis=1, initial=0.0)
        scale = np.where((size > 0) & np.isfinite(size), size, 1.0)
        square = np.einsum("tk,tk->t", (part / scale[:, None]) ** 2, energy[:, group.columns])
        n = where[:, g]
        out[:, g] = scale * np.sqrt(np.divide(square, n, out=np.zeros_like(square), where=n > 0))
    return out
