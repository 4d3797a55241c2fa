"""Solver and guard of `tests.processes`, run in the test's own process; guard's child is real."""

from __future__ import annotations

from monitor.cli import main
from tests.processes import solver
from tests.processes.scene import Scene

PATTERN = ("--snapshots", "out/T_{step}.npy")


class Here(Scene):
    """A scene whose solver and guard run in this process."""

    def solved(self, *options: object) -> None:
        solver.main(["out", *map(str, options)])

    def guarded(self, *options: object) -> int:
        return main(["guard", *map(str, options)])
