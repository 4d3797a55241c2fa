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
from probes.errors import Held, NotYet, ReadError, Refused
from probes.snapshot import Contents
from probes.spec import SnapshotSpec
from probes.wire import Arrival, FileId, Pending

Describe = Callable[[str], Contents]
Slot = tuple[int, str, str]
Reason = Literal["writing", "parts", "held", "refused", "broken", "empty"]

# A first group of several files is taken as whole after this many quiet times.
_PATIENT = 2.0


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
    """What is known of a file whose step does not stand in its name."""

    identity: tuple[int, int, int]
    contents: Contents
    keys: dict[int, tuple[str, int]] = field(default_factory=dict)


@dataclass
class Grouper:
    """Turns looks at files into arrivals and things still pending."""

    patterns: tuple[Pattern, ...]
    spec: SnapshotSpec
    describe: Describe
    known: set[str] = field(default_factory=set)
    _slots: set[Slot] = field(default_factory=set)
    _files: dict[str, _File] = field(default_factory=dict)
    _since: dict[str, float] = field(default_factory=dict)

    def group(
        self, seen: Iterable[Seen], complete: Callable[[Seen], bool], quiet: float, wall: float
    ) -> tuple[list[Arrival], list[Pending]]:
        """Arrivals not known yet, in step order, and what cannot be judged.

        complete: whether a file is settled. wall: seconds since the epoch.
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
            self._look_inside(one, complete(one), stepped, arrivals, pending, wall)
        self._files = {p: f for p, f in self._files.items() if p in {s.path for s in unnamed}}
        self._by_step(stepped, complete, quiet, wall, arrivals, pending)
        new = {a.key: a for a in arrivals if a.key not in self.known}
        self._since = {p.key: p.since for p in pending}
        return sorted(new.values(), key=_order), pending

    def _slot(self, one: Seen) -> Slot:
        return one.pattern, one.match.part, one.match.field

    def _pend(
        self, one: Seen, reason: Reason, detail: str, wall: float, step: int | None = None
    ) -> Pending:
        key = content_key(reason, one.path, step, one.inode)
        since = self._since.setdefault(key, wall)
        return Pending(key=key, path=one.path, reason=reason, detail=detail, since=since, step=step)

    # --- steps in names -----------------------------------------------------------------

    def _by_step(
        self,
        stepped: dict[int, dict[Slot, Seen]],
        complete: Callable[[Seen], bool],
        quiet: float,
        wall: float,
        arrivals: list[Arrival],
        pending: list[Pending],
    ) -> None:
        single = len(self.patterns) == 1 and not self.patterns[0].has & {"part", "field"}
        done: dict[int, Arrival] = {}
        unfinished: dict[int, list[Seen]] = {}
        if not single and not self._slots:
            self._learn(stepped, complete, quiet, wall)
        for step in sorted(stepped):
            files = stepped[step]
            writing = [one for one in files.values() if not complete(one)]
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
            if overtaken and all(complete(one) for one in stepped[step].values()):
                there, all_of = len(stepped[step]), max(len(self._slots), self.spec.parts)
                detail = f"{there} of {all_of} files of step {step * self.spec.step_factor} came"
                pending.append(self._pend(files_at[0], "parts", detail, wall, step))
            else:
                detail = "still being written, or not all files are there"
                pending.append(self._pend(files_at[0], "writing", detail, wall, step))

    def _learn(
        self,
        stepped: dict[int, dict[Slot, Seen]],
        complete: Callable[[Seen], bool],
        quiet: float,
        wall: float,
    ) -> None:
        """Which files make a snapshot: the largest set that any step has, once that is at rest."""
        calm = [
            set(files)
            for step, files in stepped.items()
            if all(complete(one) for one in files.values())
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
        facts = [(*one.identity, one.match.part, one.match.field) for one in ordered]
        return Arrival(
            key=content_key(step, facts),
            files=tuple(file_id(one, self.patterns[one.pattern]) for one in ordered),
            step=step * self.spec.step_factor,
            mtime_ns=max(one.mtime_ns for one in ordered),
        )

    # --- steps in contents --------------------------------------------------------------

    def _look_inside(
        self,
        one: Seen,
        settled: bool,
        stepped: dict[int, dict[Slot, Seen]],
        arrivals: list[Arrival],
        pending: list[Pending],
        wall: float,
    ) -> None:
        file = self._files.get(one.path)
        if file is None or file.identity != one.identity:
            try:
                contents = self.describe(one.path)
            except Held as error:
                pending.append(self._pend(one, "held", str(error), wall))
                return
            except NotYet as error:
                pending.append(self._pend(one, "writing", str(error), wall))
                return
            except Refused as error:
                pending.append(self._pend(one, "refused", str(error), wall))
                return
            except ReadError as error:
                pending.append(self._pend(one, "broken", str(error), wall))
                return
            same = file is not None and file.identity[0] == one.inode
            keys = file.keys if file is not None and same else {}
            if file is not None and contents.records < file.contents.records:
                keys = {}
            file = self._files[one.path] = _File(one.identity, contents, keys)
        if file.contents.growing:
            arrivals += self._records(one, file, settled, wall)
            return
        if not settled:
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

    def _records(self, one: Seen, file: _File, settled: bool, wall: float) -> list[Arrival]:
        """Records that are whole: the last one only when the file is at rest, since its room may
        have been made before its numbers were written."""
        contents = file.contents
        out = []
        for record in range(contents.records if settled else contents.records - 1):
            step, time = contents.steps[record], contents.times[record]
            key, since = file.keys.setdefault(
                record, (content_key(one.inode, record, step), int(wall * 1e9))
            )
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
