"""Guard catching up with snapshots that are there: what it makes of each kind of trouble.

The solver of `tests.processes` writes them; guard runs in this process, its child is real.
"""

from __future__ import annotations

from pathlib import Path

from monitor.growthlog.records import Intent, Opened, Segment, Skipped, Snapshot
from monitor.lastclean import clean_pins
from tests.monitor.here import PATTERN
from tests.processes.scene import Scene


def test_catching_up_with_nothing(scene: Scene) -> None:
    """Status 3: nothing readable."""
    assert scene.guarded(*PATTERN, "--catch-up") == 3
    assert scene.closed().status == 3


def test_catching_up_twice_takes_only_what_is_new(scene: Scene) -> None:
    """The second guard goes on from the first without a gap."""
    scene.solved("--last", 200)
    assert scene.guarded(*PATTERN, "--catch-up") == 0
    scene.solved("--last", 300, "--first", 210)
    assert scene.guarded(*PATTERN, "--catch-up") == 0
    assert scene.steps() == list(range(0, 301, 10))
    assert len([r for r in scene.records() if isinstance(r, Segment)]) == 1
    assert [r.continues for r in scene.records() if isinstance(r, Opened)] == [False, True]
    assert scene.snapshots()[-1].evidence.fresh == 31


def test_an_overflow_is_seen_at_once(scene: Scene) -> None:
    """One infinite value: overflowed with the place of it, status 11."""
    scene.solved("--last", 100, "--burst-at", 95)
    assert scene.guarded(*PATTERN, "--catch-up", "--no-actions") == 11
    last = scene.snapshots()[-1]
    assert last.verdict.condition == "overflowed"
    assert last.evidence.bad_at is not None


def test_only_recording(scene: Scene) -> None:
    """--no-actions: no pin, no stop, no HOLD, no intent, whatever is configured."""
    scene.solved("--factor", 1.1, "--last", 300)
    status = scene.guarded(*PATTERN, "--catch-up", "--no-actions", "--stop-file", "STOP")
    assert status == 10
    names = {p.name for p in scene.folder.iterdir()}
    assert not names & {"pins", "HOLD", "STOP"}
    assert not [r for r in scene.records() if isinstance(r, Intent)]


def test_another_shape_is_a_new_segment(scene: Scene) -> None:
    """A finer grid under the same pattern."""
    scene.solved("--last", 100)
    scene.solved("--last", 200, "--first", 110, "--cells", 48)
    assert scene.guarded(*PATTERN, "--catch-up") == 0
    segments = [r for r in scene.records() if isinstance(r, Segment)]
    assert [(s.why, s.blocks[0][2]) for s in segments] == [("start", (40, 40)), ("shape", (48, 48))]
    assert len(scene.steps()) == 21


def test_changed_sketch_settings_begin_a_segment(scene: Scene) -> None:
    """Sketches by other signs cannot be compared; changed alarm settings change nothing."""
    toml = '[snapshots]\npattern = "out/T_{step}.npy"\n'
    (scene.folder / "a.toml").write_text(toml)
    (scene.folder / "b.toml").write_text(toml + "[alarm]\ncalm = 20\n")
    (scene.folder / "c.toml").write_text(toml + "[sketch]\nseed = 90001\n")
    for last, name in ((50, "a"), (100, "b"), (150, "c")):
        scene.solved("--last", last, "--first", last - 40)
        assert scene.guarded(f"{name}.toml", "--catch-up") == 0
    segments = [r for r in scene.records() if isinstance(r, Segment)]
    assert [s.why for s in segments] == ["start", "settings"]


def test_a_lost_window_is_said(scene: Scene) -> None:
    """Without what the last guard held, a new segment gathers, and the log says why."""
    scene.solved("--last", 100)
    assert scene.guarded(*PATTERN, "--catch-up") == 0
    for path in (scene.folder / "growth.window").iterdir():
        path.unlink()
    scene.solved("--last", 120, "--first", 110)
    assert scene.guarded(*PATTERN, "--catch-up") == 0
    opened = [r for r in scene.records() if isinstance(r, Opened)][-1]
    assert not opened.continues
    assert "lost" in opened.note
    assert [r.why for r in scene.records() if isinstance(r, Segment)] == ["start", "gap"]
    assert scene.snapshots()[-1].verdict.condition == "gathering"


def test_missed_snapshots_are_recorded(scene: Scene) -> None:
    """A regular stride, then a jump over three places of it."""
    scene.solved("--last", 200)
    for step in (120, 130, 140):
        (scene.folder / "out" / f"T_{step}.npy").unlink()
    assert scene.guarded(*PATTERN, "--catch-up") == 0
    (skipped,) = [r for r in scene.records() if isinstance(r, Skipped)]
    assert (skipped.reason, skipped.step) == ("missed", 120)
    assert "3 snapshots" in skipped.detail


def test_a_broken_file_is_recorded_once_and_passed(scene: Scene) -> None:
    """Not an array at all: skipped with a reason, the others are judged."""
    scene.solved("--last", 100)
    (scene.folder / "out" / "T_55.npy").write_bytes(b"\x93NUMPY\x01\x00 this is no header" * 9)
    assert scene.guarded(*PATTERN, "--catch-up") == 0
    assert scene.guarded(*PATTERN, "--catch-up") == 0
    skipped = [r for r in scene.records() if isinstance(r, Skipped)]
    assert [(s.step, s.reason) for s in skipped] == [(55, "broken")]
    assert len(scene.steps()) == 11


def test_a_changed_condition_is_notified(scene: Scene) -> None:
    """The command gets each change as one JSON object."""
    (scene.folder / "stepwarden.toml").write_text(
        '[snapshots]\npattern = "out/T_{step}.npy"\n'
        '[notify]\ncommand = ["sh", "-c", "cat >> told.txt"]\n'
    )
    scene.solved("--factor", 1.1, "--last", 300)
    assert scene.guarded("--catch-up") == 10
    told = (scene.folder / "told.txt").read_text().splitlines()
    changes = 0
    before = "gathering"
    for s in scene.snapshots():
        changes += s.verdict.condition != before
        before = s.verdict.condition
    assert len(told) == changes
    assert '"condition":"runaway"' in "".join(told)


def test_the_review_of_the_log_agrees(scene: Scene) -> None:
    """What guard kept is what the log's readers call clean."""
    scene.solved("--factor", 1.08, "--last", 600)
    assert scene.guarded(*PATTERN, "--catch-up") == 10
    snapshots = scene.snapshots()
    turn = next(s for s in snapshots if s.verdict.alarmed)
    clean = clean_pins(scene.pins("kept"), snapshots, turn)
    assert clean
    assert Path(clean[-1].path).parts[0] == "pins"
    assert isinstance(turn, Snapshot)
