"""The solver's process: whether it lives, who it is, and the one way to signal it.

A number alone does not name a process, since numbers are used again. A pidfd does: it is opened
once, then start time and owner are looked up, and every later signal goes through it.
"""

from __future__ import annotations

import contextlib
import os
import select
import signal
from dataclasses import dataclass

import psutil

# Start times come from the kernel's boot time, which moves a little when the clock is set.
_SAME_START = 2.0


class NotSignalled(Exception):
    """A signal was not sent; the text says why."""


@dataclass(frozen=True, slots=True)
class Identity:
    """start: seconds since the epoch; owner: user number."""

    pid: int
    start: float
    owner: int

    def __str__(self) -> str:
        return f"process {self.pid} of user {self.owner}"


class RunProcess:
    """One process, as it was when this object was made. identity: None where there was none."""

    def __init__(self, pid: int) -> None:
        self.pid = pid
        self._file: int | None = None
        self.identity: Identity | None = None
        with contextlib.suppress(OSError, AttributeError):
            self._file = os.pidfd_open(pid)
        found = _look_up(pid)
        # The number may have got a new process between the two calls only if the first had ended.
        if found is not None and (self._file is None or not _gone(self._file)):
            self.identity = found

    def alive(self) -> bool:
        """False once it has ended, also while nobody has asked for its exit status."""
        if self.identity is None:
            return False
        if self._file is not None:
            return not _gone(self._file)
        return _same(_look_up(self.pid), self.identity)

    def send(self, number: signal.Signals) -> None:
        """Signal it. Raises NotSignalled where that is not possible or not safe."""
        if not self.alive() or self.identity is None:
            raise NotSignalled(f"process {self.pid} has ended")
        if self._file is None:
            raise NotSignalled("this system cannot signal a process safely (no pidfd)")
        now = _look_up(self.pid)
        if not _same(now, self.identity):
            raise NotSignalled(f"process {self.pid} is not the one that was watched")
        if self.identity.owner != os.getuid() and os.getuid() != 0:
            raise NotSignalled(f"{self.identity} belongs to somebody else")
        try:
            signal.pidfd_send_signal(self._file, number)
        except ProcessLookupError as error:
            raise NotSignalled(f"process {self.pid} has ended") from error
        except OSError as error:
            raise NotSignalled(f"{self.identity}: {error.strerror}") from error

    def close(self) -> None:
        if self._file is not None:
            os.close(self._file)
            self._file = None


def _gone(pidfd: int) -> bool:
    """A pidfd becomes readable when its process ends."""
    poller = select.poll()
    poller.register(pidfd, select.POLLIN)
    return bool(poller.poll(0))


def _look_up(pid: int) -> Identity | None:
    try:
        process = psutil.Process(pid)
        if process.status() == psutil.STATUS_ZOMBIE:
            return None
        return Identity(pid, process.create_time(), process.uids().real)
    except (psutil.Error, OSError, ValueError):
        return None


def _same(found: Identity | None, known: Identity) -> bool:
    return (
        found is not None
        and found.owner == known.owner
        and abs(found.start - known.start) < _SAME_START
    )
