"""A terminal for tests: a process on a pseudo-terminal, its screen emulated by pyte."""

from __future__ import annotations

import fcntl
import os
import pty
import select
import signal
import struct
import subprocess
import sys
import termios
import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

import pyte

PATIENCE = 20.0


class Terminal:
    """Runs `stepwarden desk`, or another command, with `words` on a pseudo-terminal."""

    def __init__(
        self,
        words: Sequence[str],
        *,
        size: tuple[int, int] = (80, 24),
        environment: Mapping[str, str] | None = None,
        command: Sequence[str] = (sys.executable, "-m", "monitor", "desk"),
    ) -> None:
        self.screen = pyte.Screen(*size)
        self._stream = pyte.ByteStream(self.screen)
        self.sent = b""
        master, slave = pty.openpty()
        self.master = master
        self.resize(*size, tell=False)
        self.modes = termios.tcgetattr(slave)
        base = {k: v for k, v in os.environ.items() if k not in ("NO_COLOR", "LC_ALL", "LC_CTYPE")}
        base.update({"TERM": "xterm-256color", "LANG": "C.UTF-8", "PYTHONPATH": ""})
        base.update(environment or {})
        self.process = subprocess.Popen(
            [*command, *words],
            stdin=slave,
            stdout=slave,
            stderr=slave,
            env=base,
            cwd=Path(__file__).parents[3],
            start_new_session=True,
            preexec_fn=lambda: fcntl.ioctl(0, termios.TIOCSCTTY, 0),
        )
        # The slave stays open, so that its modes can be asked for after the process.
        self.slave = slave

    def __enter__(self) -> Terminal:
        return self

    def __exit__(self, *error: object) -> None:
        if self.process.poll() is None:
            self.process.kill()
        self.process.wait()
        for handle in (self.master, self.slave):
            if handle >= 0:
                os.close(handle)

    def read(self, seconds: float = 0.05) -> bytes:
        """What comes within the time, fed to the emulated screen."""
        got = b""
        until = time.monotonic() + seconds
        while (left := until - time.monotonic()) > 0:
            if not select.select([self.master], [], [], left)[0]:
                break
            try:
                piece = os.read(self.master, 1 << 16)
            except OSError:
                break
            if not piece:
                break
            got += piece
            # pyte knows no private sequences with "$" and prints their last letter.
            self._stream.feed(piece.replace(b"\x1b[?2026$p", b"").replace(b"\x1b[?2048$p", b""))
        self.sent += got
        return got

    def wait(self, what: Callable[[], bool]) -> None:
        """Read until `what` holds; fails after `PATIENCE` seconds."""
        until = time.monotonic() + PATIENCE
        while not what():
            assert time.monotonic() < until, self.text()
            self.read()

    def wait_for(self, text: str) -> None:
        self.wait(lambda: text in self.text())

    def settle(self, quiet: float = 0.3) -> bytes:
        """Read until nothing came for `quiet` seconds; returns what came."""
        got = b""
        while piece := self.read(quiet):
            got += piece
        return got

    def text(self) -> str:
        return "\n".join(line.rstrip() for line in self.screen.display)

    def press(self, keys: str) -> None:
        os.write(self.master, keys.encode())

    def signal(self, number: signal.Signals) -> None:
        os.kill(self.process.pid, number)

    def resize(self, columns: int, rows: int, *, tell: bool = True) -> None:
        fcntl.ioctl(self.master, termios.TIOCSWINSZ, struct.pack("HHHH", rows, columns, 0, 0))
        if tell:
            self.screen.resize(rows, columns)
            os.kill(self.process.pid, signal.SIGWINCH)

    def end(self) -> int:
        """Wait for the process to end; returns its exit status, negative for a signal."""
        self.wait(lambda: self.process.poll() is not None)
        self.read(0.1)
        return self.process.returncode

    def clean(self) -> bool:
        """The terminal was left as it was met: alternate screen off, cursor shown, modes back."""
        off = self.sent.rfind(b"\x1b[?1049l") > self.sent.rfind(b"\x1b[?1049h")
        shown = self.sent.rfind(b"\x1b[?25h") > self.sent.rfind(b"\x1b[?25l")
        return off and shown and termios.tcgetattr(self.slave) == self.modes
