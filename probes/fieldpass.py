"""From stored slabs of one field to finished blocks: ghost cells, components, masks, extremes.

This is everything that happens to the values of a snapshot between the reader and the sketch, in
one pass and bounded memory.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from probes.errors import Refused
from probes.masks import MaskBook, MaskState
from probes.sketch import HALO, Array, Layout, Pass, reverse_axes
from probes.snapshot import FieldInfo
from probes.spec import FieldSpec, SketchSpec
from probes.wire import BlockReply, Crop, Packed

# A slab of about this size stays in the second-level cache while it is used several times.
_SLAB_BYTES = 1 << 21


def storage_spacing(dtype: str) -> float:
    """Relative spacing of a number type (2**-52 for float64 and complex128), 0 for integers."""
    kind = np.dtype(dtype)
    if kind.kind not in "fc":
        return 0.0
    return float(np.finfo(kind).eps)


@dataclass
class _Block:
    """One component on its way: sums, extremes and counts, in storage order."""

    name: str
    state: MaskState
    layout: Layout
    sums: Pass
    masking: bool
    fill: float | None
    at: int = 0
    low: float = math.inf
    high: float = -math.inf
    totals: list[float] = field(default_factory=list)
    bad: int = 0
    unmasked: int = 0
    masked: int = 0
    bad_at: tuple[int, ...] = ()
    window: list[Array] = field(default_factory=list)
    window_from: int = 0
    mended: dict[int, tuple[Array, Array]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        counts = self.layout.tiling.counts
        self.top = np.full(counts, -np.inf)
        self.bottom = np.full(counts, np.inf)
        self.keeps = self.masking and (self.state.learning or bool(self.state.planes))

    def add(self, slab: Array) -> None:
        n = slab.shape[0]
        top, bottom = self._extremes(slab)
        whole = slab
        clean = bool(np.isfinite(top).all() and np.isfinite(bottom).all())
        if not clean or self.fill is not None or (self.state.planes and not self.state.learning):
            slab, whole, top, bottom = self._sort_out(slab)
        elif self.keeps:
            whole = slab.copy()
        self._note(top, bottom)
        finite = [v for v in (top.max(initial=-np.inf), -bottom.min(initial=np.inf)) if v > -np.inf]
        self.sums.add(slab, max((abs(v) for v in finite), default=0.0))
        with np.errstate(over="ignore", invalid="ignore"):
            self.totals.append(float(slab.sum()))
        if self.keeps:
            self._keep(whole, n)
        self.at += n

    def _layers(self, n: int) -> Iterator[tuple[int, int, int]]:
        """(tile layer, first, last plane within the slab) for the next n planes."""
        edge = self.layout.tiling.edge[0]
        i = 0
        while i < n:
            layer = (self.at + i) // edge
            stop = min(n, (layer + 1) * edge - self.at)
            yield layer, i, stop
            i = stop

    def _extremes(self, slab: Array) -> tuple[Array, Array]:
        """Largest and smallest value per tile that the slab touches, (layers, inner tiles...).

        Planes are compared first, whole rows at a time, which is what vector units do best.
        """
        tops, bottoms = [], []
        for _, i, stop in self._layers(slab.shape[0]):
            top, bottom = slab[i:stop].max(axis=0), slab[i:stop].min(axis=0)
            for axis, edge in enumerate(self.layout.tiling.edge[1:]):
                starts = np.arange(0, top.shape[axis], edge)
                top = np.maximum.reduceat(top, starts, axis=axis)
                bottom = np.minimum.reduceat(bottom, starts, axis=axis)
            tops.append(top)
            bottoms.append(bottom)
        return np.array(tops), np.array(bottoms)

    def _note(self, top: Array, bottom: Array) -> None:
        first = self.at // self.layout.tiling.edge[0]
        rows = slice(first, first + top.shape[0])
        self.top[rows] = np.maximum(self.top[rows], top)
        self.bottom[rows] = np.minimum(self.bottom[rows], bottom)
        self.low = min(self.low, float(bottom.min()))
        self.high = max(self.high, float(top.max()))

    def _sort_out(self, slab: Array) -> tuple[Array, Array, Array, Array]:
        """Split non-finite cells into masked and bad ones; both are zero in the sums.

        Returns the slab with zeros, the slab with NaN in masked cells, and its extremes.
        """
        missing = np.isnan(slab)
        if self.fill is not None:
            missing |= slab == self.fill
        infinite = np.isinf(slab)
        masked = np.zeros_like(missing)
        if self.masking:
            for k in range(slab.shape[0]):
                masked[k], present = self.state.take(self.at + k, missing[k])
                self.unmasked += present
        bad = (missing & ~masked) | infinite
        count = int(bad.sum())
        if count and not self.bad:
            where = np.unravel_index(int(np.argmax(bad)), bad.shape)
            self.bad_at = (int(where[0]) + self.at, *(int(i) for i in where[1:]))
        self.bad += count
        self.masked += int(masked.sum())
        out = missing | infinite
        zeroed = np.where(out, 0.0, slab)
        holed = np.where(out, np.nan, slab)
        saved = self._extremes(np.where(out, -np.inf, slab))[0]
        lowest = self._extremes(np.where(out, np.inf, slab))[1]
        return zeroed, holed, saved, lowest

    def _keep(self, slab: Array, n: int) -> None:
        """Hold planes until the window of a tile layer is whole, then mend its masked tiles."""
        tiling = self.layout.tiling
        edge, depth = tiling.edge[0], tiling.shape[0]
        self.window.extend(slab[i] for i in range(n))
        done = self.at + n
        layer = (self.window_from + HALO) // edge if self.window_from else 0
        while layer < tiling.counts[0]:
            lo, hi = max(0, layer * edge - HALO), min(depth, (layer + 1) * edge + HALO)
            if hi > done:
                break
            planes = np.array(self.window[lo - self.window_from : hi - self.window_from])
            if np.isnan(planes).any():
                self._mend(layer, planes, lo)
            layer += 1
            keep_from = max(0, layer * edge - HALO)
            del self.window[: keep_from - self.window_from]
            self.window_from = keep_from

    def _mend(self, layer: int, planes: Array, lo: int) -> None:
        tiling = self.layout.tiling
        inner = math.prod(tiling.counts[1:])
        for tile in range(layer * inner, (layer + 1) * inner):
            box = tiling.box(tile)
            near = [(lo, lo + planes.shape[0])] + [
                (max(0, a - HALO), min(n, b + HALO))
                for (a, b), n in zip(box[1:], tiling.shape[1:], strict=True)
            ]
            values = planes[(slice(None), *(slice(a, b) for a, b in near[1:]))]
            holes = np.isnan(values)
            if holes.any() and not holes.all():
                values = np.ldexp(values, -self.sums.exponent)
                origin = tuple(a for a, _ in near)
                self.mended[tile] = masked_tile(self.layout, tile, values, origin)
            elif holes.all():
                self.mended[tile] = (
                    np.zeros(self.layout.width),
                    np.zeros(len(self.layout.groups)),
                )

    def reply(self, part: str, info: FieldInfo) -> BlockReply:
        if self.masking:
            self.state.snapshots += 1
        exponent = self.sums.exponent
        columns = self.sums.finish()
        positions = self.layout.positions.copy()
        for tile, (values, places) in self.mended.items():
            columns[tile] = values
            positions[tile] = places
        peak = np.maximum(self.top, -self.bottom)
        peak = np.where(np.isfinite(peak), peak, 0.0)
        sizes = positions[:, 0]
        zeros = int(sizes[(peak.ravel() == 0.0)].sum())
        some = self.high > -math.inf
        layout, peak, bad_at = self.layout, peak.ravel(), self.bad_at
        if info.fortran:
            layout, columns, positions, peak = reverse_axes(layout, columns, positions, peak)
            bad_at = bad_at[::-1]
        tiling = layout.tiling
        return BlockReply(
            field=self.name,
            part=part,
            shape=tiling.shape,
            tile=tiling.edge,
            columns=Packed.of(columns),
            exponent=exponent,
            positions=Packed.of(positions.astype(np.float32)),
            peak=Packed.of(peak),
            low=self.low if some else 0.0,
            high=self.high if some else 0.0,
            total=math.fsum(self.totals) if np.isfinite(self.totals).all() else math.nan,
            zeros=zeros,
            dtype=info.dtype,
            spacing_of_storage=storage_spacing(info.dtype),
            masked=self.masked,
            bad=self.bad,
            unmasked=self.unmasked,
            bad_at=bad_at,
            bad_tile=tiling.holding(bad_at) if bad_at else -1,
        )


def masked_tile(
    layout: Layout, tile: int, values: Array, origin: tuple[int, ...]
) -> tuple[Array, Array]:
    """Columns (width,) and positions (groups,) of a tile some of whose cells are NaN.

    values: the tile and its halo, NaN where masked; origin: grid index of values[0, ...]. A stencil
    that touches a NaN is left out, so that the edge of a mask makes no ripple of its own. Linear
    in the values as long as the mask stays.
    """
    columns = np.zeros(layout.width)
    places = np.zeros(len(layout.groups))
    box, at = layout.tiling.box(tile), layout.tiling.place(tile)
    for g, group in enumerate(layout.groups):
        if group.kind == "edge":
            continue
        part, vectors = values, []
        for axis, (lo, hi) in enumerate(box):
            columns_here = layout.axes[axis]
            if axis == group.axis:
                half = group.order // 2
                if part.shape[axis] <= group.order:
                    part = np.full_like(part, np.nan)
                    continue
                part = np.diff(part, n=group.order, axis=axis) / 2.0**group.order
                first = origin[axis] + half
                a, b = max(lo, first), min(hi, first + part.shape[axis])
                vectors.append(columns_here.signs[at[axis], a - lo : b - lo])
            else:
                first, a, b = origin[axis], lo, hi
                vectors.append(
                    columns_here.weights[at[axis], HALO : HALO + hi - lo, : layout.columns]
                )
            cut = [slice(None)] * part.ndim
            cut[axis] = slice(a - first, b - first)
            part = part[tuple(cut)]
        valid = np.isfinite(part)
        if not valid.any():
            continue
        places[g] = valid.sum()
        cells, kept = "abc"[: part.ndim], "ijk"[: part.ndim]
        terms = ",".join([cells, *(c + k for c, k in zip(cells, kept, strict=True))])
        product = np.einsum(f"{terms}->{kept}", np.where(valid, part, 0.0), *vectors)
        columns[group.columns] = product.ravel()
    return columns, places


class FieldPass:
    """Sketches every component of one stored field while its slabs go by.

    info: as the reader tells; name: of the field in the log; part: of the file; crops: boxes whose
    raw values are wanted, those of other fields or parts are ignored. Raises Refused where the
    array is no grid of one to three axes (after its component axis).
    """

    def __init__(
        self,
        info: FieldInfo,
        name: str,
        part: str,
        spec: FieldSpec,
        sketch: SketchSpec,
        masks: MaskBook,
        crops: tuple[Crop, ...] = (),
    ) -> None:
        self.info, self.name, self.part, self.spec, self.masks = info, name, part, spec, masks
        stored = info.stored_shape
        self._component = self._component_axis(len(stored))
        shape = tuple(n for a, n in enumerate(stored) if a != self._component)
        if not 1 <= len(shape) <= 3 or min(shape, default=0) < 1:
            raise Refused(
                f"field {name!r} of shape {info.shape} is no grid of one to three axes",
                remedy='give components = "first" or "last", or leave the field out',
            )
        self._cut = self._ghosts(shape)
        self.shape = tuple(b - a for a, b in self._cut)
        if min(self.shape) < 1:
            raise Refused(f"field {name!r} has no cells left without its ghost cells")
        self._complex = np.dtype(info.dtype).kind == "c"
        self._pieces = ("re", "im") if self._complex else ("",)
        count = stored[self._component] if self._component is not None else 1
        layout = Layout.of(self.shape, sketch)
        self._blocks = [
            self._block(layout, c if self._component is not None else None, piece)
            for c in range(count)
            for piece in self._pieces
        ]
        self._crops = self._wanted(crops)
        self._plane = 0
        plane = math.prod(stored[1:]) * np.dtype(info.dtype).itemsize
        budget = min(_SLAB_BYTES, sketch.budget_mb << 20)
        self.planes = max(1, budget // max(1, plane))

    def _component_axis(self, ndim: int) -> int | None:
        if self.spec.components == "none":
            return None
        first = (self.spec.components == "first") != self.info.fortran
        return 0 if first else ndim - 1

    def _ghosts(self, shape: tuple[int, ...]) -> tuple[tuple[int, int], ...]:
        ghost = self.spec.ghost
        per_axis = (ghost,) * len(shape) if isinstance(ghost, int) else ghost
        if len(per_axis) != len(shape):
            raise Refused(
                f"field {self.name!r} has {len(shape)} grid axes and ghost names {len(per_axis)}"
            )
        if self.info.fortran:
            per_axis = per_axis[::-1]
        return tuple((g, n - g) for g, n in zip(per_axis, shape, strict=True))

    def _block(self, layout: Layout, component: int | None, piece: str) -> _Block:
        inside = ",".join(str(x) for x in (component, piece) if x not in (None, ""))
        name = f"{self.name}[{inside}]" if inside else self.name
        state = self.masks.of(name, self.part, self.shape)
        masking = self.spec.mask != "none"
        return _Block(name, state, layout, Pass(layout), masking, self.spec.fill)

    def _wanted(self, crops: tuple[Crop, ...]) -> dict[str, list[tuple[Crop, Array]]]:
        """Boxes in storage order by block name, clipped to the grid, with room for their values."""
        out: dict[str, list[tuple[Crop, Array]]] = {}
        logical = self._logical(self.shape)
        for crop in crops:
            if crop.part == self.part and len(crop.lo) == len(self.shape):
                lo = tuple(max(0, a) for a in crop.lo)
                hi = tuple(min(n, b) for n, b in zip(logical, crop.hi, strict=True))
                if all(a < b for a, b in zip(lo, hi, strict=True)):
                    kept = Crop(field=crop.field, part=crop.part, lo=lo, hi=hi)
                    room = np.full([b - a for a, b in zip(lo, hi, strict=True)], np.nan)
                    out.setdefault(crop.field, []).append((kept, room))
        return out

    def _logical(self, axes: tuple[int, ...]) -> tuple[int, ...]:
        return axes[::-1] if self.info.fortran else axes

    def add(self, slab: NDArray[np.generic]) -> None:
        """Take the next slab as the reader yields it (storage order, file's number type)."""
        if self._component == 0:
            for row in slab:
                self._feed(self._plane, row, whole=True)
                self._plane += 1
            return
        lo, hi = self._cut[0]
        a, b = max(lo, self._plane), min(hi, self._plane + slab.shape[0])
        if a < b:
            inside = slab[a - self._plane : b - self._plane]
            if self._component is None:
                self._feed(0, inside)
            else:
                for c in range(slab.shape[-1]):
                    self._feed(c, inside[..., c])
        self._plane += slab.shape[0]

    def _feed(self, component: int, values: NDArray[np.generic], whole: bool = False) -> None:
        cut = [slice(a, b) for a, b in self._cut]
        if not whole:
            cut[0] = slice(None)
        values = values[tuple(cut)]
        step = values.shape[0]
        if whole:
            row = math.prod(self.shape[1:]) * 8
            step = max(1, _SLAB_BYTES // max(1, row))
        for i in range(0, values.shape[0], step):
            piece = values[i : i + step]
            parts = (piece.real, piece.imag) if self._complex else (piece,)
            for k, part in enumerate(parts):
                block = self._blocks[component * len(parts) + k]
                real = np.ascontiguousarray(part, dtype=np.float64)
                self._copy_crops(block, real)
                block.add(real)

    def _copy_crops(self, block: _Block, values: Array) -> None:
        for crop, room in self._crops.get(block.name, ()):
            lo, hi = self._logical(crop.lo), self._logical(crop.hi)
            a, b = max(lo[0], block.at), min(hi[0], block.at + values.shape[0])
            if a < b:
                inner = tuple(slice(x, y) for x, y in zip(lo[1:], hi[1:], strict=True))
                stored = room.T if self.info.fortran else room
                stored[a - lo[0] : b - lo[0]] = values[(slice(a - block.at, b - block.at), *inner)]

    def finish(self) -> tuple[list[BlockReply], list[Crop], list[str]]:
        """Blocks in component order, filled crops (float64), remarks. Raises ValueError if slabs
        are missing."""
        blocks = [b.reply(self.part, self.info) for b in self._blocks]
        crops = [
            Crop(field=c.field, part=c.part, lo=c.lo, hi=c.hi, values=Packed.of(room))
            for rooms in self._crops.values()
            for c, room in rooms
        ]
        declared = self.spec.mask == "declared" or self.spec.fill is not None
        first = all(b.state.snapshots == 1 for b in self._blocks if b.masking)
        notes = [] if declared or not first else self.masks.doubts()
        return blocks, crops, notes
