"""Which checkpoint to restart from, kept up to date while records come in.

The rules are those of `monitor.lastclean`, which needs the judged snapshots that its answer may
depend on. Of a long run only those are kept: the last ones before the alarm, and those that pins
were taken at.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence

from monitor.growthlog.records import PinRecord, Snapshot
from monitor.lastclean import CleanSnapshot, clean_files, clean_pins, place

_LAST = 128


class Checkpoints:
    """Of one segment."""

    def __init__(self) -> None:
        self._last: deque[Snapshot] = deque(maxlen=_LAST)
        self._at_pins: dict[str, Snapshot] = {}
        self._unjudged: dict[str, int] = {}
        self._closed = False
        self._answer: tuple[object, CleanSnapshot | None] = (None, None)

    def judged(self, snapshot: Snapshot) -> None:
        """Take a snapshot in; after the alarm none matters any more."""
        if self._closed:
            return
        self._closed = snapshot.verdict.alarmed
        self._last.append(snapshot)
        for pin, step in list(self._unjudged.items()):
            if place(snapshot) >= step:
                self._at_pins[pin] = snapshot
                del self._unjudged[pin]

    def pinned(self, pin: PinRecord) -> None:
        """Take a pin in: the first snapshot judged at or after its step speaks for it."""
        if pin.pin in self._at_pins or pin.step is None:
            return
        found = next((s for s in self._last if place(s) >= pin.step), None)
        if found is not None:
            self._at_pins[pin.pin] = found
        else:
            self._unjudged[pin.pin] = pin.step

    def clean(self, pins: Sequence[PinRecord], turn: Snapshot | None) -> CleanSnapshot | None:
        """The latest clean pin, else the latest clean snapshot that nobody pinned."""
        state = (len(self._last), self._last[-1].seq if self._last else 0, tuple(pins), turn)
        if self._answer[0] != state:
            held = {s.seq: s for s in (*self._at_pins.values(), *self._last)}
            snaps = [held[seq] for seq in sorted(held)]
            found = clean_pins(pins, snaps, turn) or clean_files(snaps, turn)
            self._answer = (state, found[-1] if found else None)
        return self._answer[1]
