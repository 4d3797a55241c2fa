"""Snapshots on a file system that tells of nothing and may hang."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import psutil
import pytest

from monitor.growthlog.records import Closed, Remark
from tests.cluster.services.blindmount import BlindMount
from tests.cluster.services.processes import wait_until
from tests.processes.scene import SOLVER, Scene

pytestmark = pytest.mark.cluster

# Guard as it is, but it takes a file system for hanging after this many seconds instead of 90.
IMPATIENT = (
    "import sys, monitor.cli, monitor.guarding.limits as limits; limits._BASE = 8.0; "
    "sys.exit(monitor.cli.main(sys.argv[1:]))"
)


@pytest.fixture
def scene(tmp_path: Path) -> Iterator[Scene]:
    """Log and guard on a local disk, which the files of the run are not on."""
    here = Scene(tmp_path / "run")
    here.folder.mkdir()
    yield here
    here.close()


def solving(far: Path, *options: str) -> None:
    subprocess.run([sys.executable, str(SOLVER), str(far), *options], check=True)


def remarks(scene: Scene, level: str) -> list[str]:
    return [r.text for r in scene.records() if isinstance(r, Remark) and r.level == level]


def on(mount: BlindMount) -> str:
    return f"{mount.near}/T_{{step}}.npy"


def test_polling_finds_what_no_event_tells(mount: BlindMount, scene: Scene) -> None:
    """Files written on the far side while guard waits are judged, and the log says that it polls
    and why."""
    solving(mount.far, "--last", "50")
    guard = scene.guard("--snapshots", on(mount), "--last-step", "120")
    scene.until(lambda: 50 in scene.steps())
    solving(mount.far, "--first", "60", "--last", "120")
    assert guard.wait(60) == 0
    assert scene.steps() == list(range(0, 121, 10))
    (how,) = (text for text in remarks(scene, "note") if "polling alone" in text)
    assert "fuse" in how


def test_catching_up_without_events(mount: BlindMount, scene: Scene) -> None:
    """What lies there is judged in step order, once, and guard ends by itself."""
    solving(mount.far, "--last", "200")
    for _ in range(2):
        assert scene.guarded("--snapshots", on(mount), "--catch-up") == 0
        assert scene.steps() == list(range(0, 201, 10))
    assert remarks(scene, "trouble") == []


def test_a_file_system_that_hangs_for_a_while(mount: BlindMount, scene: Scene) -> None:
    """The log says that it does not answer, once; when it answers again guard goes on."""
    solving(mount.far, "--last", "50")
    words = ["guard", "--snapshots", on(mount), "--last-step", "80", "--log", str(scene.log)]
    guard = subprocess.Popen(
        [sys.executable, "-P", "-c", IMPATIENT, *words],
        cwd=scene.folder,
        env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
        stdin=subprocess.DEVNULL,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    scene.processes.append(guard)
    scene.until(lambda: 50 in scene.steps())
    assert remarks(scene, "trouble") == []
    mount.freeze()
    scene.until(lambda: remarks(scene, "trouble") != [])
    mount.thaw()
    solving(mount.far, "--first", "60", "--last", "80")
    assert guard.wait(60) == 0
    assert scene.steps() == list(range(0, 81, 10))
    (told,) = remarks(scene, "trouble")
    assert "file system not answering" in told


def test_a_look_that_hangs_does_not_hold_guard(mount: BlindMount, scene: Scene) -> None:
    """Every access hangs: guard, asked to end, ends with a closing record all the same, long before
    it would give up on the file system."""
    solving(mount.far, "--last", "50")
    guard = scene.guard("--snapshots", on(mount))
    scene.until(lambda: 50 in scene.steps())
    mount.freeze()
    ends_when_told(guard, scene)


def test_a_pin_that_hangs_does_not_hold_guard(mount: BlindMount, scene: Scene) -> None:
    """The snapshots are within reach, the checkpoints to be kept are not. What acts is given some
    seconds to finish after the signal, then it is left as it is."""
    scene.solved("--last", "50")
    mount.freeze()
    (scene.folder / "stepwarden.toml").write_text(
        '[snapshots]\npattern = "out/T_{step}.npy"\n'
        f'[checkpoints]\npattern = "{mount.near}/state_{{step}}.npy"\n'
    )
    guard = scene.guard()
    ends_when_told(guard, scene)


def ends_when_told(guard: subprocess.Popen[bytes], scene: Scene) -> None:
    """While guard's reading process hangs: guard ends on TERM in less than the 30 s that batch
    systems commonly leave (KillWait in slurm.conf, from memory)."""
    wait_until(lambda: _hangs(guard.pid), 30, "the reading process hangs")
    guard.send_signal(signal.SIGTERM)
    assert guard.wait(25) == 128 + signal.SIGTERM
    closed = [r for r in scene.records() if isinstance(r, Closed)]
    assert [r.status for r in closed] == [143]


def _hangs(guard: int) -> bool:
    """Whether guard's reading process waits in the kernel for the frozen file system."""
    waits = [_waits_in(child.pid) for child in psutil.Process(guard).children()]
    return any("request_wait" in name or "folio_wait" in name for name in waits)


def _waits_in(pid: int) -> str:
    try:
        return Path(f"/proc/{pid}/wchan").read_text()
    except OSError:
        return ""
