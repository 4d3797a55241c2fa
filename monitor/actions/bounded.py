"""A command that may never block guard: an argument list, a time limit, its own session."""

from __future__ import annotations

import contextlib
import os
import selectors
import signal
import subprocess
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from monitor.wording import clean

# What is kept of a command's output, bytes.
KEPT = 2000


@dataclass(frozen=True, slots=True)
class Ended:
    """How a command ended. status: its exit status, None where it was not started or had to be
    ended; text: why, or the last that it wrote, in one printable line."""

    status: int | None
    text: str

    @property
    def good(self) -> bool:
        return self.status == 0


class BoundedCommand:
    """Started on construction, looked at by `poll`; both return at once.

    The command gets no terminal: standard input holds `given` and then ends, output and errors are
    read and the end of them is kept. It runs in a session of its own, so that neither a hang-up of
    guard's terminal nor ctrl+c reaches it, and is ended with all its children when its time is up.
    """

    def __init__(
        self,
        words: Sequence[str],
        limit_s: float,
        folder: Path,
        *,
        given: bytes = b"",
        extra: Mapping[str, str] | None = None,
    ) -> None:
        self._limit = limit_s
        self._until = time.monotonic() + limit_s
        self._given = given
        self._output = b""
        self._ended: Ended | None = None
        self._process: subprocess.Popen[bytes] | None = None
        try:
            self._process = subprocess.Popen(
                list(words),
                cwd=folder,
                env={**os.environ, **(extra or {})},
                stdin=subprocess.PIPE if given else subprocess.DEVNULL,
                stdout=subprocess.PIPE,
                stderr=subprocess.STDOUT,
                start_new_session=True,
            )
        except (OSError, ValueError) as error:
            reason = error.strerror if isinstance(error, OSError) else None
            self._ended = Ended(None, clean(f"cannot be started ({reason or error})"))
            return
        for pipe in (self._process.stdin, self._process.stdout):
            if pipe is not None:
                os.set_blocking(pipe.fileno(), False)

    def poll(self) -> Ended | None:
        """None while it runs."""
        if self._ended is None and self._process is not None:
            self._feed(self._process)
            self._read(self._process)
            status = self._process.poll()
            if status is not None:
                self._read(self._process)
                self._finish(self._process, Ended(status, self._describe(status)))
            elif time.monotonic() > self._until:
                self.end(f"still running after {self._limit:g} s, ended")
        return self._ended

    def wait(self, seconds: float) -> Ended | None:
        """Poll for at most so long."""
        until = time.monotonic() + seconds
        while (ended := self.poll()) is None and (left := until - time.monotonic()) > 0:
            self._sleep(min(0.05, left))
        return ended

    def end(self, why: str) -> None:
        """End it now, with all that it started in its session's process group."""
        process = self._process
        if self._ended is not None or process is None:
            return
        with contextlib.suppress(OSError):
            os.killpg(process.pid, signal.SIGKILL)
        with contextlib.suppress(subprocess.TimeoutExpired):
            process.wait(1.0)
        self._finish(process, Ended(None, why))

    def let_go(self) -> None:
        """Leave it running by itself: guard ends."""
        if self._process is not None and self._ended is None:
            self._process.returncode = 0  # keeps Popen from warning that it still runs
            self._finish(self._process, Ended(None, "left running"))

    def _sleep(self, seconds: float) -> None:
        output = self._process.stdout if self._process is not None else None
        if output is None or output.closed:
            time.sleep(seconds)
            return
        with selectors.DefaultSelector() as selector:
            selector.register(output, selectors.EVENT_READ)
            if selector.select(seconds):
                time.sleep(min(seconds, 0.005))

    def _feed(self, process: subprocess.Popen[bytes]) -> None:
        pipe = process.stdin
        if pipe is None or pipe.closed:
            return
        try:
            while self._given:
                sent = os.write(pipe.fileno(), self._given)
                self._given = self._given[sent:]
        except BlockingIOError:
            return
        except OSError:
            self._given = b""  # it does not want to know
        with contextlib.suppress(OSError):
            pipe.close()

    def _read(self, process: subprocess.Popen[bytes]) -> None:
        pipe = process.stdout
        if pipe is None or pipe.closed:
            return
        # A command that writes without end must not hold guard here.
        for _ in range(64):
            try:
                piece = os.read(pipe.fileno(), 65536)
            except OSError:
                return
            if not piece:
                return
            self._output = (self._output + piece)[-KEPT:]

    def _finish(self, process: subprocess.Popen[bytes], ended: Ended) -> None:
        self._ended = ended
        for pipe in (process.stdin, process.stdout):
            if pipe is not None:
                with contextlib.suppress(OSError):
                    pipe.close()

    def _describe(self, status: int) -> str:
        lines = self._output.decode("utf-8", errors="replace").strip().splitlines()
        said = " / ".join(line.strip() for line in lines if line.strip())
        how = f"exit status {status}" if status >= 0 else f"ended by signal {-status}"
        return clean(f"{how}: {said}" if said else how)
