"""Everything guard does to the run and its surroundings: pins, the stop, notices."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from monitor.actions.notify import Notifier, request_of
from monitor.actions.pin import Pins, Source
from monitor.actions.runprocess import RunProcess
from monitor.actions.stop import Ladder
from monitor.config import Settings
from monitor.growthlog.records import Condition, Snapshot, Verdict
from monitor.guarding.journal import Journal
from monitor.guarding.judging import Judged
from monitor.guarding.resume import Resumed
from monitor.lastclean import place
from monitor.wording import clean
from probes.wire import Arrival, Reply, Request, Sketched


@dataclass(frozen=True, slots=True)
class Surroundings:
    """folder: of the run; log: the growth log; run: its name for people; spacing: usual seconds
    between snapshots, 0 while unknown."""

    folder: Path
    log: Path
    run: str
    process: RunProcess | None
    spacing: Callable[[], float]


def calls_for_stop(verdict: Verdict) -> bool:
    """An alarm for numerical growth, or an overflow."""
    return verdict.alarmed and (verdict.kind == "numerical" or verdict.condition == "overflowed")


class Hands:
    """Made once per guard; only records where `enabled` is false."""

    def __init__(
        self,
        settings: Settings,
        ask: Callable[[Request, float], Reply],
        journal: Journal,
        around: Surroundings,
        resumed: Resumed,
        *,
        enabled: bool,
    ) -> None:
        self._settings, self._ask, self._journal, self._around = settings, ask, journal, around
        self._enabled = enabled
        self._pins = Pins(settings, ask, journal, around.log.parent, resumed.pins)
        self._notifier = Notifier(settings.notify, journal, around.folder)
        self._ladder: Ladder | None = None
        self._ladder_segment = 0
        self._turn_segment = 0
        self._stop_failed = False

    @property
    def busy(self) -> bool:
        """Whether `advance` should be called often."""
        return self._notifier.busy or (self._ladder is not None and self._ladder.active)

    @property
    def failed(self) -> bool:
        """Whether a configured action failed."""
        stop = self._ladder is not None and self._ladder.failed
        return self._stop_failed or stop or self._notifier.failed

    def take_up(self, resumed: Resumed, now: float) -> None:
        """Finish what an earlier guard left half done."""
        if not self._enabled:
            return
        self._pins.recover(resumed.total)
        if resumed.segment is not None and resumed.deeds:
            self._ladder, self._ladder_segment = self._new_ladder(), resumed.segment.number
            self._ladder.resume(resumed.deeds, now)
        if resumed.turn is not None:
            self._turn_segment = resumed.turn.seg
            self._pins.keep(resumed.turn, resumed.total)
        if resumed.changed is not None and request_of(resumed.changed[0]) not in resumed.notified:
            self._notify(*resumed.changed)

    def judged(
        self,
        judged: Judged,
        arrival: Arrival,
        sketched: Sketched,
        *,
        count: int,
        live: bool,
        behind: bool,
        now: float,
    ) -> None:
        """A snapshot was judged and recorded.

        count: snapshots judged so far. live: the run is known to be at work now. behind: others
        wait behind this one, so that it is not worth a copy of its own.
        """
        if not self._enabled:
            return
        record = judged.record
        source = Source(arrival, place(record), record, sketched)
        self._pins.saw(source)
        if self._ladder is not None and live:
            self._ladder.arrived(now)
        verdict = record.verdict
        if verdict.alarmed and self._turn_segment != record.seg:
            self._turn_segment = record.seg
            self._pins.keep(record, count)
        elif not behind and not verdict.alarmed and verdict.condition in ("gathering", "quiet"):
            self._pins.rotate(source, count)
        if live and calls_for_stop(verdict):
            self._stop(record, now)
        if judged.changed:
            self._notify(record, judged.before)

    def heard(
        self, turn: Snapshot, before: Condition, *, count: int, live: bool, now: float
    ) -> None:
        """A history that is declared an alarm has come past it between two snapshots. turn: what
        it says, in the shape of a snapshot's record."""
        if not self._enabled:
            return
        if self._turn_segment != turn.seg:
            self._turn_segment = turn.seg
            self._pins.keep(turn, count)
        if live:
            self._stop(turn, now)
        self._notify(turn, before)

    def advance(self, now: float) -> None:
        """Do what is due; never waits."""
        if not self._enabled:
            return
        if self._ladder is not None:
            self._ladder.advance(now)
        self._notifier.advance()

    def ended(self, why: str) -> None:
        """The run has ended."""
        if self._ladder is not None:
            self._ladder.ended(why)

    def close(self, wait_s: float) -> None:
        """Guard ends."""
        if self._enabled:
            self._notifier.close(wait_s)
        if self._ladder is not None:
            self._ladder.let_go()

    def _stop(self, record: Snapshot, now: float) -> None:
        if self._ladder is not None and (self._ladder.active or self._ladder_segment == record.seg):
            return
        if self._ladder is not None:
            self._stop_failed |= self._ladder.failed
        self._ladder, self._ladder_segment = self._new_ladder(), record.seg
        self._ladder.begin(now, clean(record.verdict.why))
        self._ladder.advance(now)

    def _new_ladder(self) -> Ladder:
        around = self._around
        return Ladder(
            self._settings.stop,
            self._ask,
            self._journal,
            around.process,
            around.folder,
            around.log.parent,
            around.spacing,
        )

    def _notify(self, record: Snapshot, before: Condition) -> None:
        self._notifier.changed(record, before, self._around.run, self._around.log)
