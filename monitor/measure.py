"""Measure: the sketches of one snapshot in, one evidence record out.

Keeps what the estimates need of earlier snapshots and reduces everything per tile, so that what
follows works on records alone.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

import msgspec
import numpy as np
from numpy.typing import NDArray

from monitor.config import Settings
from monitor.growthlog.records import Evidence, Mode
from monitor.measuring import placing
from monitor.measuring.memory import Memory, Scaled, memories, restore, store
from monitor.measuring.placing import CloseUpCrops, Crops, TileGrid
from monitor.measuring.reading import Reading, read_change, read_channel, tile_line
from monitor.measuring.tracking import find_modes
from probes.wire import BlockReply, Crop, Packed, Sketched

__all__ = ["CloseUpCrops", "Measured", "Measurer", "TileGrid", "resketch_distance"]

# Modes in one record at most, and snapshots in a row from which on one value is no accident.
_MODES = 4
_STEADY = 3
# Modes of two views are one if their factors per step differ by less than this.
_SAME_FACTOR = 1e-3
# Strides that differ by more than this make differences weigh each mode differently.
_UNEVEN = 1.02


@dataclass(frozen=True)
class Measured:
    """What one snapshot gives: its evidence, and material for a map and a close-up."""

    evidence: Evidence
    grid: TileGrid | None
    closeup: CloseUpCrops | None


class _Clock(msgspec.Struct):
    """Steps and times of the last snapshots, and how many there were."""

    steps: list[int | None]
    time: float | None
    seen: int
    watched: tuple[Crop, ...]
    crops: tuple[Crop, ...]


class Measurer:
    """Turns the sketches of successive snapshots into evidence. Holds bounded memory.

    Give snapshots in step order; call `new_segment` on a restart or a change of shape.
    """

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        self.new_segment()

    def new_segment(self) -> None:
        """Forget all earlier snapshots."""
        self._memories: dict[str, Memory] = {}
        self._steps: deque[int | None] = deque(maxlen=self._settings.estimate.krylov + 2)
        self._time: float | None = None
        self._seen = 0
        self._watched: tuple[Crop, ...] = ()
        self._crops: Crops = {}

    @staticmethod
    def blocks(sketched: Sketched) -> tuple[tuple[str, str, tuple[int, ...], tuple[int, ...]], ...]:
        """(field, part, shape, tile) of every block, in the order of the global tile numbers."""
        return tuple((b.field, b.part, b.shape, b.tile) for b in sketched.blocks)

    def wanted_crops(self) -> tuple[Crop, ...]:
        """Boxes whose raw values should come back with the next sketch."""
        return self._watched

    def take(self, sketched: Sketched, step: int | None, time: float | None) -> Measured:
        """Measure one snapshot. step and time as the arrival has them (None if unknown)."""
        last = self._steps[-1] if self._steps else None
        stride = step - last if step is not None and last is not None else None
        dt = None
        if time is not None and self._time is not None:
            dt = (time - self._time) / (stride or 1)
        self._steps.append(step)
        self._time = time
        self._seen += 1
        if not self._memories:
            self._memories = memories(sketched.blocks, self._settings.sketch)
        uneven = self._uneven()
        readings = [
            self._channel(self._memories[name], blocks, stride, uneven)
            for name, blocks in _by_channel(sketched.blocks).items()
        ]
        crops = {(c.field, c.part, c.lo): c.values.array() for c in sketched.crops if c.values}
        lead = placing.leading(readings)
        bad = next((b for b in sketched.blocks if b.bad), None)
        evidence = Evidence(
            channels=tuple(r.record for r in readings),
            stride=stride,
            dt=dt,
            uneven=uneven,
            fresh=self._seen,
            modes=_worth_logging([m for r in readings for m in r.modes]),
            bad_at=(bad.field, bad.part, bad.bad_at) if bad is not None else None,
        )
        grid = closeup = None
        if lead is not None:
            where, box, closeup = placing.on_the_cells(lead, self._crops, crops)
            share, local = placing.contamination(lead)
            evidence = msgspec.structs.replace(
                evidence,
                line=lead.line,
                worst=placing.worst_tiles(lead, stride),
                edges=placing.face_shares(lead),
                contamination=share,
                local=local,
                where=where,
                box=box,
            )
            grid = placing.tile_grid(lead)
            self._watched = placing.crops_to_watch(
                lead, self._watched, self._settings.estimate.crops
            )
        self._crops = crops
        return Measured(evidence, grid, closeup)

    def _channel(
        self, memory: Memory, blocks: list[BlockReply], stride: int | None, uneven: bool
    ) -> Reading:
        spec = self._settings.fields.get(memory.name.split("[")[0])
        gridded = spec is None or spec.grid
        reading, columns = read_channel(memory, blocks)
        if memory.last is not None:
            change = columns.minus(memory.last)
            read_change(reading, change, gridded)
            self._remember(memory, reading, change)
            if uneven:
                memory.tracks.clear()
            else:
                if gridded:
                    reading.line = tile_line(reading, change)
                reading.modes = find_modes(reading, stride, gridded)
        memory.last = columns
        return reading

    def _remember(self, memory: Memory, reading: Reading, change: Scaled) -> None:
        # What is kept is rounded as it is stored, so that a restored memory is the same.
        memory.differences.append(change.single())
        memory.tile_levels.append(_single(reading.tile_levels))
        memory.tile_bulk.append(_single(reading.tile_bulk))
        while len(memory.differences) > self._settings.estimate.krylov + 1:
            memory.differences.popleft()
        while len(memory.tile_levels) > self._settings.estimate.history:
            memory.tile_levels.popleft()
            memory.tile_bulk.popleft()

    def _uneven(self) -> bool:
        """Whether the strides of the present window differ, so that differences do not compare."""
        steps = [s for s in self._steps if s is not None]
        if len(steps) < 3 or len(steps) < len(self._steps):
            return False
        strides = np.diff(np.array(steps, dtype=float))
        return bool(strides.max() > _UNEVEN * strides.min())

    # --- memory across processes --------------------------------------------------------

    def dump(self) -> dict[str, bytes]:
        """Everything needed to go on in another process, by name."""
        crops = tuple(
            Crop(field=name, part=part, lo=lo, hi=lo, values=Packed.of(values))
            for (name, part, lo), values in self._crops.items()
        )
        clock = _Clock(list(self._steps), self._time, self._seen, self._watched, crops)
        return {
            "clock": msgspec.msgpack.encode(clock),
            **{f"channel {name}": store(memory) for name, memory in self._memories.items()},
        }

    def load(self, payload: dict[str, bytes]) -> None:
        """Go on where `dump` was called. Raises KeyError, ValueError or msgspec.MsgspecError for a
        damaged payload."""
        self.new_segment()
        clock = msgspec.msgpack.decode(payload["clock"], type=_Clock)
        self._steps.extend(clock.steps)
        self._time, self._seen, self._watched = clock.time, clock.seen, clock.watched
        self._crops = {
            (c.field, c.part, c.lo): c.values.array() for c in clock.crops if c.values is not None
        }
        for name, data in payload.items():
            if name.startswith("channel "):
                memory = restore(data, self._settings.sketch)
                self._memories[memory.name] = memory


def _single(values: NDArray[np.float64]) -> NDArray[np.float64]:
    return values.astype(np.float32).astype(np.float64)


def _worth_logging(modes: list[Mode]) -> tuple[Mode, ...]:
    """Modes that have persisted, or whose value came up again and again, each in one view, and
    larger ones beside them, which they may be products of; those that have persisted longest
    first."""
    lasting = [m for m in modes if m.held or m.steady >= _STEADY]
    lasting = [m for m in lasting if m.odd or m.view == "ripple" or not _seen_as_ripple(m, lasting)]
    beside = [
        o
        for o in modes
        if o not in lasting
        and any(o.f == m.f and o.view == m.view and o.share > m.share for m in lasting)
    ]
    lasting.sort(key=lambda m: (-m.held, -m.steady))
    return tuple([*lasting, *beside][:_MODES])


def _seen_as_ripple(bulk: Mode, modes: list[Mode]) -> bool:
    return any(
        m.f == bulk.f and m.view == "ripple" and abs(m.factor / bulk.factor - 1.0) < _SAME_FACTOR
        for m in modes
    )


def _by_channel(blocks: tuple[BlockReply, ...]) -> dict[str, list[BlockReply]]:
    out: dict[str, list[BlockReply]] = {}
    for block in blocks:
        out.setdefault(block.field, []).append(block)
    return out


def resketch_distance(one: Sketched, other: Sketched) -> float:
    """Largest relative distance of two sketches that should be of the same content.

    0.0 means identical; infinity that the blocks do not correspond.
    """
    if Measurer.blocks(one) != Measurer.blocks(other):
        return float("inf")
    worst = 0.0
    for a, b in zip(one.blocks, other.blocks, strict=True):
        here, there = a.columns.array(), b.columns.array()
        if a.exponent != b.exponent or here.shape != there.shape:
            return float("inf")
        size = float(np.abs(here).max(initial=0.0))
        distance = float(np.abs(here - there).max(initial=0.0))
        worst = max(worst, distance / size if size > 0.0 else distance)
    return worst
