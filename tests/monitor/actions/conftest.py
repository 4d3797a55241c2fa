"""A log and a reading process in memory, and small real processes as solvers."""

from __future__ import annotations

import signal
import subprocess
import sys
from collections.abc import Callable, Iterator

import pytest

from monitor.guarding.journal import Journal
from tests.monitor.actions.fakes import FakeChild, FakeLog

OBEDIENT = "import time\nprint('up', flush=True)\ntime.sleep(60)"
# Signals that it ignores wake it from its sleep, so it sleeps again.
STUBBORN = (
    "import signal, time\nsignal.signal(signal.SIGTERM, signal.SIG_IGN)\n"
    "print('up', flush=True)\ntime.sleep(60)"
)

StartJob = Callable[[str], "subprocess.Popen[bytes]"]


@pytest.fixture
def log() -> FakeLog:
    return FakeLog()


@pytest.fixture
def child() -> FakeChild:
    return FakeChild()


@pytest.fixture
def told() -> list[str]:
    return []


@pytest.fixture
def journal(log: FakeLog, told: list[str]) -> Journal:
    return Journal(log, lambda: 1000.0, told.append)


@pytest.fixture
def start_job() -> Iterator[StartJob]:
    """Starts Python processes that have printed a line before they are returned."""
    jobs: list[subprocess.Popen[bytes]] = []

    def start(code: str) -> subprocess.Popen[bytes]:
        job = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE)
        jobs.append(job)
        assert job.stdout is not None
        job.stdout.readline()
        return job

    yield start
    for job in jobs:
        job.send_signal(signal.SIGKILL)
        job.wait()
        if job.stdout is not None:
            job.stdout.close()
