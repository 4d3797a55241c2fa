"""One look after the other at a run's files: listing, settling, grouping and being woken."""

from __future__ import annotations

import os
import time
from collections.abc import Iterable
from pathlib import Path

import msgspec

from probes.arrivals.groups import Describe, Grouper
from probes.arrivals.listing import Listing, Seen
from probes.arrivals.patterns import Pattern
from probes.arrivals.settled import (
    LOCAL_QUIET,
    NETWORK_QUIET,
    Rest,
    Settling,
    is_network,
    mount_kind,
)
from probes.arrivals.wakeups import Wakeups
from probes.spec import SnapshotSpec
from probes.wire import Arrival, Looked

# Between two looks while waiting: where events wake us, where they do not, and while something is
# being written.
_EVENTS_PAUSE = 2.0
_POLLING_PAUSE = 0.5
_NETWORK_PAUSE = 1.0
_WRITING_PAUSE = 0.1


class Watching:
    """Watches the files of one specification."""

    def __init__(
        self,
        folder: str,
        spec: SnapshotSpec,
        describe: Describe,
        known: Iterable[str] = (),
        *,
        events: bool = True,
    ) -> None:
        """describe: contents of a file by its path. known: keys never to be offered. events: have
        the file system wake a waiting look, where it can."""
        self._patterns = tuple(Pattern.of(text, folder) for text in spec.pattern)
        self._listing = Listing(self._patterns, time.monotonic)
        self._grouper = Grouper(self._patterns, spec, describe, set(known))
        kind = _kind_of(self._patterns[0].root) if self._patterns else ""
        self._network = is_network(kind)
        quiet = NETWORK_QUIET if self._network else LOCAL_QUIET
        self._settling = Settling(spec.settle_seconds if spec.settle_seconds >= 0 else quiet)
        self._calm_list: list[Seen] = []
        self._calm: Looked | None = None
        self._wakeups = Wakeups()
        self._events = events and not self._network
        if self._network:
            self._wakeups.refuse(f"files on {kind} change without events")

    def settle(self, keys: Iterable[str]) -> None:
        """These are dealt with: never offer them again."""
        self._grouper.known |= set(keys)

    def look(self, wait_s: float) -> Looked:
        """What is new, at once or within `wait_s` seconds. Raises ArrivalError."""
        deadline = time.monotonic() + wait_s
        while True:
            looked = self._once()
            left = deadline - time.monotonic()
            if looked.arrivals or left <= 0.0:
                return looked
            writing = any(p.reason == "writing" for p in looked.pending)
            pause = _NETWORK_PAUSE if self._network else _POLLING_PAUSE
            if self._wakeups.live:
                pause = _EVENTS_PAUSE
            self._wakeups.wait(min(left, _WRITING_PAUSE if writing else pause))

    def _once(self) -> Looked:
        # Events are taken before the listing: one that comes in between wakes the next look.
        closed = self._wakeups.closed()
        seen = self._listing.look(also=closed)
        if self._events:
            self._wakeups.watch(self._listing.folders())
        if seen is self._calm_list and self._calm is not None:
            known = self._grouper.known
            left = tuple(a for a in self._calm.arrivals if a.key not in known)
            self._calm = msgspec.structs.replace(
                self._calm,
                arrivals=left,
                wakeup="events" if self._wakeups.live else "polling",
                wakeup_reason=self._wakeups.reason,
                listed=self._listing.listed,
            )
            return self._calm
        for path in closed.keys() & {one.path for one in seen}:
            self._settling.closed(path, closed[path])
        now, wall = time.monotonic(), time.time()
        rest = {s.path: self._settling.rest(s.path, s.identity, now, wall) for s in seen}
        self._settling.forget_all_but(set(rest))
        arrivals, pending = self._grouper.group(
            seen, lambda s: rest[s.path], self._settling.quiet, wall
        )
        looked = Looked(
            arrivals=tuple(arrivals),
            pending=tuple(pending),
            wakeup="events" if self._wakeups.live else "polling",
            wakeup_reason=self._wakeups.reason,
            listed=self._listing.listed,
        )
        # Where nothing is under way, the same files give the same answer.
        at_rest = all(calm == Rest.QUIET for calm in rest.values())
        final = all(p.reason in ("refused", "broken") for p in pending)
        self._calm_list, self._calm = seen, looked if at_rest and final else None
        return looked

    def complete_now(self) -> tuple[Arrival, ...]:
        """Everything complete at this moment, oldest first."""
        return self._once().arrivals

    def close(self) -> None:
        self._wakeups.stop()


def _kind_of(folder: str) -> str:
    try:
        mounts = Path("/proc/self/mountinfo").read_text(encoding="utf-8", errors="replace")
    except OSError:
        return ""
    return mount_kind(os.path.realpath(folder), mounts)
