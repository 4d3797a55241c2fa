"""Files to snapshots: parts and fields of one step, records of a growing file, steps from contents.

Holds what it has learnt of a run (which parts and fields belong to a step, how many records a file
had). Reads nothing itself: `describe` opens a file and tells its contents.
"""

from __future__ import annotations

import hashlib
from collections import defaultdict
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from typing import Literal

from probes.arrivals.listing import Seen
from probes.arrivals.patterns import Pattern
from probes.arrivals.settled import Rest
from probes.errors import Held, NotYet, ReadError, Refused
from probes.snapshot import Contents
from probes.spec import SnapshotSpec
from probes.wire import Arrival, FileId, Pending

Describe = Callable[[str], Contents]
Slot = tuple[int, str, str]
Reason = Literal["writing", "parts", "held", "refused", "broken", "empty"]

# A first group of several files is taken as whole after this many quiet times.
_PATIENT = 2.0
# An unfinished snapshot holds back later ones until it has not changed for this long (seconds,
# quiet times), and for so many seconds at most if it never comes to rest.
_HELD_BACK = 2.0
_HELD_BACK_QUIETS = 5.0
_HELD_BACK_MOST = 60.0
# A file at rest that is still incomplete after so long will not be completed, seconds.
_HOPELESS = 60.0
# First and longest pause before a file that could not be opened is tried again unchanged, seconds.
_RETRY = 0.1
_RETRY_MOST = 5.0


def content_key(*facts: object) -> str:
    """16 hexadecimal digits for facts about contents."""
    return hashlib.blake2b(repr(facts).encode(), digest_size=8).hexdigest()


def file_id(seen: Seen, pattern: Pattern) -> FileId:
    return FileId(
        path=seen.path,
        size=seen.size,
        mtime_ns=seen.mtime_ns,
        inode=seen.inode,
        part=seen.match.part,
        field=seen.match.field or pattern.own_name,
    )


@dataclass
class _File:
    """What is known of a file whose step does not stand in its name.

    generation: how often the file was cut and begun again under its inode. keys: per record its
    content key and when it was first seen, ns.
    """

    identity: tuple[int, int, int]
    contents: Contents
    generation: int = 0
    keys: dict[int, tuple[str, int]] = field(default_factory=dict)


@dataclass
class _Closed:
    """A file that could not be described as it is. since, again: wall-clock seconds."""

    identity: tuple[int, int, int]
    reason: Reason
    detail: str
    since: float
    pause: float
    again: float


