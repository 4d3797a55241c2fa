"""The loop of guard: look, read, judge, record, act, until the run ends or a signal comes."""

from __future__ import annotations

import signal
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from monitor.actions.runprocess import RunProcess
from monitor.childkeeper import ChildKeeper
from monitor.config import Settings
from monitor.exits import Exit
from monitor.foresight import foresight_text
from monitor.growthlog.lock import Lock, LockLost
from monitor.growthlog.records import Closed, Pulse, PulseChange, Skipped
from monitor.guarding.cadence import Spacing
from monitor.guarding.ending import Ending
from monitor.guarding.hands import Hands, Surroundings
from monitor.guarding.heartbeat import Heartbeat
from monitor.guarding.histories import Change, Histories
from monitor.guarding.journal import Journal
from monitor.guarding.judging import Judge, Judged, relative
from monitor.guarding.limits import seconds_for
from monitor.guarding.pulse import PulseWatch
from monitor.guarding.reading import NotRead, Reading
from monitor.guarding.resume import Resumed
from monitor.guarding.signals import Interrupted, Signals
from monitor.guarding.sorting import sort
from monitor.guarding.telling import Teller
from monitor.guarding.waiting import Reason, Skip, Waiting
from monitor.lastclean import as_turn
from monitor.wording import clean
from probes.errors import ChildError, ChildHung
from probes.wire import Arrival, Failed, Look, Looked, Pending, Reply, Request, Sketched

# Longest and shortest wait for something new, seconds; in between a quarter of the usual spacing.
LONGEST_LOOK = 5.0
SHORTEST_LOOK = 0.25
# With a process to watch, its end is noticed within this time.
PROCESS_LOOK = 1.0
# While a stop or a notice is under way.
BUSY_LOOK = 0.2
# After trouble with the folder or the file system.
TROUBLE_PAUSE = 2.0
# At the end files may still be settling: on local disks, and where attributes are cached.
SETTLING_LOCAL = 5.0
SETTLING_FAR = 130.0
# Histories are looked at so often.
HISTORY_LOOK = 1.0
# A snapshot that was written so short ago tells that the run is at work.
FRESH = 60.0
# Notices that are under way when guard ends get this long, and after a signal this long.
NOTICE_SECONDS = 20.0
NOTICE_SECONDS_SIGNALLED = 2.0


@dataclass(frozen=True, slots=True)
class Mode:
    """run: name for people. actions: False only records. catch_up: take what is there and end."""

    run: str
    actions: bool
    catch_up: bool


class Asking:
    """Requests to the reading process, with signs of life to the lock's other contenders."""

    def __init__(self, keeper: ChildKeeper, signals: Signals, heart: Heartbeat, lock: Lock) -> None:
        self._keeper, self.signals, self._heart, self._lock = keeper, signals, heart, lock
        self._held_until = 0.0
        keeper.meanwhile = signals.hurry

    def ask(self, request: Request, limit_s: float) -> Reply:
        """Ask and wait for the reply, also for some seconds after a signal; then Interrupted."""
        # A reading process that hangs is killed and a new one started, which takes a little.
        self._heart.beat(limit_s + 60.0)
        reply = self._keeper.ask(request, limit_s)
        self._heart.beat(60.0)
        return reply

    def ask_freely(self, request: Request, limit_s: float) -> Reply:
        """The same for a request that changes nothing: a signal ends the waiting with
        Interrupted."""
        with self.signals.interruptible():
            return self.ask(request, limit_s)

    def pause(self, seconds: float) -> None:
        """Sleep; a signal ends it with Interrupted."""
        self._heart.beat(seconds + 60.0)
        with self.signals.interruptible():
            time.sleep(seconds)

    def settled(self, key: str) -> None:
        self._keeper.settled([key])

    def check_lock(self, log: Path) -> None:
        """Raises LockLost if another guard has taken over. Looks once a second at most."""
        now = time.monotonic()
        if now >= self._held_until:
            self._held_until = now + 1.0
            if not self._lock.held():
                raise LockLost.of(log)


