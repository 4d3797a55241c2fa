"""What the desk knows of a run: a fold over the records of its growth log.

Takes typed records only, so that a run that is live, attached over a slow line or long finished
looks the same. No clock in here: whoever draws passes the time in.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable
from dataclasses import dataclass, field

from monitor.desk import telling
from monitor.desk.checkpoints import Checkpoints
from monitor.desk.series import Series
from monitor.growthlog.records import (
    AnyRecord,
    Closed,
    CloseUp,
    Condition,
    History,
    Intent,
    Opened,
    Outcome,
    PinRecord,
    PulseChange,
    Remark,
    Segment,
    Skipped,
    Snapshot,
    TileMap,
)
from monitor.lastclean import CleanSnapshot, as_turn
from monitor.wording import history_text, place_text

# Acts of the stop ladder.
STOPPING = ("stop-file", "command", "signal", "kill")

_EVENTS = 1000
_ARRIVALS = 400


@dataclass(frozen=True, slots=True)
class Event:
    """Something worth a line: when, how grave ("", "swelling", "runaway", "overflowed", "good") and
    what."""

    at: float
    gravity: str
    text: str


@dataclass(frozen=True, slots=True)
class Arrival:
    """A snapshot that came, or that was skipped (condition None, with the reason in `told`)."""

    at: float
    place: str
    condition: Condition | None
    path: str
    told: str = ""


@dataclass(slots=True)
class Deed:
    """An act of guard and what came of it so far."""

    intent: Intent
    outcome: Outcome | None = None


@dataclass(slots=True)
class Stretch:
    """One segment. since: its first snapshot of the present condition; alarm: the first alarmed
    one; turn: the number of snapshots before the alarm."""

    number: int
    why: str
    blocks: tuple[tuple[str, str, tuple[int, ...], tuple[int, ...]], ...] = ()
    series: Series = field(default_factory=Series)
    checkpoints: Checkpoints = field(default_factory=Checkpoints)
    since: Snapshot | None = None
    alarm: Snapshot | None = None
    last: Snapshot | None = None


class Story:
    """Facts for the screen. `take` records in file order; everything else only reads.

    histories: the last record of each; heard: the first of the present segment that is an alarm.
    maps: the latest of each field, with the place in the run that it was made at. deeds: of the
    present segment, by act and request.
    """

    def __init__(self) -> None:
        self.opened: Opened | None = None
        self.stretches: list[Stretch] = []
        self.pulse: PulseChange | None = None
        self.closed: Closed | None = None
        self.pins: dict[str, PinRecord] = {}
        self.deeds: dict[tuple[str, str], Deed] = {}
        self.histories: dict[str, History] = {}
        self.heard: History | None = None
        self.maps: dict[str, tuple[TileMap, str]] = {}
        self.closeup: CloseUp | None = None
        self.events: deque[Event] = deque(maxlen=_EVENTS)
        self.arrivals: deque[Arrival] = deque(maxlen=_ARRIVALS)
        self.skipped = 0
        self.snapshots = 0

    @property
    def run(self) -> str:
        """The run's name."""
        return self.opened.run if self.opened else ""

    @property
    def now(self) -> Stretch | None:
        """The present segment."""
        return self.stretches[-1] if self.stretches else None

    @property
    def last(self) -> Snapshot | None:
        """The last judged snapshot of the present segment."""
        return self.stretches[-1].last if self.stretches else None

    @property
    def per(self) -> str:
        """What factors and headroom count: "step", or "snapshot" where steps are unknown."""
        return "snapshot" if self.last is not None and self.last.step is None else "step"

    def clean(self) -> CleanSnapshot | None:
        """The checkpoint to restart from, as far as the log tells."""
        stretch = self.now
        if stretch is None:
            return None
        alarm = stretch.alarm
        if alarm is None and self.heard is not None and stretch.last is not None:
            alarm = as_turn(self.heard, "", stretch.last.index + 1)
        return stretch.checkpoints.clean(tuple(self.pins.values()), alarm)

    def take(self, records: Iterable[AnyRecord]) -> None:
        """Fold records in."""
        for record in records:
            match record:
                case Snapshot():
                    self._snapshot(record)
                case TileMap():
                    of = place_text(self.last) if self.last is not None else ""
                    self.maps[record.f] = (record, of)
                case CloseUp():
                    self.closeup = record
                case _:
                    self._rare(record)

    def _snapshot(self, snapshot: Snapshot) -> None:
        stretch = self.now
        if stretch is None:
            stretch = Stretch(snapshot.seg, "start")
            self.stretches.append(stretch)
        self.snapshots += 1
        before = stretch.last.verdict if stretch.last else None
        verdict = snapshot.verdict
        if before is None or before.condition != verdict.condition:
            stretch.since = snapshot
            if before is not None or verdict.condition != "gathering":
                self._event(snapshot.at, verdict.condition, telling.change(snapshot))
        if verdict.alarmed and stretch.alarm is None:
            stretch.alarm = snapshot
        stretch.last = snapshot
        stretch.series.append(snapshot)
        stretch.checkpoints.judged(snapshot)
        self.arrivals.append(
            Arrival(snapshot.at, place_text(snapshot), verdict.condition, snapshot.path)
        )
        if self.pulse is not None and self.pulse.pulse == "stalled":
            self.pulse = None

    def _rare(self, record: AnyRecord) -> None:
        match record:
            case Opened():
                if self.opened is not None:
                    self._event(record.at, "", telling.opened_again(record))
                self.opened, self.closed = record, None
            case Segment():
                stretch = Stretch(record.number, record.why, record.blocks)
                for held in self.pins.values():
                    stretch.checkpoints.pinned(held)
                self.stretches.append(stretch)
                self.maps.clear()
                self.deeds.clear()
                self.heard = None
                self.closeup = self.pulse = None
                if record.why != "start":
                    self._event(record.at, "swelling", telling.segment(record))
            case History():
                self._history(record)
            case Skipped():
                self.skipped += 1
                told = f"{record.reason}: {record.detail}"
                where = "" if record.step is None else f"{record.step:,}"
                self.arrivals.append(Arrival(record.at, where, None, record.path, told))
            case PinRecord():
                self._pin(record)
            case Intent():
                self.deeds[record.act, record.id] = Deed(record)
                if record.act in STOPPING:
                    self._event(record.at, "swelling", telling.intent(record))
            case Outcome():
                self._outcome(record)
            case PulseChange():
                self.pulse = record
                gravity = "swelling" if record.pulse == "stalled" else ""
                self._event(record.at, gravity, telling.pulse(record))
            case Remark():
                trouble = record.level == "trouble"
                self._event(record.at, "swelling" if trouble else "", record.text)
            case Closed():
                self.closed = record
                self._event(record.at, "", f"guard ended: {record.why} (status {record.status})")

    def _history(self, record: History) -> None:
        before = self.histories.get(record.name)
        self.histories[record.name] = record
        if record.verdict.alarmed and self.heard is None:
            self.heard = record
        was = before.verdict.condition if before is not None else "gathering"
        if record.verdict.condition != was:
            text = f"history {history_text(record)}"
            self._event(record.at, record.verdict.condition, text)

    def _pin(self, pin: PinRecord) -> None:
        before = self.pins.get(pin.pin)
        if pin.state == "released":
            self.pins.pop(pin.pin, None)
        else:
            self.pins[pin.pin] = pin
            if self.now is not None:
                self.now.checkpoints.pinned(pin)
        if pin.state == "kept" and (before is None or before.state != "kept"):
            self._event(pin.at, "good" if pin.verified else "swelling", telling.pin(pin))

    def _outcome(self, outcome: Outcome) -> None:
        deed = self.deeds.get((outcome.act, outcome.id))
        if deed is not None:
            deed.outcome = outcome
        # Pins have records of their own, and a notice that was given is no news.
        if outcome.act not in ("pin", "notify") or outcome.outcome == "failed":
            bad = outcome.outcome in ("failed", "no-reaction")
            self._event(outcome.at, "runaway" if bad else "good", telling.outcome(outcome))

    def _event(self, at: float, gravity: str, text: str) -> None:
        self.events.append(Event(at, gravity, text))
