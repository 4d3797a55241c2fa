"""Cells that are non-finite on purpose: land in an ocean grid, a solid in a flow.

The mask of a block is learnt from the first snapshot of a segment and confirmed by the third: until
then it may shrink (a cell that turns finite was not masked) but never grow, so a NaN that appears
later is always news. It never contains infinities.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

CONFIRMED_AFTER = 3

Bools = NDArray[np.bool_]


@dataclass
class MaskState:
    """Mask of one block, kept as packed bits of those planes along axis 0 that have any."""

    shape: tuple[int, ...]
    snapshots: int = 0
    planes: dict[int, NDArray[np.uint8]] = field(default_factory=dict)
    cells: int = 0

    @property
    def learning(self) -> bool:
        """True while the first snapshot of the segment is being read."""
        return self.snapshots == 0

    @property
    def share(self) -> float:
        """Masked cells over all cells."""
        return self.cells / math.prod(self.shape)

    def take(self, plane: int, missing: Bools) -> tuple[Bools, int]:
        """Settle one plane. missing: cells that are NaN or carry the fill value.

        Returns the cells that are masked, and how many masked cells turned out to be present.
        """
        if self.learning:
            if missing.any():
                self.planes[plane] = np.packbits(missing)
                self.cells += int(missing.sum())
            return missing, 0
        packed = self.planes.get(plane)
        if packed is None:
            return np.zeros_like(missing), 0
        mask = np.unpackbits(packed, count=missing.size).reshape(missing.shape).astype(bool)
        present = int((mask & ~missing).sum())
        if present and self.snapshots < CONFIRMED_AFTER:
            mask &= missing
            self.planes[plane] = np.packbits(mask)
            self.cells -= present
        return mask, present


@dataclass
class MaskBook:
    """The masks of one segment, by block (field with component, part)."""

    states: dict[tuple[str, str], MaskState] = field(default_factory=dict)

    def of(self, name: str, part: str, shape: tuple[int, ...]) -> MaskState:
        """The state of a block, a new one if it is unknown or has changed its shape."""
        state = self.states.get((name, part))
        if state is None or state.shape != shape:
            state = self.states[name, part] = MaskState(shape)
        return state

    def doubts(self) -> list[str]:
        """Sentences on masks that are probably not meant: large, or in one of several fields."""
        found = []
        masked: dict[tuple[str, tuple[int, ...]], list[str]] = {}
        clear: dict[tuple[str, tuple[int, ...]], list[str]] = {}
        for (name, part), state in self.states.items():
            side = masked if state.cells else clear
            side.setdefault((part, state.shape), []).append(name)
            if state.share > 0.5:
                found.append(
                    f"field {name!r}: {100 * state.share:.0f} % of the cells were not finite in "
                    'the first snapshot and are taken for a mask; declare mask = "declared" or '
                    '"none"'
                )
        for key, names in masked.items():
            found += [
                f"field {names[0]!r} has a mask and {other!r} on the same grid has none; "
                'declare mask = "declared" or "none"'
                for other in clear.get(key, [])
            ]
        return found
