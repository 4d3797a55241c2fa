"""Notices of changes of condition: complete, bounded, never waited for."""

from __future__ import annotations

import json
import sys
import time
from pathlib import Path

import pytest

from monitor.actions.notify import MOST_WAITING, Notifier, request_of
from monitor.config import NotifySection
from monitor.growthlog.records import Estimate, Intent, Outcome
from monitor.guarding.journal import Journal
from tests.monitor.actions.fakes import FakeLog, snapshot

ALARM = snapshot(
    7,
    140,
    condition="runaway",
    alarmed=True,
    kind="numerical",
    why="T grows 1.02 per step",
    field="T",
    factor=Estimate(1.02, 1.01, 1.03, 0.9),
    ruin=Estimate(300.0, 250.0, "inf", 0.8),
)


def notifier(code: str, journal: Journal, folder: Path, limit: float = 20.0) -> Notifier:
    section = NotifySection(command=(sys.executable, "-c", code), wait_seconds=limit)
    return Notifier(section, journal, folder)


def finish(notes: Notifier) -> None:
    deadline = time.monotonic() + 20.0
    while notes.busy and time.monotonic() < deadline:
        notes.advance()
        time.sleep(0.01)
    assert not notes.busy


def test_the_facts_arrive_as_json(journal: Journal, log: FakeLog, tmp_path: Path) -> None:
    """One object on standard input with condition, reason, place and headroom."""
    code = "import sys; open('seen', 'w').write(sys.stdin.read())"
    notes = notifier(code, journal, tmp_path)
    notes.changed(ALARM, "swelling", "plate", Path("growth.jsonl"))
    finish(notes)
    seen = json.loads((tmp_path / "seen").read_text())
    assert (seen["condition"], seen["before"], seen["step"]) == ("runaway", "swelling", 140)
    assert seen["why"] == "T grows 1.02 per step"
    assert seen["growth_per_step"] == pytest.approx(1.02)
    assert seen["steps_to_ruin"] == {"value": 300.0, "low": 250.0, "high": "inf", "reason": ""}
    assert seen["steps_to_overflow"] is None
    assert log.outcomes("notify") == ["done"]
    assert log.only(Intent)[0].id == request_of(ALARM)
    assert not notes.failed


def test_without_a_command_nothing_happens(journal: Journal, log: FakeLog, tmp_path: Path) -> None:
    """No process, no record."""
    notes = Notifier(NotifySection(), journal, tmp_path)
    notes.changed(ALARM, "swelling", "plate", Path("growth.jsonl"))
    notes.advance()
    assert log.records == []
    assert not notes.busy


def test_a_failing_command_is_recorded(journal: Journal, log: FakeLog, tmp_path: Path) -> None:
    """With status and last words."""
    notes = notifier("import sys; sys.exit('no route')", journal, tmp_path)
    notes.changed(ALARM, "swelling", "plate", Path("growth.jsonl"))
    finish(notes)
    (outcome,) = log.only(Outcome)
    assert (outcome.outcome, outcome.detail) == ("failed", "exit status 1: no route")
    assert notes.failed


def test_a_hanging_command_blocks_nothing(journal: Journal, log: FakeLog, tmp_path: Path) -> None:
    """Calls return at once; after its time limit it has failed."""
    notes = notifier("import time; time.sleep(60)", journal, tmp_path, limit=0.5)
    before = time.monotonic()
    notes.changed(ALARM, "swelling", "plate", Path("growth.jsonl"))
    notes.advance()
    notes.advance()
    assert time.monotonic() - before < 5.0
    finish(notes)
    assert log.outcomes("notify") == ["failed"]


def test_one_after_the_other_in_order(journal: Journal, log: FakeLog, tmp_path: Path) -> None:
    """Three changes in quick succession give three notices, none at the same time as another."""
    code = "import sys, json; open('seen', 'a').write(str(json.load(sys.stdin)['step']) + ' ')"
    notes = notifier(code, journal, tmp_path)
    for seq, step in ((1, 20), (2, 40), (3, 60)):
        notes.changed(snapshot(seq, step), "gathering", "plate", Path("growth.jsonl"))
    finish(notes)
    assert (tmp_path / "seen").read_text() == "20 40 60 "
    acts = [type(r).__name__ for r in log.records]
    assert acts == ["Intent", "Outcome"] * 3


def test_old_news_is_dropped(journal: Journal, log: FakeLog, tmp_path: Path) -> None:
    """With far more changes than the command can take, the latest are told."""
    notes = notifier("pass", journal, tmp_path)
    for seq in range(1, MOST_WAITING + 10):
        notes.changed(snapshot(seq, seq), "quiet", "plate", Path("growth.jsonl"))
    notes.advance()
    assert log.only(Intent)[0].id == "notify-10"
    notes.close(0.0)


def test_closing_waits_for_what_is_under_way(
    journal: Journal, log: FakeLog, tmp_path: Path
) -> None:
    """The notice of the last change gets through before guard ends."""
    notes = notifier("import time; time.sleep(0.3)", journal, tmp_path)
    notes.changed(ALARM, "swelling", "plate", Path("growth.jsonl"))
    notes.close(20.0)
    assert log.outcomes("notify") == ["done"]


def test_closing_does_not_wait_for_ever(journal: Journal, log: FakeLog, tmp_path: Path) -> None:
    """A command that takes longer is left running, and its intent stays open in the log."""
    notes = notifier("import time; time.sleep(5)", journal, tmp_path)
    notes.changed(ALARM, "swelling", "plate", Path("growth.jsonl"))
    before = time.monotonic()
    notes.close(0.2)
    assert time.monotonic() - before < 4.0
    assert log.outcomes("notify") == []
