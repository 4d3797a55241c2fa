"""What guard says on standard error. Losing the terminal must not matter."""

from __future__ import annotations

import sys
from typing import TextIO

from monitor.growthlog.records import Snapshot
from monitor.wording import clean, snapshot_line

_BAR = 30


class Teller:
    """Lines for a person. quiet: none per snapshot. bar: a progress bar instead (on a terminal)."""

    def __init__(
        self, run: str, *, quiet: bool, bar: bool = False, stream: TextIO | None = None
    ) -> None:
        self._run, self._quiet = run, quiet
        self._stream: TextIO | None = stream if stream is not None else sys.stderr
        self._bar = bar and not quiet and self._stream is not None and self._stream.isatty()
        self._drawn = 0

    def snapshot(self, record: Snapshot) -> None:
        if not self._quiet and not self._bar:
            self._write(snapshot_line(record, self._run) + "\n")

    def news(self, text: str) -> None:
        """A trouble or a deed: said even when quiet."""
        wipe = "\r" + " " * self._drawn + "\r" if self._drawn else ""
        self._drawn = 0
        self._write(f"{wipe}{clean(self._run)}  {clean(text)}\n")

    def progress(self, done: int, total: int) -> None:
        """Draw the bar again."""
        if self._bar:
            filled = _BAR * done // max(1, total)
            line = f"[{'#' * filled}{' ' * (_BAR - filled)}] {done} of {total} snapshots"
            self._write("\r" + line.ljust(self._drawn))
            self._drawn = len(line)

    def finish(self) -> None:
        if self._drawn:
            self._write("\n")
            self._drawn = 0

    def _write(self, text: str) -> None:
        if self._stream is None:
            return
        try:
            self._stream.write(text)
            self._stream.flush()
        except (OSError, ValueError):
            self._stream = None  # nobody listens any more
