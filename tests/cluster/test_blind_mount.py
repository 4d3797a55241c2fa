"""Snapshots on a file system that tells of nothing and may hang."""

from __future__ import annotations

import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import psutil
import pytest

from monitor.growthlog.records import Closed, Remark
from tests.cluster.services import BlindMount, wait_until
from tests.processes.scene import Scene

pytestmark = pytest.mark.cluster


@pytest.fixture
def mount(tmp_path: Path) -> Iterator[BlindMount]:
    (tmp_path / "fs").mkdir()
    mounted = BlindMount(tmp_path / "fs")
    yield mounted
    mounted.close()


@pytest.fixture
def scene(tmp_path: Path) -> Iterator[Scene]:
    """Log and guard on a local disk, which the files of the run are not on."""
    here = Scene(tmp_path / "run")
    here.folder.mkdir()
    yield here
    for process in here.processes:
        process.kill()
        process.wait()


def solving(far: Path, *options: str) -> None:
    solver = Path(__file__).parents[1] / "processes" / "solver.py"
    subprocess.run([sys.executable, str(solver), str(far), *options], check=True)


def test_polling_finds_what_no_event_tells(mount: BlindMount, scene: Scene) -> None:
    """Files written on the far side while guard waits are judged, and the log says that it polls
    and why."""
    solving(mount.far, "--last", "50")
    guard = scene.guard("--snapshots", f"{mount.near}/T_{{step}}.npy", "--last-step", "120")
    wait_until(lambda: 50 in scene.steps(), 30, "what was there is judged")
    solving(mount.far, "--first", "60", "--last", "120")
    assert guard.wait(60) == 0
    assert scene.steps() == list(range(0, 121, 10))
    told = " ".join(r.text for r in scene.records() if isinstance(r, Remark))
    assert "poll" in told


def test_a_hanging_mount_does_not_hold_guard(mount: BlindMount, scene: Scene) -> None:
    """Every access hangs: guard, asked to end, ends with a closing record all the same."""
    solving(mount.far, "--last", "50")
    guard = scene.guard("--snapshots", f"{mount.near}/T_{{step}}.npy")
    wait_until(lambda: 50 in scene.steps(), 30, "what was there is judged")
    mount.freeze()
    # The next look is under way, and hangs.
    wait_until(lambda: _hangs(guard.pid), 20, "a look hangs")
    guard.send_signal(signal.SIGTERM)
    assert guard.wait(30) == 128 + signal.SIGTERM
    closed = [r for r in scene.records() if isinstance(r, Closed)]
    assert [r.status for r in closed] == [143]


def _hangs(guard: int) -> bool:
    """Whether guard's reading process waits for the frozen file system."""
    return any("request_wait" in _waits_in(child.pid) for child in psutil.Process(guard).children())


def _waits_in(pid: int) -> str:
    try:
        return Path(f"/proc/{pid}/wchan").read_text()
    except OSError:
        return ""
