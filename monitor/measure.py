"""Measure: sketches in, one evidence record out.

Keeps what the estimates need of earlier snapshots (the last sketch, the last differences, per-tile
levels) and reduces everything per tile, so that what follows works on records alone.
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from monitor.config import Settings
from monitor.growthlog.records import (
    Box,
    Channel,
    Estimate,
    Evidence,
    Line,
    Mode,
    Num,
    Worst,
)
from probes import growth, locality, modes
from probes.sketch import Layout, levels
from probes.tiling import Tiling
from probes.wire import BlockReply, Crop, Sketched

Array = NDArray[np.float64]

# What a level must exceed its rounding floor by, in ln: solvers round every step, storage only once.
OVER_FLOOR = math.log(6.0)
# Grid cells of one crop at most, and of all crops of one channel.
_CROP_HALO = 4
_CROP_CELLS = 8192


def _ln(value: float) -> float | None:
    return math.log(value) if value > 0.0 and math.isfinite(value) else None


def _num(value: float) -> Num:
    if math.isfinite(value):
        return value
    return "nan" if math.isnan(value) else "inf" if value > 0 else "-inf"


@dataclass
class _Tracked:
    """A Ritz vector of one snapshot, kept until it can be compared with a later one."""

    value: complex
    size: float
    basis: NDArray[np.float32]
    match: float = 0.0
    gain: float = 0.0
    foretold: float = 0.0
    kept: bool = False
    held: int = 0
    grown: float = 0.0


@dataclass
class _Block:
    """One part of a channel: its layout and where its tiles stand in the global numbering."""

    part: str
    layout: Layout
    first: int


@dataclass
class _Channel:
    """Memory of one field component over the snapshots of a segment."""

    name: str
    blocks: list[_Block] = field(default_factory=list)
    last: list[tuple[Array, int]] = field(default_factory=list)
    differences: deque[list[Array]] = field(default_factory=deque)
    exponents: deque[int] = field(default_factory=deque)
    tile_levels: deque[Array] = field(default_factory=deque)
    tile_floors: deque[Array] = field(default_factory=deque)
    tracks: dict[str, deque[list[_Tracked]]] = field(default_factory=dict)

    @property
    def tiles(self) -> int:
        return sum(b.layout.tiling.count for b in self.blocks)


@dataclass(frozen=True)
class TileGrid:
    """Local amplification for a map: ln factor per snapshot by tile, NaN where not seen."""

    field: str
    part: str
    tiling: Tiling
    values: Array


@dataclass(frozen=True)
class CloseUpCrops:
    """Raw values of the worst place in two consecutive snapshots."""

    field: str
    part: str
    lo: tuple[int, ...]
    hi: tuple[int, ...]
    before: Array
    now: Array


@dataclass(frozen=True)
class Measured:
    """What one snapshot gives: the record's evidence, and material for maps and close-ups."""

    evidence: Evidence
    grid: TileGrid | None
    closeup: CloseUpCrops | None


@dataclass
class _Reading:
    """One channel in one snapshot, while it is being measured."""

    channel: _Channel
    record: Channel
    pooled: dict[str, float]
    tile_levels: Array
    tile_floors: Array
    energy: Array
    before: Array | None
    modes: list[Mode]
    line: Line | None
    vary: float
    shares: dict[str, Array]


