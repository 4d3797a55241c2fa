"""Starts, bounds and replaces the reading process."""

from __future__ import annotations

import contextlib
import os
import select
import signal
import struct
import subprocess
import sys
import time
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import Any

import probes
from probes.errors import ChildError, ChildHung
from probes.spec import WatchSpec
from probes.wire import (
    LARGEST_FRAME,
    Configure,
    Failed,
    Ready,
    Reply,
    Request,
    Settled,
    decode_reply,
    encode,
)

MEMORY_MB = 400
# How long a new process may take to be ready: on a busy network home imports are slow.
START_SECONDS = 120.0
# After its own alarm, and after a kill, the process gets this long to end.
GRACE = 5.0
KILL_SECONDS = 5.0
MOST_ABANDONED = 2
# Whoever waits for an answer is asked so often whether to go on.
SLICE = 0.5
# The child runs this very package, wherever it was imported from, without its folder becoming one
# that other modules are looked for in. -P and the working folder "/" keep a run's folder out too.
_CODE = """
import importlib.util, os, sys
package = sys.argv.pop(1)
spec = importlib.util.spec_from_file_location(
    "probes", os.path.join(package, "__init__.py"), submodule_search_locations=[package]
)
sys.modules["probes"] = module = importlib.util.module_from_spec(spec)
spec.loader.exec_module(module)
from probes.child import main
main()
"""
_THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS")


