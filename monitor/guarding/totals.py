"""Totals of conserved fields since the segment began, and which channels have bounds.

The log holds totals in a few digits; what has drifted is taken from the sums as they were read.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import msgspec
from msgspec.structs import replace

from monitor.growthlog.numbers import spell
from monitor.growthlog.records import Channel, Evidence
from probes.spec import FieldSpec
from probes.wire import BlockReply

# A total below this share of cells times rms is what is left of a cancellation: its own size says
# nothing.
_CANCELS = 1e-3


class First(msgspec.Struct, frozen=True):
    """Total of a field in the first snapshot of the segment, and the size that drift is told in."""

    total: float
    size: float


class Totals:
    """Remembers first totals; `firsts` is for going on later."""

    def __init__(
        self, fields: Mapping[str, FieldSpec], firsts: Mapping[str, First] | None = None
    ) -> None:
        self._fields = fields
        self.firsts = dict(firsts or {})

    def told(self, evidence: Evidence, blocks: Sequence[BlockReply]) -> Evidence:
        """`evidence` with drifts, and with marks on the channels that have bounds."""
        channels = tuple(self._channel(c, blocks) for c in evidence.channels)
        return replace(evidence, channels=channels)

    def _channel(self, channel: Channel, blocks: Sequence[BlockReply]) -> Channel:
        spec = self._fields.get(channel.f.split("[")[0])
        if spec is None:
            return channel
        if spec.min is not None or spec.max is not None:
            channel = replace(channel, bounded=True)
        if not spec.conserved:
            return channel
        own = [b for b in blocks if b.field == channel.f]
        total = sum(b.total for b in own)
        first = self.firsts.get(channel.f)
        if first is None:
            if not math.isfinite(total):
                return channel
            first = self.firsts[channel.f] = First(total, _size(total, channel, own))
        change = total - first.total
        return replace(channel, drift=spell(change / first.size if first.size > 0.0 else change))


def _size(total: float, channel: Channel, blocks: Sequence[BlockReply]) -> float:
    cells = sum(math.prod(b.shape) - b.masked for b in blocks)
    vary = math.exp(min(700.0, channel.vary)) if channel.vary is not None else 0.0
    whole = cells * math.hypot(total / max(1, cells), vary)
    return abs(total) if abs(total) >= _CANCELS * whole else whole
