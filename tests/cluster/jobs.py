"""The README's job script around a demo solver, as a job in a folder of its own."""

from __future__ import annotations

import re
import sys
from pathlib import Path
from typing import TypeVar

from demo_runs import settings_text
from monitor.growthlog.read import read_log
from monitor.growthlog.records import AnyRecord, Snapshot
from tests.cluster.services.processes import wait_until
from tests.cluster.services.slurm import Slurm
from tests.source_tree import ROOT

# As long as this a healthy job goes on, which a test ends before.
LONG = 100_000
HEALTHY, UNSTABLE = 0.9, 1.02

_FILE = '[[stop]]\ndo = "file"\npath = "STOP"\nwait_seconds = 15\n'
_R = TypeVar("_R")


def readme_script() -> str:
    """The job script that the README shows."""
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    return next(b for b in re.findall(r"```sh\n(.*?)```", readme, re.DOTALL) if "#SBATCH" in b)


class Job:
    """A folder with the README's script, settings, and a solver that only the first task runs.

    stop: the settings' stop section.
    """

    def __init__(self, folder: Path, slurm: Slurm, *, stop: str = _FILE) -> None:
        self.folder, self.slurm = folder, slurm
        self.script = folder / "job.sh"
        self.script.write_text(readme_script())
        settings = settings_text("plate", "out")
        (folder / "stepwarden.toml").write_text(settings[: settings.index("[[stop]]")] + stop)

    def solver(self, factor: float, *, steps: int = LONG, restart: str = "") -> None:
        """What `srun` starts from now on. restart: a snapshot to go on from."""
        words = f"--out out --stop-file STOP --pace 0.05 --step-factor {factor} --steps {steps}"
        if restart:
            words += f" --restart {restart}"
        path = self.folder / "solver"
        made = path.with_suffix(".new")
        made.write_text(
            '#!/bin/sh\n[ "${SLURM_PROCID:-0}" = 0 ] || exit 0\n'
            f"exec {sys.executable} -m demo_runs.plate {words}\n"
        )
        made.chmod(0o755)
        # A shell that is reading the old one goes on with that.
        made.replace(path)

    def submit(self, *options: str) -> str:
        return self.slurm.submit(self.script, *options)

    def said(self, number: str) -> str:
        """What the job's script and its children printed."""
        return (self.folder / f"slurm-{number}.out").read_text(errors="replace")

    @property
    def held(self) -> bool:
        return (self.folder / "HOLD").is_file()

    @property
    def log(self) -> Path:
        return self.folder / "growth.jsonl"

    def records(self) -> list[AnyRecord]:
        return list(read_log(self.log).records) if self.log.exists() else []

    def of(self, kind: type[_R]) -> list[_R]:
        return [r for r in self.records() if isinstance(r, kind)]

    def judged(self, count: int, segment: int = 1) -> None:
        """Wait until so many snapshots of a segment are in the log."""
        wait_until(
            lambda: len([s for s in self.of(Snapshot) if s.seg == segment]) >= count,
            60,
            f"{count} snapshots of segment {segment} judged",
        )
