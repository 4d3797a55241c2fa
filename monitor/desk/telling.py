"""One sentence for each kind of record that changes something. Pure; nothing is escaped here, that
is done where text is put on a screen or printed."""

from __future__ import annotations

from monitor.growthlog.records import (
    Intent,
    Opened,
    Outcome,
    PinRecord,
    PulseChange,
    Segment,
    Snapshot,
)
from monitor.wording import place_text, verdict_text

_ACTS = {
    "pin": "pin a checkpoint",
    "stop-file": "stop file",
    "command": "stop command",
    "signal": "signal",
    "kill": "kill signal",
    "hold": "hold file",
    "notify": "notify command",
}

_OUTCOMES = {
    "done": "done",
    "accepted": "the run reacted",
    "no-reaction": "no reaction",
    "failed": "failed",
    "found-done": "found done already",
}

_WHY_SEGMENT = {
    "start": "a run begins",
    "restart": "the run was restarted",
    "shape": "the fields changed their shape",
    "settings": "the settings of the sketch changed",
    "gap": "the history before is not comparable",
}


def act(intent: Intent) -> str:
    """What guard means to do."""
    name = _ACTS.get(intent.act, intent.act)
    return f"{name} {intent.target}".rstrip()


def intent(record: Intent) -> str:
    again = f" (attempt {record.attempt})" if record.attempt > 1 else ""
    return f"guard acts: {act(record)}{again}"


def outcome(record: Outcome) -> str:
    name = _ACTS.get(record.act, record.act)
    return f"{name}: {came(record)}"


def came(record: Outcome) -> str:
    """What came of an act."""
    told = _OUTCOMES[record.outcome]
    return f"{told}, {record.detail}" if record.detail else told


def change(snapshot: Snapshot) -> str:
    verdict = snapshot.verdict
    why = "" if verdict.condition == "quiet" else f": {verdict_text(verdict)}"
    return f"{verdict.condition} at {place_text(snapshot)}{why}"


def segment(record: Segment) -> str:
    step = "" if record.step is None else f" at step {record.step:,}"
    return f"segment {record.number} begins{step}: {_WHY_SEGMENT.get(record.why, record.why)}"


def pin(record: PinRecord) -> str:
    step = "a step unknown" if record.step is None else f"step {record.step:,}"
    proof = "verified" if record.verified else "not verified"
    detail = f", {record.detail}" if record.detail else ""
    return f"kept: checkpoint of {step} in {record.folder}, {proof}{detail}"


def pulse(record: PulseChange) -> str:
    return f"{record.pulse}: {record.detail}" if record.detail else record.pulse


def opened_again(record: Opened) -> str:
    if record.continues:
        return "another guard took up the watch without a gap"
    return f"another guard began anew{': ' + record.note if record.note else ''}"


def came_short(outcome: str) -> str:
    """Why an act was no help."""
    return "failed" if outcome == "failed" else "brought no reaction"
