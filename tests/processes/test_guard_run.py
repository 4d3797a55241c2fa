"""Guard beside a real solver, from the first snapshot to the end."""

from __future__ import annotations

import math
import os
import signal

import numpy as np
import pytest

from monitor.growthlog.records import (
    Opened,
    Outcome,
    PulseChange,
    Remark,
    Segment,
    Skipped,
    TileMap,
)
from tests.processes.scene import Scene
from tests.processes.solver import conductivity

PATTERN = ("--snapshots", "out/T_{step}.npy")


def outcomes(scene: Scene, act: str) -> list[str]:
    return [r.outcome for r in scene.records() if isinstance(r, Outcome) and r.act == act]


def true_factor(factor: float, cells: int = 40) -> float:
    """Largest modulus of the assembled step matrix's eigenvalues, by NumPy's dense solver."""
    number = conductivity(cells, factor)[1:-1, 1:-1]
    n = cells - 2
    line = -2.0 * np.eye(n) + np.eye(n, k=1) + np.eye(n, k=-1)
    laplacian = np.kron(line, np.eye(n)) + np.kron(np.eye(n), line)
    step = np.eye(n * n) + number.ravel()[:, None] * laplacian
    return float(np.abs(np.linalg.eigvals(step)).max())


def test_a_sick_run_is_pinned_and_stopped(scene: Scene) -> None:
    """Alarm while the field is clean, a verified clean checkpoint kept, the solver stopped through
    its stop file, HOLD left, exit status 10, and about the factor that the step matrix has."""
    solver = scene.solve("--factor", 1.1, "--last", 100000, "--pace", 0.05, "--stop-file", "STOP")
    guard = scene.guard(*PATTERN, "--pid", solver.pid, "--stop-file", "STOP")
    assert guard.wait(60.0) == 10
    assert solver.wait(10.0) == 0
    assert outcomes(scene, "stop-file") == ["done", "accepted"]
    assert "T" in (scene.folder / "HOLD").read_text()
    snapshots = scene.snapshots()
    turn = next(s for s in snapshots if s.verdict.alarmed)
    assert turn.verdict.factor is not None
    told = math.log(float(turn.verdict.factor.value or 0))
    assert abs(told / math.log(true_factor(1.1)) - 1) < 0.05
    assert turn.evidence.local is not None
    assert float(turn.evidence.local.value or 1) < 1e-4
    kept = scene.pins("kept")
    assert kept
    assert all(pin.verified and len(pin.sha256) == 64 for pin in kept)
    for pin in kept:
        values = np.load(scene.folder / pin.folder / pin.files[0])
        np.testing.assert_array_equal(values, np.load(scene.folder / "out" / f"T_{pin.step}.npy"))
    assert scene.closed().status == 10
    assert [r.pulse for r in scene.records() if isinstance(r, PulseChange)][-1] == "finished"


def test_a_healthy_run_is_followed_to_its_end(scene: Scene) -> None:
    """Every snapshot once and in order, quiet at the end, status 0, no HOLD, a map now and then, a
    line per snapshot on standard error."""
    solver = scene.solve("--last", 400, "--pace", 0.02)
    assert scene.guarded(*PATTERN, "--pid", solver.pid, "--stop-file", "STOP") == 0
    assert scene.steps() == list(range(0, 401, 10))
    assert scene.snapshots()[-1].verdict.condition == "quiet"
    assert not (scene.folder / "HOLD").exists()
    assert any(isinstance(r, TileMap) for r in scene.records())
    assert scene.said().count(" quiet") >= 30
    assert len(scene.pins("provisional")) <= 3
    assert scene.pins("provisional")


def test_catching_up_gives_what_following_gave(scene: Scene) -> None:
    """The same files judged afterwards by another guard: the same evidence and verdicts."""
    solver = scene.solve("--factor", 1.1, "--last", 300, "--pace", 0.03)
    assert scene.guarded(*PATTERN, "--pid", solver.pid, "--no-actions") == 10
    live = scene.snapshots()
    scene.log.rename(scene.folder / "first.jsonl")
    assert scene.guarded(*PATTERN, "--catch-up", "--no-actions", "--quiet") == 10
    after = scene.snapshots()
    assert [s.evidence for s in after] == [s.evidence for s in live]
    assert [s.verdict for s in after] == [s.verdict for s in live]


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_signals_end_with_a_closing_record(number: signal.Signals, scene: Scene) -> None:
    """While guard waits for the next snapshot: at once, with status 128 + n in the log as well."""
    scene.solved("--last", 40)
    guard = scene.guard(*PATTERN)
    scene.until(lambda: len(scene.steps()) == 5)
    guard.send_signal(number)
    assert guard.wait(10.0) == 128 + number
    assert scene.closed().status == 128 + number
    assert number.name in scene.closed().why


