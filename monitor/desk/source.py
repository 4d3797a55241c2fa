"""Reads the growth log in a thread of its own, so that a slow or hanging file system never holds
the screen up."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Protocol

from textual.message import Message

from monitor.desk.lookout import POLL_SECONDS, guard_alive
from monitor.desk.messages import Arrived, GuardSeen, LogTrouble
from monitor.growthlog.follow import Follower
from probes.errors import StepwardenError

# One piece of a long log: folded in well under a tenth of a second, so that keys stay quick.
PIECE = 1 << 20
# Pieces that may wait for the screen; more would only fill memory.
_WAITING = 2
_LOOK_AT_LOCK_SECONDS = 5.0


Post = Callable[[Message], object]


class Feed(Protocol):
    """Where a screen's records come from."""

    def begin(self, post: Post) -> None:
        """Post `Arrived`, `GuardSeen` and `LogTrouble` from now on, from any thread."""

    def taken(self) -> None:
        """The receiver is done with one `Arrived`."""

    def stop(self) -> None:
        """Post no more."""


class Source:
    """Follows `log` in a thread of its own.

    A daemon, and never joined: a read that hangs must not keep the desk from closing.
    """

    def __init__(self, log: Path) -> None:
        self._log = log
        self._follower = Follower(log)
        self._stopping = threading.Event()
        self._room = threading.Semaphore(_WAITING)
        self._alive: bool | None = None
        self._trouble = ""
        self._lock_seen = -_LOOK_AT_LOCK_SECONDS

    def begin(self, post: Post) -> None:
        thread = threading.Thread(target=self._run, args=(post,), name="log reader", daemon=True)
        thread.start()

    def stop(self) -> None:
        self._stopping.set()
        self._room.release()

    def taken(self) -> None:
        self._room.release()

    def _run(self, post: Post) -> None:
        first = True
        while not self._stopping.is_set():
            self._look_at_lock(post)
            more = self._read(post, first)
            first = False
            if not more:
                self._stopping.wait(POLL_SECONDS)

    def _read(self, post: Post, first: bool) -> bool:
        """One piece of the log; returns whether there is more at once."""
        follower = self._follower
        try:
            records = follower.poll(PIECE)
        except StepwardenError as error:
            self._tell_trouble(post, str(error))
            return False
        self._tell_trouble(post, "the growth log is gone" if follower.missing else "")
        if records or follower.restarted or first:
            self._room.acquire()
            if self._stopping.is_set():
                return False
            arrived = Arrived(records, follower.restarted, follower.behind, follower.bad_lines)
            post(arrived)
        return follower.behind > 0

    def _tell_trouble(self, post: Post, text: str) -> None:
        if text != self._trouble:
            self._trouble = text
            post(LogTrouble(text))

    def _look_at_lock(self, post: Post) -> None:
        if time.monotonic() - self._lock_seen < _LOOK_AT_LOCK_SECONDS:
            return
        self._lock_seen = time.monotonic()
        alive = guard_alive(self._log, time.time())
        if alive != self._alive:
            self._alive = alive
            post(GuardSeen(alive))
