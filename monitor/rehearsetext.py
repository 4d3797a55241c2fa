"""A rehearsal as text and as one JSON object."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import msgspec

from monitor.rehearse import Change, Course, Rehearsal
from monitor.wording import clean, factor_text

_MOST_CHANGES = 12


def write_up(rehearsal: Rehearsal) -> str:
    """For a person: both courses, the second with its reasons."""
    total = sum(rehearsal.rehearsed.snapshots.values())
    lines = [
        f"{total} snapshot(s); {rehearsal.differing} would have been judged otherwise",
        f"as logged:     {_summary(rehearsal.logged)}",
        f"as rehearsed:  {_summary(rehearsal.rehearsed)}",
    ]
    return "\n".join([*lines, *_course(rehearsal.rehearsed)])


def json_object(rehearsal: Rehearsal) -> dict[str, Any]:
    """The same as plain values: `schema`, `snapshots`, `differing`, `alarm` (the settings tried),
    and the courses `logged` and `rehearsed`."""
    return {
        "schema": 1,
        "snapshots": sum(rehearsal.rehearsed.snapshots.values()),
        "differing": rehearsal.differing,
        "alarm": msgspec.to_builtins(rehearsal.settings),
        "logged": _plain(rehearsal.logged),
        "rehearsed": _plain(rehearsal.rehearsed),
    }


def _plain(course: Course) -> dict[str, Any]:
    return {
        "conditions": dict(course.snapshots),
        "alarm_step": course.alarm.at if course.alarm is not None else None,
        "changes": [
            {
                "segment": change.segment,
                "step": change.at,
                "condition": change.condition,
                "field": change.verdict.field,
                "evidence": change.verdict.why,
            }
            for change in course.changes
        ],
    }


def _summary(course: Course) -> str:
    counts = ", ".join(f"{n} {said}" for said, n in course.snapshots.items()) or "nothing"
    alarm = "no alarm"
    if course.alarm is not None:
        factor = course.alarm.verdict.factor
        grew = f", {factor_text(factor)} per step" if factor is not None else ""
        alarm = f"alarm at step {course.alarm.at}{grew}"
    return f"{alarm}; {counts}"


def _course(course: Course) -> Iterator[str]:
    for change in course.changes[:_MOST_CHANGES]:
        yield _line(change)
    if len(course.changes) > _MOST_CHANGES:
        yield f"  and {len(course.changes) - _MOST_CHANGES} more changes"


def _line(change: Change) -> str:
    why = f"  {clean(change.verdict.why)}" if change.verdict.why else ""
    return f"  step {change.at:>9}  {change.condition:10}{why}"
