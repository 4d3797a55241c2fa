"""Histories beside the snapshots: fed in the order of steps, recorded when they have news.

The reading process hands over samples; here they wait until the snapshots have come as far, so that
a run that is judged afterwards gives the same as one that was followed.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field

from monitor.config import AlarmSection, Settings
from monitor.growthlog.numbers import rounded, spell
from monitor.growthlog.records import Condition, HeardAlarm, History
from monitor.guarding.journal import Journal
from monitor.guarding.limits import seconds_for
from monitor.listening import Listener
from probes.errors import ChildError
from probes.spec import HistorySpec
from probes.wire import Failed, Heard, HistoriesRead, ReadHistories, Reply, Request

# Bytes of one text file that are taken at a time.
PIECE = 1 << 20
# Between snapshots and changes of condition a history is recorded so often, seconds.
RECORD_EVERY = 60.0


@dataclass(frozen=True, slots=True)
class Sample:
    """number: place in its file. odd: how an unusual value is printed."""

    number: int
    step: float
    time: float
    value: float
    unit: float
    odd: str = ""

    def beyond(self, step: int | None, time: float | None) -> bool:
        """Whether it comes after a snapshot, as far as their steps or times tell."""
        if step is not None and math.isfinite(self.step):
            return self.step > step
        if time is not None and math.isfinite(self.time):
            return self.time > time
        return False


@dataclass(frozen=True, slots=True)
class Change:
    """A record with a condition other than the one `before`. mtime: of the text file, seconds."""

    record: History
    before: Condition
    mtime: float


@dataclass
class _Followed:
    """One history on its way. known: the last record of an earlier guard until its sample is
    reached; whatever was judged then is taken in without a word."""

    name: str
    spec: HistorySpec
    listener: Listener
    known: History | None = None
    file: str = ""
    next: int = 0
    waiting: deque[Sample] = field(default_factory=deque)
    more: bool = True
    mtime: float = 0.0
    last: Sample | None = None
    said: Condition = "gathering"
    said_at: float = 0.0
    count: int = 0
    bad: int = 0
    lo: float = math.inf
    hi: float = -math.inf

    def begin(self, file: str) -> None:
        """Another file, or the same begun again."""
        self.file, self.next, self.last = file, 0, None
        self.waiting.clear()
        self.listener.begin()


class Histories:
    """All histories of a run.

    ask: how the reading process is asked; it may raise ChildError. clock: seconds since the epoch.
    resumed: last records of an earlier guard, by name.
    """

    def __init__(
        self,
        settings: Settings,
        ask: Callable[[Request, float], Reply],
        journal: Journal,
        clock: Callable[[], float],
        resumed: Mapping[str, History],
    ) -> None:
        self._ask, self._journal, self._clock = ask, journal, clock
        self._alarm: AlarmSection = settings.alarm
        self._followed = {
            name: self._new(name, spec, resumed.get(name))
            for name, spec in settings.histories.items()
        }
        self._again: set[str] = set()

    def _new(self, name: str, spec: HistorySpec, known: History | None) -> _Followed:
        said: Condition = known.verdict.condition if known is not None else "gathering"
        listener = Listener(name, spec, self._alarm)
        return _Followed(name, spec, listener, known, said=said, said_at=self._clock())

    def __len__(self) -> int:
        return len(self._followed)

    @property
    def more(self) -> bool:
        """Whether something is left to be read at once."""
        return any(f.more for f in self._followed.values())

    def alarms(self) -> tuple[HeardAlarm, ...]:
        """Histories declared an alarm that are past it now, for the evidence of a snapshot."""
        return tuple(
            HeardAlarm(f.name, f.listener.verdict.why, f.listener.verdict.onset)
            for f in self._followed.values()
            if f.listener.verdict.condition in ("runaway", "overflowed") and f.spec.alarm
        )

    # --- reading ------------------------------------------------------------------------

    def up_to(self, step: int | None, time: float | None, segment: int) -> list[Change]:
        """Take everything that comes before a snapshot, and write how each history stands there.

        Where neither steps nor times can be compared, everything that there is.
        """
        changes = self._feed(segment, lambda s: not s.beyond(step, time))
        # What waits already lies beyond: of such a file no more needs to be held in memory.
        while wanted := [f for f in self._followed.values() if not f.waiting]:
            self._read(wanted)
            changes += self._feed(segment, lambda s: not s.beyond(step, time))
            if not any(f.more for f in wanted):
                break
        for followed in self._followed.values():
            if followed.count:
                self._write(followed, segment)
        return changes

    def onward(self, segment: int) -> list[Change]:
        """Take what there is, a piece of each file at most: no snapshot waits to be judged."""
        if not self._followed:
            return []
        self._read(list(self._followed.values()))
        changes = self._feed(segment, lambda s: True)
        now = self._clock()
        for followed in self._followed.values():
            if followed.count and now - followed.said_at >= RECORD_EVERY:
                self._write(followed, segment)
        return changes

    def _read(self, wanted: list[_Followed]) -> None:
        request = ReadHistories(
            names=tuple(f.name for f in wanted), budget=PIECE, again=tuple(sorted(self._again))
        )
        try:
            reply = self._ask(request, seconds_for(PIECE * len(wanted)))
        except ChildError as error:
            reply = Failed(kind="internal", what=str(error))
        if not isinstance(reply, HistoriesRead):
            why = reply.what if isinstance(reply, Failed) else "not understood"
            self._journal.trouble(f"reading histories: {why}", once=True)
            for followed in wanted:
                followed.more = False
            return
        self._again.clear()
        for heard in reply.heard:
            if heard.name in self._followed:
                self._take(self._followed[heard.name], heard)

    def _take(self, followed: _Followed, heard: Heard) -> None:
        followed.more, followed.mtime = heard.more, heard.mtime or followed.mtime
        if heard.trouble:
            self._journal.trouble(f"history {followed.name}: {heard.trouble}", once=True)
        for note in heard.notes:
            self._journal.note(f"history {followed.name}: {note}")
        table = heard.table.array()
        if not len(table):
            self._check_length(followed)
            return
        if heard.file != followed.file:
            followed.begin(heard.file)
            if followed.known is not None and followed.known.file != heard.file:
                followed.known = None
        # A new reading process begins from the start: what was taken before is passed over.
        for n in range(max(0, followed.next - heard.first), len(table)):
            step, time, value, unit = (float(v) for v in table[n])
            number = heard.first + n
            sample = Sample(number, step, time, value, unit, heard.odd.get(n, ""))
            followed.waiting.append(sample)
            followed.next = number + 1
        self._check_length(followed)

    def _check_length(self, followed: _Followed) -> None:
        """A file that is shorter than the log knows it was begun again."""
        known = followed.known
        if known is not None and not followed.more and 0 < followed.next <= known.sample:
            self._forget(followed)

    def _forget(self, followed: _Followed) -> None:
        followed.known = None
        followed.begin("")
        followed.more = True
        self._again.add(followed.name)

    # --- judging ------------------------------------------------------------------------

    def _feed(self, segment: int, due: Callable[[Sample], bool]) -> list[Change]:
        changes = []
        for followed in self._followed.values():
            for sample in _taken(followed.waiting, due):
                if followed.known is not None and self._is_known(followed, sample):
                    continue
                change = self._judge(followed, sample, segment)
                if change is not None:
                    changes.append(change)
        return changes

    def _is_known(self, followed: _Followed, sample: Sample) -> bool:
        """Take in a sample that the log has, silently. False once the log's last one is passed, or
        was found to be another."""
        known = followed.known
        assert known is not None  # the caller looked
        if sample.number > known.sample:
            followed.known = None
            return False
        self._listen(followed, sample)
        if sample.number == known.sample:
            followed.known = None
            if rounded(self._record(followed, 0)).value != known.value:
                self._forget(followed)
        return True

    @staticmethod
    def _listen(followed: _Followed, sample: Sample) -> None:
        followed.last = sample
        followed.listener.take(sample.step, sample.value, sample.unit, sample.odd)

    def _judge(self, followed: _Followed, sample: Sample, segment: int) -> Change | None:
        self._listen(followed, sample)
        followed.count += 1
        if math.isfinite(sample.value):
            followed.lo = min(followed.lo, sample.value)
            followed.hi = max(followed.hi, sample.value)
        else:
            followed.bad += 1
        before = followed.said
        if followed.listener.verdict.condition == before:
            return None
        return Change(self._write(followed, segment), before, followed.mtime)

    def _write(self, followed: _Followed, segment: int) -> History:
        record = self._record(followed, segment)
        changed = record.verdict.condition != followed.said
        values = {name: getattr(record, name) for name in record.__struct_fields__}
        del values["seq"], values["at"]
        followed.said, followed.said_at = record.verdict.condition, self._clock()
        followed.count = followed.bad = 0
        followed.lo, followed.hi = math.inf, -math.inf
        return self._journal.write(History, sync=changed, **values)

    @staticmethod
    def _record(followed: _Followed, segment: int) -> History:
        sample, listener = followed.last, followed.listener
        assert sample is not None  # there is no record before the first sample
        some = followed.lo <= followed.hi
        return History(
            seq=0,
            at=0.0,
            name=followed.name,
            file=followed.file,
            sample=sample.number,
            seg=segment,
            step=round(sample.step) if math.isfinite(sample.step) else None,
            time=sample.time if math.isfinite(sample.time) else None,
            value=spell(sample.value),
            print=sample.odd,
            count=followed.count,
            lo=followed.lo if some else None,
            hi=followed.hi if some else None,
            bad=followed.bad,
            level=listener.level,
            floor=listener.floor,
            verdict=listener.verdict,
        )


def _taken(waiting: deque[Sample], due: Callable[[Sample], bool]) -> Iterator[Sample]:
    """Samples that are due, in order, taken out one by one."""
    while waiting and due(waiting[0]):
        yield waiting.popleft()
