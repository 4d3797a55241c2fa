"""The verdict in words: whether to act, why, where, how long there is, and what guard does.

Pure: a story, the log's health and a time in; labelled sentences out. Nothing is escaped here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

import msgspec

from monitor.config import StopStep
from monitor.desk import telling
from monitor.desk.story import STOPPING, Deed, Story, Stretch
from monitor.growthlog.records import Condition, Estimate, Evidence, Snapshot
from monitor.wording import (
    age_text,
    box_text,
    drift_text,
    duration_text,
    exact,
    factor_text,
    headroom_text,
    history_text,
    moment_text,
    number,
    place_text,
    verdict_text,
)

# ln of the ratio of a field to its round-off in double precision: how far a growth has to go. To
# foretell ruin at least three snapshots must fall into that time.
_ROUNDOFF_TO_FIELD = 36.0
_LOOKS = 3

# The worse half of the ladder: somebody has to do something.
GRAVE: tuple[Condition, ...] = ("runaway", "overflowed")
_CALM: tuple[Condition, ...] = ("gathering", "quiet")


@dataclass(frozen=True, slots=True)
class Health:
    """What is known of the log besides its records.

    guard: True while one holds the log's lock and touches it, False if not, None if not known yet.
    trouble: why the log cannot be read at present, "" if it can. bad_lines: lines that are no
    records. behind: bytes of the log not read yet.
    """

    guard: bool | None = None
    trouble: str = ""
    bad_lines: int = 0
    behind: int = 0


@dataclass(frozen=True, slots=True)
class Row:
    """A labelled sentence of the verdict; style as in `monitor.desk.sheet`."""

    label: str
    text: str
    style: str = ""


def over(story: Story) -> bool:
    """Nothing more will come: the run is finished or guard has ended."""
    ended = story.pulse is not None and story.pulse.pulse == "finished"
    return ended or story.closed is not None


def stalled(story: Story) -> bool:
    return story.pulse is not None and story.pulse.pulse == "stalled"


def headline(story: Story, now: float) -> str:
    """How long there is, what grows how fast, and since when."""
    stretch, last = story.now, story.last
    if stretch is None or last is None:
        return "no snapshot was judged yet"
    verdict = last.verdict
    parts = []
    if verdict.ruin is not None and verdict.ruin.value is not None and not over(story):
        parts.append(_countdown("ruin", verdict.ruin, _pace(story), story.per))
    if verdict.factor is not None and verdict.factor.value is not None:
        value = factor_text(Estimate(verdict.factor.value))
        what = f" in {verdict.field}" if verdict.field else ""
        parts.append(f"{value} per {story.per}{what}")
    if stretch.since is not None:
        at = stretch.since.at
        when = moment_text(at, now) if over(story) else age_text(now - at)
        parts.append(f"since {place_text(stretch.since)}, {when}")
    return "; ".join(parts)


def rows(story: Story, health: Health, now: float) -> list[Row]:
    """The whole verdict, most urgent first."""
    out = [Row("act", *advice(story, health, now))]
    stretch, last = story.now, story.last
    if stretch is not None and last is not None:
        out.append(Row("why", verdict_text(last.verdict, story.per)))
        if place := where(stretch, last):
            out.append(Row("where", place))
        out.append(Row("left", left(story, last)))
        out.append(Row("clean", clean(story)))
        out.append(Row("run", pulse(story, last, now)))
    out.append(Row("guard", *guard(story, health, now)))
    out += [Row("also", *also) for also in histories(story)]
    return out


def advice(story: Story, health: Health, now: float) -> tuple[str, str]:
    """What the engineer should do, and how grave it is."""
    last = story.last
    if health.trouble:
        return f"look at the log: {health.trouble}", "swelling"
    if last is None:
        if over(story):
            return "see why nothing was judged: guard ended without a snapshot", "swelling"
        return _unwatched(health) or ("nothing yet: no snapshot was judged", "")
    condition = last.verdict.condition
    if condition in GRAVE:
        return _grave(story, health), condition
    if any(r.verdict.alarmed and r.verdict.condition in GRAVE for r in story.histories.values()):
        return _grave(story, health), "runaway"
    if over(story):
        if story.now is not None and story.now.alarm is not None:
            return _restart(story), "runaway"
        if earlier := _earlier_alarm(story):
            return f"see `stepwarden review`: {earlier}", "swelling"
        return "nothing to do: the run is over", "quiet"
    unwatched = _unwatched(health)
    if unwatched:
        return unwatched
    if stalled(story):
        every = story.now.series.spacing() if story.now else None
        usual = f", usually one every {duration_text(every)}" if every else ""
        age = duration_text(max(0.0, now - _written(last)))
        return f"look at the solver: no snapshot for {age}{usual}", "swelling"
    if condition == "swelling":
        return "watch: growth is suspected, an alarm is not justified yet", "swelling"
    if story.now is not None and story.now.alarm is not None:
        return "look: quiet again after an alarm, see events", "swelling"
    if condition == "gathering":
        return "nothing yet: too few snapshots", ""
    if last.verdict.kind == "resolved":
        return "nothing to do: what grows is carried by the grid", "quiet"
    return "nothing to do", "quiet"


def _unwatched(health: Health) -> tuple[str, str] | None:
    if health.guard is False:
        return "start guard again: nobody is watching this run", "swelling"
    return None


def _grave(story: Story, health: Health) -> str:
    if over(story):
        return _restart(story)
    if health.guard is False:
        return f"stop the run yourself if it still runs, guard is gone; then {_restart(story)}"
    deed = last_stop(story)
    outcome = deed.outcome.outcome if deed and deed.outcome else ""
    if deed is None:
        if stop_steps(story):
            return "stand by: guard is about to stop the run"
        return f"stop the run yourself, no stop is configured; then {_restart(story)}"
    if outcome in ("accepted", "found-done"):
        return f"the run was stopped; {_restart(story)}"
    if outcome in ("failed", "no-reaction"):
        return f"stop the run yourself: {telling.act(deed.intent)} {telling.came_short(outcome)}"
    return "wait: guard is stopping the run"


def _restart(story: Story) -> str:
    found = story.clean()
    mend = "with a smaller step or the cause mended"
    if found is None:
        return "find a checkpoint older than this log: no clean one is known"
    return f"restart from {story.per} {exact(found.step)} {mend}"


def where(stretch: Stretch, last: Snapshot) -> str:
    """Where it grows; "" while nothing does. An overflow is not where it began: the alarm is."""
    verdict = last.verdict
    if verdict.kind == "none" and verdict.condition in ("quiet", "gathering"):
        return ""
    source = last.evidence
    if not _placed(source) and stretch.alarm is not None:
        source = stretch.alarm.evidence
    parts = []
    if source.where is not None:
        field, part = source.where
        parts.append(f"{field}, part {part}" if part else field)
    if source.box is not None:
        parts.append(f"cells {box_text(source.box)}")
    elif source.worst:
        parts.append(f"tile {source.worst[0].tile}")
    parts += [f"{share:.0%} at boundary {name}" for name, share in _main_edges(source)]
    if source.bad_at is not None:
        name, _, index = source.bad_at
        parts.append(f"first non-finite cell of {name} at {list(index)}")
    return ", ".join(parts) or "place not known"


def _placed(evidence: Evidence) -> bool:
    return evidence.box is not None or bool(evidence.worst)


def _main_edges(evidence: Evidence) -> list[tuple[str, float]]:
    ordered = sorted(evidence.edges.items(), key=lambda edge: -edge[1])
    return [edge for edge in ordered if edge[1] >= 0.2][:2]


def left(story: Story, last: Snapshot) -> str:
    """Headroom: ruin first, overflow second."""
    verdict = last.verdict
    if verdict.condition == "overflowed":
        return "nothing: the fields hold values that are not finite"
    if verdict.ruin is None and verdict.overflow is None:
        if verdict.condition == "gathering":
            return "not known yet"
        grows = verdict.kind in ("numerical", "undetermined")
        return "not estimated" if grows else "no countdown: nothing grows towards ruin"
    pace = _pace(story)
    ruin = _countdown("ruin", verdict.ruin, pace, story.per)
    overflow = _countdown("overflow", verdict.overflow, pace, story.per)
    if ruin.partition(": ")[2] == overflow.partition(": ")[2] != "":
        ruin, overflow = f"ruin and {overflow}", ""
    local = last.evidence.local
    size = ""
    if local is not None and local.value is not None:
        size = f"growing part {number(local.value, 2)} of the field there"
    if verdict.ruin is not None and verdict.ruin.value is not None:
        ruin = f"at this rate {ruin}"
    return "; ".join(part for part in (ruin, overflow, size, _too_far_apart(last)) if part)


def _too_far_apart(last: Snapshot) -> str:
    """A growth that the cadence lets one detect but not foretell."""
    factor, stride = last.verdict.factor, last.evidence.stride
    value = factor.value if factor is not None else None
    if not isinstance(value, float) or value <= 1.0 or stride is None or last.step is None:
        return ""
    span = _ROUNDOFF_TO_FIELD / math.log(value)
    if stride <= span / _LOOKS:
        return ""
    wanted = max(1, math.floor(span / (2 * _LOOKS)))
    return f"detected, not foretold: that takes a snapshot every {exact(wanted)} steps"


def _pace(story: Story) -> float | None:
    """Seconds per step while the run goes on."""
    if over(story) or stalled(story) or story.now is None:
        return None
    return story.now.series.pace()


def _countdown(name: str, steps: Estimate | None, pace: float | None, per: str) -> str:
    told = headroom_text(steps, pace, per)
    if steps is None or steps.value is None:
        return f"{name}: {told}"
    if told in ("now", "never at this rate"):
        return f"{name} {told}"
    return f"{name} in {told}"


def histories(story: Story) -> list[tuple[str, str]]:
    """The histories on one line, those that call for attention first; nothing without any."""
    records = sorted(story.histories.values(), key=lambda r: r.verdict.condition in _CALM)
    if not records:
        return []
    worst = records[0].verdict.condition
    return [("; ".join(history_text(r) for r in records), "" if worst in _CALM else worst)]


def clean(story: Story) -> str:
    """What to restart from."""
    found = story.clean()
    if found is None:
        return "no clean checkpoint is known"
    kept = "pinned" if found.pinned else "not pinned"
    return f"{story.per} {exact(found.step)}, {kept}, {found.path}: {found.reason}"


def pulse(story: Story, last: Snapshot, now: float) -> str:
    """Where the run is and whether it goes on."""
    parts = [place_text(last)]
    if last.time is not None:
        parts.append(f"time {number(last.time, 6)}")
    if over(story):
        parts.append(f"last snapshot {moment_text(_written(last), now)}")
    else:
        parts.append(f"last snapshot {age_text(now - _written(last))}")
    word = "arriving"
    if story.pulse is not None:
        word = story.pulse.pulse
    elif story.closed is not None:
        word = "no longer followed"
    every = story.now.series.spacing() if story.now else None
    if word == "arriving" and every:
        word = f"arriving every {duration_text(every)}"
    parts.append(word)
    if drift := drift_text(last.evidence):
        parts.append(drift)
    if story.skipped:
        parts.append(f"{exact(story.skipped)} skipped")
    if earlier := _earlier_alarm(story):
        parts.append(earlier)
    elif len(story.stretches) > 1:
        parts.append(f"segment {story.stretches[-1].number}")
    return ", ".join(parts)


def _earlier_alarm(story: Story) -> str:
    """The last alarm of a segment before the present one."""
    for stretch in reversed(story.stretches[:-1]):
        if stretch.alarm is not None:
            return f"segment {stretch.number} was alarmed at {place_text(stretch.alarm)}"
    return ""


def _written(snapshot: Snapshot) -> float:
    return snapshot.mtime or snapshot.at


def guard(story: Story, health: Health, now: float) -> tuple[str, str]:
    """What guard has done, or will do, and whether it is there."""
    deed = last_stop(story)
    told = _deed(story, deed, now) if deed is not None else ""
    if story.closed is not None:
        ended = f"ended: {story.closed.why} (status {story.closed.status})"
        return "; ".join(filter(None, (told, ended))), ""
    if health.guard is False:
        gone = "not running, its lock is gone or no longer touched"
        return "; ".join(filter(None, (gone, told))), "swelling"
    if told:
        return told, ""
    alarmed = story.now is not None and story.now.alarm is not None
    if alarmed and not stop_steps(story):
        return "told, and keeps clean checkpoints; no stop is configured", ""
    return f"on an alarm: {plan(story)}", ""


def last_stop(story: Story) -> Deed | None:
    """The last rung of the stop ladder that was tried, if any."""
    tried = [d for d in story.deeds.values() if d.intent.act in STOPPING]
    return tried[-1] if tried else None


def _deed(story: Story, deed: Deed, now: float) -> str:
    at = deed.outcome.at if deed.outcome else deed.intent.at
    when = moment_text(at, now) if over(story) else age_text(now - at)
    told = f"{telling.act(deed.intent)}: "
    told += telling.came(deed.outcome) if deed.outcome else "asked"
    told += f" ({when})"
    waiting = deed.outcome is None or deed.outcome.outcome == "done"
    if waiting and not over(story):
        tried = sum(d.intent.act in STOPPING for d in story.deeds.values())
        ladder = stop_steps(story)
        if 0 < tried <= len(ladder):
            told += f"; waits {duration_text(ladder[tried - 1].wait_seconds)}"
            told += f", then {_rung(ladder[tried])}" if tried < len(ladder) else ""
    return told


def plan(story: Story) -> str:
    """What guard does on an alarm, from its settings."""
    pins = "keep a clean checkpoint"
    settings = story.opened.settings if story.opened else {}
    section = settings.get("pins")
    if isinstance(section, dict) and section.get("enabled") is False:
        pins = "tell"
    ladder = stop_steps(story)
    if not ladder:
        return f"{pins}; no stop is configured"
    out = f"{pins}, then {_rung(ladder[0])}"
    for before, rung in pairwise(ladder):
        out += f", after {duration_text(before.wait_seconds)} {_rung(rung)}"
    return out


def stop_steps(story: Story) -> tuple[StopStep, ...]:
    """The stop ladder in the settings that guard wrote to the log."""
    settings = story.opened.settings if story.opened else {}
    try:
        return msgspec.convert(settings.get("stop", ()), tuple[StopStep, ...])
    except msgspec.ValidationError:
        return ()


def _rung(step: StopStep) -> str:
    if step.do == "file":
        return f"{step.action} file {step.path}"
    if step.do == "command":
        return f"command {' '.join(step.command)}"
    return f"signal {step.signal}"
