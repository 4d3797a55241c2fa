"""The solver's process is known by more than its number."""

from __future__ import annotations

import os
import signal

import pytest

from monitor.actions import runprocess
from monitor.actions.runprocess import Identity, NotSignalled, RunProcess
from tests.monitor.actions.conftest import OBEDIENT, STUBBORN, StartJob


def test_a_living_process(start_job: StartJob) -> None:
    """Its identity has owner and start time; it lives until it has ended, reaped or not."""
    job = start_job(OBEDIENT)
    process = RunProcess(job.pid)
    assert process.identity is not None
    assert process.identity.owner == os.getuid()
    assert process.alive()
    process.send(signal.SIGTERM)
    os.waitid(os.P_PID, job.pid, os.WEXITED | os.WNOWAIT)
    assert not process.alive()
    with pytest.raises(NotSignalled, match="has ended"):
        process.send(signal.SIGTERM)
    process.close()


def test_a_number_without_process(start_job: StartJob) -> None:
    """Ended from the start."""
    job = start_job("print()")
    job.wait()
    process = RunProcess(job.pid)
    assert process.identity is None
    assert not process.alive()
    process.close()


def test_another_process_under_the_number_is_not_signalled(
    start_job: StartJob, monkeypatch: pytest.MonkeyPatch
) -> None:
    """When the start time is not the recorded one, nothing is sent."""
    job = start_job(STUBBORN)
    process = RunProcess(job.pid)
    other = Identity(job.pid, 12345.0, os.getuid())
    monkeypatch.setattr(runprocess, "_look_up", lambda pid: other)
    with pytest.raises(NotSignalled, match="not the one"):
        process.send(signal.SIGKILL)
    assert process.alive()
    process.close()


def test_without_pidfd_nothing_is_sent(
    start_job: StartJob, monkeypatch: pytest.MonkeyPatch
) -> None:
    """An old system can still be watched, but not signalled safely."""
    monkeypatch.delattr(os, "pidfd_open")
    job = start_job(OBEDIENT)
    process = RunProcess(job.pid)
    assert process.alive()
    with pytest.raises(NotSignalled, match="safely"):
        process.send(signal.SIGTERM)
    job.kill()
    job.wait()
    assert not process.alive()
    process.close()


def test_somebody_elses_process(start_job: StartJob, monkeypatch: pytest.MonkeyPatch) -> None:
    """The owner recorded at the start must be who guard runs as."""
    job = start_job(OBEDIENT)
    process = RunProcess(job.pid)
    monkeypatch.setattr(os, "getuid", lambda: 987654)
    with pytest.raises(NotSignalled, match="somebody else"):
        process.send(signal.SIGTERM)
    process.close()