@dataclass
class Grouper:
    """Turns looks at files into arrivals and things still pending."""

    patterns: tuple[Pattern, ...]
    spec: SnapshotSpec
    describe: Describe
    known: set[str] = field(default_factory=set)
    _slots: set[Slot] = field(default_factory=set)
    _files: dict[str, _File] = field(default_factory=dict)
    _closed: dict[str, _Closed] = field(default_factory=dict)
    _since: dict[tuple[str, int | None], float] = field(default_factory=dict)
    _waiting: dict[tuple[str, int | None], float] = field(default_factory=dict)
    _made: dict[int, tuple[list[Seen], Arrival]] = field(default_factory=dict)

    def group(
        self, seen: Iterable[Seen], rest: Callable[[Seen], Rest], quiet: float, wall: float
    ) -> tuple[list[Arrival], list[Pending]]:
        """Arrivals not known yet, in step order, and what cannot be judged.

        rest: how calm a file is. quiet: quiet time, s. wall: seconds since the epoch.
        """
        stepped: dict[int, dict[Slot, Seen]] = defaultdict(dict)
        arrivals: list[Arrival] = []
        pending: list[Pending] = []
        unnamed: list[Seen] = []
        for one in seen:
            if one.match.step is None or self.spec.record_axis == "yes":
                unnamed.append(one)
            else:
                stepped[one.match.step][self._slot(one)] = one
        for one in unnamed:
            self._look_inside(one, rest(one), stepped, arrivals, pending, wall)
        there = {one.path for one in unnamed}
        self._files = {p: f for p, f in self._files.items() if p in there}
        self._closed = {p: c for p, c in self._closed.items() if p in there}
        self._by_step(stepped, rest, quiet, wall, arrivals, pending)
        self._made = {step: made for step, made in self._made.items() if step in stepped}
        new = {a.key: a for a in arrivals if a.key not in self.known}
        self._since, self._waiting = self._waiting, {}
        ready = self._in_turn(new.values(), stepped, unnamed, pending, rest, quiet, wall)
        return sorted(ready, key=_order), pending

    def _in_turn(
        self,
        arrivals: Iterable[Arrival],
        stepped: dict[int, dict[Slot, Seen]],
        unnamed: list[Seen],
        pending: list[Pending],
        rest: Callable[[Seen], Rest],
        quiet: float,
        wall: float,
    ) -> list[Arrival]:
        """Without those that must wait for an earlier one that is just being finished: a later
        file may be known to be complete (by an event) before an earlier one is."""
        patience = max(_HELD_BACK, _HELD_BACK_QUIETS * quiet)
        recent = [
            p
            for p in pending
            if p.reason in ("writing", "parts") and wall - p.since < _HELD_BACK_MOST
        ]
        steps = {p.step for p in recent if p.step is not None}
        paths = {p.path for p in recent}
        factor = self.spec.step_factor

        def at_work(files: Iterable[Seen]) -> bool:
            return wall - max(one.mtime_ns for one in files) / 1e9 < patience

        first_step = min(
            (s for s, files in stepped.items() if s * factor in steps and at_work(files.values())),
            default=None,
        )
        first_change = min(
            (
                one.mtime_ns
                for one in unnamed
                if one.path in paths and not rest(one) and at_work([one])
            ),
            default=None,
        )

        def waits(arrival: Arrival) -> bool:
            if arrival.growing:
                return False
            if first_step is not None and arrival.step is not None:
                return arrival.step > first_step * factor
            return first_change is not None and arrival.mtime_ns > first_change

        return [a for a in arrivals if not waits(a)]

    def _slot(self, one: Seen) -> Slot:
        return one.pattern, one.match.part, one.match.field

    def _pend(
        self, one: Seen, reason: Reason, detail: str, wall: float, step: int | None = None
    ) -> Pending:
        key = content_key(reason, one.path, step, one.inode)
        # Whether a file is held or half written may change with every look: what counts is how
        # long it could not be judged.
        since = self._waiting[one.path, step] = self._since.get((one.path, step), wall)
        solver_step = step * self.spec.step_factor if step is not None else None
        return Pending(
            key=key, path=one.path, reason=reason, detail=detail, since=since, step=solver_step
        )

    # --- steps in names -----------------------------------------------------------------

    def _by_step(
        self,
        stepped: dict[int, dict[Slot, Seen]],
        rest: Callable[[Seen], Rest],
        quiet: float,
        wall: float,
        arrivals: list[Arrival],
        pending: list[Pending],
    ) -> None:
        single = len(self.patterns) == 1 and not self.patterns[0].has & {"part", "field"}
        done: dict[int, Arrival] = {}
        unfinished: dict[int, list[Seen]] = {}
        if not single and not self._slots:
            self._learn(stepped, rest, quiet, wall)
        for step in sorted(stepped):
            files = stepped[step]
            writing = [one for one in files.values() if not rest(one)]
            if writing:
                arrival_known = self._arrival(step, files).key in self.known
                if not arrival_known:
                    unfinished[step] = writing
                continue
            if not single and not self._whole(files):
                unfinished[step] = list(files.values())
                continue
            if not single:
                self._slots |= set(files)
            done[step] = self._arrival(step, files)
        arrivals += done.values()
        latest = max(done, default=None)
        for step, files_at in unfinished.items():
            overtaken = latest is not None and step < latest
            if overtaken and all(rest(one) for one in stepped[step].values()):
                there, all_of = len(stepped[step]), max(len(self._slots), self.spec.parts)
                detail = f"{there} of {all_of} files of step {step * self.spec.step_factor} came"
                pending.append(self._pend(files_at[0], "parts", detail, wall, step))
            else:
                detail = "still being written, or not all files are there"
                pending.append(self._pend(files_at[0], "writing", detail, wall, step))

    def _learn(
        self,
        stepped: dict[int, dict[Slot, Seen]],
        rest: Callable[[Seen], Rest],
        quiet: float,
        wall: float,
    ) -> None:
        """Which files make a snapshot: the largest set that any step has, once that is at rest."""
        calm = [
            set(files)
            for step, files in stepped.items()
            if all(rest(one) for one in files.values())
            and (
                step < max(stepped)
                or wall - max(one.mtime_ns for one in files.values()) / 1e9 >= _PATIENT * quiet
            )
        ]
        if calm:
            largest = max(calm, key=len)
            parts = {part for _, part, _ in largest}
            if not self.spec.parts or len(parts) >= self.spec.parts:
                self._slots = largest

    def _whole(self, files: dict[Slot, Seen]) -> bool:
        if not self._slots or not self._slots <= set(files):
            return False
        return not self.spec.parts or len({part for _, part, _ in files}) >= self.spec.parts

    def _arrival(self, step: int, files: dict[Slot, Seen]) -> Arrival:
        ordered = [files[slot] for slot in sorted(files)]
        made = self._made.get(step)
        if made is not None and made[0] == ordered:
            return made[1]
        facts = [(*one.identity, one.match.part, one.match.field) for one in ordered]
        arrival = Arrival(
            key=content_key(step, facts),
            files=tuple(file_id(one, self.patterns[one.pattern]) for one in ordered),
            step=step * self.spec.step_factor,
            mtime_ns=max(one.mtime_ns for one in ordered),
        )
        self._made[step] = ordered, arrival
        return arrival

    # --- steps in contents --------------------------------------------------------------

    def _look_inside(
        self,
        one: Seen,
        calm: Rest,
        stepped: dict[int, dict[Slot, Seen]],
        arrivals: list[Arrival],
        pending: list[Pending],
        wall: float,
    ) -> None:
        file = self._files.get(one.path)
        if file is None or file.identity != one.identity:
            contents = self._described(one, calm, wall)
            if isinstance(contents, _Closed):
                pending.append(self._pend(one, contents.reason, contents.detail, wall))
                return
            file = self._files[one.path] = self._taken_up(one, contents, file)
        if file.contents.growing:
            arrivals += self._records(one, file, calm, wall)
            return
        if not calm:
            pending.append(self._pend(one, "writing", "still being written", wall))
            return
        step, time = file.contents.steps[0], file.contents.times[0]
        if step is not None and (one.match.part or len(self.patterns) > 1):
            # Parts that are overwritten in place: those of one step belong together.
            stepped[step][self._slot(one)] = one
            return
        solver_step = step * self.spec.step_factor if step is not None else None
        arrivals.append(
            Arrival(
                key=content_key(*one.identity, step),
                files=(file_id(one, self.patterns[one.pattern]),),
                step=solver_step,
                time=time,
                mtime_ns=one.mtime_ns,
            )
        )

    def _described(self, one: Seen, calm: Rest, wall: float) -> Contents | _Closed:
        """The file's contents, or why there are none. An unchanged file is tried ever less often,
        so that a writer that keeps readers out is not pestered."""
        before = self._closed.get(one.path)
        if before is not None and before.identity != one.identity:
            before = None
        if before is not None and (before.reason in ("refused", "broken") or wall < before.again):
            return before
        reason: Reason
        try:
            contents = self.describe(one.path)
        except Held as error:
            reason, detail = "held", str(error)
        except NotYet as error:
            stuck = before is not None and calm and wall - before.since > _HOPELESS
            reason, detail = "broken" if stuck else "writing", str(error)
            if one.size == 0:
                reason = "empty"
        except Refused as error:
            reason, detail = "refused", str(error)
        except ReadError as error:
            reason, detail = "broken", str(error)
        else:
            self._closed.pop(one.path, None)
            return contents
        since = before.since if before is not None else wall
        pause = min(2.0 * before.pause, _RETRY_MOST) if before is not None else _RETRY
        closed = _Closed(one.identity, reason, detail, since, pause, wall + pause)
        self._closed[one.path] = closed
        return closed

    def _taken_up(self, one: Seen, contents: Contents, old: _File | None) -> _File:
        """The file as it is now, with what is known of the records it already had."""
        if old is not None and old.identity[0] == one.inode:
            if contents.records >= old.contents.records:
                return _File(one.identity, contents, old.generation, old.keys)
            return _File(one.identity, contents, old.generation + 1)
        # Seen for the first time by this process: the log tells which generation was the last.
        generation = 0
        if contents.growing and contents.records:
            while self._record_key(one, contents, 0, generation + 1) in self.known:
                generation += 1
        return _File(one.identity, contents, generation)

    @staticmethod
    def _record_key(one: Seen, contents: Contents, record: int, generation: int) -> str:
        clock = contents.steps[record], contents.times[record]
        return content_key(one.inode, record, *clock, generation)

    def _records(self, one: Seen, file: _File, calm: Rest, wall: float) -> list[Arrival]:
        """Records that are whole: the last one only when the file has been quiet, since its room
        may have been made before its numbers were written."""
        contents = file.contents
        out = []
        for record in range(contents.records if calm == Rest.QUIET else contents.records - 1):
            step, time = contents.steps[record], contents.times[record]
            if record not in file.keys:
                key = self._record_key(one, contents, record, file.generation)
                file.keys[record] = key, int(wall * 1e9)
            key, since = file.keys[record]
            if key not in self.known:
                out.append(
                    Arrival(
                        key=key,
                        files=(file_id(one, self.patterns[one.pattern]),),
                        step=step * self.spec.step_factor if step is not None else None,
                        time=time,
                        record=record,
                        growing=True,
                        mtime_ns=since,
                    )
                )
        return out


def _order(arrival: Arrival) -> tuple[int, float, int, int]:
    if arrival.step is None:
        return 1, 0.0, arrival.mtime_ns, arrival.record
    return 0, float(arrival.step), arrival.mtime_ns, arrival.record
