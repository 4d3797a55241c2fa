"""Real solvers and real guards, each a process of its own."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from monitor.growthlog.read import read_log
from monitor.growthlog.records import AnyRecord, Closed, PinRecord, Snapshot

SOLVER = Path(__file__).with_name("solver.py")
# Nothing here takes nearly as long, also on a busy machine.
LONGEST = 60.0


@dataclass
class Scene:
    """One run's folder, and the processes at work on it."""

    folder: Path
    processes: list[subprocess.Popen[bytes]] = field(default_factory=list)

    @property
    def log(self) -> Path:
        return self.folder / "growth.jsonl"

    def solve(self, *options: object) -> subprocess.Popen[bytes]:
        """Start the solver on out/."""
        return self._start([str(SOLVER), "out", *map(str, options)], "solver.txt")

    def solved(self, *options: object) -> None:
        """Run the solver to its end."""
        assert self.solve(*options).wait(LONGEST) == 0

    def guard(self, *options: object, said: str = "guard.txt") -> subprocess.Popen[bytes]:
        """Start guard in the run's folder; what it says goes to the file `said`."""
        words = ["-P", "-m", "monitor", "guard", *map(str, options)]
        return self._start(words, said)

    def guarded(self, *options: object) -> int:
        """Run guard to its end; its exit status."""
        return self.guard(*options).wait(LONGEST)

    def said(self, name: str = "guard.txt") -> str:
        return (self.folder / name).read_text(encoding="utf-8")

    def records(self) -> list[AnyRecord]:
        return read_log(self.log).records if self.log.exists() else []

    def snapshots(self) -> list[Snapshot]:
        return [r for r in self.records() if isinstance(r, Snapshot)]

    def steps(self) -> list[int | None]:
        return [s.step for s in self.snapshots()]

    def pins(self, state: str) -> list[PinRecord]:
        last = {r.pin: r for r in self.records() if isinstance(r, PinRecord)}
        return [r for r in last.values() if r.state == state]

    def closed(self) -> Closed:
        last = self.records()[-1]
        assert isinstance(last, Closed)
        return last

    def until(self, what: Callable[[], bool], seconds: float = LONGEST) -> None:
        """Wait until something is so."""
        deadline = time.monotonic() + seconds
        while not what():
            if time.monotonic() > deadline:
                said = self.said() if (self.folder / "guard.txt").exists() else ""
                pytest.fail(f"it did not happen; guard said: {said[-2000:]}")
            time.sleep(0.02)

    def _start(self, words: list[str], said: str) -> subprocess.Popen[bytes]:
        with (self.folder / said).open("ab") as output:
            process = subprocess.Popen(
                [sys.executable, *words],
                cwd=self.folder,
                stdin=subprocess.DEVNULL,
                stdout=output,
                stderr=subprocess.STDOUT,
                env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
            )
        self.processes.append(process)
        return process

    def close(self) -> None:
        for process in self.processes:
            if process.poll() is None:
                process.kill()
            process.wait()
