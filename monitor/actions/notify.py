"""Run the ``[notify]`` command at every change of condition, without ever waiting for it."""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable
from pathlib import Path

import msgspec

from monitor.actions.bounded import BoundedCommand
from monitor.config import NotifySection
from monitor.growthlog.records import Condition, Snapshot
from monitor.guarding.journal import Journal

# Messages that wait while the command runs; the oldest are dropped, since news is what counts.
MOST_WAITING = 32

Start = Callable[..., BoundedCommand]


def request_of(snapshot: Snapshot) -> str:
    """The request id of the notice about one snapshot, the same after a restart of guard."""
    return f"notify-{snapshot.seq}"


def facts(snapshot: Snapshot, before: Condition, run: str, log: Path) -> dict[str, object]:
    """What the command finds on its standard input, as one JSON object."""
    verdict = snapshot.verdict
    return {
        "schema": 1,
        "request": request_of(snapshot),
        "run": run,
        "log": str(log),
        "condition": verdict.condition,
        "before": before,
        "alarmed": verdict.alarmed,
        "kind": verdict.kind,
        "why": verdict.why,
        "step": snapshot.step,
        "time": snapshot.time,
        "snapshot": snapshot.path,
        "field": verdict.field,
        "growth_per_step": verdict.factor.value if verdict.factor is not None else None,
        "cells_per_wavelength": verdict.cells,
        "steps_to_ruin": _steps(snapshot, "ruin"),
        "steps_to_overflow": _steps(snapshot, "overflow"),
        "at": snapshot.at,
    }


def _steps(snapshot: Snapshot, which: str) -> dict[str, object] | None:
    estimate = getattr(snapshot.verdict, which)
    if estimate is None:
        return None
    return {name: getattr(estimate, name) for name in ("value", "low", "high", "reason")}


class Notifier:
    """One notice at a time; the next when the one before has ended.

    failed: a notice did not get through.
    """

    def __init__(
        self, section: NotifySection, journal: Journal, folder: Path, start: Start = BoundedCommand
    ) -> None:
        self._section, self._journal, self._folder = section, journal, folder
        self._start = start
        self._waiting: deque[tuple[str, bytes]] = deque(maxlen=MOST_WAITING)
        self._running: tuple[str, BoundedCommand] | None = None
        self.failed = False

    @property
    def busy(self) -> bool:
        return self._running is not None or bool(self._waiting)

    def changed(self, snapshot: Snapshot, before: Condition, run: str, log: Path) -> None:
        """Have the command told that the condition changed with this snapshot."""
        if self._section.command:
            given = msgspec.json.encode(facts(snapshot, before, run, log)) + b"\n"
            self._waiting.append((request_of(snapshot), given))

    def advance(self) -> None:
        """Do what is due; returns at once."""
        if self._running is not None:
            request, command = self._running
            ended = command.poll()
            if ended is None:
                return
            self._running = None
            self.failed |= not ended.good
            self._journal.outcome("notify", request, "done" if ended.good else "failed", ended.text)
        if self._waiting:
            request, given = self._waiting.popleft()
            self._journal.intend("notify", request, self._section.command[0])
            command = self._start(
                self._section.command, self._section.wait_seconds, self._folder, given=given
            )
            self._running = request, command

    def close(self, wait_s: float) -> None:
        """Guard ends: wait so long at most for what is under way, then leave it running."""
        until = time.monotonic() + wait_s
        self.advance()
        while self._running is not None and (left := until - time.monotonic()) > 0.0:
            self._running[1].wait(left)
            self.advance()
        if self._running is not None:
            self._running[1].let_go()
