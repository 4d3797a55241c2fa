"""Replay a history against other alarm settings: what would have been said, and when. Pure.

The decision is a fold over evidence records as the growth log holds them, so with the settings that
guard had it gives what guard gave.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any

import msgspec

from monitor import condition
from monitor.config import AlarmSection
from monitor.growthlog.numbers import rounded
from monitor.growthlog.records import (
    AnyRecord,
    Condition,
    Opened,
    Segment,
    Snapshot,
    Verdict,
)
from monitor.lastclean import place
from probes.spec import FieldSpec

# Names of settings, as regular expressions, that have a say in the decision alone.
DECIDING = (r"alarm\.\w+", r"fields\..+\.(min|max|growth_per_time)")

NOTHING: Mapping[str, Any] = MappingProxyType({})


@dataclass(frozen=True, slots=True)
class Change:
    """A change of condition. at: solver step, or number of the snapshot where that is unknown."""

    segment: int
    at: int
    condition: Condition
    verdict: Verdict


@dataclass
class Course:
    """What was said of a history: changes in order, snapshots per condition, first alarm."""

    changes: list[Change] = field(default_factory=list)
    snapshots: dict[Condition, int] = field(default_factory=dict)
    alarm: Change | None = None

    def take(self, snapshot: Snapshot, verdict: Verdict, before: Condition | None) -> None:
        """Add one judged snapshot; before: condition of the snapshot before it in the segment."""
        said = verdict.condition
        self.snapshots[said] = self.snapshots.get(said, 0) + 1
        change = Change(snapshot.seg, place(snapshot), said, verdict)
        if said != before:
            self.changes.append(change)
        if verdict.alarmed and self.alarm is None:
            self.alarm = change


@dataclass(frozen=True, slots=True)
class Rehearsal:
    """logged: what guard said. rehearsed: what the other settings say of the same evidence.

    differing: snapshots whose condition differs. settings: the last alarm section that was tried.
    """

    logged: Course
    rehearsed: Course
    differing: int
    settings: AlarmSection


def rehearse(
    records: Iterable[AnyRecord],
    alarm: Mapping[str, Any] = NOTHING,
    fields: Mapping[str, Mapping[str, Any]] = NOTHING,
) -> Rehearsal:
    """Fold the evidence of a log again.

    alarm: keys of ``[alarm]`` that shall differ from what each guard had. fields: the same for the
    sections ``[fields.NAME]``. Both must have been checked.
    """
    logged, rehearsed = Course(), Course()
    settings, specs = AlarmSection(**alarm), _changed({}, fields)
    state, before, said = condition.start(), None, None
    segment, differing = 0, 0
    for record in records:
        if isinstance(record, Opened):
            settings = msgspec.structs.replace(logged_alarm(record), **alarm)
            specs = _changed(logged_fields(record), fields)
        if isinstance(record, Segment | Snapshot):
            number = record.number if isinstance(record, Segment) else record.seg
            if number != segment:
                segment, state, before, said = number, condition.start(), None, None
        if isinstance(record, Snapshot):
            state, verdict = condition.decide(
                state, record.evidence, record.step, record.index, settings, specs
            )
            verdict = rounded(verdict)
            logged.take(record, record.verdict, before)
            rehearsed.take(record, verdict, said)
            before, said = record.verdict.condition, verdict.condition
            differing += before != said
    return Rehearsal(logged, rehearsed, differing, settings)


def _changed(
    specs: Mapping[str, FieldSpec], changes: Mapping[str, Mapping[str, Any]]
) -> dict[str, FieldSpec]:
    out = dict(specs)
    for name, keys in changes.items():
        out[name] = msgspec.structs.replace(out.get(name, FieldSpec()), **keys)
    return out


def logged_alarm(record: Opened) -> AlarmSection:
    """The alarm settings that a guard wrote down; keys that are no more are left out."""
    return msgspec.convert(_known(record.settings.get("alarm"), AlarmSection), AlarmSection)


def logged_fields(record: Opened) -> dict[str, FieldSpec]:
    """The field settings that a guard wrote down; keys that are no more are left out."""
    sections = record.settings.get("fields")
    if not isinstance(sections, Mapping):
        return {}
    return {
        str(name): msgspec.convert(_known(table, FieldSpec), FieldSpec)
        for name, table in sections.items()
    }


def _known(table: object, kind: type[msgspec.Struct]) -> dict[str, object]:
    if not isinstance(table, Mapping):
        return {}
    return {k: v for k, v in table.items() if k in kind.__struct_fields__}
