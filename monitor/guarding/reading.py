"""Have one arrival read by the reading process, with patience and an end to it."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

from monitor.guarding.limits import seconds_for
from probes.errors import ChildError
from probes.wire import Arrival, Crop, Failed, ReadSnapshot, Reply, Request, Sketched

# How long a file that looks incomplete although it was settled may hold up those after it.
PATIENCE = 60.0
PATIENCE_BEHIND = 10.0
# A file at which the reading process died or hung is tried once more.
DEATHS = 2


@dataclass(frozen=True, slots=True)
class NotRead:
    """later: try again. Else reason and detail for the log."""

    later: bool
    reason: Literal["refused", "broken"] = "broken"
    detail: str = ""


class Reading:
    """Asks for sketches and remembers what went wrong with whom."""

    def __init__(
        self,
        ask: Callable[[Request, float], Reply],
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._ask, self._clock = ask, clock
        self._first: dict[str, float] = {}
        self._deaths: dict[str, int] = {}

    def read(
        self, arrival: Arrival, crops: tuple[Crop, ...], new_segment: bool, *, behind: bool
    ) -> Sketched | NotRead:
        """behind: other snapshots wait behind this one."""
        size = sum(file.size for file in arrival.files)
        request = ReadSnapshot(arrival=arrival, crops=crops, new_segment=new_segment)
        try:
            reply = self._ask(request, seconds_for(size))
        except ChildError as error:
            return self._died(arrival.key, str(error))
        if isinstance(reply, Sketched):
            self._first.pop(arrival.key, None)
            self._deaths.pop(arrival.key, None)
            return reply
        if not isinstance(reply, Failed):
            return NotRead(False, "broken", "the reading process answered something else")
        detail = f"{reply.what}; {reply.remedy}" if reply.remedy else reply.what
        if reply.kind == "not-yet":
            return self._not_yet(arrival.key, detail, behind)
        return NotRead(False, "refused" if reply.kind == "refused" else "broken", detail)

    def _died(self, key: str, why: str) -> NotRead:
        self._deaths[key] = self._deaths.get(key, 0) + 1
        later = self._deaths[key] < DEATHS
        return NotRead(later, "broken", f"the reading process did not survive it: {why}")

    def _not_yet(self, key: str, detail: str, behind: bool) -> NotRead:
        if len(self._first) > 1000:
            self._first.clear()  # contents that never came back
        now = self._clock()
        waited = now - self._first.setdefault(key, now)
        return NotRead(waited < (PATIENCE_BEHIND if behind else PATIENCE), "broken", detail)