def test_an_alarm_wins_over_a_signal(scene: Scene) -> None:
    """The job script learns of the alarm even when the job was ended."""
    scene.solved("--factor", 1.1, "--last", 300)
    guard = scene.guard(*PATTERN, "--no-actions")
    scene.until(lambda: len(scene.steps()) == 31)
    guard.send_signal(signal.SIGTERM)
    assert guard.wait(10.0) == 10
    assert "SIGTERM" in scene.closed().why


def test_two_guards_on_one_log(scene: Scene) -> None:
    """The second is told who has it and ends with status 2; the first goes on."""
    scene.solved("--last", 40)
    first = scene.guard(*PATTERN)
    scene.until(lambda: len(scene.steps()) == 5)
    assert scene.guard(*PATTERN, said="second.txt").wait(30.0) == 2
    assert str(first.pid) in scene.said("second.txt")
    assert first.poll() is None


def test_a_guard_whose_lock_was_taken_ends_without_a_word_in_the_log(scene: Scene) -> None:
    """After --take-over only the second writes."""
    scene.solved("--last", 40)
    first = scene.guard(*PATTERN)
    scene.until(lambda: len(scene.steps()) == 5)
    second = scene.guard(*PATTERN, "--take-over", said="second.txt")
    assert first.wait(30.0) == 2
    assert "taken" in scene.said()
    scene.solved("--last", 80, "--first", 50)
    scene.until(lambda: len(scene.steps()) == 9)
    opened = [r for r in scene.records() if isinstance(r, Opened)]
    assert [o.pid for o in opened] == [first.pid, second.pid]
    after = [r for r in scene.records() if r.seq > opened[1].seq]
    assert [r.seq for r in after] == list(range(opened[1].seq + 1, opened[1].seq + 1 + len(after)))
    second.send_signal(signal.SIGTERM)
    assert second.wait(10.0) == 128 + signal.SIGTERM


def test_two_names_in_turn(scene: Scene) -> None:
    """Only two files exist at a time; the steps are unknown; at the alarm a copy from before the
    growth is there that the solver has overwritten long since."""
    solver = scene.solve(
        "--factor", 1.08, "--last", 4000, "--every", 10, "--pace", 0.06, "--names", "two",
        "--in-place", "--stop-file", "STOP",
    )  # fmt: skip
    guard = scene.guard(
        "--snapshots", "out/T_?.npy", "--pid", solver.pid, "--stop-file", "STOP", "--quiet"
    )
    assert guard.wait(60.0) == 10
    turn = next(s for s in scene.snapshots() if s.verdict.alarmed)
    kept = scene.pins("kept")
    assert kept
    assert {pin.method for pin in kept} <= {"copy", "reflink"}
    assert all(pin.step is not None and pin.step < turn.index for pin in kept)


def test_a_restart_is_a_new_segment(scene: Scene) -> None:
    """The solver is started again from an earlier step: lower steps, newer files."""
    scene.solved("--last", 200)
    guard = scene.guard(*PATTERN, "--last-step", 230)
    scene.until(lambda: len(scene.steps()) == 21)
    scene.solved("--last", 230, "--first", 150)
    assert guard.wait(30.0) == 0
    segments = [r for r in scene.records() if isinstance(r, Segment)]
    assert [(s.number, s.why) for s in segments] == [(1, "start"), (2, "restart")]
    assert scene.steps() == [*range(0, 201, 10), *range(150, 231, 10)]
    assert [s.index for s in scene.snapshots() if s.seg == 2] == list(range(1, 10))


def test_a_mended_run_ends_well_in_the_log_of_the_failed_one(scene: Scene) -> None:
    """An alarmed log taken up again ends with 10 as long as its segment goes on, with 0 once the
    run was started again with a step that holds."""
    scene.solved("--factor", 1.1, "--last", 300)
    assert scene.guarded(*PATTERN, "--catch-up") == 10
    assert scene.guarded(*PATTERN, "--catch-up") == 10
    scene.solved("--factor", 0.9, "--last", 290)
    assert scene.guarded(*PATTERN, "--last-step", 290) == 0
    assert [r.number for r in scene.records() if isinstance(r, Segment)] == [1, 2]
    assert scene.closed().status == 0


