"""Masked cells over restarts of the reading process. Pure.

The reading process learns which cells are non-finite on purpose from the first snapshot that it
reads. One that is started in the middle of a segment (after a crash, or with a new guard) would
learn an overflow that has just begun as a mask. The number of masked cells is remembered here, and
cells beyond it count as what they are.
"""

from __future__ import annotations

from msgspec.structs import replace

from probes.wire import Sketched


class MaskMemory:
    """Masked cells per block (field, part) of one segment."""

    def __init__(self, masked: dict[str, int] | None = None) -> None:
        self._masked = dict(masked or {})

    @property
    def masked(self) -> dict[str, int]:
        """To go on from later."""
        return dict(self._masked)

    def check(self, sketched: Sketched) -> Sketched:
        """The same with masked cells that were not masked before counted as bad."""
        blocks = []
        for block in sketched.blocks:
            key = f"{block.field}/{block.part}"
            before = self._masked.setdefault(key, block.masked)
            more = block.masked - before
            if more > 0:
                block = replace(block, masked=before, bad=block.bad + more)
            else:
                self._masked[key] = block.masked
            blocks.append(block)
        return replace(sketched, blocks=tuple(blocks))
