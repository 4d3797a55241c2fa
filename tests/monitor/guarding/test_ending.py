"""When a run counts as ended."""

from __future__ import annotations

import sys
import time
from pathlib import Path
from typing import Any

import pytest

from monitor.actions.runprocess import RunProcess
from monitor.config import RunSection
from monitor.guarding.ending import COMMAND_EVERY, FILE_EVERY, Ending
from tests.monitor.actions.conftest import OBEDIENT, StartJob, start_job
from tests.monitor.actions.fakes import FakeChild

__all__ = ["start_job"]


def ending(folder: Path, process: RunProcess | None = None, **run: Any) -> Ending:
    return Ending(RunSection(**run), folder, process, FakeChild().ask)


def test_nothing_declared_never_ends(tmp_path: Path) -> None:
    """However long nothing comes."""
    end = ending(tmp_path)
    assert not end.declared
    assert end.reached(1e9, 10**9, 1e9) == ""


def test_the_process_ends(tmp_path: Path, start_job: StartJob) -> None:
    """Its pid is gone, or there but not yet reaped."""
    job = start_job(OBEDIENT)
    process = RunProcess(job.pid)
    end = ending(tmp_path, process, pid=job.pid)
    assert end.reached(0.0, None, 0.0) == ""
    job.kill()
    job.wait()
    assert str(job.pid) in end.reached(0.0, None, 0.0)
    process.close()


def test_the_last_step(tmp_path: Path) -> None:
    """That step or a later one."""
    end = ending(tmp_path, last_step=500)
    assert end.reached(0.0, None, 0.0) == ""
    assert end.reached(0.0, 499, 0.0) == ""
    assert "500" in end.reached(0.0, 500, 0.0)


def test_a_file_appears(tmp_path: Path) -> None:
    """Relative to the run's folder; looked at every two seconds."""
    end = ending(tmp_path, end_file="done")
    assert end.reached(100.0, None, 0.0) == ""
    (tmp_path / "done").touch()
    assert end.reached(100.5, None, 0.0) == ""
    assert "done" in end.reached(100.0 + FILE_EVERY, None, 0.0)


def test_idle(tmp_path: Path) -> None:
    """So long without a snapshot."""
    end = ending(tmp_path, idle_seconds=30.0)
    assert end.reached(0.0, None, 29.0) == ""
    assert "30 s" in end.reached(0.0, None, 30.0)


@pytest.mark.parametrize(("status", "ended"), [(0, True), (1, False)])
def test_a_command_says_so(status: int, ended: bool, tmp_path: Path) -> None:
    """Exit status 0 means finished; it runs beside guard, and again after five seconds."""
    code = f"import sys; open('ran', 'a').write('x'); sys.exit({status})"
    end = ending(tmp_path, end_command=(sys.executable, "-c", code))
    why = ""
    deadline = time.monotonic() + 20.0
    while not why and not (tmp_path / "ran").exists() and time.monotonic() < deadline:
        why = end.reached(100.0, None, 0.0)
        time.sleep(0.01)
    settle = time.monotonic() + 0.5
    while not why and time.monotonic() < settle:
        why = end.reached(100.0, None, 0.0)
        time.sleep(0.01)
    assert bool(why) == ended
    assert (tmp_path / "ran").read_text() == "x"
    if not ended:
        deadline = time.monotonic() + 20.0
        while (tmp_path / "ran").read_text() == "x" and time.monotonic() < deadline:
            end.reached(100.0 + COMMAND_EVERY, None, 0.0)
            time.sleep(0.01)
        assert (tmp_path / "ran").read_text() == "xx"
    end.close()
