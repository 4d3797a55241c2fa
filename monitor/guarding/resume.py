"""What an earlier guard left in the log, for the next one to go on from. A fold over records."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

from monitor.actions.pin import Held, PinHistory
from monitor.actions.stop import ACTS, Deed
from monitor.growthlog.records import (
    AnyRecord,
    Condition,
    History,
    Intent,
    Opened,
    Outcome,
    PinRecord,
    Pulse,
    PulseChange,
    Segment,
    Skipped,
    Snapshot,
)

# A content that was skipped for one of these reasons is settled; the other reasons may pass.
FINAL = ("late", "refused", "broken")


@dataclass
class Resumed:
    """State of a log after its last record.

    known: content keys that are settled. total: snapshots in all segments. condition: of the last
    snapshot of this segment. changed: the last snapshot at which the condition changed, with the
    condition before. deeds: acts of this segment's stop, in order. notified: request ids of notices
    that were begun. skipped: keys that were recorded as skipped, for whatever reason. histories:
    the last record of each. heard: one of them alarmed in this segment.
    """

    opened: Opened | None = None
    segment: Segment | None = None
    last: Snapshot | None = None
    total: int = 0
    known: set[str] = field(default_factory=set)
    skipped: set[str] = field(default_factory=set)
    condition: Condition = "gathering"
    changed: tuple[Snapshot, Condition] | None = None
    turn: Snapshot | None = None
    deeds: list[Deed] = field(default_factory=list)
    notified: set[str] = field(default_factory=set)
    pulse: Pulse | None = None
    histories: dict[str, History] = field(default_factory=dict)
    heard: bool = False
    pins: PinHistory = field(default_factory=PinHistory)
    empty: bool = True

    def take(self, record: AnyRecord) -> None:
        """Fold one record in."""
        self.empty = False
        match record:
            case Snapshot():
                self._snapshot(record)
            case History():
                self.histories[record.name] = record
                self.heard |= record.verdict.alarmed
            case Segment():
                self.segment, self.last, self.turn = record, None, None
                self.condition, self.changed = "gathering", None
                self.deeds, self.heard = [], False
            case Skipped():
                self.skipped.add(record.key)
                if record.reason in FINAL:
                    self.known.add(record.key)
            case PinRecord():
                self._pin(record)
            case Intent():
                self._intent(record)
            case Outcome():
                self._outcome(record)
            case PulseChange():
                self.pulse = record.pulse
            case Opened():
                self.opened = record

    def _snapshot(self, record: Snapshot) -> None:
        self.known.add(record.key)
        self.total += 1
        self.last = record
        verdict = record.verdict
        if verdict.condition != self.condition:
            self.changed = record, self.condition
        self.condition = verdict.condition
        if verdict.alarmed and self.turn is None:
            self.turn = record
        for held in self.pins.held:
            # Pins of checkpoint files are judged by the first snapshot at or after their step.
            if held.judged is None:
                held.judged = record

    def _pin(self, record: PinRecord) -> None:
        pins = self.pins
        pins.used.add(record.pin)
        here = next((h for h in pins.held if h.record.pin == record.pin), None)
        if record.state == "released":
            pins.held = [h for h in pins.held if h is not here]
        elif here is not None:
            here.record = record
        else:
            pins.held.append(Held(record, self.total, self.last))

    def _intent(self, record: Intent) -> None:
        if record.act == "pin":
            self.pins.used.add(record.id)
            self.pins.open.append(record)
        elif record.act == "notify":
            self.notified.add(record.id)
        elif record.act in ACTS or record.act == "hold":
            deed = self._deed(record.act, record.id)
            if deed is None:
                self.deeds.append(Deed(record))
            else:
                deed.intent = record
                deed.outcomes.clear()

    def _outcome(self, record: Outcome) -> None:
        if record.act == "pin":
            self.pins.open = [i for i in self.pins.open if i.id != record.id]
        elif (deed := self._deed(record.act, record.id)) is not None:
            deed.outcomes.append(record)

    def _deed(self, act: str, request: str) -> Deed | None:
        return next((d for d in self.deeds if d.intent.act == act and d.intent.id == request), None)


def resume(records: Iterable[AnyRecord]) -> Resumed:
    """Everything the next guard needs to know of a log."""
    state = Resumed()
    for record in records:
        state.take(record)
    return state