class Session:
    """One guard at work on one log."""

    def __init__(
        self,
        settings: Settings,
        folder: Path,
        log: Path,
        mode: Mode,
        asking: Asking,
        journal: Journal,
        judge: Judge,
        process: RunProcess | None,
        teller: Teller,
        clock: Callable[[], float],
        resumed: Resumed,
    ) -> None:
        self._settings, self._folder, self._log, self._mode = settings, folder, log, mode
        self._asking, self._journal, self._judge = asking, journal, judge
        self._process, self._teller, self._clock = process, teller, clock
        self._resumed = resumed
        self._known = resumed.known
        self._spacing = Spacing()
        self._pulse = PulseWatch(settings.snapshots.stale_seconds, clock(), resumed.pulse)
        self._ending = Ending(settings.run, folder, process, asking.ask)
        self._reading = Reading(asking.ask_freely)
        self._waiting = Waiting(resumed.skipped)
        around = Surroundings(folder, log, mode.run, process, lambda: self._spacing.usual or 0.0)
        self._histories = Histories(settings, asking.ask_freely, journal, clock, resumed.histories)
        self._hands = Hands(settings, asking.ask, journal, around, resumed, enabled=mode.actions)
        # The worst exit status that conditions call for: what this guard saw, and while a segment
        # of an earlier one goes on, what that saw in it.
        self._worst = 0
        self._inherited = _called_for(
            alarmed=resumed.turn is not None or resumed.heard,
            overflowed=resumed.condition == "overflowed",
        )
        self._pending: tuple[Pending, ...] = ()
        self._wakeup = ""
        self._caught_up = False
        self._blind = False
        self._failing = ""
        self._noted: set[str] = set()
        self._done = 0

    def run(self) -> int:
        """To the end of the run (or of what is there), or to a signal; returns the exit status."""
        try:
            self._hands.take_up(self._resumed, self._clock())
            # What was read of the log is no longer needed.
            self._resumed = Resumed()
            why = self._catch_up() if self._mode.catch_up else self._follow()
            self._asking.check_lock(self._log)
        except Interrupted:
            number = self._asking.signals.caught or signal.SIGTERM
            name = signal.Signals(number).name
            return self._close(f"signal {name}", 128 + number, NOTICE_SECONDS_SIGNALLED)
        except LockLost:
            raise
        except Exception as error:
            # A fault of ours: whoever reads the log should not have to guess.
            self._close(f"internal error: {type(error).__name__}: {error}", Exit.INTERNAL, 0.0)
            raise
        finally:
            self._teller.finish()
            self._ending.close()
        unread = self._judge.count == 0
        return self._close(why, Exit.UNREADABLE if unread else Exit.GOOD, NOTICE_SECONDS)

    # --- the two ways to guard ----------------------------------------------------------

    def _follow(self) -> str:
        while True:
            arrivals = self._look(self._wait())
            progress = self._take(arrivals)
            why = self._turn()
            if why:
                self._finish(why)
                return why
            if not arrivals:
                self._caught_up = True
                self._hear(self._histories.onward(self._judge.number))
            elif not progress:
                self._asking.pause(SHORTEST_LOOK)

    def _catch_up(self) -> str:
        self._drain()
        self._hear_the_rest()
        while self._hands.busy:
            # A stop that the catch-up called for is seen through.
            self._take(self._look(BUSY_LOOK))
            self._hands.advance(self._clock())
        why = self._ended()
        if why:
            self._finish(why)
            return why
        self._report_pending(at_end=True)
        return "caught up"

    def _turn(self) -> str:
        """What is due besides snapshots; returns why the run has ended, or ""."""
        now = self._clock()
        self._asking.check_lock(self._log)
        self._report_pending(at_end=False)
        self._hands.advance(now)
        stalled = self._pulse.look(now, self._spacing.usual)
        if stalled is not None:
            self._change_pulse("stalled", stalled)
        self._report_failing()
        return self._ended()

    def _ended(self) -> str:
        step = self._judge.place.step if self._judge.place is not None else None
        now = self._clock()
        return self._ending.reached(now, step, self._pulse.quiet_for(now))

    def _finish(self, why: str) -> None:
        """The run has ended: take what it wrote last, and say so."""
        self._drain()
        self._hear_the_rest()
        self._report_pending(at_end=True)
        self._hands.ended(clean(why))
        if self._pulse.pulse != "finished":
            self._change_pulse("finished", why)

    def _drain(self) -> None:
        """Take everything that is there, also what is still settling."""
        since = time.monotonic()
        empty = 0
        while True:
            arrivals = self._look(SHORTEST_LOOK if self._done else 0.0)
            if self._take(arrivals):
                since, empty = time.monotonic(), 0
                continue
            self._hands.advance(self._clock())
            settling = bool(arrivals) or any(p.reason == "writing" for p in self._pending)
            patience = SETTLING_LOCAL if self._wakeup == "events" else SETTLING_FAR
            waited = time.monotonic() - since
            if not self._blind:
                empty += 1
            # What arrived and cannot be read yet is given up by `Reading`, in its own time.
            if (empty >= 2 and not settling) or (waited > patience and not arrivals):
                return
            if settling:
                self._asking.pause(SHORTEST_LOOK)

    # --- looking ------------------------------------------------------------------------

    def _wait(self) -> float:
        """How long to wait for something new."""
        if self._caught_up and self._histories.more:
            return 0.0
        if self._hands.busy:
            return BUSY_LOOK
        longest = self._settings.snapshots.poll_seconds or LONGEST_LOOK
        if self._process is not None or self._ending.declared:
            longest = min(longest, PROCESS_LOOK)
        if len(self._histories):
            longest = min(longest, HISTORY_LOOK)
        usual = self._spacing.usual
        return min(longest, max(SHORTEST_LOOK, (usual if usual is not None else 2.0) / 4.0))

    def _look(self, wait_s: float) -> tuple[Arrival, ...]:
        self._blind = True
        try:
            reply = self._asking.ask_freely(Look(wait_s=wait_s), wait_s + seconds_for(0))
        except ChildError as error:
            # Looking hardly reads anything: what takes so long is the file system.
            hung = isinstance(error, ChildHung)
            why = f"file system not answering ({error})" if hung else str(error)
            self._journal.trouble(f"looking for snapshots: {why}", once=True)
            self._asking.pause(TROUBLE_PAUSE)
            return ()
        if not isinstance(reply, Looked):
            why = reply.what if isinstance(reply, Failed) else "not understood"
            where = f"{reply.where}: " if isinstance(reply, Failed) and reply.where else ""
            self._journal.trouble(f"looking for snapshots: {where}{why}", once=True)
            self._asking.pause(TROUBLE_PAUSE)
            return ()
        self._blind = False
        self._pending = reply.pending
        if reply.wakeup != self._wakeup:
            self._wakeup = reply.wakeup
            reason = f" ({reply.wakeup_reason})" if reply.wakeup_reason else ""
            how = "events of the file system" if reply.wakeup == "events" else "polling alone"
            self._journal.note(f"new snapshots are noticed by {how}{reason}")
        return reply.arrivals

    def _report_pending(self, *, at_end: bool) -> None:
        step = self._judge.place.step if self._judge.place is not None else None
        skips, troubles = self._waiting.look(self._pending, self._clock(), step, at_end=at_end)
        for skip in skips:
            self._skip(skip)
        for text in troubles:
            self._journal.trouble(text)

    # --- taking -------------------------------------------------------------------------

    def _take(self, arrivals: tuple[Arrival, ...]) -> bool:
        """Judge arrivals in order; returns whether any was settled, one way or the other."""
        before = self._done
        for number, arrival in enumerate(arrivals):
            behind = number + 1 < len(arrivals)
            if arrival.key in self._known:
                self._asking.settled(arrival.key)
            elif not self._take_one(arrival, behind=behind):
                break  # those behind it wait, so that the order of steps is kept
            self._done += 1
            self._teller.progress(self._done, self._done + len(arrivals) - number - 1)
            self._hands.advance(self._clock())
            if self._asking.signals.caught is not None:
                raise Interrupted
        return self._done > before

    def _take_one(self, arrival: Arrival, *, behind: bool) -> bool:
        """Read, judge and act upon one arrival. False where it has to be tried again."""
        if arrival.step is not None and self._is_late(arrival):
            return True
        sketched = self._read(arrival, behind=behind)
        if sketched is not None and arrival.step is None:
            # The step stands in the file alone.
            began = self._judge.beginning
            if self._is_late(sketched.arrival):
                return True
            if self._judge.beginning and not began:
                sketched = self._read(arrival, behind=behind)
        if sketched is not None and (why := self._judge.differs(sketched)):
            self._judge.restart(why)
            sketched = self._read(arrival, behind=behind)
        if sketched is None:
            return arrival.key in self._known
        self._judge_one(sketched, behind=behind)
        return True

    def _read(self, arrival: Arrival, *, behind: bool) -> Sketched | None:
        """None where it could not be read; it is in the log then, or to be tried again."""
        crops = self._judge.wanted_crops()
        read = self._reading.read(arrival, crops, self._judge.beginning, behind=behind)
        if isinstance(read, NotRead):
            if not read.later:
                self._skip_arrival(arrival, read.reason, read.detail)
            return None
        return read

    def _is_late(self, arrival: Arrival) -> bool:
        what, why = sort(arrival, self._judge.place)
        if what == "late":
            self._skip_arrival(arrival, "late", why)
        elif what == "restart":
            self._judge.restart("restart")
        return what == "late"

    def _judge_one(self, sketched: Sketched, *, behind: bool) -> None:
        arrival = sketched.arrival
        self._hear(self._histories.up_to(arrival.step, arrival.time, self._judge.number))
        judged = self._judge.judge(sketched, self._histories.alarms())
        self._known.add(arrival.key)
        self._asking.settled(arrival.key)
        now = self._clock()
        self._spacing.add(judged.record.mtime)
        change = self._pulse.arrived(now)
        if change is not None and not self._mode.catch_up:
            self._change_pulse("arriving", change)
        for note in sketched.notes:
            self._note_once(note)
        self._remember(judged)
        self._teller.snapshot(judged.record)
        if judged.changed and (foresight := foresight_text(judged.record.evidence)):
            self._teller.news(foresight)
        self._hands.judged(
            judged,
            arrival,
            sketched,
            count=self._judge.count,
            live=self._is_at_work(judged.record.mtime),
            behind=behind,
            now=now,
        )

    def _is_at_work(self, written: float) -> bool:
        """Whether something written then shows that the run is at work now, not that it was."""
        if self._process is not None:
            return self._process.alive()
        fresh = max(FRESH, 5.0 * (self._spacing.usual or 0.0))
        return self._caught_up or self._clock() - written < fresh

    def _hear_the_rest(self) -> None:
        """What the histories have beyond the last snapshot."""
        self._hear(self._histories.onward(self._judge.number))
        while self._histories.more:
            self._hear(self._histories.onward(self._judge.number))

    def _hear(self, changes: list[Change]) -> None:
        """Tell of histories whose condition has changed, and act upon those declared an alarm."""
        for change in changes:
            record, verdict = change.record, change.record.verdict
            why = f": {verdict.why}" if verdict.why else ""
            self._teller.news(f"history {record.name} {verdict.condition}{why}")
            if not verdict.alarmed or verdict.condition not in ("runaway", "overflowed"):
                continue
            self._worst = max(self._worst, _called_for(alarmed=True))
            path = self._settings.histories[record.name].path
            turn = as_turn(record, path, self._judge.index + 1)
            live, now = self._is_at_work(change.mtime), self._clock()
            self._hands.heard(turn, change.before, count=self._judge.count, live=live, now=now)

    def _remember(self, judged: Judged) -> None:
        record = judged.record
        if record.index == 1:
            self._inherited = 0
        overflowed = record.verdict.condition == "overflowed"
        called = _called_for(alarmed=record.verdict.alarmed, overflowed=overflowed)
        self._worst = max(self._worst, called)

    # --- records ------------------------------------------------------------------------

    def _skip_arrival(self, arrival: Arrival, reason: Reason, detail: str) -> None:
        path = arrival.files[0].path if arrival.files else ""
        self._skip(Skip(path, reason, detail, arrival.key, arrival.step, True))

    def _skip(self, skip: Skip) -> None:
        self._journal.write(
            Skipped,
            path=clean(relative(skip.path, self._folder)),
            reason=skip.reason,
            detail=clean(skip.detail),
            key=skip.key,
            step=skip.step,
        )
        if skip.final:
            self._known.add(skip.key)
            self._asking.settled(skip.key)

    def _change_pulse(self, pulse: Pulse, detail: str) -> None:
        self._journal.write(PulseChange, sync=True, pulse=pulse, detail=clean(detail))
        self._pulse.pulse = pulse
        if pulse != "arriving":
            self._teller.news(f"{pulse}: {detail}")

    def _note_once(self, text: str) -> None:
        if text not in self._noted:
            self._noted.add(text)
            self._journal.note(text)

    def _report_failing(self) -> None:
        """Disk full and the like: said once on standard error, since the log cannot say it."""
        failing = self._journal.failing
        if bool(failing) != bool(self._failing):
            self._teller.news(failing or "the growth log is being written again")
        self._failing = failing

    def _close(self, why: str, status: int, notice_s: float) -> int:
        self._hands.close(notice_s)
        self._report_failing()
        status = self._status(status)
        self._journal.write(Closed, sync=True, why=clean(why), status=status)
        return status

    def _status(self, otherwise: int) -> int:
        """A failed action comes first, since nothing else tells of it; then the worst condition."""
        if self._hands.failed:
            return Exit.ACTION_FAILED
        return max(self._worst, self._inherited) or otherwise


def _called_for(*, alarmed: bool, overflowed: bool = False) -> int:
    """The exit status of a condition; the worse the greater."""
    return Exit.OVERFLOWED if overflowed else Exit.ALARM if alarmed else 0
