"""Bounds that a field must keep: broken, or about to be. A pure fold over evidence records.

A broken bound is an alarm of its own: compressible and shallow-water codes die of negative density
or depth without any exponential before. The approach to one is a warning with a range.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Literal

import msgspec
import numpy as np

from monitor.growthlog.records import Channel, Estimate, Evidence
from monitor.wording import number, steps_text
from probes.bounds import approach
from probes.spec import FieldSpec

# Distances kept per bound: trends are sought among these.
KEPT = 128
# An approach has to have taken this share of the largest distance seen.
_TAKEN = 0.2

Side = Literal["min", "max"]


class Gaps(msgspec.Struct, frozen=True):
    """Distances of a field's extreme to its bound over the last snapshots of a segment.

    x: step or count; gap: positive inside the bound. least, most: over the whole segment.
    """

    x: tuple[float, ...] = ()
    gap: tuple[float, ...] = ()
    least: float = float("inf")
    most: float = 0.0

    def and_then(self, x: float, gap: float) -> Gaps:
        return Gaps(
            (*self.x, x)[-KEPT:],
            (*self.gap, gap)[-KEPT:],
            min(self.least, gap),
            max(self.most, gap),
        )


@dataclass(frozen=True, slots=True)
class Told:
    """What is to be said of a field's bound: broken, or (not broken) neared."""

    field: str
    broken: bool
    why: str


def followed(
    gaps: Mapping[str, Gaps], x: float, evidence: Evidence, fields: Mapping[str, FieldSpec]
) -> dict[str, Gaps]:
    """`gaps`, by field and side, with one snapshot more."""
    return {
        f"{channel.f} {side}": gaps.get(f"{channel.f} {side}", Gaps()).and_then(x, gap)
        for channel, side, _, gap in _bounded(evidence, fields)
    }


def judged(
    gaps: Mapping[str, Gaps],
    evidence: Evidence,
    fields: Mapping[str, FieldSpec],
    run_length: float,
    per: str,
) -> Iterator[Told]:
    """Broken bounds and approaches in the snapshot that `followed` has taken in last.

    run_length: as in ``[alarm]``. per: "step" or "snapshot", what x counts.
    """
    for channel, side, bound, gap in _bounded(evidence, fields):
        value = channel.lo if side == "min" else channel.hi
        moves, where = ("falls", "below") if side == "min" else ("rises", "above")
        if gap < 0.0:
            why = f"{channel.f} {moves} to {number(value)}, {where} its bound {number(bound)}"
            yield Told(channel.f, True, why)
        elif left := nearing(gaps[f"{channel.f} {side}"], run_length):
            what = "smallest" if side == "min" else "largest"
            yield Told(
                channel.f,
                False,
                f"{channel.f}: its {what} value {number(value)} {moves} towards its bound "
                f"{number(bound)}, which it reaches in {steps_text(left, per)} at this rate",
            )


def nearing(gaps: Gaps, run_length: float) -> Estimate | None:
    """Steps until a bound is reached, where that is near enough to be told.

    A quantity that has been as close before swings, and is left alone; so is one that has come only
    a little closer.
    """
    here = gaps.gap[-1] if gaps.gap else 0.0
    if here <= 0.0 or here > gaps.least or here > (1.0 - _TAKEN) * gaps.most:
        return None
    found = approach(np.array(gaps.x), np.array(gaps.gap), run_length)
    if found is None or not found.near:
        return None
    left = found.left
    return Estimate(left.value, left.low, left.high, left.coverage)


def _bounded(
    evidence: Evidence, fields: Mapping[str, FieldSpec]
) -> Iterator[tuple[Channel, Side, float, float]]:
    """(channel, side, bound, distance inside it) of every bound that a finite extreme has."""
    for channel in evidence.channels:
        spec = fields.get(channel.f.split("[")[0])
        if spec is None:
            continue
        if spec.min is not None and not isinstance(channel.lo, str):
            yield channel, "min", spec.min, channel.lo - spec.min
        if spec.max is not None and not isinstance(channel.hi, str):
            yield channel, "max", spec.max, spec.max - channel.hi
