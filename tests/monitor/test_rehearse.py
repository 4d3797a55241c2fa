"""Rehearsal: the fold over logged evidence, with the same and with other settings."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from monitor.cli import main
from monitor.growthlog.read import each_record
from monitor.growthlog.records import Opened, Snapshot
from monitor.rehearse import logged_alarm, rehearse
from tests.monitor.here import PATTERN, Here

SAMPLE = Path(__file__).parents[1] / "data" / "sample-growth.jsonl"


@pytest.fixture
def grown(scene: Here) -> Here:
    """A run that is restarted once and then grows by 1.1 per step."""
    scene.solved("--last", 150)
    assert scene.guarded(*PATTERN, "--catch-up", "--quiet") == 0
    scene.solved("--last", 400, "--first", 160, "--factor", 1.1)
    assert scene.guarded(*PATTERN, "--catch-up", "--quiet", "--no-actions") == 10
    return scene


def test_the_same_settings_give_what_guard_gave(grown: Here) -> None:
    """Every change, its step, its words and its numbers, over two guards on one log."""
    rehearsal = rehearse(each_record(grown.log))
    assert rehearsal.differing == 0
    assert rehearsal.rehearsed == rehearsal.logged
    assert rehearsal.rehearsed.alarm is not None
    said = [s.verdict for s in grown.snapshots()]
    assert rehearsal.rehearsed.alarm.verdict == next(v for v in said if v.alarmed)


def test_stricter_settings_alarm_later(grown: Here) -> None:
    """A mode must persist for longer and a line rise further; fewer snapshots are runaway."""
    loose = rehearse(each_record(grown.log))
    strict = rehearse(each_record(grown.log), {"held": 14, "decades": 6.0})
    assert strict.differing > 0
    assert strict.rehearsed.snapshots.get("runaway", 0) < loose.rehearsed.snapshots["runaway"]
    assert strict.logged == loose.logged


def test_bounds_can_be_tried(grown: Here) -> None:
    """A maximum that the field exceeds from the start on alarms at the first snapshot."""
    low = min(float(c.hi) for s in grown.snapshots() for c in s.evidence.channels)
    tried = rehearse(each_record(grown.log), fields={"T": {"max": low - 1.0}})
    assert tried.rehearsed.alarm is not None
    assert tried.rehearsed.alarm.at == 0


def test_reading_again_with_another_sketch(grown: Here, capsys: pytest.CaptureFixture[str]) -> None:
    """Other signs see the same growth; the run's folder and log stay as they were."""
    toml = '[snapshots]\npattern = "out/T_{step}.npy"\n'
    (grown.folder / "stepwarden.toml").write_text(toml)
    before = grown.log.read_bytes(), sorted(p.name for p in grown.folder.iterdir())
    words = ["rehearse", ".", "--again", "--set", "sketch.seed=90001", "--json"]
    assert main(words) == 10
    told = json.loads(capsys.readouterr().out)
    assert told["rehearsed"]["alarm_step"] > 150
    assert told["snapshots"] == len(grown.snapshots())
    assert (grown.log.read_bytes(), sorted(p.name for p in grown.folder.iterdir())) == before


def test_text_names_the_alarm(grown: Here, capsys: pytest.CaptureFixture[str]) -> None:
    """Both courses are summed up; the status is that of the rehearsal."""
    assert main(["rehearse", str(grown.folder), "--set", "alarm.held=200"]) in (0, 10)
    assert main(["rehearse", str(grown.log)]) == 10
    told = capsys.readouterr().out
    assert "as rehearsed:  alarm at step" in told
    assert "0 would have been judged otherwise" in told


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["--set", "alarm.held"], "SECTION.KEY=VALUE"),
        (["--set", "alarm.hold=3"], "did you mean 'held'"),
        (["--set", "sketch.seed=4"], "--again"),
        (["--set", "fields.T.ghost=1"], "--again"),
        (["--set", "alarm.held=0"], "held"),
    ],
)
def test_what_cannot_be_tried(
    words: list[str], told: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """Status 2 and a message that names the setting."""
    assert main(["rehearse", str(SAMPLE), *words]) == 2
    assert told in capsys.readouterr().err


def test_old_logs_can_be_rehearsed() -> None:
    """The stored sample log is folded again, with the alarm settings that it names."""
    records = list(each_record(SAMPLE))
    opened = next(r for r in records if isinstance(r, Opened))
    assert logged_alarm(opened).straight == 0.04
    rehearsal = rehearse(records)
    snapshots = sum(isinstance(r, Snapshot) for r in records)
    assert sum(rehearsal.rehearsed.snapshots.values()) == snapshots
    assert rehearsal.logged.alarm is not None