class ChildKeeper:
    """One reading process at a time, replaced when it dies or hangs.

    watch: what to look at. known: content keys that are in the log already. memory_mb: what the
    process may use beyond its start. Not thread-safe.
    """

    def __init__(
        self, watch: WatchSpec, known: Iterable[str], *, memory_mb: int = MEMORY_MB
    ) -> None:
        self._watch, self._memory_mb = watch, memory_mb
        self._known: set[str] = set(known)
        self._process: subprocess.Popen[bytes] | None = None
        self._told: set[str] = set()
        self._abandoned: list[subprocess.Popen[bytes]] = []
        # Called again and again while an answer is awaited; what it raises ends the waiting.
        self.meanwhile: Callable[[], None] = lambda: None

    def ask(self, request: Request, timeout_s: float) -> Reply:
        """Send a request and wait for its reply, a process being started if there is none.

        Raises ChildError where the process dies, hangs beyond the time limit (ChildHung; it is
        killed) or answers nonsense; the next request starts a new one. Failed replies are returned.
        """
        if self._process is None or self._process.poll() is not None:
            self._start()
        self._tell_settled()
        return self._exchange(request, timeout_s)

    def settled(self, keys: Iterable[str]) -> None:
        """These contents are in the log now and are never to be offered again."""
        self._known |= set(keys)

    def close(self) -> None:
        """End the process."""
        process, self._process = self._process, None
        if process is not None:
            with contextlib.suppress(OSError):
                _pipe(process.stdin).close()
            try:
                process.wait(0.5)
            except subprocess.TimeoutExpired:
                self._end(process)
            _pipe(process.stdout).close()

    # --- the process --------------------------------------------------------------------

    def _start(self) -> None:
        self._forget()
        self._abandoned = [p for p in self._abandoned if p.poll() is None]
        if len(self._abandoned) >= MOST_ABANDONED:
            raise ChildError(
                "file system not answering",
                self._watch.folder,
                f"{len(self._abandoned)} reading processes hang and cannot be ended",
            )
        package = str(Path(probes.__file__).resolve().parent)
        environment = {**os.environ, "PYTHONSAFEPATH": "1", "PYTHONUNBUFFERED": "1"}
        environment |= dict.fromkeys(_THREADS, "1")
        try:
            self._process = subprocess.Popen(
                [sys.executable, "-P", "-c", _CODE, package, str(self._memory_mb)],
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                cwd="/",
                env=environment,
                bufsize=0,
            )
        except OSError as error:
            raise ChildError(f"the reading process cannot be started ({error.strerror})") from error
        self._told = set(self._known)
        reply = self._exchange(
            Configure(watch=self._watch, known=tuple(self._known)), START_SECONDS
        )
        if isinstance(reply, Failed):
            self._forget()
            raise ChildError(reply.what, reply.where, reply.remedy)
        if not isinstance(reply, Ready):
            self._forget()
            raise ChildError("the reading process did not get ready")

    def _tell_settled(self) -> None:
        news = self._known - self._told
        if news:
            self._exchange(Settled(keys=tuple(news)), START_SECONDS)
            self._told |= news

    def _exchange(self, request: Request, timeout_s: float) -> Reply:
        process = self._process
        if process is None:
            raise ChildError("the reading process is not running")
        deadline = time.monotonic() + timeout_s
        try:
            limit = f"{max(0.1, timeout_s):.3f}".encode()
            self._send(process, struct.pack(">I", len(limit)) + limit + encode(request), deadline)
            (length,) = struct.unpack(">I", self._receive(process, 4, deadline + GRACE))
            if length > LARGEST_FRAME:
                raise ChildError(f"a reply of {length} bytes is over the limit")
            return decode_reply(self._receive(process, length, deadline + GRACE))
        except TimeoutError as error:
            self._end(process)
            self._process = None
            raise ChildHung(
                f"no answer within {timeout_s:.0f} s", remedy="the reading process was ended"
            ) from error
        except (EOFError, BrokenPipeError, ConnectionError) as error:
            why, hung = _how_it_ended(process)
            self._forget()
            raise (ChildHung if hung else ChildError)(f"the reading process {why}") from error
        except ChildError:
            self._forget()
            raise
        except BaseException:
            # A signal came in between: what is in the pipe belongs to nobody now.
            self._forget()
            raise

    def _send(self, process: subprocess.Popen[bytes], data: bytes, deadline: float) -> None:
        """Write everything, without waiting for ever for a process that does not read."""
        handle = _pipe(process.stdin).fileno()
        os.set_blocking(handle, False)
        view = memoryview(data)
        while view:
            self._await([], [handle], deadline)
            with contextlib.suppress(BlockingIOError):
                view = view[os.write(handle, view) :]

    def _receive(self, process: subprocess.Popen[bytes], count: int, deadline: float) -> bytes:
        """Read `count` bytes. Raises EOFError at an early end, TimeoutError at the deadline."""
        handle = _pipe(process.stdout).fileno()
        out = bytearray()
        while len(out) < count:
            self._await([handle], [], deadline)
            block = os.read(handle, min(count - len(out), 1 << 20))
            if not block:
                raise EOFError
            out += block
        return bytes(out)

    def _await(self, reading: list[int], writing: list[int], deadline: float) -> None:
        """Until a pipe is ready. Raises TimeoutError at the deadline."""
        while (left := deadline - time.monotonic()) > 0:
            if any(select.select(reading, writing, [], min(left, SLICE))):
                return
            self.meanwhile()
        raise TimeoutError

    def _forget(self) -> None:
        process, self._process = self._process, None
        if process is not None:
            self._end(process)

    def _end(self, process: subprocess.Popen[bytes]) -> None:
        """Kill; a process that hangs in the kernel cannot be, and is abandoned."""
        with contextlib.suppress(OSError):
            process.kill()
        try:
            process.wait(KILL_SECONDS)
        except subprocess.TimeoutExpired:
            self._abandoned.append(process)
        for pipe in (process.stdin, process.stdout):
            with contextlib.suppress(OSError):
                _pipe(pipe).close()


def _pipe(pipe: Any) -> Any:
    assert pipe is not None
    return pipe


def _how_it_ended(process: subprocess.Popen[bytes]) -> tuple[str, bool]:
    """In words, and whether its own alarm ended it."""
    try:
        code = process.wait(1.0)
    except subprocess.TimeoutExpired:
        return "closed its pipe", False
    if code == -signal.SIGALRM:
        return "took too long and ended itself", True
    if code < 0:
        with contextlib.suppress(ValueError):
            return f"was ended by {signal.Signals(-code).name}", False
    return f"ended with status {code}", False
