"""Keep checkpoints safe from the solver's rotation.

With two alternating files the clean one is gone by the time of an alarm, so while a run is quiet
some provisional pins of spread ages are held (`monitor.actions.spacing`). An alarm stops their
rotation and keeps those from before the growth began. All copying, checking and removing is done by
the reading process.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from msgspec.structs import replace

from monitor.actions.linkrule import LinkRule
from monitor.actions.proof import differs_from_record
from monitor.actions.spacing import surplus, wanted
from monitor.config import Settings
from monitor.growthlog.records import Intent, PinRecord, Snapshot
from monitor.guarding.journal import Journal
from monitor.guarding.limits import seconds_for
from monitor.lastclean import clean_reason, place
from monitor.measure import resketch_distance
from probes.errors import ChildError
from probes.wire import (
    Arrival,
    Drop,
    Failed,
    FileId,
    FindCheckpoint,
    Found,
    ReadSnapshot,
    Reply,
    Request,
    Secure,
    Secured,
    Sketched,
)

Ask = Callable[[Request, float], Reply]

# Two sketches of the same content are equal but for rounding.
SAME = 1e-12
# Earlier snapshots that are remembered, for an alarm that finds no pin from before the growth.
REMEMBERED = 512
MOST_FILES = 8192
# How many of these are tried then: they may have been overwritten since.
TRIED = 8
GIGABYTE = 1e9


@dataclass(frozen=True, slots=True)
class Source:
    """Something that can be pinned. place: its step, or its number where steps are unknown.

    judged: the snapshot record that tells whether it is clean. sketched: as read just now. watched:
    these are watched files, not checkpoints of their own.
    """

    arrival: Arrival
    place: int
    judged: Snapshot
    sketched: Sketched | None = None
    watched: bool = True

    @property
    def size(self) -> int:
        return sum(file.size for file in self.arrival.files)


@dataclass
class Held:
    """A pin that is held. at: number of snapshots judged before it was made."""

    record: PinRecord
    at: int
    judged: Snapshot | None = None

    @property
    def provisional(self) -> bool:
        return self.record.state == "provisional"


@dataclass
class PinHistory:
    """What a log says of pins: those held, ids ever used, intents without outcome."""

    held: list[Held] = field(default_factory=list)
    used: set[str] = field(default_factory=set)
    open: list[Intent] = field(default_factory=list)


class Pins:
    """The pins of one run. Every method returns when the work is done; nothing is raised but a
    lost lock."""

    def __init__(
        self, settings: Settings, ask: Ask, journal: Journal, folder: Path, history: PinHistory
    ) -> None:
        """folder: that of the log; pins live in a folder beside it."""
        self._section, self._checkpoints = settings.pins, settings.checkpoints
        self._patterns = settings.snapshots.pattern
        self._ask, self._journal, self._folder = ask, journal, folder
        self._held, self._used = history.held, history.used
        self._open = history.open
        self._recent: deque[Source] = deque(maxlen=REMEMBERED)
        patterns = self._checkpoints.pattern or self._patterns
        self._links = LinkRule(all("{step}" in p for p in patterns))

    @property
    def records(self) -> list[PinRecord]:
        """Pins that are held, oldest first."""
        return [held.record for held in self._held]

    def recover(self, count: int) -> None:
        """After a start: put right what a killed guard left half done. count: snapshots so far."""
        for intent in self._open:
            known = any(h.record.pin == intent.id for h in self._held)
            if known:
                self._journal.outcome("pin", intent.id, "found-done")
            else:
                self._clear_away(intent)
        self._open = []
        for held in list(self._held):
            if not (self._folder / held.record.folder).is_dir():
                self._held.remove(held)
                gone = replace(held.record, state="released", detail="its folder is gone")
                self._write(gone)

    def saw(self, source: Source) -> None:
        """A watched snapshot was judged."""
        if not self._checkpoints.pattern:
            self._links.saw(source.arrival.files)
            # The sketch is large and serves only while the snapshot is the present one.
            light = Source(source.arrival, source.place, source.judged)
            self._recent.append(light)
            while len(self._recent) * len(light.arrival.files) > MOST_FILES:
                self._recent.popleft()

    def rotate(self, present: Source, count: int) -> None:
        """Make a provisional pin if it is time for one, and let go of one that it replaces.

        present: the snapshot just judged quiet. count: snapshots judged so far.
        """
        if not self._section.enabled:
            return
        slots = self._section.provisional
        if not wanted(self._ages(count), slots):
            return
        source = self._newest_checkpoint(present) if self._checkpoints.pattern else present
        # One growing file keeps its old records by itself.
        if source is None or source.arrival.growing or self._is_pinned(source):
            return
        slots = min(slots, self._affordable(source.size))
        if slots < 1:
            self._journal.trouble(
                f"no checkpoint can be pinned: {source.size / GIGABYTE:.3g} GB are over what is "
                f"left of [pins] budget_gb = {self._section.budget_gb:g}",
                once=True,
            )
            return
        while len(self._provisional()) > slots:
            self._let_go(surplus(self._ages(count), slots), "over the budget")
        if not wanted(self._ages(count), slots):
            return
        record = self._pin(source, "provisional", "")
        if record is not None:
            self._held.append(Held(record, count, source.judged))
            while (least := surplus(self._ages(count), slots)) is not None:
                self._let_go(least, "")

    def keep(self, turn: Snapshot, count: int) -> None:
        """At an alarm (its record is `turn`): keep pins from before the growth began.

        Without any, the latest earlier snapshot from before it that still exists is pinned; without
        that, the oldest that there is, and the log says so.
        """
        if not self._section.enabled:
            return
        if any(h.record.state == "kept" and h.record.seq > turn.seq for h in self._held):
            return  # an earlier guard has done this
        clean = [(h, why) for h in self._provisional() if (why := _clean(h.judged, h, turn))]
        for held, why in clean:
            self._promote(held, why, count)
        if any(h.record.state == "kept" and h.record.seq > turn.seq for h in self._held):
            return
        if not self._keep_earlier(turn, count):
            self._keep_oldest(turn, count)

    # --- choosing -----------------------------------------------------------------------

    def _provisional(self) -> list[Held]:
        return [h for h in self._held if h.provisional]

    def _ages(self, count: int) -> list[int]:
        return [count - h.at for h in self._provisional()]

    def _is_pinned(self, source: Source) -> bool:
        return any(
            h.record.step == source.place
            and h.judged is not None
            and h.judged.seg == source.judged.seg
            for h in self._held
        )

    def _affordable(self, size: int) -> int:
        """How many provisional pins of this size the budget allows."""
        kept = sum(h.record.bytes for h in self._held if not h.provisional)
        left = self._section.budget_gb * GIGABYTE - kept
        return int(left // max(1, size)) if left > 0 else 0

    def _newest_checkpoint(self, present: Source) -> Source | None:
        found = self._find()
        for arrival in found:
            self._links.saw(arrival.files)
        fitting = [a for a in found if a.step is None or a.step <= present.place]
        return self._as_source(fitting[-1], present.judged) if fitting else None

    @staticmethod
    def _as_source(arrival: Arrival, judged: Snapshot) -> Source:
        where = arrival.step if arrival.step is not None else place(judged)
        return Source(arrival, where, judged, watched=False)

    def _find(self) -> tuple[Arrival, ...]:
        request = FindCheckpoint(
            pattern=self._checkpoints.pattern,
            companions=self._checkpoints.companions,
            parts=self._checkpoints.parts,
        )
        try:
            reply = self._ask(request, seconds_for(0))
        except ChildError as error:
            self._journal.trouble(f"checkpoints cannot be listed: {error}", once=True)
            return ()
        if isinstance(reply, Found):
            return reply.checkpoints
        why = reply.what if isinstance(reply, Failed) else "not understood"
        self._journal.trouble(f"checkpoints cannot be listed: {why}", once=True)
        return ()

    # --- at an alarm --------------------------------------------------------------------

    def _promote(self, held: Held, why: str, count: int) -> None:
        if held.record.method == "link" and not self._harden(held, count):
            return
        held.record = self._write(
            replace(held.record, state="kept", detail=_joined(held.record.detail, why))
        )

    def _harden(self, held: Held, count: int) -> bool:
        """A kept pin outlives the run, and the next run may write into files of the same names: a
        link becomes a copy. False where the linked file was found changed."""
        old = held.record
        arrival = self._pinned(old, None)
        copy = self._secure(arrival, self._fresh_id(f"{old.pin}-copy"), link=False)
        if isinstance(copy, str):
            held.record = replace(
                old, detail=_joined(old.detail, f"still a hard link ({copy}): copy it")
            )
            return True
        if copy.sha256 != old.sha256:
            self._outcome_failed(copy.pin, "the linked file was written to")
            self._drop(copy.folder)
            self._release(held, "the linked file was written to")
            return False
        held.record = replace(copy, step=old.step, verified=old.verified, detail=old.detail)
        self._journal.outcome("pin", copy.pin, "done")
        self._drop(old.folder)
        self._write(replace(old, state="released", detail=f"copied to {copy.folder}"))
        return True

    def _keep_earlier(self, turn: Snapshot, count: int) -> bool:
        """Pin what still exists from before the growth, latest first."""
        sources = [s for s in self._earlier(turn) if _clean(s.judged, None, turn, s.place)]
        for source in sorted(sources, key=lambda s: -s.place)[:TRIED]:
            why = _clean(source.judged, None, turn, source.place)
            record = self._pin(source, "kept", why)
            if record is not None:
                self._held.append(Held(record, count, source.judged))
                return True
        return False

    def _keep_oldest(self, turn: Snapshot, count: int) -> None:
        """Nothing clean is left: keep the oldest there is."""
        missing = "no checkpoint from before the growth is left"
        oldest = min(self._provisional(), key=lambda h: h.at, default=None)
        if oldest is not None:
            self._promote(oldest, "the oldest there was, perhaps not clean", count)
            self._journal.trouble(f"{missing}: the oldest pin, step {oldest.record.step}, is kept")
            return
        for source in sorted(self._earlier(turn), key=lambda s: s.place)[:TRIED]:
            record = self._pin(source, "kept", "the oldest there was, perhaps not clean")
            if record is not None:
                self._held.append(Held(record, count, source.judged))
                self._journal.trouble(
                    f"{missing}: step {record.step}, the oldest there is, is kept"
                )
                return
        self._journal.trouble(f"{missing}, and nothing else could be pinned")

    def _earlier(self, turn: Snapshot) -> list[Source]:
        if not self._checkpoints.pattern:
            return [s for s in self._recent if s.judged.seq < turn.seq]
        return [self._as_source(a, turn) for a in self._find() if a.step is not None]

    # --- doing --------------------------------------------------------------------------

    def _pin(self, source: Source, state: str, why: str) -> PinRecord | None:
        """Copy, check, record. None, and an outcome "failed", where that is not possible."""
        name = self._fresh_id(f"s{source.judged.seg}-{source.place:08d}")
        allow = self._links.allowed and state == "provisional" and not source.arrival.growing
        done = self._secure(source.arrival, name, link=allow)
        if isinstance(done, str):
            return None
        trouble, verified = self._check(done, source)
        if trouble and not verified:
            self._outcome_failed(name, trouble)
            self._drop(done.folder)
            return None
        record = replace(
            done,
            state=state,
            step=source.place,
            verified=not trouble,
            detail=_joined(trouble, why),
        )
        record = self._write(record)
        self._journal.outcome("pin", name, "done")
        return record

    def _secure(self, arrival: Arrival, name: str, *, link: bool) -> PinRecord | str:
        """Intent and copy; the record-to-be, or why not (the outcome is written then)."""
        relative = f"{self._section.folder}/{name}"
        self._journal.intend("pin", name, relative)
        self._used.add(name)
        size = sum(file.size for file in arrival.files)
        folder = self._folder / relative
        reply = self._try(
            Secure(files=arrival.files, folder=str(folder), allow_link=link), seconds_for(size)
        )
        if isinstance(reply, str):
            self._outcome_failed(name, reply)
            return reply
        if not isinstance(reply, Secured):
            self._outcome_failed(name, "not understood by the reading process")
            return "not understood by the reading process"
        return PinRecord(
            seq=0,
            at=0.0,
            pin=name,
            state="provisional",
            folder=relative,
            files=tuple(_within(folder, name) for name in reply.files),
            sha256=reply.sha256,
            method=reply.method,
            bytes=reply.bytes,
        )

    def _check(self, record: PinRecord, source: Source) -> tuple[str, bool]:
        """("", True) where the copy holds what was judged; (why, True) where that cannot be told;
        (why, False) where it does not."""
        arrival = self._pinned(record, source.arrival)
        reply = self._try(ReadSnapshot(arrival=arrival), seconds_for(source.size))
        if isinstance(reply, str) or not isinstance(reply, Sketched):
            why = reply if isinstance(reply, str) else "not understood"
            if source.watched:
                return f"the copy cannot be read ({why})", False
            return f"only its checksum was taken, its contents cannot be judged ({why})", True
        if not source.watched:
            bad = sum(block.bad for block in reply.blocks)
            return (f"it holds {bad} non-finite values", False) if bad else ("", True)
        if source.sketched is None:
            wrong = differs_from_record(reply, source.judged.evidence.channels)
            return (f"the copy is not as recorded: {wrong}", False) if wrong else ("", True)
        distance = resketch_distance(source.sketched, reply)
        if distance <= SAME:
            return "", True
        return f"the copy differs from what was judged (by {distance:.2g})", False

    def _pinned(self, record: PinRecord, original: Arrival | None) -> Arrival:
        """The pinned files as something that can be read or copied."""
        folder = self._folder / record.folder
        before: Sequence[FileId | None] = original.files if original is not None else ()
        if len(before) != len(record.files):
            before = [None] * len(record.files)
        files = []
        for name, old in zip(record.files, before, strict=True):
            path = folder / name
            try:
                status = path.stat()
                size, time, inode = status.st_size, status.st_mtime_ns, status.st_ino
            except OSError:
                size, time, inode = 0, 0, 0  # the reading process will say that it is not there
            part, of = (old.part, old.field) if old is not None else ("", "")
            files.append(
                FileId(path=str(path), size=size, mtime_ns=time, inode=inode, part=part, field=of)
            )
        base = original or Arrival(key="", files=())
        return replace(base, key=f"pin {record.pin}", files=tuple(files))

    def _let_go(self, position: int | None, why: str) -> None:
        if position is not None:
            self._release(self._provisional()[position], why)

    def _release(self, held: Held, why: str) -> None:
        self._drop(held.record.folder)
        self._held.remove(held)
        self._write(replace(held.record, state="released", detail=why))

    def _drop(self, folder: str) -> None:
        reply = self._try(Drop(folder=str(self._folder / folder)), seconds_for(0))
        if isinstance(reply, str):
            self._journal.trouble(f"the pin {folder} cannot be removed: {reply}", once=True)

    def _clear_away(self, intent: Intent) -> None:
        """A pin that was being made when guard was killed: half a copy is of no use."""
        if (self._folder / intent.target).is_dir():
            self._drop(intent.target)
        self._outcome_failed(intent.id, "guard was ended while it was being made")

    def _outcome_failed(self, name: str, why: str) -> None:
        self._journal.outcome("pin", name, "failed", why)

    def _write(self, record: PinRecord) -> PinRecord:
        values = {name: getattr(record, name) for name in record.__struct_fields__}
        del values["seq"], values["at"]
        return self._journal.write(PinRecord, sync=record.state == "kept", **values)

    def _fresh_id(self, name: str) -> str:
        fresh, number = name, 2
        while fresh in self._used:
            fresh, number = f"{name}-{number}", number + 1
        return fresh

    def _try(self, request: Request, limit_s: float) -> Reply | str:
        try:
            reply = self._ask(request, limit_s)
        except ChildError as error:
            return str(error)
        return reply.what if isinstance(reply, Failed) else reply


def _clean(
    judged: Snapshot | None, held: Held | None, turn: Snapshot, where: int | None = None
) -> str:
    """Why this pin counts as clean although the alarm `turn` came, "" if it does not."""
    if where is None and held is not None:
        where = held.record.step
    onset = turn.verdict.onset
    if onset is not None and where is not None and where < onset[0]:
        return f"from before the growth can have begun (step {onset[0]})"
    if judged is None or judged.seq >= turn.seq:
        return ""
    # Of the snapshots before the alarm only this one and whether it was the last matter here.
    last = judged.seg == turn.seg and judged.index + 1 >= turn.index
    return clean_reason(judged, turn, [judged] if last else [judged, turn])


def _joined(*parts: str) -> str:
    return "; ".join(part for part in parts if part)


def _within(folder: Path, name: str) -> str:
    """A file's name relative to the pin's folder, however the reading process gave it."""
    path = Path(name)
    return str(path.relative_to(folder)) if path.is_relative_to(folder) else name
