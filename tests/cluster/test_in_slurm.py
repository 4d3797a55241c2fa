"""The README's job script in a real Slurm: alarm, stop, HOLD, chains, requeueing, cancelling."""

from __future__ import annotations

import re
import sys
from pathlib import Path

import pytest

from demo_runs import settings_text
from monitor.growthlog.read import read_log
from monitor.growthlog.records import Closed, Opened, Outcome, Segment, Snapshot
from monitor.review import summarise
from tests.cluster.services import Slurm, wait_until
from tests.source_tree import ROOT

pytestmark = pytest.mark.cluster

# As long as this a healthy job goes on, which a test ends before.
_LONG = 100_000


def readme_script() -> str:
    """The job script that the README shows."""
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    return next(b for b in re.findall(r"```sh\n(.*?)```", readme, re.DOTALL) if "#SBATCH" in b)


class Job:
    """A folder with the README's script, settings, and a solver that only the first task runs."""

    def __init__(
        self, folder: Path, slurm: Slurm, factor: float, steps: int, stop: str = ""
    ) -> None:
        self.folder, self.slurm = folder, slurm
        self.script = folder / "job.sh"
        self.script.write_text(readme_script())
        settings = settings_text("plate", "out")
        if stop:
            settings = settings[: settings.index("[[stop]]")] + stop
        (folder / "stepwarden.toml").write_text(settings)
        solver = folder / "solver"
        solver.write_text(
            '#!/bin/sh\n[ "${SLURM_PROCID:-0}" = 0 ] || exit 0\n'
            f"exec {sys.executable} -m demo_runs.plate --out out --pace 0.05 --step-factor "
            f"{factor} --steps {steps} $(test -e again && echo --restart out/T_0000070.npy)\n"
        )
        solver.chmod(0o755)

    def submit(self) -> str:
        return self.slurm.submit(self.script, "--time=5")

    def records(self) -> list[object]:
        log = self.folder / "growth.jsonl"
        return list(read_log(log).records) if log.exists() else []

    def of(self, kind: type) -> list:  # type: ignore[type-arg]
        return [r for r in self.records() if isinstance(r, kind)]


def test_an_unstable_job_is_stopped_and_held(slurm: Slurm, tmp_path: Path) -> None:
    """Alarm while clean, a checkpoint kept, the solver stopped by its stop file; the chain ends at
    the HOLD file, and a job that somebody submits all the same does nothing but show it."""
    job = Job(tmp_path, slurm, 1.02, 4000)
    job.submit()
    slurm.wait_for_end(90)
    review = summarise(read_log(tmp_path / "growth.jsonl"))
    assert review.alarmed
    assert review.clean is not None
    assert review.clean.pinned
    assert any(r.act == "stop-file" and r.outcome == "accepted" for r in job.of(Outcome))
    assert job.of(Closed)[-1].status == 10
    assert (tmp_path / "HOLD").is_file()
    before = len(job.of(Snapshot))
    number = job.submit()
    slurm.wait_for_end(30)
    said = (tmp_path / f"slurm-{number}.out").read_text()
    assert (tmp_path / "HOLD").read_text().strip() in said
    assert len(job.of(Snapshot)) == before
    assert len(list(tmp_path.glob("slurm-*.out"))) == 2


def test_a_stop_by_the_batch_system(slurm: Slurm, tmp_path: Path) -> None:
    """A rung that signals the job step by the job's own number, as an argument list."""
    stop = (
        '[[stop]]\ndo = "command"\nwait_seconds = 20\n'
        'command = ["sh", "-c", "exec scancel --signal=TERM $SLURM_JOB_ID.0"]\n'
    )
    job = Job(tmp_path, slurm, 1.02, 4000, stop)
    job.submit()
    slurm.wait_for_end(90)
    told = [(r.act, r.outcome) for r in job.of(Outcome)]
    assert ("command", "accepted") in told
    assert job.of(Closed)[-1].status == 10
    assert (tmp_path / "HOLD").is_file()


def test_a_job_that_is_cancelled(slurm: Slurm, tmp_path: Path) -> None:
    """The batch system's TERM ends guard with a closing record, status 143; nothing is held."""
    job = Job(tmp_path, slurm, 0.9, _LONG)
    number = job.submit()
    wait_until(lambda: len(job.of(Snapshot)) >= 6, 60, "six snapshots judged")
    slurm.ask("scancel", "--full", "--signal=TERM", number)
    slurm.ask("scancel", number)
    slurm.wait_for_end(30)
    wait_until(lambda: bool(job.of(Closed)), 10, "guard closes its log")
    assert job.of(Closed)[-1].status == 143
    assert not (tmp_path / "HOLD").exists()


def test_a_requeued_job_goes_on_in_the_same_log(slurm: Slurm, tmp_path: Path) -> None:
    """The script runs again in the same folder from an earlier step: one log, a new segment, no
    snapshot recorded twice within one."""
    job = Job(tmp_path, slurm, 0.9, _LONG)
    number = job.submit()
    wait_until(lambda: len(job.of(Snapshot)) >= 8, 60, "eight snapshots judged")
    (tmp_path / "again").touch()
    slurm.ask("scontrol", "requeue", number)
    wait_until(lambda: len(job.of(Segment)) >= 2, 60, "a second segment")
    wait_until(lambda: len([s for s in job.of(Snapshot) if s.seg == 2]) >= 3, 60, "goes on there")
    slurm.ask("scancel", number)
    slurm.wait_for_end(30)
    assert [s.why for s in job.of(Segment)] == ["start", "restart"]
    assert len(job.of(Opened)) == 2
    for segment in (1, 2):
        steps = [s.step for s in job.of(Snapshot) if s.seg == segment]
        assert steps == sorted(set(steps))
    assert not any(s.verdict.alarmed for s in job.of(Snapshot))