def test_a_late_snapshot_is_recorded_and_not_used(scene: Scene) -> None:
    """A file of an earlier step and an earlier time turns up (copied from elsewhere)."""
    scene.solved("--last", 100)
    late = scene.folder / "out" / "T_50.npy"
    late.rename(scene.folder / "T_50.npy")
    guard = scene.guard(*PATTERN, "--last-step", 110)
    scene.until(lambda: len(scene.steps()) == 10)
    (scene.folder / "T_50.npy").rename(late)
    scene.until(lambda: any(isinstance(r, Skipped) for r in scene.records()))
    scene.solved("--last", 110, "--first", 110)
    assert guard.wait(30.0) == 0
    skipped = [(r.reason, r.step) for r in scene.records() if isinstance(r, Skipped)]
    assert skipped == [("missed", 50), ("late", 50)]
    assert 50 not in scene.steps()


def test_a_stalled_run_is_said_and_followed_on(scene: Scene) -> None:
    """stale_seconds without a snapshot: stalled; the next one: arriving again."""
    (scene.folder / "stepwarden.toml").write_text(
        '[snapshots]\npattern = "out/T_{step}.npy"\nstale_seconds = 1.0\n'
    )
    scene.solved("--last", 50)
    guard = scene.guard("--last-step", 60)

    def pulses() -> list[str]:
        return [r.pulse for r in scene.records() if isinstance(r, PulseChange)]

    scene.until(lambda: pulses() == ["arriving", "stalled"])
    scene.solved("--last", 60, "--first", 60)
    assert guard.wait(30.0) == 0
    assert pulses() == ["arriving", "stalled", "arriving", "finished"]


def test_a_stubborn_run_makes_the_guard_fail(scene: Scene) -> None:
    """The stop file is not looked at, and there is nothing else: status 12, and a trouble."""
    (scene.folder / "stepwarden.toml").write_text(
        '[snapshots]\npattern = "out/T_{step}.npy"\n'
        '[[stop]]\ndo = "file"\npath = "STOP"\nwait_seconds = 1.0\n'
    )
    solver = scene.solve("--factor", 1.2, "--last", 250, "--pace", 0.2)
    assert scene.guarded("--pid", solver.pid) == 12
    assert outcomes(scene, "stop-file") == ["done", "no-reaction"]
    assert any("did not react" in r.text for r in scene.records() if isinstance(r, Remark))


def test_modules_in_the_runs_folder_are_never_imported(scene: Scene) -> None:
    """A run's folder may hold files called like ours or like a library's."""
    for name in ("monitor", "probes", "numpy", "msgspec", "json", "child", "sitecustomize"):
        (scene.folder / f"{name}.py").write_text("open('trapped', 'a').write(__name__)\n")
    out = scene.folder / "out"
    out.mkdir()
    for step in range(0, 100, 10):
        np.save(out / f"T_{step}.npy", np.arange(400.0).reshape(20, 20) + step)
    assert scene.guarded(*PATTERN, "--catch-up") == 0
    assert not (scene.folder / "trapped").exists()


def test_a_full_disk_does_not_stop_guarding(scene: Scene) -> None:
    """Nothing can be written any more, neither log nor window (here: a limit on the size of files,
    which also holds for what guard says, hence quietly); guard says so once, and still has the run
    stopped."""
    import resource

    solver = scene.solve("--factor", 1.1, "--last", 100000, "--pace", 0.05, "--stop-file", "STOP")
    guard = scene.guard(*PATTERN, "--pid", solver.pid, "--stop-file", "STOP", "--quiet")
    resource.prlimit(guard.pid, resource.RLIMIT_FSIZE, (3000, resource.RLIM_INFINITY))
    assert guard.wait(60.0) == 10
    assert solver.wait(10.0) == 0
    assert scene.said().count("is not being written") == 1


def test_the_owner_of_the_process_is_recorded(scene: Scene) -> None:
    """Number, start time and owner stand in the opening record."""
    solver = scene.solve("--last", 20, "--pace", 0.5)
    assert scene.guarded(*PATTERN, "--pid", solver.pid) == 0
    opened = next(r for r in scene.records() if isinstance(r, Opened))
    assert opened.process is not None
    assert (opened.process[0], opened.process[2]) == (solver.pid, os.getuid())
