"""Touch the lock while guard is at work, also during a long read."""

from __future__ import annotations

import threading
import time
from typing import Self

from monitor.growthlog.lock import Lock

_EVERY = 5.0


class Heartbeat:
    """A thread that touches the lock as long as guard has shown life within `patience_s` seconds,
    so that a guard that hangs for ever loses its lock to one on another host."""

    def __init__(self, lock: Lock) -> None:
        self._lock = lock
        self._until = 0.0
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._run, name="heartbeat", daemon=True)

    def __enter__(self) -> Self:
        self.beat(60.0)
        self._thread.start()
        return self

    def __exit__(self, *error: object) -> None:
        self._stop.set()
        self._thread.join(1.0)

    def beat(self, patience_s: float) -> None:
        """Guard lives, and will show it again within so many seconds."""
        self._until = time.monotonic() + patience_s

    def _run(self) -> None:
        while not self._stop.wait(_EVERY):
            if time.monotonic() < self._until:
                self._lock.touch()
