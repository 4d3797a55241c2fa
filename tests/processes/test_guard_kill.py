"""kill -9 of guard at any moment and a restart: nothing missed, twice or forgotten."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

from monitor.growthlog.read import read_log
from monitor.growthlog.records import Closed, Opened, Segment, Skipped, Snapshot
from tests.processes.scene import Scene

KILLS = 50
SNAPSHOTS = 160


class Zygote:
    """A process that forks guards in a run's folder."""

    def __init__(self, folder: Path) -> None:
        self._process = subprocess.Popen(
            [sys.executable, "-P", str(Path(__file__).with_name("zygote.py"))],
            cwd=folder,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            env={
                **os.environ,
                "PYTHONPATH": os.pathsep.join(sys.path),
                "OPENBLAS_NUM_THREADS": "1",
            },
        )

    def guard(self, options: str) -> int:
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._process.stdin.write(f"{options}\n".encode())
        self._process.stdin.flush()
        return int(self._process.stdout.readline())

    def close(self) -> None:
        self._process.kill()
        self._process.wait()
        for pipe in (self._process.stdin, self._process.stdout):
            if pipe is not None:
                pipe.close()


def size(path: Path) -> int:
    return path.stat().st_size if path.exists() else 0


def gone(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return True
    return False


def test_fifty_kills(scene: Scene) -> None:
    """A solver writes 160 snapshots while guard is killed 50 times, at moments spread over its
    start, its reading, recording and pinning. In the end every snapshot is in the log once, in
    order, in one segment; the evidence is that of a guard that was never disturbed; and every pin
    that is held is there, with nothing left beside."""
    moments = random.Random(48271)
    zygote = Zygote(scene.folder)
    options = "--snapshots out/T_{step}.npy --quiet"
    solver = scene.solve("--factor", 1.08, "--last", 10 * (SNAPSHOTS - 1), "--pace", 0.12)
    try:
        for _ in range(KILLS):
            before = size(scene.log)
            pid = zygote.guard(options)
            # Some are killed while they start, most when they have begun to write.
            if moments.random() < 0.8:
                scene.until(
                    lambda size=before: scene.log.exists() and scene.log.stat().st_size > size
                )
            time.sleep(moments.uniform(0.0, 0.5))
            os.kill(pid, signal.SIGKILL)
            scene.until(lambda pid=pid: gone(pid))
        assert solver.wait(60.0) == 0
        last = zygote.guard(options + " --catch-up")
        scene.until(lambda: gone(last))
        assert isinstance(scene.records()[-1], Closed)
        check_records(scene)
        check_pins(scene)
        undisturbed = zygote.guard(options + " --catch-up --no-actions --log other.jsonl")
        other = scene.folder / "other.jsonl"
        scene.until(lambda: gone(undisturbed))
        assert [evidence(s) for s in scene.snapshots()] == [
            evidence(s) for s in read_log(other).records if isinstance(s, Snapshot)
        ]
    finally:
        zygote.close()


def evidence(snapshot: Snapshot) -> object:
    return snapshot.step, snapshot.index, snapshot.evidence, snapshot.verdict


def check_records(scene: Scene) -> None:
    records = scene.records()
    assert scene.steps() == list(range(0, 10 * SNAPSHOTS, 10))
    assert len({s.key for s in scene.snapshots()}) == SNAPSHOTS
    assert [r.seq for r in records] == list(range(1, len(records) + 1))
    assert [r.why for r in records if isinstance(r, Segment)] == ["start"]
    assert [r for r in records if isinstance(r, Skipped)] == []
    opened = [r for r in records if isinstance(r, Opened)]
    assert len(opened) > KILLS / 2
    assert all(not o.note for o in opened)


def check_pins(scene: Scene) -> None:
    held = [*scene.pins("provisional"), *scene.pins("kept")]
    assert scene.pins("kept")
    assert {Path(p.folder).name for p in held} == {
        p.name for p in (scene.folder / "pins").iterdir()
    }
    assert all(p.verified for p in held)


def test_alternating_files_and_kills(scene: Scene) -> None:
    """With two names in turn what was overwritten while no guard was there is lost, and all that
    was read is there once, in the order of writing."""
    moments = random.Random(90833)
    zygote = Zygote(scene.folder)
    endless = ("--last", 10**6, "--pace", 0.1, "--stop-file", "STOP")
    solver = scene.solve(*endless, "--names", "two", "--in-place")
    try:
        for _ in range(8):
            before = len(scene.snapshots())
            pid = zygote.guard("--snapshots out/T_?.npy --quiet")
            time.sleep(moments.uniform(0.2, 1.2))
            # On a busy machine guard may not have come to anything yet.
            scene.until(lambda before=before: len(scene.snapshots()) > before)
            os.kill(pid, signal.SIGKILL)
            scene.until(lambda pid=pid: gone(pid))
        (scene.folder / "STOP").touch()
        assert solver.wait(60.0) == 0
        last = zygote.guard("--snapshots out/T_?.npy --quiet --catch-up")
        scene.until(lambda: gone(last))
        snapshots = scene.snapshots()
        assert len({s.key for s in snapshots}) == len(snapshots) > 8
        assert [s.mtime for s in snapshots] == sorted(s.mtime for s in snapshots)
        assert [s.index for s in snapshots if s.seg == 1] == list(range(1, len(snapshots) + 1))
    finally:
        zygote.close()
