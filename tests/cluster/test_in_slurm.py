"""The README's job script in a real Slurm: alarm, stop, HOLD, chains, requeueing, cancelling.

What Slurm promises of signals, states and requeueing: the manual pages of sbatch (--signal,
--requeue), scancel and scontrol, from memory.
"""

from __future__ import annotations

from pathlib import Path

import pytest

from monitor.growthlog.read import read_log
from monitor.growthlog.records import Closed, Intent, Opened, Outcome, Segment, Snapshot
from monitor.review import summarise
from tests.cluster.jobs import HEALTHY, UNSTABLE, Job
from tests.cluster.services.processes import wait_until
from tests.cluster.services.slurm import Slurm

pytestmark = pytest.mark.cluster


def test_an_unstable_job_is_stopped_and_held(slurm: Slurm, tmp_path: Path) -> None:
    """Alarm while clean, a checkpoint kept, the solver stopped by its stop file, and the chain ends
    there: no second job is submitted, and the first, requeued by hand, only shows the HOLD file."""
    job = Job(tmp_path, slurm)
    job.solver(UNSTABLE)
    number = job.submit()
    slurm.wait_for_end(90)
    assert slurm.state(number) == "COMPLETED"
    review = summarise(read_log(job.log))
    assert review.alarmed
    assert review.clean is not None
    assert review.clean.pinned
    assert any(r.act == "stop-file" and r.outcome == "accepted" for r in job.of(Outcome))
    assert job.of(Closed)[-1].status == 10
    assert job.held
    before = job.log.read_bytes()
    slurm.ask("scontrol", "requeue", number)
    hold = (tmp_path / "HOLD").read_text()
    # The output file is begun anew by a job that runs again.
    wait_until(lambda: job.said(number) == hold, 60, "HOLD is shown")
    slurm.wait_for_end(30)
    assert job.log.read_bytes() == before
    assert [p.name for p in tmp_path.glob("slurm-*.out")] == [f"slurm-{number}.out"]


def test_a_resubmitted_job_honours_hold(slurm: Slurm, tmp_path: Path) -> None:
    """Somebody submits the held run again: neither solver nor guard starts."""
    job = Job(tmp_path, slurm)
    job.solver(HEALTHY)
    (tmp_path / "HOLD").write_text("Why: grew\n")
    number = job.submit()
    slurm.wait_for_end(30)
    assert job.said(number) == "Why: grew\n"
    assert slurm.state(number) == "COMPLETED"
    assert not job.log.exists()
    assert not (tmp_path / "out").exists()


def by_command(line: str, wait: int = 20) -> str:
    """A stop section that has a shell run `line`, in which the job's number is a variable."""
    return f'[[stop]]\ndo = "command"\nwait_seconds = {wait}\ncommand = ["sh", "-c", "{line}"]\n'


def test_a_stop_by_signalling_the_step(slurm: Slurm, tmp_path: Path) -> None:
    """Only the solver's step is told to end: guard sees it end, and closes with the alarm."""
    job = Job(tmp_path, slurm, stop=by_command("exec scancel --signal=TERM $SLURM_JOB_ID.0"))
    job.solver(UNSTABLE)
    number = job.submit()
    slurm.wait_for_end(90)
    assert slurm.state(number) == "COMPLETED"
    told = [(r.act, r.outcome) for r in job.of(Outcome)]
    assert ("command", "accepted") in told
    assert job.of(Closed)[-1].status == 10
    assert job.held


def test_a_stop_by_cancelling_the_job_and_a_mended_run(slurm: Slurm, tmp_path: Path) -> None:
    """The README's command ends the whole job with guard in it, which still pins, holds and closes
    with the alarm. Restarted with a smaller step from the checkpoint that the review names, with
    HOLD removed, the run goes on: what was left of the stop is not done to it."""
    twice = 2 * by_command("exec scancel $SLURM_JOB_ID", wait=3)
    job = Job(tmp_path, slurm, stop=twice)
    job.solver(UNSTABLE)
    number = job.submit()
    slurm.wait_for_end(90)
    assert slurm.state(number) == "CANCELLED"
    assert job.of(Closed)[-1].status == 10
    assert job.held
    clean = summarise(read_log(job.log)).clean
    assert clean is not None
    assert clean.pinned
    (tmp_path / "HOLD").unlink()
    job.solver(HEALTHY, restart=clean.path)
    deeds = len(job.of(Intent))
    again = job.submit()
    job.judged(8, segment=2)
    assert slurm.state(again) == "RUNNING"
    assert [r.act for r in job.of(Intent)[deeds:] if r.act != "pin"] == []
    assert not any(s.verdict.alarmed for s in job.of(Snapshot) if s.seg == 2)
    assert not job.held


def test_a_chain_of_jobs_until_it_is_cancelled(slurm: Slurm, tmp_path: Path) -> None:
    """Slurm's signal before the time limit reaches the script: the solver ends cleanly, guard
    closes with 0 and the next job is submitted. That one is cancelled: guard closes with 143 before
    the job is gone, and nothing is submitted any more."""
    job = Job(tmp_path, slurm)
    job.solver(HEALTHY)
    first = job.submit("--time=1", "--signal=B:USR1@50")
    job.judged(4)
    wait_until(lambda: first not in slurm.jobs(), 90, "the first job ended")
    assert slurm.state(first) == "COMPLETED"
    (closed,) = job.of(Closed)
    assert (closed.status, closed.why) == (0, "run-ended is there")
    (second,) = slurm.jobs()
    job.judged(4, segment=2)
    slurm.ask("scancel", second)
    slurm.wait_for_end(30)
    assert slurm.state(second) == "CANCELLED"
    assert [c.status for c in job.of(Closed)] == [0, 143]
    assert not (tmp_path / "growth.jsonl.lock").exists()
    assert not job.held


def test_a_job_at_its_time_limit(slurm: Slurm, tmp_path: Path) -> None:
    """A solver that was not told in time is ended by Slurm, and guard with it: 143, no successor,
    nothing held."""
    job = Job(tmp_path, slurm)
    job.solver(HEALTHY)
    number = job.submit("--signal=B:CONT@60")
    job.judged(4)
    slurm.ask("scontrol", "update", f"JobId={number}", "EndTime=now+2")
    slurm.wait_for_end(90)
    assert slurm.state(number) == "TIMEOUT"
    assert [c.status for c in job.of(Closed)] == [143]
    assert not job.held


def test_a_requeued_job_goes_on_in_the_same_log(slurm: Slurm, tmp_path: Path) -> None:
    """The script runs again in the same folder from an earlier step: one log, a new segment, and no
    snapshot is recorded twice."""
    job = Job(tmp_path, slurm)
    job.solver(HEALTHY)
    number = job.submit()
    job.judged(8)
    job.solver(HEALTHY, restart="out/T_0000070.npy")
    slurm.ask("scontrol", "requeue", number)
    job.judged(3, segment=2)
    assert slurm.jobs() == [number]
    slurm.ask("scancel", number)
    slurm.wait_for_end(30)
    assert [s.why for s in job.of(Segment)] == ["start", "restart"]
    assert [c.status for c in job.of(Closed)] == [143, 143]
    assert len(job.of(Opened)) == 2
    snapshots = job.of(Snapshot)
    assert len({s.key for s in snapshots}) == len(snapshots)
    for segment, first in ((1, 0), (2, 105)):
        steps = [s.step for s in snapshots if s.seg == segment]
        assert steps == list(range(first, first + 35 * len(steps), 35))
    assert not any(s.verdict.alarmed for s in snapshots)
