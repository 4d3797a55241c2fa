"""What a snapshot that arrives is to the run so far: the next one, a restart, or too late. Pure."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from probes.wire import Arrival

What = Literal["next", "restart", "late"]


@dataclass(frozen=True, slots=True)
class Place:
    """The last judged snapshot: its step (None if unknown) and its files' time of change, s."""

    step: int | None
    mtime: float


def begun(arrival: Arrival) -> float:
    """When the snapshot began to be written, as far as its files tell: the earliest time of
    change, seconds since the epoch. Parts of one snapshot may be finished long after each other."""
    times = [file.mtime_ns for file in arrival.files] or [arrival.mtime_ns]
    if arrival.growing:
        times = [arrival.mtime_ns]
    return min(times) / 1e9


def sort(arrival: Arrival, last: Place | None) -> tuple[What, str]:
    """What it is, and in words why.

    A step at or below the last one is a restart if it was written after the last snapshot was, and
    a straggler otherwise. The very step that was judged, written again (many solvers write a last
    checkpoint at their end), is no restart.
    """
    if last is None or arrival.step is None or last.step is None or arrival.step > last.step:
        return "next", ""
    if arrival.step == last.step:
        return "late", f"step {arrival.step} was judged already and has been written again"
    if begun(arrival) > last.mtime:
        return "restart", f"step {arrival.step} was written after step {last.step}"
    return "late", f"seen only after step {last.step} had been judged"
