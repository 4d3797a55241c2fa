"""What looks like a snapshot and cannot be judged: when to say so, once. Pure.

Most of it passes: a file is being written, a part is still missing. So it is told only when it has
lasted, when the run has gone on past it, or at the end.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

from probes.wire import Pending

Reason = Literal["late", "parts", "held", "refused", "broken", "empty"]

# Seconds after which what has not passed is told.
LASTING = 60.0
REMEDY = (
    "the writer should close the file after each snapshot, or open it in SWMR mode (one writer, "
    "many readers), or write NAME.tmp in the same folder, fsync it and rename it"
)


@dataclass(frozen=True, slots=True)
class Skip:
    """A record to be written. final: the content will not become readable."""

    path: str
    reason: Reason
    detail: str
    key: str
    step: int | None
    final: bool


class Waiting:
    """Remembers what was told. told: keys that the log has already."""

    def __init__(self, told: Iterable[str] = ()) -> None:
        self._told = set(told)
        self._held: set[str] = set()

    def look(
        self, pending: Iterable[Pending], now: float, step: int | None, *, at_end: bool = False
    ) -> tuple[list[Skip], list[str]]:
        """(skips to record, troubles to tell). step: of the last judged snapshot."""
        skips, troubles = [], []
        for p in pending:
            lasting = at_end or now - p.since > LASTING
            passed = step is not None and p.step is not None and p.step < step
            if p.reason == "held":
                if lasting and p.path not in self._held:
                    self._held.add(p.path)
                    troubles.append(f"{p.path} cannot be read while its writer holds it; {REMEDY}")
                    skips += self._once(p, "held")
            elif p.reason in ("refused", "broken"):
                skips += self._once(p, p.reason)
            elif p.reason == "writing":
                if at_end:
                    skips += self._once(p, "broken", "incomplete when guard ended; ")
            elif lasting and (passed or at_end or p.reason == "empty"):
                skips += self._once(p, p.reason)
        return skips, troubles

    def _once(self, p: Pending, reason: Reason, before: str = "") -> list[Skip]:
        if p.key in self._told:
            return []
        self._told.add(p.key)
        final = p.reason in ("refused", "broken")
        return [Skip(p.path, reason, before + p.detail, p.key, p.step, final)]
