"""Does a pinned copy hold what the record of its snapshot says? Pure."""

from __future__ import annotations

import math
from collections.abc import Sequence

from monitor.growthlog.numbers import significant
from monitor.growthlog.records import Channel
from probes.wire import BlockReply, Sketched

# Four significant digits in the log; the sum of a field may cancel, so it is compared with its
# largest value times its cells.
_DIGITS = 2e-3


def digest(blocks: Sequence[BlockReply]) -> dict[str, tuple[float, float, float, int]]:
    """Per field: smallest, largest, sum of the finite values, and number of non-finite cells, over
    all parts."""
    found: dict[str, list[BlockReply]] = {}
    for block in blocks:
        found.setdefault(block.field, []).append(block)
    return {
        name: (
            min(b.low for b in group),
            max(b.high for b in group),
            math.fsum(b.total for b in group),
            sum(b.bad for b in group),
        )
        for name, group in found.items()
    }


def differs_from_record(sketched: Sketched, channels: Sequence[Channel]) -> str:
    """What of a copy's extremes and sums is not as recorded; "" where all agree."""
    found = digest(sketched.blocks)
    cells = {b.field: 0 for b in sketched.blocks}
    for block in sketched.blocks:
        cells[block.field] += math.prod(block.shape)
    for channel in channels:
        if channel.f not in found:
            return f"{channel.f} is not in the copy"
        low, high, total, bad = found[channel.f]
        size = max(abs(low), abs(high))
        for name, here, recorded, doubt in (
            ("smallest value", low, channel.lo, _DIGITS * abs(low)),
            ("largest value", high, channel.hi, _DIGITS * abs(high)),
            ("sum", total, channel.total, _DIGITS * size * cells[channel.f]),
        ):
            if not isinstance(recorded, float | int) or not math.isfinite(here):
                continue
            if abs(here - recorded) > doubt:
                return f"{name} of {channel.f} is {significant(here)}, recorded was {recorded}"
        if bool(bad) != bool(channel.bad):
            return f"{channel.f} has {bad} non-finite values, recorded were {channel.bad}"
    return ""