class Measurer:
    """Turns the sketches of successive snapshots into evidence. Holds bounded memory.

    Give snapshots in step order; call `new_segment` on a restart or a change of shape.
    """

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        self._krylov = settings.estimate.krylov
        self.new_segment()

    def new_segment(self) -> None:
        """Forget all earlier snapshots."""
        self._channels: dict[str, _Channel] = {}
        self._steps: deque[int | None] = deque(maxlen=self._settings.estimate.history)
        self._times: deque[float | None] = deque(maxlen=2)
        self._index = -1
        self._watched: list[Crop] = []
        self._crops: dict[tuple[str, str, tuple[int, ...]], Array] = {}

    @staticmethod
    def blocks(sketched: Sketched) -> tuple[tuple[str, str, tuple[int, ...], tuple[int, ...]], ...]:
        """(field, part, shape, tile) of every block, in the order of the global tile numbers."""
        return tuple((b.field, b.part, b.shape, b.tile) for b in sketched.blocks)

    def wanted_crops(self) -> tuple[Crop, ...]:
        """Boxes whose raw values should come back with the next sketch."""
        return tuple(self._watched)

    def take(self, sketched: Sketched, step: int | None, time: float | None) -> Measured:
        """Measure one snapshot. step and time as the arrival has them (None if unknown)."""
        self._index += 1
        before_step = self._steps[-1] if self._steps else None
        before_time = self._times[-1] if self._times else None
        stride = step - before_step if step is not None and before_step is not None else None
        dt = None
        if time is not None and before_time is not None:
            dt = (time - before_time) / (stride or 1)
        self._steps.append(step)
        self._times.append(time)
        uneven = self._uneven()
        readings = [
            self._measure_channel(name, blocks, stride, uneven)
            for name, blocks in self._by_channel(sketched).items()
        ]
        leading = self._leading(readings)
        crops = {(c.field, c.part, c.lo): c.values.array() for c in sketched.crops if c.values}
        grid, closeup, where, box, worst, edges = None, None, None, None, (), {}
        contamination: Estimate | None = None
        local: Estimate | None = None
        if leading is not None:
            where, box, closeup = self._place(leading, crops)
            worst = self._worst(leading, stride)
            edges = self._edges(leading)
            grid = self._grid(leading)
            contamination, local = self._contamination(leading)
        self._crops = crops
        self._watched = self._watch(leading) if leading is not None else []
        bad = next((b for b in sketched.blocks if b.bad), None)
        evidence = Evidence(
            channels=tuple(r.record for r in readings),
            stride=stride,
            dt=dt,
            uneven=uneven,
            fresh=self._index + 1,
            modes=tuple(sorted((m for r in readings for m in r.modes), key=lambda m: -m.held)[:4]),
            line=leading.line if leading is not None else None,
            worst=worst,
            edges=edges,
            contamination=contamination,
            local=local,
            where=where,
            box=box,
            bad_at=(bad.field, bad.part, bad.bad_at) if bad is not None else None,
        )
        return Measured(evidence, grid, closeup)

    # --- one channel --------------------------------------------------------------------

    def _by_channel(self, sketched: Sketched) -> dict[str, list[BlockReply]]:
        out: dict[str, list[BlockReply]] = {}
        for block in sketched.blocks:
            out.setdefault(block.field, []).append(block)
        if not self._channels:
            first = 0
            for block in sketched.blocks:
                channel = self._channels.setdefault(block.field, _Channel(block.field))
                layout = Layout.of(block.shape, self._settings.sketch, block.tile)
                channel.blocks.append(_Block(block.part, layout, first))
                first += layout.tiling.count
        return out

    def _uneven(self) -> bool:
        """True where the strides of the present window differ, so that differences do not compare."""
        recent = list(self._steps)[-(self._krylov + 2) :]
        if any(s is None for s in recent) or len(recent) < 3:
            return False
        strides = np.diff(np.array(recent, dtype=float))
        return bool(strides.max() > 1.02 * strides.min())

    def _measure_channel(
        self, name: str, blocks: list[BlockReply], stride: int | None, uneven: bool
    ) -> _Reading:
        channel = self._channels[name]
        now = [(b.columns.array(), b.exponent) for b in blocks]
        places = [b.positions.array() for b in blocks]
        positions = np.concatenate(places)
        exponent = max([e for _, e in now] + [e for _, e in channel.last])
        layouts = [b.layout for b in channel.blocks]
        own = np.concatenate(
            [
                levels(np.ldexp(c, e - exponent), layout, p)
                for (c, e), layout, p in zip(now, layouts, places, strict=True)
            ]
        )
        groups = {g.name: i for i, g in enumerate(layouts[0].groups)}
        axes = range(len(blocks[0].shape))
        shift = exponent * math.log(2.0)
        peak = np.concatenate([b.peak.array() for b in blocks])
        gridded = self._gridded(name)
        floors = growth.rounding_floor(peak, blocks[0].spacing_of_storage, 8)
        floor_sum = positions[:, groups["r8.0"]] * 0.0
        for a in axes:
            floor_sum += floors**2 * positions[:, groups[f"r8.{a}"]]
        totals = {
            order: np.sum([positions[:, groups[f"r{order}.{a}"]] for a in axes], axis=0)
            for order in (8,)
        }
        vary = self._variation(now, layouts, positions, blocks) * math.exp(0.0)
        low = min(b.low for b in blocks)
        high = max(b.high for b in blocks)
        record = {
            "f": name,
            "lo": _num(low),
            "hi": _num(high),
            "bad": sum(b.bad for b in blocks),
            "own": _shifted(_ln(_ripple(own, positions, groups, axes, 8)), shift),
            "floor": _ln(math.sqrt(float(floor_sum.sum()) / max(1.0, float(totals[8].sum())))),
            "vary": _shifted(_ln(vary), now[0][1] * math.log(2.0)),
            "total": _num(math.fsum(b.total for b in blocks)),
            "top": _top(blocks[0].dtype),
        }
        reading = _Reading(
            channel, Channel(**record), {}, np.full(channel.tiles, -np.inf),
            _safe_ln(np.sqrt(np.divide(floor_sum, totals[8], out=np.zeros_like(floor_sum),
                                       where=totals[8] > 0))),
            np.zeros(channel.tiles), None, [], None, vary, {},
        )
        if channel.last:
            change = [
                np.ldexp(c, e - exponent) - np.ldexp(c0, e0 - exponent)
                for (c, e), (c0, e0) in zip(now, channel.last, strict=True)
            ]
            self._measure_change(
                reading, change, exponent, layouts, places, positions, groups, record, floor_sum,
                stride, uneven, gridded,
            )
        channel.last = now
        return reading

    def _measure_change(
        self, reading: _Reading, change: list[Array], exponent: int, layouts: list[Layout],
        places: list[Array], positions: Array, groups: dict[str, int], record: dict[str, object],
        floor_sum: Array, stride: int | None, uneven: bool, gridded: bool,
    ) -> None:
        channel, axes = reading.channel, range(len(layouts[0].tiling.shape))
        shift = exponent * math.log(2.0)
        per_tile = np.concatenate(
            [levels(c, layout, p) for c, layout, p in zip(change, layouts, places, strict=True)]
        )
        for name, g in groups.items():
            reading.pooled[name] = growth.pool(per_tile[:, g], positions[:, g])
        energy = _energy(per_tile, positions, groups, axes, 8)
        count = np.sum([positions[:, groups[f"r8.{a}"]] for a in axes], axis=0)
        reading.energy = energy
        reading.tile_levels = _safe_ln(
            np.sqrt(np.divide(energy, count, out=np.zeros_like(energy), where=count > 0))
        ) + shift
        previous = channel.tile_levels[-1] if channel.tile_levels else None
        reading.before = previous
        record["bulk"] = _shifted(_ln(reading.pooled["bulk"]), shift)
        if gridded:
            record["ripple"] = _shifted(_ln(_ripple(per_tile, positions, groups, axes, 8)), shift)
            angles = self._angles(reading.pooled, record["floor"], shift, axes)
            record["cells"] = growth.cells_per_wavelength(angles)
        reading.record = Channel(**record)  # type: ignore[arg-type]
        keep = self._settings.estimate.history
        channel.differences.append(change)
        channel.exponents.append(exponent)
        channel.tile_levels.append(reading.tile_levels)
        channel.tile_floors.append(reading.tile_floors)
        while len(channel.differences) > self._krylov + 1:
            channel.differences.popleft()
            channel.exponents.popleft()
        while len(channel.tile_levels) > keep:
            channel.tile_levels.popleft()
            channel.tile_floors.popleft()
        if uneven:
            channel.tracks.clear()
            return
        if gridded:
            reading.line = self._tile_line(reading, groups, per_tile)
        reading.modes = self._find_modes(reading, positions, groups, floor_sum, stride, gridded)

    def _gridded(self, name: str) -> bool:
        spec = self._settings.fields.get(name.split("[")[0])
        return spec is None or spec.grid

    @staticmethod
    def _variation(
        now: list[tuple[Array, int]], layouts: list[Layout], positions: Array,
        blocks: list[BlockReply],
    ) -> float:
        """Rms deviation of the field from its mean, in units of 2**exponent of the first block.

        The bulk group splits into the mean part of each tile (first column) and what varies inside.
        """
        exponent = now[0][1]
        inside, means, cells = 0.0, [], []
        scale = max(max(abs(b.low), abs(b.high)) for b in blocks)
        scale = math.ldexp(scale, -exponent) if scale > 0 else 1.0
        for (columns, e), layout in zip(now, layouts, strict=True):
            part = np.ldexp(columns[:, layout.group("bulk").columns], e - exponent) / scale
            weights = layout.energy[:, layout.group("bulk").columns]
            square = part**2 * weights
            n = layout.positions[:, 0]
            inside += float(square[:, 1:].sum())
            means.append(part[:, 0] / np.sqrt(n))
            cells.append(n)
        mean, n = np.concatenate(means), np.concatenate(cells)
        total = float(n.sum())
        centre = float((mean * n).sum()) / total
        between = float((n * (mean - centre) ** 2).sum())
        return scale * math.sqrt((inside + between) / total)

    @staticmethod
    def _angles(
        pooled: dict[str, float], floor: object, shift: float, axes: range
    ) -> tuple[float, ...]:
        """Radians per cell and axis, 0 where the axis is below its floor or hardly takes part."""
        limit = math.exp(float(floor) - shift + OVER_FLOOR) if isinstance(floor, float) else 0.0
        high = [pooled[f"r8.{a}"] for a in axes]
        strongest = max(high, default=0.0)
        return tuple(
            growth.half_angle(pooled[f"r6.{a}"], h, 6, 8)
            if h > limit and h > 0.05 * strongest
            else 0.0
            for a, h in zip(axes, high, strict=True)
        )

    def _tile_line(
        self, reading: _Reading, groups: dict[str, int], per_tile: Array
    ) -> Line | None:
        channel = reading.channel
        found = locality.straightest_tile(
            np.array(channel.tile_levels), np.array(channel.tile_floors), math.log(100.0), 0.02,
            OVER_FLOOR,
        )
        if found is None:
            return None
        tile, span, slope, rise, rms = found
        axes = range(len(channel.blocks[0].layout.tiling.shape))
        angles = self._angles({n: per_tile[tile, g] for n, g in groups.items()}, None, 0.0, axes)
        return Line(
            f=channel.name, slope=slope, rise=rise, rms=rms, span=span,
            tile=self._global_tile(channel, tile), cells=growth.cells_per_wavelength(angles),
            over=float(reading.tile_levels[tile] - reading.tile_floors[tile]),
        )

    @staticmethod
    def _global_tile(channel: _Channel, tile: int) -> int:
        """From the channel's own numbering to that over all blocks of the snapshot."""
        for block in channel.blocks:
            if tile < block.layout.tiling.count:
                return block.first + tile
            tile -= block.layout.tiling.count
        raise IndexError(tile)

    # --- modes --------------------------------------------------------------------------

    def _find_modes(
        self, reading: _Reading, positions: Array, groups: dict[str, int], floor_sum: Array,
        stride: int | None, gridded: bool,
    ) -> list[Mode]:
        channel = reading.channel
        if len(channel.differences) < 3:
            return []
        views = {"ripple": ("r8",), "fine": ("r6", "edge"), "bulk": ("bulk",)}
        if not gridded:
            views = {"bulk": ("bulk",)}
        out = []
        noise = math.sqrt(float(floor_sum.sum()))
        for view, kinds in views.items():
            vectors = self._vectors(channel, kinds)
            exponent = max(channel.exponents)
            out += self._track(
                reading, view, vectors, math.ldexp(noise, -exponent), exponent, positions, groups,
                stride,
            )
        return sorted(out, key=lambda m: (-m.held, -m.factor))

    def _vectors(self, channel: _Channel, kinds: tuple[str, ...] | None) -> Array:
        """(numbers, differences): weighted columns of some groups, in one scale."""
        top = max(channel.exponents)
        out = []
        for change, exponent in zip(channel.differences, channel.exponents, strict=True):
            pieces = []
            for columns, block in zip(change, channel.blocks, strict=True):
                weights = np.sqrt(block.layout.energy)
                for group in block.layout.groups:
                    if kinds is None or group.kind in kinds:
                        part = columns[:, group.columns] * weights[:, group.columns]
                        pieces.append(np.ldexp(part, exponent - top).ravel())
            out.append(np.concatenate(pieces))
        return np.column_stack(out)

    def _track(
        self, reading: _Reading, view: str, vectors: Array, noise: float, exponent: int,
        positions: Array, groups: dict[str, int], stride: int | None,
    ) -> list[Mode]:
        channel, r = reading.channel, self._krylov
        track = channel.tracks.setdefault(view, deque(maxlen=r))
        rising = [
            p for p in modes.ritz_pairs(vectors, noise)
            if abs(p.value) > 1.0 and p.size > 3.0 * noise and p.residual < 0.5 and p.share > 1e-8
        ]
        # The largest is not always the one that grows: keep the fastest as well.
        chosen = sorted(rising, key=lambda p: -p.size)[:2]
        fastest = sorted(rising, key=lambda p: -abs(p.value))[:2]
        chosen += [p for p in fastest if p not in chosen]
        now, out = [], []
        for pair in chosen:
            size = math.log(pair.size) + exponent * math.log(2.0)
            here = _Tracked(pair.value, size, pair.vectors(vectors).astype(np.float32))
            self._compare(here, track, r)
            now.append(here)
            out.append(self._mode(reading, view, pair, here, vectors, groups, positions, exponent, stride))
        track.append(now)
        return out

    @staticmethod
    def _compare(here: _Tracked, track: deque[list[_Tracked]], r: int) -> None:
        """Look for the same pair one window earlier, and take up its history of one snapshot ago."""
        if len(track) < r:
            return
        growth_now = math.log(abs(here.value))
        for old in track[-r]:
            if old.basis.shape[0] != here.basis.shape[0]:
                continue
            steady = abs(math.log(abs(old.value)) / growth_now - 1.0) < 0.15
            likeness = modes.likeness(old.basis.astype(float), here.basis.astype(float))
            if likeness > here.match and (steady or here.match == 0.0):
                here.match, here.gain, here.foretold = likeness, here.size - old.size, r * growth_now
                off = abs(here.gain - here.foretold)
                here.kept = steady and likeness > 0.9 and off <= 0.15 + 0.1 * here.foretold
        if not here.kept:
            return
        here.held, here.grown = r, here.gain
        for old in track[-1]:
            near = abs(math.log(abs(old.value)) / growth_now - 1.0) < 0.15
            if near and old.held and old.held + 1 > here.held:
                here.held, here.grown = old.held + 1, old.grown + here.size - old.size

    def _mode(
        self, reading: _Reading, view: str, pair: modes.RitzPair, here: _Tracked, vectors: Array,
        groups: dict[str, int], positions: Array, exponent: int, stride: int | None,
    ) -> Mode:
        per_step = stride or 1
        size = abs(pair.value)
        doubt = max(pair.residual, 1e-4)
        cells, angles, amplitude = self._mode_shape(reading, pair, groups, positions, exponent)
        negative = pair.value.real < 0.0 and abs(pair.value.imag) <= 1e-9 * size
        nearly = pair.value.real < 0.0 and abs(pair.value.imag) < 0.1 * size and per_step == 1
        return Mode(
            f=reading.channel.name, re=pair.value.real, im=pair.value.imag,
            factor=size ** (1.0 / per_step),
            low=max(size - doubt, 1e-300) ** (1.0 / per_step),
            high=(size + doubt) ** (1.0 / per_step),
            residual=pair.residual, share=pair.share, span=vectors.shape[1],
            view="bulk" if view == "bulk" else "ripple", cells=cells, axes=angles,
            held=here.held, match=here.match, gain=here.gain, foretold=here.foretold,
            grown=here.grown, amp=amplitude, odd=bool(nearly or (negative and per_step % 2 == 1)),
        )

    def _mode_shape(
        self, reading: _Reading, pair: modes.RitzPair, groups: dict[str, int], positions: Array,
        exponent: int,
    ) -> tuple[float | None, tuple[float, ...], float | None]:
        """Wavelength, angles and ln rms size in the field of a Ritz vector, from its levels."""
        channel = reading.channel
        full: list[Array] = []
        for part in (pair.weights.real, pair.weights.imag):
            pieces = []
            for b, block in enumerate(channel.blocks):
                columns = sum(
                    w * np.ldexp(change[b], e - exponent)
                    for w, change, e in zip(
                        part, channel.differences, channel.exponents, strict=True
                    )
                )
                at = slice(block.first - channel.blocks[0].first, None)
                n = block.layout.tiling.count
                place = positions[sum(x.layout.tiling.count for x in channel.blocks[:b]):][:n]
                del at
                pieces.append(levels(np.asarray(columns), block.layout, place))
            full.append(np.concatenate(pieces))
        per_tile = np.hypot(full[0], full[1])
        axes = range(len(channel.blocks[0].layout.tiling.shape))
        pooled = {n: growth.pool(per_tile[:, g], positions[:, g]) for n, g in groups.items()}
        # Rounding noise of every difference enters with its weight.
        floor = reading.record.floor
        noise = floor + math.log(float(np.linalg.norm(pair.weights))) if floor is not None else None
        angles = self._angles(pooled, noise, exponent * math.log(2.0), axes)
        energy = _energy(per_tile, positions, groups, axes, 8)
        if float(energy.sum()) > 0.0 and np.isfinite(energy).all():
            reading.shares[f"{pair.value}"] = energy
            reading.energy = energy
        cells = growth.cells_per_wavelength(angles)
        sizes = [
            pooled[f"r8.{a}"] / math.sin(angle / 2.0) ** 8
            for a, angle in zip(axes, angles, strict=True)
            if angle > 0.0
        ]
        if not sizes:
            return cells, angles, None
        doubt = max(pair.residual, 1e-4)
        size = modes.size_in_field(max(sizes), pair.value, doubt)
        amp = _shifted(_ln(size), exponent * math.log(2.0)) if size is not None else None
        return cells, angles, amp

    # --- what leads ---------------------------------------------------------------------

    def _leading(self, readings: list[_Reading]) -> _Reading | None:
        """The channel to look at more closely: a held mode first, then a line, then the steepest
        ripple above its floor."""
        def rank(r: _Reading) -> tuple[float, float, float]:
            held = max((m.held for m in r.modes if (m.cells or 99.0) < 6.0), default=0)
            rise = r.line.rise if r.line is not None else 0.0
            ripple, floor = r.record.ripple, r.record.floor
            over = ripple - floor if ripple is not None and floor is not None else -math.inf
            return float(held), rise, over
        seen = [r for r in readings if r.record.bulk is not None or r.record.ripple is not None]
        return max(seen, key=rank, default=None)

    def _worst(self, r: _Reading, stride: int | None) -> tuple[Worst, ...]:
        total = float(r.energy.sum())
        if total <= 0.0 or not math.isfinite(total):
            return ()
        order = np.argsort(-r.energy)[:4]
        out = []
        for tile in order:
            share = float(r.energy[tile]) / total
            if share < 0.01:
                break
            factor = 1.0
            if r.before is not None and np.isfinite(r.before[tile]):
                factor = math.exp((r.tile_levels[tile] - r.before[tile]) / (stride or 1))
            out.append(Worst(self._global_tile(r.channel, int(tile)), share, factor))
        return tuple(out)

    @staticmethod
    def _edges(r: _Reading) -> dict[str, float]:
        if len(r.channel.blocks) != 1:
            return {}
        return locality.face_shares(r.energy, r.channel.blocks[0].layout.tiling)

    def _grid(self, r: _Reading) -> TileGrid | None:
        if r.before is None:
            return None
        block, first = self._heaviest(r)
        n = block.layout.tiling.count
        with np.errstate(invalid="ignore"):
            change = (r.tile_levels - r.before)[first : first + n]
        return TileGrid(r.channel.name, block.part, block.layout.tiling, change)

    @staticmethod
    def _heaviest(r: _Reading) -> tuple[_Block, int]:
        """The part with most of the growing energy, and its first tile within the channel."""
        best, at, start = 0.0, (r.channel.blocks[0], 0), 0
        for block in r.channel.blocks:
            n = block.layout.tiling.count
            energy = float(r.energy[start : start + n].sum())
            if energy > best:
                best, at = energy, (block, start)
            start += n
        return at

    def _contamination(self, r: _Reading) -> tuple[Estimate | None, Estimate | None]:
        """Share of the growing part in the field's variation, over the field and in one tile."""
        sized = [m for m in r.modes if m.amp is not None and (m.cells or 99.0) < 8.0]
        if not sized:
            return (Estimate(reason="no growing mode stands out"),) * 2
        if r.vary <= 0.0 or r.record.vary is None:
            return (Estimate(reason="the field does not vary"),) * 2
        mode = max(sized, key=lambda m: (m.held, m.amp or -math.inf))
        ratio = math.exp(min(700.0, (mode.amp or 0.0) - r.record.vary))
        total = float(r.energy.sum())
        local = ratio
        if total > 0.0:
            share = r.energy / total
            local = ratio * math.sqrt(float(share.max()) * len(share))
        return (
            Estimate(ratio, ratio / 2.0, ratio * 2.0, 0.8),
            Estimate(local, local / 2.0, local * 2.0, 0.8),
        )

    # --- places on the cells ------------------------------------------------------------

    def _watch(self, r: _Reading) -> list[Crop]:
        """Tiles to look at closely in the next snapshot: the worst, and those at the outer layers
        of what grows. Tiles watched already are preferred, since two looks make a difference."""
        block, first = self._heaviest(r)
        tiling = block.layout.tiling
        energy = r.energy[first : first + tiling.count]
        total = float(energy.sum())
        if total <= 0.0 or not math.isfinite(total):
            return []
        chosen = [int(t) for t in np.argsort(-energy)[:2]]
        grid = energy.reshape(tiling.counts)
        for axis in range(grid.ndim):
            others = tuple(a for a in range(grid.ndim) if a != axis)
            filled = np.cumsum(grid.sum(axis=others)) / total
            for level in (0.025, 0.975):
                layer = min(int(np.searchsorted(filled, level)), grid.shape[axis] - 1)
                inside = np.take(grid, layer, axis=axis)
                place = list(np.unravel_index(int(np.argmax(inside)), inside.shape))
                place.insert(axis, layer)
                chosen.append(tiling.number([int(i) for i in place]))
        old = {c.lo for c in self._watched if c.field == r.channel.name and c.part == block.part}
        boxes: list[Crop] = []
        limit = self._settings.estimate.crops
        for tile in dict.fromkeys(chosen):
            lo = tuple(max(0, a - _CROP_HALO) for a, _ in tiling.box(tile))
            hi = tuple(
                min(n, b + _CROP_HALO)
                for (_, b), n in zip(tiling.box(tile), tiling.shape, strict=True)
            )
            if math.prod(b - a for a, b in zip(lo, hi, strict=True)) <= _CROP_CELLS:
                boxes.append(Crop(field=r.channel.name, part=block.part, lo=lo, hi=hi))
        for crop in self._watched:
            if crop.lo in old and len(boxes) < limit and crop.lo not in {b.lo for b in boxes}:
                boxes.append(crop)
        return boxes[:limit]

    def _place(
        self, r: _Reading, crops: dict[tuple[str, str, tuple[int, ...]], Array]
    ) -> tuple[tuple[str, str] | None, Box | None, CloseUpCrops | None]:
        """Field and part, the box on the cells, and the raw values around the worst tile."""
        block, first = self._heaviest(r)
        tiling = block.layout.tiling
        energy = r.energy[first : first + tiling.count]
        profiles: dict[int, tuple[Box, Array]] = {}
        closeup, best = None, -1.0
        for (name, part, lo), now in crops.items():
            before = self._crops.get((name, part, lo))
            if name != r.channel.name or part != block.part or before is None:
                continue
            hi = tuple(a + n for a, n in zip(lo, now.shape, strict=True))
            box = tuple(zip(lo, hi, strict=True))
            centre = tuple(
                min(n - 1, max(0, (a + b) // 2)) for (a, b), n in zip(box, tiling.shape, strict=True)
            )
            tile = tiling.holding(centre)
            profiles[tile] = (box, locality.cell_energy(before, now))
            if energy[tile] > best:
                best = float(energy[tile])
                closeup = CloseUpCrops(name, part, lo, hi, before, now)
        box_on_cells = locality.quantile_box(energy, tiling, profiles)
        return (r.channel.name, block.part), box_on_cells, closeup


def _shifted(value: float | None, shift: float) -> float | None:
    return None if value is None else value + shift


def _safe_ln(values: Array) -> Array:
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.log(values)


def _top(dtype: str) -> float | None:
    kind = np.dtype(dtype)
    if kind.kind not in "fc" or kind.itemsize >= (16 if kind.kind == "c" else 8):
        return None
    return math.log(float(np.finfo(kind).max))


def _energy(
    per_tile: Array, positions: Array, groups: dict[str, int], axes: range, order: int
) -> Array:
    """(tiles,): sum of squared ripple of one order over the axes."""
    out = np.zeros(per_tile.shape[0])
    for a in axes:
        g = groups[f"r{order}.{a}"]
        with np.errstate(over="ignore"):
            out += per_tile[:, g] ** 2 * positions[:, g]
    return out


def _ripple(
    per_tile: Array, positions: Array, groups: dict[str, int], axes: range, order: int
) -> float:
    """Rms of the ripple per stencil position, pooled over axes and tiles."""
    parts = [groups[f"r{order}.{a}"] for a in axes]
    values = np.concatenate([per_tile[:, g] for g in parts])
    return growth.pool(values, np.concatenate([positions[:, g] for g in parts]))
