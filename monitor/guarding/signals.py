"""Signals that end guard: noted at once, obeyed where it is safe."""

from __future__ import annotations

import signal
import time
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Any, Self

ENDING = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
# What must not be cut off without need gets so long after a signal, in seconds: batch systems kill
# half a minute after it.
LONGEST_FINISH = 10.0


class Interrupted(Exception):
    """A signal to end came while guard was only waiting or reading, or some time ago."""


class Signals:
    """A context in which INT, TERM and HUP are noted instead of ending the process.

    Outside `interruptible` they wait until somebody looks at `caught`. A signal that was ignored
    when guard was started (nohup) stays ignored. A second one of a kind ends guard at once, as it
    would without us.
    """

    def __init__(self) -> None:
        self.caught: int | None = None
        self._when = 0.0
        self._open = False
        self._before: dict[signal.Signals, Any] = {}

    def __enter__(self) -> Self:
        for number in ENDING:
            if signal.getsignal(number) is not signal.SIG_IGN:
                self._before[number] = signal.signal(number, self._note)
        return self

    def __exit__(self, *error: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)

    @contextmanager
    def interruptible(self) -> Iterator[None]:
        """Leave this block with Interrupted as soon as a signal comes, or if one came before."""
        self._open = True
        try:
            if self.caught is not None:
                raise Interrupted
            yield
        finally:
            self._open = False

    def hurry(self) -> None:
        """To be called while something is under way outside `interruptible`: raises Interrupted
        `LONGEST_FINISH` seconds after a signal."""
        if self.caught is not None and time.monotonic() - self._when >= LONGEST_FINISH:
            raise Interrupted

    def _note(self, number: int, frame: FrameType | None) -> None:
        signal.signal(number, signal.SIG_DFL)
        first, self.caught = self.caught is None, self.caught or number
        if first:
            self._when = time.monotonic()
        if first and self._open:
            self._open = False
            raise Interrupted
